"""The chart of a whole screen: every candidate by two columns, families by marker, requirement, bounds, shortlist.

Every candidate is a fine dot (drawn as an image, so a million cost little); over the dots one marker a neighbourhood
tells the family by its shape, filled if that candidate meets every limit. Positive quantities have logarithmic axes.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from homog.columns import COLUMNS
from homog.errors import InputError, unknown
from homog.families import FAMILIES
from homog.materials import Material
from homog.plots import labels
from homog.plots.dial import halo
from homog.plots.style import (
    GREY,
    HEAD,
    INK,
    PLAIN,
    RULE,
    SMALL,
    TITLE,
    WEDGE,
    Limit,
    axes_at,
    blank_figure,
    bounds_of,
    foot,
    one_at_a_time,
    symbol,
    wrapped,
    write,
)

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

WIDTH, HEIGHT = 10.4, 7.0
BOX = (0.85, 0.95, 6.7, 5.25)
"""Left, bottom, width and height of the axes in inches."""
SIDE = 7.8
"""Left edge of the explanations beside them."""
LOOKS = (
    ("o", "#2f5d94"),
    ("s", "#b5651d"),
    ("D", "#1d232e"),
    ("^", "#7d8794"),
    ("v", "#d39a2d"),
    ("P", "#5c3b6b"),
    ("X", "#6fa0c9"),
    ("p", "#8a6d3b"),
    ("h", "#3f4a58"),
    (">", "#a9b3bf"),
    ("<", "#7a4a12"),
    ("d", "#4b78ad"),
)
"""Marker and tone of each family; the tones differ in lightness and the shape alone is enough."""
SIGNED = re.compile(r"(bending_)?(nu|eta)(\d|_)|.*_deg$")
"""Columns that keep a linear axis whatever their values."""
MOSTLY = 0.99
"""Share of positive values above which a column has a logarithmic axis."""
SPACING = 0.125
"""Inches between markers: one a square of this size."""
TAIL = 0.002
"""Share of the candidates at each end of an axis that may lie outside it."""


@one_at_a_time
def property_chart(
    table: pd.DataFrame,
    shortlist: pd.DataFrame,
    *,
    x: str = "density_kg_m3",
    y: str = "E1_MPa",
    limits: Sequence[Limit] = (),
    material: Material | None = None,
    model: str = "",
    title: str = "",
    counts: Mapping[str, tuple[int, int]] | None = None,
) -> Figure:
    """Return the chart of all candidates by two columns.

    Parameters
    ----------
    table : DataFrame
        One row a candidate: `family`, the two columns, and `meets` (bool) if it is known.
    shortlist : DataFrame
        The same columns, best first, with `rank` if it is not simply the order; may be empty.
    x, y : str
        Columns of `table`.
    limits : sequence of Limit
        Requirements: those on x and y make the outlined region, all are listed.
    material : Material
        Parent, for the bounds: Voigt, and Hashin-Shtrikman for cells that are isotropic in the plane; drawn if x is a
        density and y a Young's modulus.
    model, title : str
        The wall model, named at the foot; the heading.
    counts : mapping of str to (int, int)
        Where `table` is a sample: how many candidates each family has in all, and how many of them meet every limit.

    Raises
    ------
    InputError
        A column that the table does not have, or no candidate with a finite (and on a logarithmic axis positive) value.

    Notes
    -----
    Voigt: E = rho E_s. Hashin-Shtrikman in the plane, for any nu_s: E = E_s rho / (3 - 2 rho) (Hashin & Shtrikman 1963,
    from memory, confirmed by the plane bounds on the bulk and shear moduli).
    """
    for name in ("family", x, y):
        if name not in table.columns:
            raise unknown("column of the table", name, [str(c) for c in table.columns])
    values = [table[name].to_numpy(float) for name in (x, y)]
    logs = [_logarithmic(name, value) for name, value in zip((x, y), values, strict=True)]
    shown = np.logical_and.reduce([np.isfinite(v) & ((v > 0.0) | ~log) for v, log in zip(values, logs, strict=True)])
    if not shown.any():
        raise InputError(f"No candidate has values of both '{x}' and '{y}' to draw; choose other columns")
    meets = table["meets"].to_numpy(bool) if "meets" in table.columns else np.ones(len(table), bool)
    families = table["family"].to_numpy(str)

    figure = blank_figure(WIDTH, HEIGHT)
    ax = axes_at(figure, *BOX, "chart")
    box = [_box(limits, name) for name in (x, y)]
    picked = [shortlist[name].to_numpy(float) if len(shortlist) else np.empty(0) for name in (x, y)]
    bound = _bounds(material, x, y)
    _scales(ax, [v[shown] for v in values], logs, box, picked, bound)
    points = np.stack([v[shown] for v in values], -1)
    names = _cloud(ax, points, families[shown], meets[shown])
    if any(np.isfinite(edges).any() for edges in box):
        _region(ax, box)
    _bound_lines(ax, bound)
    if len(shortlist):
        ranks = shortlist["rank"].to_numpy(int) if "rank" in shortlist.columns else np.arange(1, len(shortlist) + 1)
        back = ax.transData.inverted()
        spots = labels.place(_inches(ax, np.stack(picked, -1)), ranks, _inches(ax, points), np.array(BOX[2:]))
        for spot in spots:
            at, to = (back.transform(ax.transAxes.transform(p / np.array(BOX[2:]))) for p in (spot.middle, spot.ring))
            _badge(ax, spot.text, at, to)
    ax.set_xlabel(axis_label(x), fontsize=PLAIN, color=INK)
    ax.set_ylabel(axis_label(y), fontsize=PLAIN, color=INK)

    write(figure, 0.2, HEIGHT - 0.16, title or f"{symbol(y)[0]} against {symbol(x)[0]}", fontsize=TITLE,
          fontweight="bold", gid="title")  # fmt: skip
    counts = counts or {str(name): (int((families == name).sum()), int((meets & (families == name)).sum()))
                        for name in np.unique(families)}  # fmt: skip
    write(figure, 0.2, HEIGHT - 0.46, _count(ax, points, len(table), counts, "meets" in table.columns),
          fontsize=PLAIN, color=GREY)  # fmt: skip
    _side(figure, names, counts, "meets" in table.columns, limits, len(shortlist) > 0, bound)
    basis = ([f"Model: {model}"] if model else []) + ([f"Parent: {material.name}"] if material else [])
    foot(figure, ". ".join(basis) or "Candidates of a screen")
    return figure


def axis_label(column: str) -> str:
    """Return what stands along an axis: symbol, meaning and unit of a column."""
    name, unit = symbol(column)
    meaning = COLUMNS[column].meaning if column in COLUMNS else ""
    meaning = re.sub(r"(?<![A-Za-z])-(?=[a-z])", "−", meaning)
    if re.fullmatch(r"[a-z ]+", name):  # plain words say no more than the meaning
        said = meaning or name
        said = said[0].upper() + said[1:]
    else:
        said = f"{name}: {meaning}" if meaning else name
    return said + (f", {unit}" if unit else "")


def _logarithmic(name: str, values: Array) -> bool:
    finite = values[np.isfinite(values)]
    return not SIGNED.match(name) and finite.size > 0 and bool((finite > 0.0).mean() > MOSTLY)


def _box(limits: Sequence[Limit], column: str) -> tuple[float, float]:
    """Lowest and highest value of a column that all limits allow."""
    mine = [limit for limit in limits if limit.column == column]
    return max([limit.low for limit in mine], default=-math.inf), min([limit.high for limit in mine], default=math.inf)


def _bounds(material: Material | None, x: str, y: str) -> list[tuple[str, Array, Array]]:
    """Name, abscissae and ordinates of the theoretical limits."""
    if material is None or x not in ("density_kg_m3", "relative_density") or not re.match(r"E.*_MPa$", y):
        return []
    rho = np.geomspace(1e-5, 1.0, 400)
    along = rho * (material.density_kg_m3 if x == "density_kg_m3" else 1.0)
    E = material.wall_modulus_MPa
    return [
        ("Voigt bound", along, E * rho),
        ("Hashin–Shtrikman, isotropic in the plane", along, E * rho / (3.0 - 2.0 * rho)),
    ]


def _scales(ax: Axes, values: Sequence[Array], logs: Sequence[bool], box: Sequence[tuple[float, float]],
            picked: Sequence[Array], bound: list[tuple[str, Array, Array]]) -> None:  # fmt: skip
    """Set both axes: nearly all candidates, the shortlist, the requirement and the bound at the right lie inside."""
    spans: list[tuple[float, float]] = []
    for k, (value, log) in enumerate(zip(values, logs, strict=True)):
        low, high = np.quantile(value, [TAIL, 1.0 - TAIL])
        more = np.concatenate([picked[k], [edge for edge in box[k]]])
        if k == 1 and bound:
            more = np.append(more, np.interp(spans[0][1], bound[0][1], bound[0][2]))
        more = more[np.isfinite(more) & ((more > 0.0) | (not log))]
        low, high = min(low, *more, low), max(high, *more, high)
        if log:
            pad = (high / low) ** 0.05 if high > low else 1.5
            spans.append((low / pad, high * pad))
        else:
            pad = 0.05 * (high - low) or 0.1
            spans.append((low - pad, high + pad))
    for name, span, log in zip("xy", spans, logs, strict=True):
        ax.set(**{f"{name}scale": "log" if log else "linear", f"{name}lim": span})
    ax.tick_params(labelsize=SMALL, colors=INK, which="both", width=0.6)
    ax.grid(visible=True, which="major", color=RULE, lw=0.5)
    ax.set_axisbelow(True)
    for side in ax.spines.values():
        side.set(color=GREY, lw=0.8)
    for axis, log in zip((ax.xaxis, ax.yaxis), logs, strict=True):
        if log:
            _log_ticks(axis, axis.get_view_interval())


def _log_ticks(axis: Any, span: Any) -> None:
    """Plain numbers on a logarithmic axis, with 2 and 5 between the powers where there is room."""
    from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

    from homog.plots.style import number

    decades = math.log10(span[1] / span[0])
    axis.set_major_locator(LogLocator(10.0, subs=(1.0, 2.0, 5.0) if decades < 2.5 else (1.0,), numticks=12))
    axis.set_minor_locator(LogLocator(10.0, subs=tuple(range(2, 10)), numticks=99))
    axis.set_major_formatter(FuncFormatter(lambda value, _: number(value)))
    axis.set_minor_formatter(NullFormatter())


def _inches(ax: Axes, points: Array) -> Array:
    """Where data points lie on the page, inches from the lower left corner of the axes."""
    fraction = ax.transAxes.inverted().transform(ax.transData.transform(points))
    return np.asarray(fraction * np.array(BOX[2:]))


def _cloud(ax: Axes, points: Array, families: NDArray[Any], meets: Mask) -> dict[str, tuple[str, str]]:
    """Draw dots and markers; return each family's look, the most numerous first."""
    found, sizes = np.unique(families, return_counts=True)
    order = found[np.argsort(-sizes, kind="stable")]
    looks = {str(name): LOOKS[k % len(LOOKS)] for k, name in enumerate(order)}
    place = _inches(ax, points)
    inside = np.asarray(((place >= 0.0) & (place <= np.array(BOX[2:]))).all(axis=1))
    chosen = _chosen(np.floor(place / SPACING).astype(np.int64), np.searchsorted(found, families), meets, inside)
    for name, (marker, tone) in looks.items():
        mine = families == name
        ax.plot(*points[mine].T, ls="", marker=".", ms=1.6, mew=0.0, color=tone, alpha=0.35, rasterized=True, zorder=2)
        for fill, members in (("white", mine & chosen & ~meets), (tone, mine & chosen & meets)):
            ax.plot(*points[members].T, ls="", marker=marker, ms=4.6, mfc=fill, mec=tone, mew=0.8, zorder=3,
                    gid="family")  # fmt: skip
    return looks


