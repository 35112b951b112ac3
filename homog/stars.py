"""Stars of beams: n Timoshenko walls that meet at a point, seen from their tips.

Flexibilities are for forces along, across (to the left) and about each tip, in the wall's own frame, of walls 1 to
n - 1 while tip 0 is held; freedoms 3 i - 3 to 3 i - 1 belong to wall i. Arrays only; trailing axes `...` are the batch.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from homog.elements import WALL_SHEAR

Array = NDArray[np.float64]


def wall_flexibility(length: Array, thickness: Array, modulus: Array, poisson: Array) -> Array:
    """Return the tip flexibility (3, 3, ...) of a Timoshenko cantilever: along, across, rotation; per unit depth."""
    EA = modulus * thickness
    EI = EA * thickness * thickness / 12.0
    GA = WALL_SHEAR * EA / (2.0 * (1.0 + poisson))
    f = np.zeros((3, 3, *np.broadcast_shapes(np.shape(length), np.shape(EA))))
    f[0, 0], f[2, 2] = length / EA, length / EI
    f[1, 1] = length * length * length / (3.0 * EI) + length / GA
    f[1, 2] = f[2, 1] = length * length / (2.0 * EI)
    return f


def held_forces(angles: Array, lengths: Array) -> Array:
    """Return the force on tip 0 (3, 3n - 3, ...) per unit force on the others, each in its own wall's frame.

    Equilibrium of a star with walls at `angles` (n, ...) and tips at `lengths` (n, ...): forces, and moments about the
    point (M + V l of each wall), add up to zero.
    """
    return _held(np.cos(angles - angles[0]), np.sin(angles - angles[0]), lengths)


def _held(cosine: Array, sine: Array, lengths: Array) -> Array:
    Q = np.zeros((3, 3 * len(cosine) - 3, *np.shape(cosine)[1:]))
    for i in range(1, len(cosine)):
        c, s, k = cosine[i], sine[i], 3 * i - 3
        Q[0, k], Q[0, k + 1] = -c, s
        Q[1, k], Q[1, k + 1] = -s, -c
        Q[2, k], Q[2, k + 1], Q[2, k + 2] = s * lengths[0], c * lengths[0] - lengths[i], -1.0
    return Q


def star_flexibility(angles: Array, lengths: Array, thickness: Array, modulus: Array, poisson: Array) -> Array:
    """Return the flexibility (3n - 3, 3n - 3, ...) of n beams (n, ...) that meet at a point, tip 0 held."""
    return star_of(np.cos(angles - angles[0]), np.sin(angles - angles[0]), lengths, thickness, modulus, poisson)


def star_of(cosine: Array, sine: Array, lengths: Array, thickness: Array, modulus: Array, poisson: Array) -> Array:
    """Return `star_flexibility` from the cosine and sine (n, ...) of each wall's angle from the first."""
    Q = _held(cosine, sine, lengths)
    f0 = wall_flexibility(lengths[0], thickness[0], modulus, poisson)
    F = np.einsum("ia...,ib...->ab...", Q, np.einsum("ij...,jb...->ib...", f0, Q))
    for i in range(1, len(cosine)):
        k = 3 * i - 3
        F[k : k + 3, k : k + 3] += wall_flexibility(lengths[i], thickness[i], modulus, poisson)
    return np.asarray(F)


def carried(F: Array, lengths: Array) -> Array:
    """Return T' F T (3n - 3, 3n - 3, ...): F for forces at points that lie `lengths` (n, ...) farther out than F's.

    A force across at the tip is the same force and the moment V l at the point.
    """
    out = np.array(np.broadcast_to(F, F.shape[:2] + np.broadcast_shapes(F.shape[2:], np.shape(lengths)[1:])))
    for i in range(1, len(lengths)):
        out[:, 3 * i - 2] += out[:, 3 * i - 1] * lengths[i]
    for i in range(1, len(lengths)):
        out[3 * i - 2] += out[3 * i - 1] * lengths[i]
    return out
