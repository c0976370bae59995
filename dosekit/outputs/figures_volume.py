"""A look at a volume alone: density in three planes with its structures, before any dose is asked for."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from matplotlib.cm import ScalarMappable
from matplotlib.colors import Normalize

from dosekit.outputs.figures_slices import draw_slice, outline_legend
from dosekit.outputs.planes import PLANES, DoseVolume, shown_box_mm
from dosekit.outputs.style import PAGE_MM, foot_legend, letter_panel, new_figure, styled

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from dosekit.grids.voxels import VoxelGrid

__all__ = ["volume_figure"]

_GREY_TOP_G_CM3 = 1.9
_TALLEST_PANEL_MM = 95.0
_PANELS_WIDTH_MM = PAGE_MM - 27.0


@styled
def volume_figure(
    grid: VoxelGrid, *, target: str | None = None, point_mm: tuple[float, float, float] | None = None
) -> Figure:
    """Draw the density of a volume and its structures in three planes.

    Parameters
    ----------
    grid : VoxelGrid
        The volume.
    target : str, optional
        Structure whose middle is shown and whose outline is heaviest.
    point_mm : (x, y, z), optional
        Point to show instead; the middle of the volume without either.

    Returns
    -------
    Figure
        175 mm wide.
    """
    if point_mm is None:
        x, y, z = (0.5 * (low + high) for low, high in zip(grid.lower_mm, grid.upper_mm, strict=True))
        point_mm = (x, y, z) if target is None else grid.centroid_mm(target)
    nothing = DoseVolume(
        np.zeros(grid.shape, dtype=np.float32), grid.centres_mm("x"), grid.centres_mm("y"), grid.centres_mm("z")
    )
    names = list(grid.structures)
    box = shown_box_mm(grid)
    widths = [box[view.horizontal][1] - box[view.horizontal][0] for view in PLANES]
    tallest = max(box[view.vertical][1] - box[view.vertical][0] for view in PLANES)
    scale = min(_PANELS_WIDTH_MM / sum(widths), _TALLEST_PANEL_MM / tallest)
    figure = new_figure(
        PAGE_MM,
        max(50.0, tallest * scale + 16.0 + 3.8 * -(-len(names) // 5)),
        alt=f"Density of {grid.name or 'a volume'} in three planes; outlines: {', '.join(names) or 'none'}.",
    )
    panels = figure.subplots(1, 3, width_ratios=widths)
    for axes, letter, view in zip(panels, "abc", PLANES, strict=True):
        draw_slice(
            axes,
            nothing,
            grid,
            view=view.name,
            point_mm=point_mm,
            reference_gy=1.0,
            structures=names,
            target=target,
            isodose_percent=(),
            box_mm=box,
        )
        letter_panel(axes, letter, f"{view.name}, {view.fixed} {point_mm['xyz'.index(view.fixed)]:.0f} mm")
        axes.set_anchor("N")
    norm = Normalize(0.0, _GREY_TOP_G_CM3)
    bar = figure.colorbar(ScalarMappable(norm, "gray"), ax=list(panels), shrink=0.9, aspect=28, pad=0.012)
    bar.set_label("density (g/cm³)")
    if names:
        foot_legend(figure, outline_legend(grid, names, target=target), ncols=min(5, len(names)))
    return figure