def _chosen(square: NDArray[np.int64], family: NDArray[np.int64], meets: Mask, inside: Mask) -> Mask:
    """One candidate for each square (i, j) of the page: of those that meet the limits if there are any, and of the
    families that are there the one whose turn it is, so that neighbouring squares show all of them."""
    key = square @ np.array([1, 1 << 20])
    order = np.flatnonzero(inside)
    _, where = np.unique(key[order], return_inverse=True)
    any_meets = np.zeros(where.max(initial=-1) + 1, bool)
    np.logical_or.at(any_meets, where, meets[order])
    keep = meets[order] | ~any_meets[where]
    order, where = order[keep], where[keep]
    many = int(family.max()) + 1
    pairs, first = np.unique(where * many + family[order], return_index=True)  # sorted by square, then family
    _, start, count = np.unique(pairs // many, return_index=True, return_counts=True)
    corner = square[order[first[start]]]
    turn = (corner @ np.array([1, 2])) % count
    chosen = np.zeros(len(square), bool)
    chosen[order[first[start + turn]]] = True
    return chosen


def _region(ax: Axes, box: Sequence[tuple[float, float]]) -> None:
    """Outline what is required: shade what is out, hairs on its side."""
    from matplotlib.collections import LineCollection

    (x0, x1), (y0, y1) = ax.get_xlim(), ax.get_ylim()
    (a0, a1), (b0, b1) = ((max(e[0], s[0]), min(e[1], s[1])) for e, s in zip(box, ((x0, x1), (y0, y1)), strict=True))
    for corners in (((x0, a0), (y0, y1)), ((a1, x1), (y0, y1)), ((a0, a1), (y0, b0)), ((a0, a1), (b1, y1))):
        (l, r), (d, u) = corners
        if r > l and u > d:
            ax.fill([l, r, r, l], [d, d, u, u], color=WEDGE, alpha=0.75, lw=0.0, zorder=0.6, gid="out")
    if a0 >= a1 or b0 >= b1:
        return  # limits that exclude each other
    place, back = np.array(BOX[2:]), ax.transData.inverted()

    def page(point: Array) -> Array:
        return np.asarray(back.transform(ax.transAxes.transform(point / place)))

    low, high = _inches(ax, np.array([[a0, b0], [a1, b1]]))
    edges = {  # from, to, which way is out, whether it is a requirement and not just the edge of the axes
        "left": (low, (low[0], high[1]), (-1, 0), math.isfinite(box[0][0])),
        "right": ((high[0], low[1]), high, (1, 0), math.isfinite(box[0][1])),
        "bottom": (low, (high[0], low[1]), (0, -1), math.isfinite(box[1][0])),
        "top": ((low[0], high[1]), high, (0, 1), math.isfinite(box[1][1])),
    }
    for start, end, out, required in edges.values():
        if not required:
            continue
        a, b = np.array(start), np.array(end)
        line = np.array([page(a), page(b)])
        ax.plot(line[:, 0], line[:, 1], color=INK, lw=1.5, zorder=4, gid="requirement")
        steps = np.linspace(a, b, max(2, round(float(np.hypot(*(b - a))) / 0.1)))
        hairs = [np.array([page(s), page(s + 0.05 * np.array(out))]) for s in steps]
        ax.add_collection(LineCollection(hairs, colors=INK, linewidths=0.7, zorder=4))
    x, y = page(np.array([low[0], high[1]]))
    text = ax.annotate("required", (x, y), (5, -5), textcoords="offset points", fontsize=PLAIN, fontweight="bold",
                       color=INK, ha="left", va="top", zorder=7, gid="requirement-name")  # fmt: skip
    halo(text, 3.0)


def _bound_lines(ax: Axes, bound: list[tuple[str, Array, Array]]) -> None:
    for (name, x, y), dash, at in zip(bound, ("-", (0, (6, 2))), (0.05, 0.02), strict=False):
        ax.plot(x, y, color=INK, lw=1.3, ls=dash, zorder=3.5, gid="bound", scalex=False, scaley=False)
        place = _inches(ax, np.stack([x, y], -1))
        inside = ((place > 0.0) & (place < np.array(BOX[2:]))).all(axis=1)
        if inside.sum() < 3:
            continue
        visible = np.flatnonzero(inside)
        k = int(visible[round(at * (len(visible) - 1))])
        slope = place[min(k + 1, len(place) - 1)] - place[k - 1]
        angle = math.degrees(math.atan2(slope[1], slope[0]))
        text = ax.annotate(name, (x[k], y[k]), (0, 4), textcoords="offset points", fontsize=SMALL, color=INK,
                           rotation=angle, rotation_mode="anchor", ha="left", va="bottom", zorder=7,
                           gid="bound-name")  # fmt: skip
        halo(text, 3.0)


def _badge(ax: Axes, text: str, at: Array, to: Array) -> None:
    """A ring about a shortlisted candidate and its rank, joined by a line."""
    ring: dict[str, Any] = {"ls": "", "marker": "o", "ms": 8.5, "mfc": "none"}
    ax.plot([at[0], to[0]], [at[1], to[1]], color=INK, lw=0.8, zorder=7.5)
    ax.plot([to[0]], [to[1]], mec="white", mew=3.0, zorder=7.6, **ring)
    ax.plot([to[0]], [to[1]], mec=INK, mew=1.4, zorder=7.7, gid="shortlisted", **ring)
    box = {"boxstyle": "round,pad=0.25,rounding_size=0.5", "fc": INK, "ec": "white", "lw": 0.8}
    ax.text(at[0], at[1], text, fontsize=SMALL, fontweight="bold", color="white", ha="center", va="center", zorder=8,
            gid="rank", bbox=box)  # fmt: skip


def _count(ax: Axes, points: Array, shown: int, counts: Mapping[str, tuple[int, int]], known: bool) -> str:
    place = _inches(ax, points)
    drawn = int(((place >= 0.0) & (place <= np.array(BOX[2:]))).all(axis=1).sum())
    total, families = sum(count for count, _ in counts.values()), len(counts)
    said = f"{_grouped(total)} candidates of {families} {'families' if families != 1 else 'family'}"
    if known:
        said += f"; {_grouped(sum(met for _, met in counts.values()))} meet every limit"
    if shown < total:
        said += f"; a sample of {_grouped(shown)} is drawn"
    left = shown - drawn
    return said + (f"; {_grouped(left)} have no value here or lie outside the axes" if left else "")


def _grouped(count: int) -> str:
    return f"{count:,}".replace(",", "\u202f") if count >= 10000 else str(count)


def _side(figure: Figure, looks: dict[str, tuple[str, str]], counts: Mapping[str, tuple[int, int]], known: bool,
          limits: Sequence[Limit], ranked: bool, bound: list[tuple[str, Array, Array]]) -> None:  # fmt: skip
    """Explain families, requirement, bounds and signs beside the axes."""
    ax = axes_at(figure, 0.0, 0.0, WIDTH, HEIGHT, "key")
    ax.set(xlim=(0.0, WIDTH), ylim=(0.0, HEIGHT))
    ax.set_axis_off()
    y = HEIGHT - 0.8

    def heading(text: str) -> None:
        nonlocal y
        y -= 0.1
        write(figure, SIDE, y, text, fontsize=HEAD, fontweight="bold")
        y -= 0.25

    def line(text: str, indent: float = 0.0, color: str = INK) -> None:
        nonlocal y
        for part in wrapped(text, WIDTH - SIDE - indent - 0.15):
            write(figure, SIDE + indent, y, part, color=color)
            y -= 0.15

    heading("Families")
    for name, (marker, tone) in looks.items():
        ax.plot([SIDE + 0.08], [y - 0.06], ls="", marker=marker, ms=6.0, mfc=tone, mec=tone, gid="family-key")
        line(FAMILIES[name].title if name in FAMILIES else name, 0.25)
        count, met = counts[name]
        said = _grouped(count) + (f", {_grouped(met)} meet" if known else "")
        line(said, 0.25, GREY)
        y -= 0.04
    if limits:
        heading("Required")
        for limit in limits[:12]:
            line(bounds_of(limit))
        if len(limits) > 12:
            line(f"and {len(limits) - 12} more")
    heading("Signs")
    signs = ["filled: meets every limit, open: does not"] if known else []
    signs += ["one marker a neighbourhood, a dot a candidate"] + ["numbers: rank in the shortlist"] * ranked
    line("; ".join(signs))
