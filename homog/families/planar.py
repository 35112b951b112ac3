"""Planar wall lattices: honeycombs, grids and the arrowhead. Every wall is straight and every joint rigid."""

from __future__ import annotations

import numpy as np

from homog.cell import UnitCell
from homog.families.base import Family, Parameter, Rule, Values, batch, wall_cell
from homog.materials import Material

LENGTH = Parameter("length", "mm", 0.05, 1000.0, 10.0, "wall length between joints")
THICKNESS = Parameter("thickness", "mm", 0.001, 200.0, 1.0, "wall thickness", made=True)
ROOT3 = np.sqrt(3.0)


def _honeycomb(p: Values, material: Material) -> UnitCell:
    #   1'\ /1'      vertical wall 0-1 along axis 2; inclined walls from 1 up to two images of 0,
    #      1         at `angle` from axis 1 (downwards if it is negative)
    #      |
    #      0
    l, h, t, tv = p["inclined"], p["vertical"], p["thickness"], p["vertical_thickness"]
    c, s = np.cos(np.radians(p["angle"])), np.sin(np.radians(p["angle"]))
    points = batch([0.0 * l, 0.0 * l], [0.0 * h, h])
    lattice = batch([l * c, h + l * s], [-l * c, h + l * s])
    walls = [[(0, (0, 0)), (1, (0, 0))], [(1, (0, 0)), (0, (1, 0))], [(1, (0, 0)), (0, (0, 1))]]
    return wall_cell(points, lattice, walls, batch(tv, t, t), material)


def _honeycomb_parameters(low: float, high: float, default: float, vertical: float) -> tuple[Parameter, ...]:
    return (
        Parameter("inclined", "mm", 0.05, 1000.0, 10.0, "length l of the inclined walls"),
        Parameter("vertical", "mm", 0.05, 2000.0, vertical, "length h of the walls along axis 2"),
        Parameter("angle", "deg", low, high, default, "angle of the inclined walls from axis 1"),
        THICKNESS,
        Parameter("vertical_thickness", "mm", 0.001, 200.0, "thickness",
                  "thickness of the walls along axis 2, each one wall with a round end", made=True),
    )  # fmt: skip


def _tips_collide(p: Values, material: Material) -> np.ndarray:
    reach = 2.0 * p["inclined"] * np.sin(np.radians(-p["angle"]))
    tips: np.ndarray = p["vertical"] <= reach + np.maximum(p["thickness"], p["vertical_thickness"])
    return tips


def _verticals_touch(p: Values, material: Material) -> np.ndarray:
    gap: np.ndarray = 2.0 * p["inclined"] * np.cos(np.radians(p["angle"])) - p["vertical_thickness"]
    return gap <= 0.0


VERTICALS_TOUCH = Rule(
    "verticals-touch",
    "the walls along axis 2 are as thick as the cell is wide; 2 inclined cos(angle) must exceed vertical_thickness",
    _verticals_touch,
)
GIBSON = (
    "Gibson, Ashby, Schajer & Robertson 1982, Proc. R. Soc. A 382, 25; Gibson & Ashby, Cellular Solids, 1997, ch. 4"
)


def _square(p: Values, material: Material) -> UnitCell:
    l = p["length"]
    walls = [[(0, (0, 0)), (0, (1, 0))], [(0, (0, 0)), (0, (0, 1))]]
    return wall_cell(
        batch([0.0 * l, 0.0 * l]), batch([l, 0.0], [0.0, l]), walls, batch(*[p["thickness"]] * 2), material
    )


def _triangular(p: Values, material: Material) -> UnitCell:
    l = p["length"]
    lattice = batch([l / 2.0, ROOT3 / 2.0 * l], [-l / 2.0, ROOT3 / 2.0 * l])
    walls = [[(0, (0, 0)), (0, (1, 0))], [(0, (0, 0)), (0, (0, 1))], [(0, (0, 1)), (0, (1, 0))]]
    return wall_cell(batch([0.0 * l, 0.0 * l]), lattice, walls, batch(*[p["thickness"]] * 3), material)


