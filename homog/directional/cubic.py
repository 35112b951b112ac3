"""Extremes of a spatial compliance of cubic symmetry about the axes, in closed form: what `frames` finds by a search.

With s = S11 - S12 - S44/2 (Voigt), J = n1^2 n2^2 + n2^2 n3^2 + n3^2 n1^2 and P = the sum of n_i^2 m_i^2,

    1/E = S11 - 2 s J        nu = -(S12 + s P) E        1/G = S44 + 4 s P

so that E is extreme along the axes (J = 0) and the diagonals (J = 1/3), G where P is 0 or 1/2, and nu with n along
(1, 1, a) and m along (1, -1, 0) or (a, a, -2) (Norris 2006, Proc. R. Soc. A 462, 3385, from memory; confirmed against
the search). On w = 1/(2 + a^2) in [0, 1/2] both are quadratics over a quadratic, stationary where another quadratic is
zero. Arrays only.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from homog.directional.frames import TIE_TOLERANCE
from homog.tensors import Array

CUBIC_TOLERANCE = 1e-10
"""Below this share of the largest component what breaks cubic symmetry is round-off."""


def is_cubic(S: Array) -> NDArray[np.bool_]:
    """Say which Mandel compliances (c, 6, 6) are cubic about the axes."""
    nearest = np.zeros_like(S)
    for block, value in zip(_BLOCKS, _constants(S), strict=True):
        nearest += value[:, None, None] * block
    return np.asarray(np.abs(S - nearest).max(axis=(1, 2)) <= CUBIC_TOLERANCE * np.abs(S).max(axis=(1, 2)))


_AXES, _SHEARS = np.diag([1.0, 1.0, 1.0, 0.0, 0.0, 0.0]), np.diag([0.0, 0.0, 0.0, 1.0, 1.0, 1.0])
_BLOCKS = (_AXES, np.pad(np.ones((3, 3)), (0, 3)) - _AXES, _SHEARS)


def _constants(S: Array) -> tuple[Array, ...]:
    """S11, S12 and S44/2 of the cubic tensors nearest to S."""
    return tuple(np.einsum("cij,ij->c", S, block) / block.sum() for block in _BLOCKS)


def extremes(S: Array) -> Array:
    """Return nu_min, its angle, nu_max, its angle, E_min, .., E_max, .., G_min, G_max, (10, c), as `frames.extremes`.

    S (c, 6, 6) are cubic about the axes (`is_cubic`) and positive definite.
    """
    S11, S12, half = _constants(S)
    s = S11 - S12 - half
    w = np.zeros((6, len(S)))  # the axes, the face diagonals, and where nu is stationary
    w[1] = 0.5
    # numerators S12 + s (b w + c w^2) over S11 + s (-4 w + 6 w^2)
    for k, (b, c) in enumerate(((1.0, 0.0), (3.0, -6.0))):
        square = -(6.0 * b + 4.0 * c) * s
        linear = 2.0 * c * S11 - 12.0 * S12
        constant = b * S11 + 4.0 * S12
        root = np.sqrt(np.maximum(linear**2 - 4.0 * square * constant, 0.0))
        q = -0.5 * (linear + np.copysign(root, linear))
        w[2 + 2 * k], w[3 + 2 * k] = q / square, constant / q
    w = np.clip(np.nan_to_num(w, nan=0.0, posinf=0.0, neginf=0.0), 0.0, 0.5)
    w = np.concatenate([w, np.full((1, len(S)), 1.0 / 3.0)])  # the diagonals
    stretch = S11 + s * w * (6.0 * w - 4.0)
    nu = -np.concatenate([S12 + s * w, S12 + s * w * (3.0 - 6.0 * w)]) / np.concatenate([stretch, stretch])
    largest = np.maximum(w, 1.0 - 2.0 * w)  # of the n_i^2
    degrees = np.degrees(np.arccos(np.sqrt(np.clip(largest, 0.0, 1.0))))
    ends = np.stack([S11, S11 - 2.0 / 3.0 * s])
    places = np.array([[0.0], [np.degrees(np.arccos(np.sqrt(1.0 / 3.0)))]])
    shears = np.stack([2.0 * half, 2.0 * (S11 - S12)])
    return np.array([
        *_least(nu, np.concatenate([degrees, degrees]), 1.0), *_most(nu, np.concatenate([degrees, degrees]), 1.0),
        *_least(1.0 / ends, places, 0.0), *_most(1.0 / ends, places, 0.0),
        1.0 / shears.max(axis=0), 1.0 / shears.min(axis=0),
    ])  # fmt: skip


def _least(values: Array, degrees: Array, floor: float) -> tuple[Array, Array]:
    best = values.min(axis=0)
    tie = values <= best + TIE_TOLERANCE * (floor + np.abs(best))
    return best, np.where(tie, degrees, np.inf).min(axis=0)


def _most(values: Array, degrees: Array, floor: float) -> tuple[Array, Array]:
    best, where = _least(-values, degrees, floor)
    return -best, where
