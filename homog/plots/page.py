"""The page of one cell: three dials, its shape at scale with axes and a bar, and what its columns say.

The dials show nu, E and G (`stiffness`), or stress and strain at first yield (`yield`).
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from homog import directional
from homog.cell import Status
from homog.columns import column, evaluate
from homog.directional import Extremes
from homog.effective import Effective, soft_mode
from homog.errors import InputError, unknown
from homog.families import FAMILIES
from homog.plots import paint
from homog.plots.dial import TURN, Panel, Scale, draw_panel
from homog.plots.style import (
    GREY,
    HEAD,
    PLAIN,
    TITLE,
    Limit,
    axes_at,
    blank_figure,
    bounds_of,
    foot,
    number,
    one_at_a_time,
    symbol,
    value_of,
    wrapped,
    write,
)
from homog.results import Results
from homog.stress import sections
from homog.tensors import vector

if TYPE_CHECKING:
    from matplotlib.figure import Figure

Array = NDArray[np.float64]

WIDTH, HEIGHT = 10.4, 7.55
"""Of the page in inches: landscape, so that it prints at full size on A4 and letter paper."""
LINE = 0.15
"""From one small line to the next, inches."""
SAME = 1e-3
"""Two curves that differ less than this share are drawn as one."""
SLANTED = (math.sqrt(0.5), math.sqrt(0.5))
"""Axes 2 and 3 of the second plane of a spatial cell."""
FIRST = "all in the plane 1-2"
SECOND = "dashed: the plane of axis 1 and the 45° line between 2 and 3"
QUANTITIES = ("stiffness", "yield")
"""What a page's dials may show."""
FIRST_YIELD = "first yield of a beam's extreme fibre; inner corners of the solid see more"
STRENGTH = ("relative_density", "density_kg_m3", "yield_1_MPa", "yield_2_MPa", "yield_12_MPa", "yield_strain_1",
            "E1_MPa", "E2_MPa", "G12_MPa", "nu12", "nu21", "slenderness", "thinnest_mm", "cell_1_mm",
            "cell_2_mm")  # fmt: skip
"""What stands beside the cell on a page of first yield."""
READINGS = {
    "planar": ("relative_density", "density_kg_m3", "E1_MPa", "E2_MPa", "G12_MPa", "nu12", "nu21", "eta1_12", "nu_min",
               "nu_max", "auxetic_share", "auxetic_reach_deg", "anisotropy", "slenderness", "cell_1_mm", "cell_2_mm"),
    "sheet": ("relative_density", "E1_MPa", "E2_MPa", "G12_MPa", "nu12", "nu21", "bending_nu12", "bending_nu21",
              "A11_N_per_mm", "A22_N_per_mm", "D11_N_mm", "D22_N_mm", "auxetic_reach_deg", "height_mm", "cell_1_mm",
              "cell_2_mm"),
    "spatial": ("relative_density", "density_kg_m3", "E1_MPa", "E2_MPa", "E3_MPa", "G12_MPa", "nu12", "nu13", "nu23",
                "nu_min", "nu_max", "auxetic_share", "anisotropy", "slenderness", "cell_1_mm", "cell_2_mm"),
}  # fmt: skip
"""What stands beside the cell."""


