"""What the checks of published values share: constants read off a tensor, and cells built by hand from elements.

The constants come from the plain inverse of the Voigt stiffness, so that these checks lean on nothing but the tensor.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from hypothesis import settings

from homog.cell import Block, UnitCell
from homog.effective import homogenize
from homog.tensors import compliance_to_voigt, rotate, rotation

SHEAR_COEFFICIENT = 5.0 / 6.0  # of a rectangular wall

drawn = settings(max_examples=50, deadline=None, print_blob=True)
"""How random parameters are drawn; a failure prints what reproduces it. No deadline: a busy machine is no failure."""


class Constants(NamedTuple):
    """Engineering constants of a plane tensor, each of the batch's shape."""

    E1: np.ndarray
    E2: np.ndarray
    nu12: np.ndarray
    nu21: np.ndarray
    G12: np.ndarray


def from_compliance(S):
    """Return the constants of Voigt compliances (..., 3, 3)."""
    return Constants(
        1.0 / S[..., 0, 0],
        1.0 / S[..., 1, 1],
        -S[..., 1, 0] / S[..., 0, 0],
        -S[..., 0, 1] / S[..., 1, 1],
        1.0 / S[..., 2, 2],
    )


def compliance(cell, model="euler", *, load_deg=0.0):
    """Return the Voigt compliance of a cell in axes of which the first stands at `load_deg` from axis 1."""
    stiffness = homogenize(cell, model=model).stiffness
    if cell.kind == "planar":
        stiffness = rotate(stiffness, rotation(-load_deg))
    return compliance_to_voigt(np.linalg.inv(stiffness), sheet=cell.kind == "sheet")


def constants(cell, model="euler", *, load_deg=0.0):
    """Return the engineering constants of a planar cell for axes turned by `load_deg`."""
    return from_compliance(compliance(cell, model, load_deg=load_deg))


def plane_moduli(K, G):
    """Return E and nu of an isotropic plane tensor: E = 4 K G / (K + G), nu = (K - G) / (K + G)."""
    return 4.0 * K * G / (K + G), (K - G) / (K + G)


def shear_share(model, poisson):
    """Return B = E / (kappa G) = 2 (1 + nu) / kappa of the walls, 0 for walls that do not shear."""
    return 0.0 if model == "euler" else 2.0 * (1.0 + poisson) / SHEAR_COEFFICIENT


def block(kind, elements, **props):
    """Return a block from elements written [(point, image), ...]."""
    nodes = np.array([[point for point, _ in ends] for ends in elements])
    shifts = np.array([[image for _, image in ends] for ends in elements])
    return Block(kind, nodes, shifts, {name: np.atleast_1d(np.asarray(value, float)) for name, value in props.items()})


def walls(elements, thickness, *, poisson=0.3, **props):
    """Return a block of walls with modulus 1."""
    return block("wall", elements, thickness=thickness, modulus=1.0, poisson=poisson, **props)


def cell(points, lattice, *blocks):
    """Return a cell of one member."""
    return UnitCell(np.array(points, float), np.array(lattice, float), blocks)


def orders(errors, ratio=2.0):
    """Return the observed orders of convergence of errors at parameters that shrink by `ratio`."""
    e = np.abs(np.asarray(errors, float))
    return np.log(e[:-1] / e[1:]) / np.log(ratio)
