"""Young's modulus, Poisson's ratio, shear modulus and coupling in given directions.

With n the pull, m across it and S the compliance: 1/E = S nnnn, nu = -S nnmm/S nnnn, 1/G = 4 S nmnm and
eta = 2 S nnnm/S nnnn. Every function takes a Mandel stiffness and either angles in the plane or vectors in space.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from homog.directional.frames import pair
from homog.errors import InputError
from homog.tensors import Array

UNIT_TOLERANCE = 1e-9
"""How far a direction's length may be from 1, and its product with the direction across from 0."""
SINGULAR_TOLERANCE = 1e-14
"""A stiffness whose smallest eigenvalue is below this share of the largest is singular in double precision."""


def young(stiffness: ArrayLike, *, angle: ArrayLike | None = None, direction: ArrayLike | None = None) -> Array:
    """Return Young's modulus along given directions, in the stiffness's unit.

    Parameters
    ----------
    stiffness : ndarray of shape (..., 3, 3) or (..., 6, 6), Mandel
        Plane or spatial; a sheet's [A B; B D] is neither.
    angle : ndarray of shape (a,) or any other, radians
        Directions in the plane, counter-clockwise from axis 1. For a spatial tensor they lie in the plane 1-2.
    direction : ndarray of shape (a, 3) or (any, 3)
        Unit vectors, for spatial tensors.

    Returns
    -------
    ndarray of shape (..., a)
        Every member of the batch in every direction. NaN for a stiffness that is not finite or not positive definite.

    Raises
    ------
    InputError
        Not exactly one of `angle` and `direction`; `direction` for a plane tensor; vectors that are not unit vectors.

    Notes
    -----
    1/E(n) = S nnnn.

    >>> from homog.tensors import orthotropic
    >>> np.round(young(orthotropic(4.0, 1.0, 0.5, 0.3), angle=np.radians([0.0, 45.0, 90.0])), 6)
    array([4.      , 0.923077, 1.      ])
    """
    S = _compliance(stiffness)
    n, _ = _directions(S.shape[-1], angle, direction, None, across_needed=False)
    N = pair(n, n)
    return 1.0 / _form(S, N, N)


def poisson(
    stiffness: ArrayLike,
    *,
    angle: ArrayLike | None = None,
    direction: ArrayLike | None = None,
    across: ArrayLike | None = None,
) -> Array:
    """Return Poisson's ratio -eps_m/eps_n for a pull along n, measured along m.

    Parameters
    ----------
    stiffness, angle, direction : as in `young`
        With `angle`, m is the direction across the pull in the plane.
    across : ndarray of shape (a, 3), broadcast against `direction`
        Unit vectors m, perpendicular to `direction`; needed with `direction`.

    Returns
    -------
    ndarray of shape (..., a)
        As in `young`.

    Raises
    ------
    InputError
        As in `young`; `across` missing, out of place or not perpendicular.

    Notes
    -----
    nu(n, m) = -S nnmm / S nnnn.

    >>> from homog.tensors import orthotropic
    >>> np.round(poisson(orthotropic(4.0, 1.0, 0.5, 0.3), angle=np.pi / 4), 6)
    np.float64(0.538462)
    """
    S = _compliance(stiffness)
    n, m = _directions(S.shape[-1], angle, direction, across)
    N, M = pair(n, n), pair(m, m)
    return -_form(S, N, M) / _form(S, N, N)


def shear(
    stiffness: ArrayLike,
    *,
    angle: ArrayLike | None = None,
    direction: ArrayLike | None = None,
    across: ArrayLike | None = None,
) -> Array:
    """Return the shear modulus between n and m, in the stiffness's unit: 1/G(n, m) = 4 S nmnm.

    Parameters, result and errors are those of `poisson`.

    >>> from homog.tensors import orthotropic
    >>> np.round(shear(orthotropic(4.0, 1.0, 0.5, 0.3), angle=np.pi / 4), 6)
    np.float64(0.666667)
    """
    S = _compliance(stiffness)
    n, m = _directions(S.shape[-1], angle, direction, across)
    P = pair(n, m)
    return 0.25 / _form(S, P, P)


