"""The shape of a cell on axes, at scale: section in the plane, panels or tubes in space, with axes and a scale bar."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from homog.cell import UnitCell
from homog.plots import shapes
from homog.plots.style import BODY, FAINT, GREY, INK, PLAIN, SMALL, axes_size, number

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.patches import Patch

Array = NDArray[np.float64]

REPEATS = 2.1
"""Repeats of a planar cell that are shown along the axis that shows fewest."""
PANELS = 2
"""Fewest repeats of a folded sheet that are shown along an axis."""
OBLIQUE = (-62.0, 28.0)
"""Azimuth and elevation of the viewer of a sheet or a lattice in space, degrees."""
OWN, OTHER = ("#1c2942", "#41587a", "#9fb1cb"), ("#a3adbb", "#d5dbe3", "#f6f8fa")
"""Shades of what is picked out and of the rest, dark to light."""
TUBES = ("#26354c", "#41587a", "#eef1f5")
"""Shades of struts."""
STRIP = 0.52
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
    window, repeat = (_clip(ax, c) for c in (np.array([low, [high[0], low[1]], high, [low[0], high[1]]]), corners))
    for face, edge, clip in ((FAINT, GREY, window), (BODY, INK, repeat)):
        for style in ({"fc": edge, "ec": edge, "lw": 1.0}, {"fc": face, "ec": "none", "lw": 0.0}):
            patch = PathPatch(outline, zorder=2, gid="section", **style)
            ax.add_artist(patch)  # unlike add_patch, measures nothing
            patch.set_clip_path(clip)
    ax.add_patch(Polygon(corners, closed=True, fill=False, ec=INK, lw=0.9, ls=(0, (3, 2)), zorder=3, gid="repeat"))
    _frame(ax, low, high, np.eye(3))


def _clip(ax: Axes, corners: Array) -> Patch:
    """The region to clip to: a rectangle where it is one, since a clip box costs a file less than a path."""
    from matplotlib.patches import Polygon, Rectangle

    (x0, y0), (x1, y1) = corners.min(axis=0), corners.max(axis=0)
    if np.isclose(corners[:, 0], x0).sum() == np.isclose(corners[:, 1], y0).sum() == 2:
        return Rectangle((x0, y0), x1 - x0, y1 - y0, transform=ax.transData)
    return Polygon(corners, closed=True, transform=ax.transData)


def draw_sheet(ax: Axes, cell: UnitCell, *, oblique: bool) -> None:
    """Draw a folded sheet's panels, shaded, from above or obliquely; one repeat is picked out."""
    size, room = np.ptp(shapes.repeat_corners(cell), axis=0), _room(ax)
    counts = np.clip(room * (PANELS * size / room).max() / size + 0.05, PANELS, 6).astype(int)
    turn = shapes.view(*OBLIQUE) if oblique else shapes.view(-90.0, 90.0)
    _facets(ax, shapes.sheet_facets(cell, (int(counts[0]), int(counts[1]))), turn, edges=True)


def draw_space(ax: Axes, cell: UnitCell) -> None:
    """Draw one repeat of a lattice of struts, shaded tubes in the dashed box of the repeat, seen obliquely."""
    turn = shapes.view(*OBLIQUE)
    vectors = shapes.repeat_vectors(cell)
    for k in range(3):
        for i, j in np.ndindex(2, 2):
            start = cell.points[0] + i * vectors[(k + 1) % 3] + j * vectors[(k + 2) % 3]
            ends = np.array([start, start + vectors[k]]) @ turn.T
            ax.plot(ends[:, 0], ends[:, 1], color=GREY, lw=0.6, ls=(0, (3, 2)), zorder=1, gid="repeat")
    _facets(ax, shapes.strut_facets(cell), turn, edges=False)


def _facets(ax: Axes, facets: shapes.Facets, turn: Array, *, edges: bool) -> None:
    from matplotlib.collections import PolyCollection
    from matplotlib.colors import LinearSegmentedColormap

    polygons, light, near, own = shapes.seen(facets, turn)
    strong, other = (
        LinearSegmentedColormap.from_list("shades", shades)(light)[:, :3] for shades in (OWN if edges else TUBES, OTHER)
    )
    colors = np.where(own[:, None], strong, other)
    if not edges:  # what is far is paler
        colors = colors + (1.0 - colors) * 0.35 * (1.0 - near[:, None])
    ax.add_collection(PolyCollection(polygons, facecolors=colors, edgecolors=INK if edges else colors,
                                     linewidths=0.5 if edges else 0.25, zorder=2, gid="facets"))  # fmt: skip
    points = np.concatenate(polygons)
    _frame(ax, points.min(axis=0), points.max(axis=0), turn)


def _room(ax: Axes) -> Array:
    """Inches (width, height) that axes offer to a drawing above the strip."""
    return np.asarray(axes_size(ax) - np.array([0.0, STRIP]))


def _frame(ax: Axes, low: Array, high: Array, turn: Array) -> None:
    """Fit axes to a drawing; below it the arrows of axes 1, 2 (, 3) and a bar along axis 1 with its length in mm."""
    room = _room(ax)
    inch = float(((high - low) / room).max())  # mm
    middle = (low + high) / 2.0
    left, bottom = middle - room * inch / 2.0
    ax.set(aspect="equal", xlim=(left, left + room[0] * inch), ylim=(bottom - STRIP * inch, bottom + room[1] * inch))
    ax.set_axis_off()
    flat = turn[:2].T  # where each axis points on the page, per unit length
    arrows = ARROW * inch * flat
    start = np.array([left + 0.08 * inch, bottom - STRIP * inch + 0.03 * inch - min(0.0, float(arrows[:, 1].min()))])
    for name, arrow in zip("123", arrows, strict=True):
        if np.hypot(*arrow) < 0.2 * ARROW * inch:
            continue
        (x0, y0), (x1, y1) = start, start + arrow
        ax.annotate("", (x1, y1), (x0, y0), arrowprops={"arrowstyle": "-|>,head_width=0.18,head_length=0.35",
                    "color": INK, "lw": 1.0, "shrinkA": 0.0, "shrinkB": 0.0})  # fmt: skip
        x, y = start + arrow + 0.09 * inch * arrow / np.hypot(*arrow)
        ax.text(x, y, name, fontsize=PLAIN, fontweight="bold", color=INK, ha="center", va="center", gid="axis")
    _scale_bar(ax, np.array([left + room[0] * inch, start[1]]), 0.34 * room[0] * inch, flat[0], inch)


def _scale_bar(ax: Axes, corner: Array, longest: float, along: Array, inch: float) -> None:
    """A bar of 1, 2 or 5 times a power of ten mm along a direction of the page, its right end near a corner."""
    power = 10.0 ** math.floor(math.log10(longest))
    length = max(m * power for m in (1.0, 2.0, 5.0) if m * power <= longest * (1.0 + 1e-9))
    end = corner - np.array([0.05, -0.04]) * inch
    begin = end - length * along
    across = 0.04 * inch * np.array([-along[1], along[0]]) / np.hypot(*along)
    ax.plot(*np.stack([begin, end]).T, color=INK, lw=1.6, solid_capstyle="butt", gid="scale-bar")
    for tip in (begin, end):
        ax.plot(*np.stack([tip - across, tip + across]).T, color=INK, lw=1.0)
    x, y = (begin + end) / 2.0
    y += (0.05 + 0.3 * abs(along[1])) * inch  # clear of a slanting bar
    ax.text(x, y, number(length, "mm"), fontsize=SMALL, color=INK, ha="center", va="bottom")