def _kagome(p: Values, material: Material) -> UnitCell:
    # upright triangle 0 1 2; each side runs on through its ends into the next triangles
    l = p["length"]
    points = batch([0.0 * l, 0.0 * l], [l, 0.0 * l], [l / 2.0, ROOT3 / 2.0 * l])
    lattice = batch([l, ROOT3 * l], [-l, ROOT3 * l])
    walls = [
        [(0, (0, 0)), (1, (0, 0))], [(1, (0, 0)), (2, (0, 0))], [(2, (0, 0)), (0, (0, 0))],
        [(1, (0, 0)), (0, (1, -1))], [(2, (0, 0)), (1, (0, 1))], [(2, (0, 0)), (0, (1, 0))],
    ]  # fmt: skip
    return wall_cell(points, lattice, walls, batch(*[p["thickness"]] * 6), material)


def _arrowhead(p: Values, material: Material) -> UnitCell:
    # 0 is the lower apex (0, hB); its image one period up is the upper apex (0, hA); 1 is the side joint (w, 0)
    w = p["half_width"]
    upper, lower = (w / np.tan(np.radians(p[name])) for name in ("outer_angle", "inner_angle"))
    points = batch([0.0 * w, lower], [w, 0.0 * w])
    lattice = batch([2.0 * w, 0.0], [0.0, upper - lower])
    walls = [
        [(0, (0, 1)), (1, (0, 0))], [(0, (0, 1)), (1, (-1, 0))],
        [(0, (0, 0)), (1, (0, 0))], [(0, (0, 0)), (1, (-1, 0))],
    ]  # fmt: skip
    return wall_cell(points, lattice, walls, batch(*[p["thickness"]] * 4), material)


FAMILIES = (
    Family(
        "hexagonal-honeycomb", "Hexagonal honeycomb", "planar", _honeycomb_parameters(1.0, 85.0, 30.0, 10.0),
        "orthotropic", GIBSON, _honeycomb, rules=(VERTICALS_TOUCH,),
        notes="The regular hexagon (vertical = inclined, angle = 30) is isotropic in the plane.",
    ),
    Family(
        "reentrant-honeycomb", "Re-entrant honeycomb", "planar", _honeycomb_parameters(-85.0, -1.0, -30.0, 20.0),
        "orthotropic", GIBSON, _honeycomb,
        rules=(Rule("tips-collide", "opposite tips of the bow-tie touch; vertical must exceed "
                    "2 inclined sin|angle| plus the wall thickness", _tips_collide), VERTICALS_TOUCH),
        notes="Auxetic along its axes only: nu rises through zero when the load turns off them.",
    ),
    Family(
        "square-grid", "Square grid", "planar", (LENGTH, THICKNESS), "square",
        "Wang & McDowell 2004, J. Eng. Mater. Technol. 126, 137 (from memory)", _square,
    ),
    Family(
        "triangular-grid", "Triangular grid", "planar", (LENGTH, THICKNESS), "isotropic",
        "Wang & McDowell 2004, J. Eng. Mater. Technol. 126, 137 (from memory)", _triangular,
    ),
    Family(
        "kagome-grid", "Kagome grid", "planar", (LENGTH, THICKNESS), "isotropic",
        "Wang & McDowell 2004, J. Eng. Mater. Technol. 126, 137 (from memory)", _kagome,
    ),
    Family(
        "arrowhead", "Arrowhead (double-V)", "planar",
        (
            Parameter("half_width", "mm", 0.05, 1000.0, 10.0, "half the period along axis 1"),
            Parameter("outer_angle", "deg", 5.0, 80.0, 30.0, "angle of the long struts from axis 2"),
            Parameter("inner_angle", "deg", 10.0, 88.0, 60.0, "angle of the short struts from axis 2"),
            THICKNESS,
        ),
        "orthotropic", "Larsen, Sigmund & Bouwstra 1997, J. MEMS 6, 99 (from memory)", _arrowhead,
        rules=(Rule("struts-cross", "the short struts do not lie inside the long ones; "
                    "inner_angle must exceed outer_angle", lambda p, m: p["inner_angle"] <= p["outer_angle"]),),
    ),
)  # fmt: skip
