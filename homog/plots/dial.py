"""A dial: a quantity against direction in a plane, on plain axes, radius = a + b value or a + b log value.

For Poisson's ratio the ring nu = 0 is bold and lies well off the centre, so that auxetic directions are seen to lie
inside it; there the curve is wide and the space up to the ring is filled and hatched with spokes. Requirements are
strokes across their axis, or whole rings, with hairs on the side that is out.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from homog.plots.style import BLUE, GREY, HEAD, INK, OCHRE, PALE, RULE, SMALL, WEDGE, Limit, axes_size, number, wide

if TYPE_CHECKING:
    from matplotlib.axes import Axes

Array = NDArray[np.float64]

SAMPLES = 3601
"""Directions of a curve: every 0.1 deg."""
TURN = np.radians(np.linspace(0.0, 360.0, SAMPLES))
ROUND = np.stack([np.cos(TURN), np.sin(TURN)], -1)
LOG_ABOVE = 20.0
"""A modulus that varies more than this over the directions is drawn on a logarithmic radius."""
LEVEL = 1e-3
"""A quantity that varies less than this share over the directions is called the same in all of them."""
ZERO_RING = 0.30
"""Least radius of the ring nu = 0, so that there is always an inside to see."""
HEADROOM = 0.1
"""Least share of a ring's step between the highest value and the rim."""
SPAN_X, SPAN_Y = 1.22, 1.13
"""Half of what a dial of radius 1 takes with its labels."""
HAIR = 0.035
STROKE = 0.10
"""Half the length of a stroke across an axis, in radii of the dial."""


@dataclass(frozen=True, eq=False)
class Panel:
    """One dial.

    `curves` are values over TURN, the second one dashed. `on_axis` names the columns that belong to one direction
    (degrees from axis 1), `on_ring` those that belong to all of them. `lowest` and `highest` are value and direction.
    """

    name: str
    title: str
    unit: str
    curves: tuple[Array, ...]
    on_axis: Mapping[str, float]
    on_ring: tuple[str, ...]
    lowest: tuple[float, float]
    highest: tuple[float, float]
    signed: bool = False
    notes: tuple[str, ...] = ()
    reach: float = 0.0
    """How far the load may turn from axis 1, degrees, before nu reaches 0: shaded between 0 and 90."""

    @property
    def level(self) -> bool:
        """Whether the first curve is the same in all directions."""
        low, high = self.lowest[0], self.highest[0]
        return high - low <= LEVEL * (max(abs(low), abs(high), 1.0) if self.signed else high)

    def limits(self, limits: Sequence[Limit]) -> list[Limit]:
        """Return those limits that are drawn on this dial."""
        return [limit for limit in limits if limit.column in self.on_axis or limit.column in self.on_ring]


@dataclass(frozen=True)
class Scale:
    """Value to radius, 0 at the centre and 1 at the rim: linear, or logarithmic."""

    centre: float
    rim: float
    rings: tuple[float, ...]
    logarithmic: bool = False

    def radius(self, value: Any) -> Array:
        """Return the radii of values, 0 below the centre."""
        v = np.asarray(value, float)
        if self.logarithmic:
            part = np.log(np.maximum(v, self.centre) / self.centre) / math.log(self.rim / self.centre)
        else:
            part = (v - self.centre) / (self.rim - self.centre)
        return np.asarray(np.maximum(part, 0.0))


def _step(span: float, most: int) -> float:
    """The 1, 2 or 5 times a power of ten that divides a span into at most so many steps."""
    power = 10.0 ** math.floor(math.log10(span / most))
    return next(m * power for m in (1.0, 2.0, 5.0, 10.0) if span <= m * power * most * (1.0 + 1e-9))


def signed_scale(low: float, high: float) -> Scale:
    """Return the linear scale of a signed quantity: zero is a ring well off the centre, whatever the values."""
    low, high = min(low, 0.0), max(high, 0.0)
    step = _step(max(high - low, 0.4), 5)
    rim = math.ceil(high / step + HEADROOM) * step
    lowest = math.floor(low / step + 1e-9) * step
    centre = min(lowest - 0.6 * step, -ZERO_RING / (1.0 - ZERO_RING) * rim)
    first = math.ceil(centre / step + 0.35)
    return Scale(centre, rim, tuple(step * k for k in range(first, round(rim / step) + 1)))