@one_at_a_time
def polar_figure(
    effective: Effective,
    *,
    quantity: str = "stiffness",
    limits: Sequence[Limit] = (),
    title: str = "",
    cell_label: str = "",
) -> Figure:
    """Return the page of one cell: E, nu and G or first yield against direction, its shape at scale, its main columns.

    Parameters
    ----------
    effective : Effective
        One cell: batch shape () or a batch of one.
    quantity : str
        `stiffness`: nu, E and G; `yield`: stress at first yield under a pull and in shear, and strain under the pull.
    limits : sequence of Limit
        Requirements. Those on E, nu, G and the reach are drawn, with hairs on the side that is out; all are listed
        with what the cell has.
    title, cell_label : str
        Heading and the line below it; the family's title and its parameters if not given.

    Returns
    -------
    Figure
        Of a planar or spatial cell: nu, E, G, in the plane 1-2; in space a second curve is of the plane through axis 1
        at 45 deg between axes 2 and 3, where it differs. Of a sheet: nu, bending nu and E over its slab.

    Raises
    ------
    InputError
        More cells than one; a cell that cannot exist or is a mechanism; a limit on an unknown column; for `yield`, a
        parent without yield or elements without a cross section.
    """
    if quantity not in QUANTITIES:
        raise unknown("quantity", quantity, QUANTITIES)
    results = Results(effective)
    family = effective.cell.family
    if results.count != 1:
        raise InputError(f"A polar figure is of one cell and this batch has {results.count}; draw each by itself")
    if results.status[0] == Status.MECHANISM:
        raise InputError(
            f"Cell '{family}' has no polar plot: the uniform strain {soft_mode(results.stiffness[0], effective.kind)} "
            "costs no energy, so no Poisson's ratio exists; brace the cell or stiffen its joints"
        )
    if results.status[0] != Status.OK or not np.isfinite(results.membrane).all():
        raise InputError(f"Cell '{family}' has no polar plot: it cannot exist or be inverted; check its parameters")
    for limit in limits:
        column(limit.column)
    readings: tuple[str, ...] = READINGS[effective.kind]
    if quantity == "yield":
        panels, readings = _yield_panels(results), STRENGTH
    else:
        panels = {"planar": _plane_panels, "sheet": _sheet_panels, "spatial": _space_panels}[effective.kind](results)
    names = dict.fromkeys((*readings, "verdict", "reasons", *(limit.column for limit in limits)))
    values = {name: value[0] for name, value in evaluate(effective, list(names)).items()}

    figure = blank_figure(WIDTH, HEIGHT)
    _head(figure, effective, title, cell_label)
    places = ((0.15, 1.72, 4.95), (5.2, 1.12, 2.45), (7.78, 1.12, 2.45))  # left, bottom and width of each dial
    drawn = [panel.limits(limits) for panel in panels]
    drawn[0] += [limit for limit in limits if all(limit not in found for found in drawn)]  # listed below the first dial
    for panel, listed, (x, y, width) in zip(panels, drawn, places, strict=True):
        _place(figure, panel, x, y, width, limits, listed, values)
    _shape(figure, effective)
    _readings(figure, readings, values)
    foot(figure, f"Model: {effective.model}. Parent: {effective.cell.parent.name}")
    return figure


# ------------------------------------------------------------------------------------------------ what is drawn


def _panels(C: Array, e: Extremes, reach: float, others: Sequence[tuple[Array, Array, Array]] = ()) -> list[Panel]:
    """nu, E and G over the plane 1-2 of a stiffness whose extremes there are known; `others` are further curves."""
    nu, E, G = (of(C, angle=TURN) for of in (directional.poisson, directional.young, directional.shear))
    g_min, g_max = _first(-G), _first(G)
    return [
        Panel("nu", "Poisson's ratio ν", "", (nu, *(o[0] for o in others)), {"nu12": 0.0, "nu21": 90.0},
              ("nu_min", "nu_max"), (float(e.nu_min), float(e.nu_min_deg)), (float(e.nu_max), float(e.nu_max_deg)),
              signed=True, reach=reach, notes=_auxetic_words(e, reach)),
        Panel("E", "Young's modulus E", "MPa", (E, *(o[1] for o in others)), {"E1_MPa": 0.0, "E2_MPa": 90.0},
              ("E_min_MPa", "E_max_MPa"), (float(e.E_min), float(e.E_min_deg)), (float(e.E_max), float(e.E_max_deg))),
        Panel("G", "Shear modulus G", "MPa", (G, *(o[2] for o in others)), {"G12_MPa": 0.0},
              ("G_min_MPa", "G_max_MPa"), (float(e.G_min), g_min), (float(e.G_max), g_max)),
    ]  # fmt: skip


def _first(curve: Array) -> float:
    """The smallest direction, degrees, at which a curve over TURN is highest."""
    return float(np.degrees(TURN[_least(-curve)]))


def _auxetic_words(e: Extremes, reach: float) -> tuple[str, ...]:
    share = float(e.auxetic_share)
    if share <= 0.0:
        return ("auxetic in no direction",)
    if share >= 1.0:
        return ("auxetic in every direction",)
    if reach <= 0.0:
        return (f"not auxetic along axis 1, but in {number(100.0 * share)} % of the directions",)
    return (f"auxetic up to ±{number(reach)}° from axis 1 (shaded) and in {number(100.0 * share)} % of the directions",)


def _plane_panels(results: Results) -> list[Panel]:
    e = directional.plane_extremes(results.membrane[0])
    return _panels(np.linalg.inv(results.membrane[0]), e, float(e.auxetic_reach_deg))


def _sheet_panels(results: Results) -> list[Panel]:
    nu, E, _ = _plane_panels(results)
    bending = results.compliance[0, 3:, 3:]
    e = directional.plane_extremes(bending)
    curve = directional.poisson(np.linalg.inv(bending), angle=TURN)
    below = Panel(
        "bending_nu", "Bending Poisson's ratio", "", (curve,), {"bending_nu12": 0.0, "bending_nu21": 90.0}, (),
        (float(e.nu_min), float(e.nu_min_deg)), (float(e.nu_max), float(e.nu_max_deg)), signed=True,
        notes=("bold ring: a dome inside, a saddle outside",),
    )  # fmt: skip
    return [nu, below, E]


