"""Stars of round beams in space: their flexibility, how loads are carried along them, and when two have one pattern.

Loads and motions of an arm are six Cartesian components, force (displacement), then moment (rotation), for the star's
own axes; freedoms 6 i to 6 i + 5 belong to arm i. Arrays only; trailing axes `...` are the batch.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Index = NDArray[np.int64]

MATCH_TOLERANCE = 1e-9
"""Directions of arms (unit vectors) that agree within this are the same."""


def cross_matrix(a: Array) -> Array:
    """Return the matrix of a cross product, a x b = cross_matrix(a) b."""
    return np.array([[0.0, -a[2], a[1]], [a[2], 0.0, -a[0]], [-a[1], a[0], 0.0]])


def shear_compliance(poisson: Array) -> Array:
    """Return 1/kappa of a round section by energy: 7/6 + (nu/(1 + nu))^2/6.

    The exact shear stress of a bent round bar (Love 1927, art. 232) holds this energy over V^2/(2 G A) (Renton 1991,
    Int. J. Solids Struct. 27, 1955; both from memory, confirmed by integration). Cowper's kappa, 6 (1 + nu)/(7 + 6 nu),
    is of the mean motion instead; with it a joint's correction would depend on where the star is cut.
    """
    nu = np.asarray(poisson)
    return np.asarray(7.0 / 6.0 + (nu / (1.0 + nu)) ** 2 / 6.0)


def strut_shares(e: Array) -> Array:
    """Return the matrices (5, 6, 6) of `strut_scales`: a cantilever along e is their sum, each times its scale."""
    along, across, turn = np.outer(e, e), np.eye(3) - np.outer(e, e), cross_matrix(e)
    shares = np.zeros((5, 6, 6))
    shares[0, :3, :3], shares[1, :3, :3] = along, across
    shares[2, 3:, :3], shares[2, :3, 3:] = turn, turn.T  # a force f turns the tip by e x f
    shares[3, 3:, 3:], shares[4, 3:, 3:] = along, across
    return shares


def strut_scales(length: Array, diameter: Array, modulus: Array, poisson: Array) -> Array:
    """Return the tip flexibilities (5, ...) of a round Timoshenko cantilever.

    Stretch l/EA, deflection l^3/3EI + l/(kappa G A), deflection by a moment l^2/2EI, twist l/GJ, rotation l/EI.
    """
    EA, EI = modulus * np.pi * diameter**2 / 4.0, modulus * np.pi * diameter**4 / 64.0
    twice = 2.0 * (1.0 + poisson)
    return np.stack(
        np.broadcast_arrays(
            length / EA,
            length**3 / (3.0 * EI) + shear_compliance(poisson) * twice * length / EA,
            length**2 / (2.0 * EI),
            twice * length / (2.0 * EI),
            length / EI,
        )
    )


def carrying(directions: Array, lengths: Array) -> Array:
    """Return T (6n, 6n): loads at the point for loads on tips `lengths` (n,) out along `directions` (n, 3)."""
    T = np.eye(6 * len(directions))
    for i, (e, length) in enumerate(zip(directions, lengths, strict=True)):
        T[6 * i + 3 : 6 * i + 6, 6 * i : 6 * i + 3] = length * cross_matrix(e)
    return T


def balanced(n: int) -> Array:
    """Return the projection (6n, 6n) of loads at the point on those that add up to nothing."""
    return np.eye(6 * n) - np.tile(np.eye(6), (n, n)) / n


def held(n: int) -> Array:
    """Return (6n, 6n - 6): loads of all arms at the point for those of arms 1 to n - 1, arm 0 in balance with them."""
    return np.concatenate([np.kron(-np.ones((1, n - 1)), np.eye(6)), np.eye(6 * n - 6)])


def isometries(a: Array, b: Array, *, mirrors: bool = False) -> Iterator[tuple[Array, Index]]:
    """Yield every rotation R (and with `mirrors` every reflection) that makes the directions a those of b, both (n, 3).

    With each comes the order of b: R a[i] = b[order[i]]. The first two of a must not lie on one line.
    """
    if len(a) != len(b):
        return
    back = np.linalg.inv(np.stack([a[0], a[1], np.cross(a[0], a[1])], axis=1))
    for i, j in itertools.permutations(range(len(b)), 2):
        if abs(b[i] @ b[j] - a[0] @ a[1]) > MATCH_TOLERANCE:
            continue
        for sign in (1.0, -1.0) if mirrors else (1.0,):
            R = np.stack([b[i], b[j], sign * np.cross(b[i], b[j])], axis=1) @ back
            off = np.abs((a @ R.T)[:, None] - b).max(axis=-1)
            order = off.argmin(axis=1)
            if (off.min(axis=1) <= MATCH_TOLERANCE).all() and len(set(order.tolist())) == len(b):
                yield R, order


def moved(R: Array, order: Index) -> Array:
    """Return the matrix (6n, 6n) by which an isometry moves the loads of a star: moments do not follow a mirror."""
    n = len(order)
    one = np.zeros((6, 6))
    one[:3, :3], one[3:, 3:] = R, np.linalg.det(R) * R
    where = np.zeros((n, n))
    where[order, np.arange(n)] = 1.0
    return np.asarray(np.kron(where, one), np.float64)