def coupling(
    stiffness: ArrayLike,
    *,
    angle: ArrayLike | None = None,
    direction: ArrayLike | None = None,
    across: ArrayLike | None = None,
) -> Array:
    """Return eta = gamma_nm/eps_n for a pull along n: the engineering shear that comes with a unit stretch.

    Parameters, result and errors are those of `poisson`; with `angle`, m is n turned a quarter counter-clockwise.
    eta(n, m) = 2 S nnnm / S nnnn.

    >>> from homog.tensors import orthotropic
    >>> np.round(coupling(orthotropic(4.0, 1.0, 0.5, 0.3), angle=np.pi / 8), 6)
    np.float64(1.228347)
    """
    S = _compliance(stiffness)
    n, m = _directions(S.shape[-1], angle, direction, across)
    N = pair(n, n)
    return 2.0 * _form(S, N, pair(n, m)) / _form(S, N, N)


def _form(S: Array, left: Array, right: Array) -> Array:
    """left.S.right: every member of the batch (..., v, v) with every pair of vectors (..., v)."""
    values = S.reshape(*S.shape[:-2], -1) @ (left[..., :, None] * right[..., None, :]).reshape(-1, S.shape[-1] ** 2).T
    return np.asarray(values.reshape(S.shape[:-2] + left.shape[:-1]))[()]


def _compliance(stiffness: ArrayLike) -> Array:
    """Inverse of a batch of stiffnesses, NaN where a member is not finite or not positive definite."""
    C = np.asarray(stiffness, float)
    if C.ndim < 2 or C.shape[-2:] not in ((3, 3), (6, 6)):
        raise InputError(f"stiffness has shape {C.shape}; it must end in (3, 3) (plane) or (6, 6) (space), Mandel")
    unit = np.eye(C.shape[-1])
    finite = np.isfinite(C).all(axis=(-2, -1))[..., None, None]
    size = np.linalg.eigvalsh(np.where(finite, C, unit))
    regular = finite & (size[..., 0] > SINGULAR_TOLERANCE * size[..., -1])[..., None, None]
    return np.where(regular, np.linalg.inv(np.where(regular, C, unit)), np.nan)


def _directions(
    size: int,
    angle: ArrayLike | None,
    direction: ArrayLike | None,
    across: ArrayLike | None,
    *,
    across_needed: bool = True,
) -> tuple[Array, Array]:
    """Unit vectors n and m (..., d) from what the caller gave; m is n itself where no direction across is needed."""
    if (angle is None) == (direction is None):
        raise InputError("Give either 'angle' (radians, in the plane 1-2) or 'direction' (unit vectors in space)")
    if angle is not None:
        if across is not None:
            raise InputError("'across' goes with 'direction'; with 'angle' it is the normal in the plane, leave it out")
        a = np.asarray(angle, float)
        if not np.isfinite(a).all():
            raise InputError("'angle' holds a value that is not finite; give angles in radians")
        c, s, rest = np.cos(a), np.sin(a), [np.zeros_like(a)] * (size == 6)
        return np.stack([c, s, *rest], axis=-1), np.stack([-s, c, *rest], axis=-1)
    if size == 3:
        raise InputError("'direction' is for spatial tensors (6 x 6), this one is plane (3 x 3); give 'angle'")
    n = _unit_vectors("direction", direction)
    if not across_needed:
        return n, n
    if across is None:
        raise InputError("'direction' alone leaves open where to measure; give 'across' too, unit vectors across it")
    n, m = np.broadcast_arrays(n, _unit_vectors("across", across))
    slant = np.abs((n * m).sum(-1)).max(initial=0.0)
    if slant > UNIT_TOLERANCE:
        raise InputError(f"'across' is not perpendicular to 'direction': their product is {slant:.3g}, allowed is 0")
    return n, m


def _unit_vectors(name: str, given: ArrayLike | None) -> Array:
    v = np.asarray(given, float)
    if v.ndim < 1 or v.shape[-1] != 3:
        raise InputError(f"'{name}' has shape {v.shape}; it must end in 3, unit vectors in space")
    off = np.abs(np.linalg.norm(v, axis=-1) - 1.0).max(initial=0.0)
    if not off <= UNIT_TOLERANCE:
        raise InputError(f"'{name}' holds a vector whose length is off 1 by {off:.3g}; divide each by its length")
    return v
