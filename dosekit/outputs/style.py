"""One visual style for every figure: paper sizes, fixed colours, the caution line, repeatable files.

* Widths of 85 mm (one column) and 175 mm (two columns), 8 pt sans serif, thin rules.
* Components, particles and structures keep the colours and dash patterns of `dosekit.outputs.palette`.
* Every figure has a strip at its foot for the research-only line; axes never reach into it.
* PDF (vector) and PNG (300 dpi) carry no date and no program version, so the same
  figure drawn with the same library versions is the same file.

The style is in force only while a figure is drawn or written; the caller's plotting settings
are untouched, and no window toolkit is ever started.
"""

from __future__ import annotations

import io
import textwrap
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from functools import wraps
from pathlib import Path
from typing import TYPE_CHECKING, Any, ParamSpec, TypeVar

import matplotlib as mpl
from matplotlib import patheffects
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.layout_engine import ConstrainedLayoutEngine

from dosekit.caution import BANNER, SHORT_CAUTION
from dosekit.outputs.files import write_bytes
from dosekit.outputs.palette import (
    COMPONENT_COLOURS,
    COMPONENT_DASHES,
    COMPONENT_LABELS,
    INK,
    PARTICLE_COLOURS,
    RULE,
    STRUCTURE_COLOURS,
    STRUCTURE_DASHES,
    component_style,
    particle_label,
    particle_style,
)

if TYPE_CHECKING:
    from matplotlib.artist import Artist
    from matplotlib.axes import Axes

__all__ = [
    "COLUMN_MM",
    "COMPONENT_COLOURS",
    "COMPONENT_DASHES",
    "COMPONENT_LABELS",
    "INK",
    "PAGE_MM",
    "PARTICLE_COLOURS",
    "RULE",
    "STRUCTURE_COLOURS",
    "STRUCTURE_DASHES",
    "FigureFiles",
    "add_caution",
    "component_style",
    "foot_legend",
    "halo",
    "letter_panel",
    "new_figure",
    "own_style",
    "particle_label",
    "particle_style",
    "styled",
    "write_figure",
]

COLUMN_MM = 85.0
PAGE_MM = 175.0
MM_PER_INCH = 25.4
PNG_DPI = 300
CAUTION_POINT = 5.5
LEGEND_ROW_POINT = 10.6

_SETTINGS: dict[Any, Any] = {
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans"],
    "font.size": 8.0,
    "mathtext.fontset": "dejavusans",
    "axes.titlesize": 8.0,
    "axes.labelsize": 8.0,
    "axes.labelcolor": INK,
    "axes.edgecolor": INK,
    "axes.linewidth": 0.6,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.titlelocation": "left",
    "axes.axisbelow": True,
    "xtick.labelsize": 7.0,
    "ytick.labelsize": 7.0,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "xtick.minor.width": 0.4,
    "ytick.minor.width": 0.4,
    "xtick.major.size": 2.5,
    "ytick.major.size": 2.5,
    "xtick.minor.size": 1.5,
    "ytick.minor.size": 1.5,
    "text.color": INK,
    "lines.linewidth": 1.0,
    "lines.markersize": 3.0,
    "legend.fontsize": 7.0,
    "legend.frameon": False,
    "legend.handlelength": 2.4,
    "legend.borderaxespad": 0.3,
    "legend.labelspacing": 0.35,
    "legend.columnspacing": 1.2,
    "grid.linewidth": 0.3,
    "grid.color": "#d9d9d9",
    "figure.dpi": 100.0,
    "savefig.dpi": PNG_DPI,
    "pdf.fonttype": 42,
    "pdf.compression": 6,
    "image.interpolation": "nearest",
    "path.simplify": True,
}

_P = ParamSpec("_P")
_R = TypeVar("_R")


@dataclass(frozen=True)
class FigureFiles:
    """The two files of one figure and the words that stand for it.

    Parameters
    ----------
    pdf, png : Path
        The files written.
    alt : str
        What the figure shows, for readers who cannot see it.
    """

    pdf: Path
    png: Path
    alt: str


@contextmanager
def own_style() -> Iterator[None]:
    """Put the house style in force, and the caller's own back afterwards."""
    with mpl.rc_context():
        mpl.rcdefaults()
        mpl.rcParams.update(_SETTINGS)
        yield


def styled(function: Callable[_P, _R]) -> Callable[_P, _R]:
    """Make a drawing function run in the house style.

    Parameters
    ----------
    function : callable
        A function that draws.

    Returns
    -------
    callable
        The same function, run inside `own_style`.
    """

    @wraps(function)
    def in_style(*args: _P.args, **kwargs: _P.kwargs) -> _R:
        with own_style():
            return function(*args, **kwargs)

    return in_style


