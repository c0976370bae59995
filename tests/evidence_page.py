"""Turn recorded comparisons into the page of evidence."""

from __future__ import annotations

TITLES = {
    "published": "Published values",
    "reference": "Independent transport results",
    "library": "General reference libraries",
    "model": "Agreement with measurement where the model is approximate",
}

INTRO = """# Evidence

RESEARCH ONLY - NOT FOR CLINICAL USE. Agreement with these values does not make a result fit for patient care.

This page is written by the tests: `python -m pytest tests --evidence-page docs/explanation/evidence.md`.
Each row is one comparison: what was compared, where the value comes from, the value, ours, the difference
and the bar that the test holds us to.
"""


def render(rows: list[dict[str, object]]) -> str:
    """Return the page as Markdown."""
    parts = [INTRO]
    for kind in [*TITLES, *sorted({str(row["kind"]) for row in rows} - set(TITLES))]:
        chosen = sorted(
            (row for row in rows if row["kind"] == kind),
            key=lambda row: (row["test"], row["what"], row["source"]),
        )
        if not chosen:
            continue
        parts.append(f"\n## {TITLES.get(kind, kind)}\n\n")
        parts.append("| what | source | value | ours | difference | unit | bar |\n|---|---|---:|---:|---:|---|---|\n")
        for row in chosen:
            value, ours = float(row["value"]), float(row["ours"])
            off = f"{100.0 * (ours / value - 1.0):+.2f} %" if value else f"{ours - value:+.3g}"
            cells = [row["what"], row["source"], f"{value:.5g}", f"{ours:.5g}", off, row["unit"], row["bar"]]
            parts.append("| " + " | ".join(map(str, cells)) + " |\n")
    return "".join(parts)
