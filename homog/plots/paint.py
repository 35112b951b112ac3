"""The shape of a cell on axes, at scale: section in the plane, panels or tubes in space, with axes and a scale bar."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from homog.cell import UnitCell
from homog.plots import shapes
from homog.plots.style import BODY, FAINT, GREY, HEAD, INK, SMALL, number

if TYPE_CHECKING:
    from matplotlib.axes import Axes

Array = NDArray[np.float64]

REPEATS = 2.2
"""Repeats of a planar cell that are shown along the axis that shows fewest."""
PANELS = 3
"""Repeats of a folded sheet along its longer repeat."""
OBLIQUE = (-62.0, 28.0)
"""Azimuth and elevation of the viewer of a sheet or a lattice in space, degrees."""
DARK, LIGHT = "#26354c", "#eef1f5"
"""Ends of the shading of what is picked out, by brightness."""
STRIP = 0.5
"""Inches kept free below a drawing for its axes and scale bar."""
ARROW = 0.30
"""Length of an axis' arrow in inches."""


def draw_plane(ax: Axes, cell: UnitCell) -> None:
    """Draw the true section about the repeat, which is picked out."""
    from matplotlib.patches import PathPatch, Polygon
    from matplotlib.path import Path

    corners = shapes.repeat_corners(cell)
    size, middle = np.ptp(corners, axis=0), corners.mean(axis=0)
    room = _room(ax)
    half = room * REPEATS * (size / room).max() / 2.0
    low, high = middle - half, middle + half
    polygons = shapes.section(cell, low, high)
    codes = [code for p in polygons for code in (Path.MOVETO, *[Path.LINETO] * (len(p) - 1), Path.CLOSEPOLY)]
    outline = Path(np.concatenate([np.concatenate([p, p[:1]]) for p in polygons]), codes)
    window = Polygon([low, (high[0], low[1]), high, (low[0], high[1])], closed=True, transform=ax.transData)
    repeat = Polygon(corners, closed=True, transform=ax.transData)
    for face, edge, clip in ((FAINT, GREY, window), (BODY, INK, repeat)):
        for style in ({"fc": edge, "ec": edge, "lw": 1.0}, {"fc": face, "ec": "none", "lw": 0.0}):
            patch = PathPatch(outline, zorder=2, gid="section", **style)
            ax.add_patch(patch)
            patch.set_clip_path(clip)
    ax.add_patch(Polygon(corners, closed=True, fill=False, ec=INK, lw=0.9, ls=(0, (3, 2)), zorder=3, gid="repeat"))
    _frame(ax, low, high, np.eye(3))


def draw_sheet(ax: Axes, cell: UnitCell, *, oblique: bool) -> None:
    """Draw a folded sheet's panels, shaded, from above or obliquely; one repeat is picked out."""
    size = np.ptp(shapes.repeat_corners(cell), axis=0)
    counts = tuple(int(min(max(round(PANELS * size.max() / s), 2), 6)) for s in size)
    turn = shapes.view(*OBLIQUE) if oblique else shapes.view(-90.0, 90.0)
    _facets(ax, shapes.sheet_facets(cell, (counts[0], counts[1])), turn, edges=True, bar=not oblique)


def draw_space(ax: Axes, cell: UnitCell) -> None:
    """Draw one repeat of a lattice of struts, shaded tubes seen obliquely."""
    _facets(ax, shapes.strut_facets(cell), shapes.view(*OBLIQUE), edges=False, bar=True)


def _facets(ax: Axes, facets: shapes.Facets, turn: Array, *, edges: bool, bar: bool) -> None:
    from matplotlib.collections import PolyCollection
    from matplotlib.colors import LinearSegmentedColormap, to_rgb

    polygons, light, near, own = shapes.seen(facets, turn)
    strong = LinearSegmentedColormap.from_list("strong", [DARK, BODY, LIGHT])(light)[:, :3]
    pale = 0.45 * strong + 0.55 * np.array(to_rgb("white"))
    colors = np.where(own[:, None], strong, pale)
    colors = colors + (1.0 - colors) * 0.35 * (1.0 - near[:, None]) * (not edges)
    ax.add_collection(PolyCollection(polygons, facecolors=colors, edgecolors=INK if edges else colors,
                                     linewidths=0.6 if edges else 0.25, zorder=2, gid="facets"))  # fmt: skip
    points = np.concatenate(polygons)
    _frame(ax, points.min(axis=0), points.max(axis=0), turn, bar=bar)


def _room(ax: Axes) -> Array:
    """Inches (width, height) that axes offer to a drawing above the strip."""
    assert ax.figure is not None
    box, page = ax.get_position(), ax.get_figure(root=True).get_size_inches()
    return np.array([box.width * page[0], box.height * page[1] - STRIP])


def _frame(ax: Axes, low: Array, high: Array, turn: Array, *, bar: bool = True) -> None:
    """Fit axes to a drawing; below it the arrows of axes 1, 2 (, 3) and a bar along axis 1 with its length in mm."""
    room = _room(ax)
    inch = float(((high - low) / room).max())  # mm
    middle = (low + high) / 2.0
    left, bottom = middle - room * inch / 2.0
    ax.set(aspect="equal", xlim=(left, left + room[0] * inch), ylim=(bottom - STRIP * inch, bottom + room[1] * inch))
    ax.set_axis_off()
    flat = turn[:2].T  # where each axis points on the page
    start = np.array([left, bottom]) + inch * np.array([0.12, 0.36 if not np.allclose(turn[2], [0, 0, 1]) else 0.42])
    start[1] -= STRIP * inch
    start[1] -= ARROW * inch * max(0.0, float(-flat[:, 1].min()))
