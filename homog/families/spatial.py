"""Spatial lattices of round struts with rigid joints."""

from __future__ import annotations

import functools

import numpy as np

from homog.cell import Block, UnitCell
from homog.families.base import Family, Parameter, Rule, Values, batch, topology
from homog.materials import Material
from homog.section import strut_volume

OCTET_IMAGES = [(1, 0, 0), (0, 1, 0), (0, 0, 1), (1, -1, 0), (1, 0, -1), (0, 1, -1)]


def _octet(p: Values, material: Material) -> UnitCell:
    # one node, twelve neighbours, six struts of its own to its images; cell edge sqrt2 l, axes along the cube's
    l, diameter = p["length"], p["diameter"]
    h = l / np.sqrt(2.0)
    lattice = batch([0.0, h, h], [h, 0.0, h], [h, h, 0.0])
    nodes, shifts = topology([[(0, (0, 0, 0)), (0, image)] for image in OCTET_IMAGES])
    points = batch([0.0 * l, 0.0 * l, 0.0 * l])
    props = {
        "diameter": np.asarray(diameter)[..., None],
        "modulus": np.array([material.modulus_MPa]),
        "poisson": np.array([material.poisson]),
    }
    return UnitCell(
        points, lattice, (Block("strut", nodes, shifts, props),), parent=material,
        solid=6.0 * np.pi / 4.0 * diameter**2 * l - _octet_joint() * diameter**3, slenderness=diameter / l,
    )  # fmt: skip


@functools.cache
def _octet_joint() -> float:
    """Return the volume that the struts of one joint share, for unit diameter: its shape is fixed, so it is scaled."""
    lattice = np.array([[0.0, 1.0, 1.0], [1.0, 0.0, 1.0], [1.0, 1.0, 0.0]]) / np.sqrt(2.0)
    nodes, shifts = topology([[(0, (0, 0, 0)), (0, image)] for image in OCTET_IMAGES])
    return float(6.0 * np.pi / 4.0 - strut_volume(np.zeros((1, 3)), lattice, nodes, shifts, np.array(1.0)))


FAMILIES = (
    Family(
        "octet", "Octet lattice", "spatial",
        (
            Parameter("length", "mm", 0.05, 1000.0, 10.0, "strut length; the cell edge is sqrt2 of it"),
            Parameter("diameter", "mm", 0.001, 200.0, 1.0, "strut diameter", made=True),
        ),
        "cubic", "Deshpande, Fleck & Ashby 2001, J. Mech. Phys. Solids 49, 1747 (from memory)", _octet,
        rules=(Rule("struts-merge", "the struts of one joint fill the next; diameter must be under 0.57 length",
                    lambda p, m: p["diameter"] >= 0.57 * p["length"]),),
    ),
)  # fmt: skip
