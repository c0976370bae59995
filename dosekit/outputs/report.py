"""One HTML file that tells the whole run: opens in any browser, needs no network, prints well.

Pictures are inlined, nothing is fetched and no script runs (the page forbids both to itself).
All text that comes from a study or a structure set is escaped.
"""

from __future__ import annotations

import base64
import struct
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from dosekit.caution import BANNER, CAUTION
from dosekit.errors import InputError
from dosekit.outputs.files import write_text
from dosekit.outputs.summary import key_lines
from dosekit.outputs.tables import spoken

if TYPE_CHECKING:
    from dosekit.outputs.record import RunRecord
    from dosekit.outputs.style import FigureFiles
    from dosekit.outputs.summary import RunSummary
    from dosekit.outputs.tables import OutputTable

__all__ = ["ReportFigure", "report_figure", "report_html", "write_report"]

_TEMPLATE = "report.html.jinja"
_NARROW_PIXELS = 1200
_DIGITS = 4


@dataclass(frozen=True)
class ReportFigure:
    """A figure of the report.

    Parameters
    ----------
    caption : str
        What it shows and how to read it.
    alt : str
        The same for readers who cannot see it.
    png : bytes
        The picture.
    """

    caption: str
    alt: str
    png: bytes

    @property
    def data(self) -> str:
        """The picture in base 64."""
        return base64.b64encode(self.png).decode("ascii")

    @property
    def width(self) -> int:
        """Width in pixels at half the resolution, as the page shows it."""
        return _png_size(self.png)[0] // 2

    @property
    def height(self) -> int:
        """Height in pixels at half the resolution."""
        return _png_size(self.png)[1] // 2

    @property
    def narrow(self) -> bool:
        """Whether it is a figure of one column."""
        return _png_size(self.png)[0] < _NARROW_PIXELS


def report_figure(files: FigureFiles, *, caption: str) -> ReportFigure:
    """Take a written figure into the report.

    Parameters
    ----------
    files : FigureFiles
        The written figure.
    caption : str
        What it shows and how to read it.

    Returns
    -------
    ReportFigure
        The figure with its picture.
    """
    return ReportFigure(caption=caption, alt=files.alt, png=files.png.read_bytes())


def report_html(
    summary: RunSummary,
    record: RunRecord,
    *,
    figures: Sequence[ReportFigure] = (),
    tables: Sequence[tuple[str, OutputTable]] = (),
    repeat_command: str = "dosekit run STUDY.toml",
) -> str:
    """Return the report as one HTML text.

    Parameters
    ----------
    summary : RunSummary
        What a reader wants to know first.
    record : RunRecord
        Inputs, versions, sources, warnings, energy balance.
    figures : sequence of ReportFigure
        Pictures in order.
    tables : sequence of (heading, OutputTable)
        Tables in order.
    repeat_command : str
        What repeats the run.

    Returns
    -------
    str
        The page.
    """
    from jinja2 import Environment, PackageLoader, StrictUndefined

    environment = Environment(
        loader=PackageLoader("dosekit.outputs", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        keep_trailing_newline=True,
    )
    contents = [("result", "Result in short")]
    contents += [("figures", "Figures")] if figures else []
    contents += [("tables", "Tables")] if tables else []
    contents += [("energy", "Energy balance")] if record.energy_balance else []
    contents += [("inputs", "Inputs"), ("sources", "What it rests on"), ("repeat", "How to repeat it")]
    return environment.get_template(_TEMPLATE).render(
        banner=BANNER,
        caution_rest=CAUTION.removeprefix(BANNER).lstrip(". "),
        summary=summary,
        record=record,
        figures=list(figures),
        tables=list(tables),
        contents=contents,
        key_values=key_lines(summary),
        repeat_command=repeat_command,
        draw_table=_draw_table,
        spoken=spoken,
    )


def write_report(path: str | Path, html: str) -> Path:
    """Write the report, complete or not at all.

    Parameters
    ----------
    path : str or Path
        Where to write.
    html : str
        From `report_html`.

    Returns
    -------
    Path
        The file.
    """
    return write_text(path, html)


def _draw_table(table: OutputTable) -> Any:
    from markupsafe import Markup, escape

    numeric = [all(not isinstance(row[i], str) for row in table.rows) for i in range(len(table.columns))]

    def cell(value: object, *, right: bool, tag: str) -> str:
        if isinstance(value, float):
            text = f"{value:.{_DIGITS}g}" if value == value else "-"  # noqa: PLR0124
        else:
            text = str(value)
        kind = ' class="n"' if right else ""
        scope = ' scope="row"' if tag == "th" else ""
        return f"<{tag}{scope}{kind}>{escape(text)}</{tag}>"

    head = "".join(
        f'<th scope="col"{" class=" + chr(34) + "n" + chr(34) if right else ""}>{escape(spoken(name))}</th>'
        for name, right in zip(table.columns, numeric, strict=True)
    )
    body = "\n".join(
        "<tr>"
        + "".join(cell(value, right=numeric[i], tag="th" if i == 0 else "td") for i, value in enumerate(row))
        + "</tr>"
        for row in table.rows
    )
    page = (
        f'<div class="scroll"><table><caption>{escape(table.units)}</caption>'
        f"<thead><tr>{head}</tr></thead><tbody>\n{body}\n</tbody></table></div>"
    )
    return Markup(page)  # noqa: S704 - every part above is escaped


def _png_size(png: bytes) -> tuple[int, int]:
    if png[:8] != b"\x89PNG\r\n\x1a\n" or len(png) < 24:
        raise InputError("a report figure that is not a PNG picture", allowed="PNG")
    width, height = struct.unpack(">II", png[16:24])
    return int(width), int(height)