def modulus_scale(low: float, high: float) -> Scale:
    """Return the scale of a positive quantity: from zero, or logarithmic if it varies more than LOG_ABOVE."""
    if high <= LOG_ABOVE * low:
        step = _step(high, 4)
        steps = math.ceil(high / step + HEADROOM)
        return Scale(0.0, steps * step, tuple(step * k for k in range(1, steps + 1)))
    first, last = math.floor(math.log10(low) + 1e-9), math.ceil(math.log10(high) + HEADROOM)
    every = math.ceil((last - first) / 5)
    rings = tuple(10.0**k for k in range(last, first - 1, -every))[::-1]
    return Scale(10.0 ** (first - 0.7 * every), 10.0**last, rings, logarithmic=True)


def draw_panel(ax: Axes, panel: Panel, limits: Sequence[Limit] = (), required_reach: float = math.nan) -> Scale:
    """Draw a dial with the limits that belong to it, and return its scale; `required_reach` in degrees or NaN."""
    mine = panel.limits(limits)
    bounds = [b for limit in mine for b in (limit.low, limit.high) if math.isfinite(b) and (panel.signed or b > 0.0)]
    low, high = min(c.min() for c in panel.curves), max(c.max() for c in panel.curves)
    scale = (signed_scale if panel.signed else modulus_scale)(min(low, *bounds, low), max(high, *bounds, high))
    ax.set(aspect="equal", xlim=(-SPAN_X, SPAN_X), ylim=(-SPAN_Y, SPAN_Y))
    ax.set_axis_off()
    _spokes(ax)
    busy = [(scale.radius(curve)[:, None] * ROUND)[::10] for curve in panel.curves]
    extremes = () if panel.level else (panel.lowest, panel.highest)
    marks = np.array([float(scale.radius(value)) * _unit(degrees) for value, degrees in extremes]).reshape(-1, 2)
    _rings(ax, scale, np.concatenate(busy), marks, signed=panel.signed)
    if 0.0 < panel.reach < 90.0:
        _reach(ax, panel.reach)
    if math.isfinite(required_reach):
        for degrees in (required_reach, -required_reach, 180.0 - required_reach, 180.0 + required_reach):
            x, y = _unit(degrees)
            ax.plot([0.3 * x, x], [0.3 * y, y], color=INK, lw=1.2, ls=(0, (5, 2)), zorder=3, gid="limit")
    for k, curve in enumerate(panel.curves):
        _curve(ax, scale, curve, signed=panel.signed, second=k > 0)
    for limit in mine:
        for bound, sign in ((limit.high, 1.0), (limit.low, -1.0)):
            if bound in bounds:
                _stroke(ax, float(scale.radius(bound)), sign * HAIR, panel.on_axis.get(limit.column))
    for (value, degrees), marker, face in zip(extremes, "v^", ("white", INK), strict=False):
        x, y = float(scale.radius(value)) * _unit(degrees)
        ax.plot([x], [y], ls="", marker=marker, ms=6.0, mfc=face, mec=INK, mew=1.1, zorder=7, gid="extreme")
    return scale


def _unit(degrees: float) -> Array:
    return np.array([math.cos(math.radians(degrees)), math.sin(math.radians(degrees))])