def new_figure(width_mm: float, height_mm: float, *, alt: str) -> Figure:
    """Make an empty figure with the caution strip at its foot.

    Parameters
    ----------
    width_mm, height_mm : float
        Outer size.
    alt : str
        What the figure shows, in a sentence or two; kept as the figure's label.

    Returns
    -------
    Figure
        Drawn off screen; its layout keeps clear of the caution strip.
    """
    figure = Figure(figsize=(width_mm / MM_PER_INCH, height_mm / MM_PER_INCH))
    FigureCanvasAgg(figure)
    figure.set_label(alt)
    strip = add_caution(figure)
    figure.set_layout_engine(
        "constrained", rect=(0.0, strip, 1.0, 1.0 - strip), w_pad=0.03, h_pad=0.03, wspace=0.03, hspace=0.03
    )
    return figure


def add_caution(figure: Figure) -> float:
    """Write the research-only line at the foot of a figure.

    Parameters
    ----------
    figure : Figure
        The figure; its width decides how the line is broken.

    Returns
    -------
    float
        Height of the strip taken, as a fraction of the figure's height.
    """
    width_pt, height_pt = (72.0 * float(side) for side in figure.get_size_inches())
    # 0.6 of the type size is the mean advance of this face; measured widths stay below it.
    per_line = max(20, int((width_pt - 8.0) / (0.6 * CAUTION_POINT)))
    lines = textwrap.wrap(SHORT_CAUTION, width=per_line)
    figure.text(
        4.0 / width_pt,
        3.0 / height_pt,
        "\n".join(lines),
        fontsize=CAUTION_POINT,
        color="#555555",
        ha="left",
        va="bottom",
        linespacing=1.15,
        gid="caution",
    )
    return (5.0 + 1.3 * CAUTION_POINT * len(lines)) / height_pt


def foot_legend(figure: Figure, source: Axes | tuple[list[Artist], list[str]], *, ncols: int) -> None:
    """Put one legend for the whole figure between its panels and the caution strip.

    Parameters
    ----------
    figure : Figure
        The figure.
    source : Axes or (handles, labels)
        What to list.
    ncols : int
        Columns of the legend.
    """
    handles, labels = source if isinstance(source, tuple) else source.get_legend_handles_labels()
    rows = -(-len(labels) // ncols)
    height_pt = 72.0 * float(figure.get_size_inches()[1])
    engine = figure.get_layout_engine()
    strip = float(engine.get()["rect"][1]) if engine is not None else 0.0
    taken = (LEGEND_ROW_POINT * rows + 4.0) / height_pt
    legend = figure.legend(handles, labels, loc="lower center", bbox_to_anchor=(0.5, strip), ncols=ncols, borderpad=0.2)
    legend.set_in_layout(False)
    if isinstance(engine, ConstrainedLayoutEngine):
        engine.set(rect=(0.0, strip + taken, 1.0, 1.0 - strip - taken))


def halo(width_pt: float = 1.6, *, colour: str = "white") -> list[patheffects.AbstractPathEffect]:
    """Return a thin outline that keeps text and lines readable on any background.

    Parameters
    ----------
    width_pt : float
        Total width of the outline.
    colour : str
        Its colour.

    Returns
    -------
    list
        Path effects.
    """
    return [patheffects.withStroke(linewidth=width_pt, foreground=colour)]


def letter_panel(axes: Axes, letter: str, title: str = "") -> None:
    """Head a panel with its letter and a short title.

    Parameters
    ----------
    axes : Axes
        The panel.
    letter : str
        One letter.
    title : str
        A few words.
    """
    head = f"$\\bf{{{letter}}}$"
    axes.set_title(f"{head}  {title}" if title else head, loc="left", fontsize=8.0, pad=4.0)


def write_figure(figure: Figure, stem: str | Path) -> FigureFiles:
    """Write a figure as PDF and PNG, without dates, complete or not at all.

    Parameters
    ----------
    figure : Figure
        What to write.
    stem : str or Path
        The path without suffix.

    Returns
    -------
    FigureFiles
        The two files and the alternative text.
    """
    stem = Path(stem)
    alt = str(figure.get_label())
    pdf, png = io.BytesIO(), io.BytesIO()
    with own_style():
        # Laid out once and then held, so that both files, and a second writing, agree to the last bit.
        figure.draw_without_rendering()
        figure.set_layout_engine("none")
        figure.savefig(
            pdf,
            format="pdf",
            metadata={
                "Title": stem.name,
                "Subject": BANNER,
                "Creator": "dosekit",
                "Producer": None,
                "CreationDate": None,
            },
        )
        figure.savefig(
            png,
            format="png",
            dpi=PNG_DPI,
            metadata={"Software": None, "Title": stem.name, "Description": f"{BANNER}. {alt}"},
        )
    return FigureFiles(
        pdf=write_bytes(stem.with_name(stem.name + ".pdf"), pdf.getvalue()),
        png=write_bytes(stem.with_name(stem.name + ".png"), png.getvalue()),
        alt=alt,
    )