def _turned(up: Sequence[float]) -> tuple[Array, Array]:
    """The directions over TURN, and those a quarter turn on, in the plane of axis 1 and the unit vector `up` (d,)."""
    y, x = np.asarray(up, float), np.eye(len(up))[0]
    c, s = np.cos(TURN)[:, None], np.sin(TURN)[:, None]
    return c * x + s * y, c * y - s * x


def _yield_panels(results: Results) -> list[Panel]:
    parent = results.parent
    if np.isnan(parent.yield_MPa):
        raise InputError(f"Parent '{parent.name}' has no yield, so nothing yields first; give it one, take another "
                         "parent ('homog materials' lists them), or draw the stiffness")  # fmt: skip
    found = sections(results.effective)
    planar = results.kind == "planar"
    curves = []
    for up in [[0.0, 1.0]] if planar else [[0.0, 1.0, 0.0], [0.0, *SLANTED]]:
        n, m = _turned(up)
        pull, shear = vector(_dyads(n, n)), vector(_dyads(n, m) + _dyads(m, n))
        stress, across = (parent.yield_MPa / found.peak(load)[0] for load in (pull, shear))
        E = directional.young(results.stiffness[0], **({"angle": TURN} if planar else {"direction": n}))
        curves.append((stress, across, stress / E))
    parent_words = f"the parent yields at {number(parent.yield_MPa, 'MPa')}; a push does what a pull does, no buckling"
    notes: tuple[str, ...] = (FIRST_YIELD, parent_words)
    if not planar:
        same = all(np.abs(a - b).max() <= SAME * a.max() for a, b in zip(*curves, strict=True))
        notes = (FIRST if same else f"{FIRST}; {SECOND}", *notes)
        curves = curves[:1] if same else curves

    def panel(k: int, name: str, title: str, unit: str, on_axis: dict[str, float], notes: tuple[str, ...]) -> Panel:
        curve = curves[0][k]
        low, high = ((float(curve[i]), float(np.degrees(TURN[i]))) for i in (_least(curve), _least(-curve)))
        return Panel(name, title, unit, tuple(c[k] for c in curves), on_axis, (), low, high, notes=notes)

    return [
        panel(0, "yield", "Pull at first yield", "MPa", {"yield_1_MPa": 0.0, "yield_2_MPa": 90.0}, notes),
        panel(1, "yield_shear", "Shear at first yield", "MPa", {"yield_12_MPa": 0.0}, ()),
        panel(2, "yield_strain", "Strain at first yield", "", {"yield_strain_1": 0.0}, ("along the pull",)),
    ]


def _dyads(a: Array, b: Array) -> Array:
    return a[:, :, None] * b[:, None, :]


def _least(curve: Array) -> int:
    """The first place over TURN at which a curve is lowest."""
    return int(np.argmax(curve <= curve.min() + SAME**2 * abs(curve.min())))


def _space_panels(results: Results) -> list[Panel]:
    S, C = results.compliance[0], results.stiffness[0]
    keep = [0, 1, 5]
    e = directional.plane_extremes(S[np.ix_(keep, keep)])
    n, m = _turned([0.0, *SLANTED])
    slanted = (directional.poisson(C, direction=n, across=m), directional.young(C, direction=n),
               directional.shear(C, direction=n, across=m))  # fmt: skip
    reach = float(e.auxetic_reach_deg)
    panels, note = _panels(C, e, reach, [slanted]), f"{FIRST}; {SECOND}"
    if all(np.abs(np.subtract(*p.curves)).max() <= SAME * np.abs(p.curves).max() for p in panels):
        panels, note = _panels(C, e, reach), FIRST
    panels[0] = dataclasses.replace(panels[0], notes=(note, *panels[0].notes))
    return panels


# ------------------------------------------------------------------------------------------------ where it stands


