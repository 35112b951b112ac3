"""Units that turn: rigid-looking polygons joined at their corners by short flexible ligaments.

A unit is a braced polygon of bars whose areas reproduce a plate (Filipov, Liu, Tachi, Schenk & Paulino 2017, Int. J.
Solids Struct. 124, 26; from memory, confirmed), per unit depth. The rule's shear is right only at nu = 1/3: at 0.4 it
is a third too stiff and breaks the Voigt bound, at 0 it vanishes. So it is used at nu = 1/3, with the largest modulus
that makes the unit stiffer than the parent neither in area nor in shear (`plate`). Two units meet at a pin and are
joined by two hinges of half the ligament's stiffness, one on each side, so that the symmetry stays. The ligament is a
flexure strip, K = E t^3 / (12 l) per unit depth; its stretch and shear are left out, its solid is part of the units'
corners.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from homog.cell import Block, UnitCell
from homog.families.base import Family, Parameter, Rule, Values, batch, topology
from homog.materials import Material

Array = NDArray[np.float64]

Corner = tuple[int, tuple[int, int]]


def _ligament_hinge(p: Values, material: Material) -> Array:
    return np.asarray(material.wall_modulus_MPa * p["ligament_thickness"] ** 3 / (12.0 * p["ligament_length"]))


def plate(material: Material) -> float:
    """Return the modulus of a plate of nu = 1/3 with neither K nor G above the parent's, MPa.

    K = E/(2 (1 - nu)) and G = E/(2 (1 + nu)) in plane stress; of nu = 1/3 they are 3 E'/4 and 3 E'/8.
    """
    E, nu = material.wall_modulus_MPa, material.wall_poisson
    return min(2.0 * E / (3.0 * (1.0 - nu)), 4.0 * E / (3.0 * (1.0 + nu)))


def _units(
    points: Array, lattice: Array, bars: list[list[Corner]], rigidity: Array, hinges: list[list[Corner]],
    p: Values, material: Material, solid: Array,
) -> UnitCell:  # fmt: skip
    half = np.asarray(_ligament_hinge(p, material) / 2.0)[..., None]
    return UnitCell(
        points, lattice,
        (Block("bar", *topology(bars), {"rigidity": rigidity}), Block("hinge", *topology(hinges), {"stiffness": half})),
        parent=material, solid=solid, slenderness=p["ligament_thickness"] / p["ligament_length"],
    )  # fmt: skip


def _squares(p: Values, material: Material) -> UnitCell:
    # A at the origin turned by +opening/2, B at (c, 0) by -opening/2; corners 0 to 3 of A: right, top, left, bottom pin
    a, phi = p["side"], np.radians(p["opening"]) / 2.0
    near, far = a / 2.0 * (np.cos(phi) - np.sin(phi)), a / 2.0 * (np.cos(phi) + np.sin(phi))
    centre = 2.0 * far
    points = batch([far, -near], [near, far], [-far, near], [-near, -far])
    lattice = batch([centre, centre], [-centre, centre])
    A: list[Corner] = [(0, (0, 0)), (1, (0, 0)), (2, (0, 0)), (3, (0, 0))]
    B: list[Corner] = [(0, (0, 0)), (1, (0, -1)), (2, (1, -1)), (3, (1, 0))]  # left, bottom, right, top corner of B
    bars = [[U[i], U[(i + 1) % 4]] for U in (A, B) for i in range(4)]
    bars += [[U[i], U[i + 2]] for U in (A, B) for i in (0, 1)]
    edge, brace = 0.375, 0.375 * np.sqrt(2.0)  # the rule at W = H = side, nu = 1/3
    rigidity = np.asarray(plate(material) * a)[..., None] * np.array([edge] * 8 + [brace] * 4)
    hinges = []
    for i in range(4):  # pin i is corner i of A and of B; both neighbours on the same side of the pin face one void
        shift = np.array(A[i][1]) - np.array(B[i][1])
        for one, other in ((1, -1), (-1, 1)):
            node, image = B[(i + other) % 4]
            hinges.append([A[(i + one) % 4], A[i], (node, tuple(np.array(image) + shift))])
    return _units(points, lattice, bars, rigidity, hinges, p, material, 2.0 * a**2)


def _triangles(p: Values, material: Material) -> UnitCell:
    # twisted kagome: A turned by +psi, B by -psi from the fully open lattice, psi = 60 deg - opening/2
    a = p["side"]
    psi = np.pi / 3.0 - np.radians(p["opening"]) / 2.0
    radius = a / np.sqrt(3.0)
    angles = np.radians([90.0, 210.0, 330.0])
    points = batch(*[[radius * np.cos(k + psi), radius * np.sin(k + psi)] for k in angles])
    distance = 2.0 * radius * np.cos(psi)
    u = np.stack([np.cos(angles), np.sin(angles)], axis=-1)
    lattice = batch(*[[distance * (u[0] - u[k])[0], distance * (u[0] - u[k])[1]] for k in (1, 2)])
    A: list[Corner] = [(0, (0, 0)), (1, (0, 0)), (2, (0, 0))]
    B: list[Corner] = [(0, (0, 0)), (1, (1, 0)), (2, (0, 1))]
    bars = [[U[i], U[(i + 1) % 3]] for U in (A, B) for i in range(3)]
    each = plate(material) * a * np.sqrt(3.0) / 4.0  # three bars of an equilateral plate of nu = 1/3
    hinges = []
    for i in range(3):
        shift = np.array(A[i][1]) - np.array(B[i][1])
        for one, other in ((1, 2), (2, 1)):
            node, image = B[(i + other) % 3]
            hinges.append([A[(i + one) % 3], A[i], (node, tuple(np.array(image) + shift))])
    rigidity = np.asarray(each)[..., None] * np.ones(6)
    return _units(points, lattice, bars, rigidity, hinges, p, material, np.sqrt(3.0) / 2.0 * a**2)


def _parameters(high: float, opening: float) -> tuple[Parameter, ...]:
    return (
        Parameter("side", "mm", 0.05, 1000.0, 10.0, "side of the unit, from pin to pin"),
        Parameter("opening", "deg", 1.0, high, opening, "acute angle of the voids, counted from closed"),
        Parameter("ligament_thickness", "mm", 0.001, 100.0, 0.4, "thickness of the ligament at a corner", made=True),
        Parameter("ligament_length", "mm", 0.005, 200.0, 1.0, "length of the ligament"),
    )


RULES = (
    Rule("void-closed", "the voids are narrower than the ligaments; open them or thin the ligaments",
         lambda p, m: p["side"] * np.sin(np.radians(p["opening"])) <= p["ligament_thickness"]),
    Rule("ligament-long", "the ligament is no longer small beside its unit; ligament_length must be under a quarter "
         "of side", lambda p, m: p["ligament_length"] >= p["side"] / 4.0),
)  # fmt: skip

NOTES = "Rigid units give nu = -1; what the units themselves give way raises it."

FAMILIES = (
    Family(
        "rotating-squares", "Rotating squares", "planar", _parameters(89.0, 15.0), "square",
        "Grima & Evans 2000, J. Mater. Sci. Lett. 19, 1563 (from memory)", _squares, rules=RULES, notes=NOTES,
    ),
    Family(
        "rotating-triangles", "Rotating triangles", "planar", _parameters(119.0, 20.0), "isotropic",
        "Grima & Evans 2006, J. Mater. Sci. 41, 3193 (from memory)", _triangles, rules=RULES, notes=NOTES,
    ),
)  # fmt: skip