def _spokes(ax: Axes) -> None:
    """Axes 1 and 2, a spoke every 30 degrees and a tick every 10."""
    from matplotlib.collections import LineCollection

    lines: dict[bool, list[Array]] = {True: [], False: []}
    for degrees in range(0, 180, 10):
        x, y = _unit(degrees)
        axis, spoke = degrees % 90 == 0, degrees % 30 == 0
        for end in (_unit(degrees), -_unit(degrees)):
            lines[axis or not spoke].append(np.stack([(0.0 if spoke else 0.975) * end, end]))
        if axis:
            ax.text(1.05 * x, 1.04 * y, "1" if degrees == 0 else "2", fontsize=HEAD, fontweight="bold", color=INK,
                    ha="left" if degrees == 0 else "center", va="center" if degrees == 0 else "bottom")  # fmt: skip
        elif spoke:
            ax.text(1.03 * x, 1.03 * y, f"{degrees}°", fontsize=SMALL, color=GREY,
                    ha="left" if x > 0 else "right", va="bottom")  # fmt: skip
    for strong, color in ((True, GREY), (False, RULE)):
        widths = [0.9 if np.allclose(line[0], 0.0) and strong else 0.5 for line in lines[strong]]
        ax.add_collection(LineCollection(lines[strong], colors=color, linewidths=widths, zorder=1.5))


def _rings(ax: Axes, scale: Scale, busy: Array, marks: Array, *, signed: bool) -> None:
    """The rings and their values, which stand on one ray clear of curves `busy` (q, 2) and of `marks` (q, 2)."""
    gap = scale.rings[-1] - scale.rings[-2] if len(scale.rings) > 1 else scale.rings[-1]
    places = max(0, -math.floor(math.log10(gap) + 1e-9)) if signed else None
    inch = 2.0 * SPAN_X / axes_size(ax)[0]
    for degrees in (30, 60, 120, 150):  # the spokes' names
        x, y = 1.03 * _unit(degrees)
        ends = x + math.copysign(inch, x) * wide(f"{degrees}°") * np.linspace(0.0, 1.0, 4)
        marks = np.concatenate([marks, np.stack([ends, np.full(4, y + inch * SMALL / 144.0)], -1)])
    names = ["0" if abs(value) < 1e-9 * gap else number(value, places=places) for value in scale.rings]
    size = inch * np.array([max(wide(name) for name in names) / 2.0 + 0.03, SMALL / 144.0 + 0.02])
    ray = _clear_ray(scale, size, busy, marks)
    for value, name in zip(scale.rings, names, strict=True):
        radius, zero = float(scale.radius(value)), signed and abs(value) < 1e-9 * gap
        style: dict[str, Any] = {"color": RULE, "lw": 0.6, "zorder": 1.4, "gid": "ring"}
        if zero:
            style = {"color": INK, "lw": 2.6, "zorder": 4, "gid": "zero-ring"}
        elif radius > 1.0 - 1e-9:
            style = {"color": GREY, "lw": 0.8, "zorder": 1.5, "gid": "rim"}
        ax.plot(radius * ROUND[::10, 0], radius * ROUND[::10, 1], **style)
        text = ax.text(radius * math.cos(ray), radius * math.sin(ray), name, fontsize=SMALL,
                       color=INK if zero else GREY, fontweight="bold" if zero else "normal", ha="center", va="center",
                       zorder=6, gid="ring-value")  # fmt: skip
        halo(text)


def halo(artist: Any, width: float = 2.4) -> None:
    """Give a text or a line a white edge, so that it can be told from what it lies on."""
    from matplotlib.patheffects import withStroke

    artist.set_path_effects([withStroke(linewidth=width, foreground="white")])


def _clear_ray(scale: Scale, size: Array, busy: Array, marks: Array) -> float:
    """The angle (radians), off the spokes, at which the rings' values of a half size (2,) are least in the way."""
    radii, best, ray = scale.radius(np.array(scale.rings)), -1.0, 0.0
    for degrees in (45, 75, 105, 135, 15, 165, -45, -75, -105, -135, -15, -165, 50, 70, 40, 80, -50, -70, -40, -80):
        centres = radii[:, None] * _unit(degrees)
        clear, unmarked = (_clearance(centres, points, size) for points in (busy, marks))
        apart = (np.abs(np.diff(centres, axis=0)) / (2.0 * size)).max(axis=-1).min(initial=1.0)
        axes = (np.abs(centres[1:]) / size).min(initial=1.0)  # the innermost may lie on an axis
        room = 2.0 * float(np.minimum(clear, 1.3).mean()) + 3.0 * float(min(apart, unmarked.min())) + 0.4 * float(axes)
        if room > best + 0.02:
            best, ray = room, math.radians(degrees)
    return ray