def _head(figure: Figure, effective: Effective, title: str, cell_label: str) -> None:
    cell = effective.cell
    family = FAMILIES.get(cell.family)
    write(figure, 0.2, HEIGHT - 0.16, title or (family.title if family else cell.family), fontsize=TITLE,
          fontweight="bold", gid="title")  # fmt: skip
    if not cell_label:
        units = {p.name: p.unit for p in family.parameters} if family else {}
        parts = []
        for name, value in cell.parameters.items():
            plain = np.ravel(value)[0]
            unit = units.get(name, "").replace("deg", "°")
            said = str(plain) if isinstance(plain, str) else number(float(plain), unit)
            parts.append(f"{name.replace('_', ' ')} {said}")
        cell_label = f"{cell.family}: {', '.join(parts)}" if parts else cell.family
    lines = wrapped(cell_label, 7.9, PLAIN)
    if len(lines) > 2:
        lines[1] += " …"
    parent = cell.parent
    deep = ", plane strain" if parent.deep and cell.kind == "planar" else ""
    said = f"parent: {parent.name}, E {number(parent.modulus_MPa, 'MPa')}, ν {number(parent.poisson)}{deep}"
    lines = [*lines[:2], said]
    write(figure, 0.2, HEIGHT - 0.45, "\n".join(lines), fontsize=PLAIN, color=GREY, gid="cell-label")


def _place(figure: Figure, panel: Panel, x: float, y: float, width: float, limits: Sequence[Limit],
           listed: Sequence[Limit], values: dict[str, Any]) -> None:  # fmt: skip
    """One dial with its heading above and, below it, its extremes and the requirements in `listed`."""
    height = width * 1.13 / 1.22
    ax = axes_at(figure, x, y, width, height, panel.name)
    required = next((limit.low for limit in limits if limit.column == "auxetic_reach_deg"), -math.inf)
    scale = draw_panel(ax, panel, limits, required if panel.name == "nu" and required > 0.0 else math.nan)
    top = y + height + 0.26
    write(figure, x + 0.1, top, panel.title + (f", {panel.unit}" if panel.unit else ""), fontsize=HEAD,
          fontweight="bold")  # fmt: skip
    texts = _caption(panel, scale, wide=width > 4.0) + [_required(limit, values) for limit in listed]
    lines = [line for text in texts for line in wrapped(text, width - 0.1)]
    most = int((y - 0.3) / LINE)
    if len(lines) > most:
        lines = [*lines[: most - 1], f"and {len(lines) - most + 1} lines more: see the table"]
    write(figure, x + 0.1, y - 0.06, "\n".join(lines), linespacing=1.3, gid=f"caption-{panel.name}")


def _required(limit: Limit, values: dict[str, Any]) -> str:
    has = float(values[limit.column])
    met = "met" if limit.low <= has <= limit.high else "missed"
    return f"required {bounds_of(limit)}: has {value_of(limit.column, has)}, {met}"


def _caption(panel: Panel, scale: Scale, *, wide: bool) -> list[str]:
    places = 2 if panel.signed else None

    def said(at: tuple[float, float]) -> str:
        return f"{number(at[0], panel.unit, places=places)} at {number(round(at[1], 1))}°"

    lines = ["bold ring: ν = 0; inside it the cell is auxetic"] if panel.name == "nu" else []
    if panel.level:
        lines.append(f"the same in all directions, {number(panel.highest[0], panel.unit, places=places)}")
    else:
        found = [f"▲ max {said(panel.highest)}", f"▽ min {said(panel.lowest)}"]
        lines += ["\u2003".join(found)] if wide else found
    lines += panel.notes
    if scale.logarithmic:
        lines.append("logarithmic radius")
    return lines


def _shape(figure: Figure, effective: Effective) -> None:
    cell = effective.cell if not effective.cell.shape else effective.cell.at((0,) * len(effective.cell.shape))
    x, y, width, height = 5.3, 3.87, 2.8, 2.7
    if cell.kind == "planar":
        paint.draw_plane(axes_at(figure, x, y, width, height, "cell"), cell)
    elif cell.kind == "sheet":
        part = 0.41 * width
        paint.draw_sheet(axes_at(figure, x, y, part, height, "cell"), cell, oblique=False)
        paint.draw_sheet(axes_at(figure, x + part + 0.1, y, width - part - 0.1, height, "oblique"), cell, oblique=True)
    else:
        paint.draw_space(axes_at(figure, x, y, width, height, "cell"), cell)


def _readings(figure: Figure, readings: Sequence[str], values: dict[str, Any]) -> None:
    left, right, y = 8.3, WIDTH - 0.2, HEIGHT - 0.88
    for name in readings:
        write(figure, left, y, symbol(name)[0], color=GREY)
        write(figure, right, y, value_of(name, float(values[name])), ha="right")
        y -= LINE + 0.005
    codes = ", ".join(str(values["reasons"]).split())
    said = f"verdict: {values['verdict']}" + (f" ({codes})" if codes else "")
    write(figure, left, y - 0.06, "\n".join(wrapped(said, 0.88 * (right - left))), fontweight="bold", gid="verdict")
