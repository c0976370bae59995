"""The docs: their code runs, their links lead somewhere, the study reference lists every key."""

from __future__ import annotations

import re
import warnings
from pathlib import Path

import pytest

from dosekit.errors import DosekitWarning

ROOT = Path(__file__).resolve().parents[2]
PAGES = sorted([ROOT / "README.md", ROOT / "DEVELOPERS.md", *(ROOT / "docs").rglob("*.md")])
FENCE = re.compile(r"^```python[ \t]*([^\n]*)\n(.*?)^```", re.MULTILINE | re.DOTALL)


def _ident(path):
    return path.relative_to(ROOT).as_posix()


@pytest.mark.slow
@pytest.mark.parametrize("path", [page for page in PAGES if FENCE.search(page.read_text("utf-8"))], ids=_ident)
def test_the_code_of_a_page_runs(path, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    names: dict[str, object] = {"__name__": "page"}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", DosekitWarning)
        for mark, code in FENCE.findall(path.read_text("utf-8")):
            if "no-run" not in mark:
                exec(compile(code, str(path), "exec"), names)


@pytest.mark.parametrize("path", PAGES, ids=_ident)
def test_links_lead_somewhere(path):
    for target in re.findall(r"\]\(([^)#\s]+)\)", path.read_text("utf-8")):
        if not target.startswith(("http:", "https:")):
            assert (path.parent / target).exists(), f"{path.name} links to {target}"


@pytest.mark.parametrize("path", [page for page in PAGES if page.parent != ROOT], ids=_ident)
def test_every_page_says_research_only(path):
    assert "RESEARCH ONLY" in path.read_text("utf-8")


def test_the_reference_lists_every_key_of_a_study():
    from dosekit.studies import model

    text = (ROOT / "docs" / "reference" / "study_file.md").read_text("utf-8")
    for name in model.__all__:
        section = getattr(model, name)
        for key in getattr(section, "model_fields", {}):
            assert f"`{key}`" in text, f"{name}.{key} is not in the reference"