def _clearance(centres: Array, points: Array, size: Array) -> Array:
    """How far the nearest point is from each centre, in half sizes, at most 1.5: under 1 a text would lie on it."""
    return np.asarray((np.abs(centres[:, None, :] - points) / size).max(axis=-1).min(axis=1, initial=1.5))


def _stroke(ax: Axes, radius: float, hair: float, at_deg: float | None) -> None:
    """A limit: a stroke across its axis, or a whole dashed ring, with hairs towards the side that is out."""
    from matplotlib.collections import LineCollection

    spans, hairs, style = [(0.0, 360.0)], 61, (0, (5, 2))
    if at_deg is not None:
        half = min(math.degrees(STROKE / max(radius, STROKE)), 45.0)
        spans, hairs = [(a - half, a + half) for a in (at_deg, at_deg + 180.0)], 7
    for low, high in spans:
        turn = np.radians(np.linspace(low, high, 181))
        (line,) = ax.plot(radius * np.cos(turn), radius * np.sin(turn), color=INK, lw=1.8, zorder=5.5, gid="limit",
                          ls=style if at_deg is None else "-", solid_capstyle="butt")  # fmt: skip
        if at_deg is not None:
            halo(line, 4.5)
        units = np.array([_unit(a) for a in np.linspace(low, high, hairs)])
        lines = np.stack([radius * units, (radius + hair) * units], 1)
        ax.add_collection(LineCollection(list(lines), colors=INK, linewidths=0.8, zorder=5.5, gid="hairs"))


def _reach(ax: Axes, reach: float) -> None:
    from matplotlib.patches import Wedge

    for middle in (0.0, 180.0):
        wedge = Wedge((0.0, 0.0), 1.0, middle - reach, middle + reach, fc=WEDGE, ec="none", zorder=0.5, gid="reach")
        ax.add_patch(wedge)
        for degrees in (middle - reach, middle + reach):
            x, y = _unit(degrees)
            ax.plot([0.0, x], [0.0, y], color=OCHRE, lw=0.9, ls=(0, (1, 2)), zorder=1.6)
    ax.text(1.05, -0.11, f"±{number(reach)}°", fontsize=SMALL, color=OCHRE, ha="left", va="center", gid="reach-value")


def _curve(ax: Axes, scale: Scale, curve: Array, *, signed: bool, second: bool) -> None:
    from matplotlib.collections import LineCollection
    from matplotlib.patches import PathPatch
    from matplotlib.path import Path

    radius = scale.radius(curve)
    xy = radius[:, None] * ROUND
    inside = (curve < 0.0) & signed
    touching = (inside | np.roll(inside, 1) | np.roll(inside, -1)) & inside.any()
    for part, color, width, name in ((~inside, BLUE, 1.8, "curve"), (touching, OCHRE, 2.6, "auxetic-curve")):
        if part.any():
            drawn = np.where(part[:, None], xy, np.nan)
            ax.plot(drawn[:, 0], drawn[:, 1], color=color, lw=0.65 * width if second else width, zorder=5, gid=name,
                    ls=(0, (4, 1.6)) if second else "-", solid_capstyle="round")  # fmt: skip
    if not inside.any() or second:
        return
    ring = float(scale.radius(0.0)) * ROUND
    edge = np.where(inside[:, None], xy, ring)
    codes = [Path.MOVETO, *[Path.LINETO] * (len(ring[::4]) - 1)] * 2
    outline = Path(np.concatenate([ring[::4], edge[::4][::-1]]), codes)
    ax.add_artist(PathPatch(outline, fc=PALE, ec="none", zorder=2, gid="auxetic"))
    every = 30 if inside.mean() < 0.5 else 60
    spokes = [np.stack([ring[k], edge[k]]) for k in range(every // 2, SAMPLES - 1, every) if inside[k]]
    ax.add_collection(LineCollection(spokes, colors=OCHRE, linewidths=0.45, zorder=2.5, gid="hatch"))
