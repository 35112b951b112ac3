"""Symmetric second- and fourth-order tensors as vectors and matrices.

Inside the package a symmetric tensor is its Mandel vector, the components in an orthonormal basis of symmetric
tensors, so that a rotation is an orthogonal matrix and eigenvalues mean something:

    plane  (11, 22, sqrt2 12)        space  (11, 22, 33, sqrt2 23, sqrt2 13, sqrt2 12)

Outside (files, reports, JSON) the order is the same but shear strain is the engineering shear, gamma = 2 e, and the
matrices are Voigt's. A sheet's 6 x 6 stiffness [A B; B D] is two plane vectors, membrane strain and curvature.

Arrays only: nothing here knows a cell. Leading axes `...` are the batch.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]

SQRT2 = np.sqrt(2.0)
SWEEPS = 12
"""Most rounds of rotations for eigenvalues; 3 x 3 takes about four."""
PAIRS = {2: ((0, 0), (1, 1), (0, 1)), 3: ((0, 0), (1, 1), (2, 2), (1, 2), (0, 2), (0, 1))}


def basis(d: int) -> Array:
    """Return the orthonormal basis of symmetric d x d tensors, ndarray of shape (v, d, d)."""
    tensors = np.zeros((len(PAIRS[d]), d, d))
    for row, (i, j) in enumerate(PAIRS[d]):
        tensors[row, i, j] = tensors[row, j, i] = 1.0 if i == j else 1.0 / SQRT2
    return tensors


def vector(tensor: ArrayLike) -> Array:
    """Return the Mandel vector (..., v) of symmetric tensors (..., d, d)."""
    t = np.asarray(tensor, float)
    return np.asarray(np.einsum("vij,...ij->...v", basis(t.shape[-1]), t))


def voigt_factors(size: int, *, sheet: bool = False) -> Array:
    """Return the factors that turn a Mandel strain vector of `size` into engineering strains, ndarray (size,)."""
    plane, space = [1.0, 1.0, SQRT2], [1.0, 1.0, 1.0, SQRT2, SQRT2, SQRT2]
    if size == 3:
        return np.array(plane)
    return np.array(plane + plane if sheet else space)


def stiffness_to_voigt(stiffness: ArrayLike, *, sheet: bool = False) -> Array:
    """Return the Voigt stiffness (..., v, v) for engineering shear of a Mandel stiffness (..., v, v)."""
    C = np.asarray(stiffness, float)
    f = voigt_factors(C.shape[-1], sheet=sheet)
    return C / (f[:, None] * f)


def stiffness_from_voigt(stiffness: ArrayLike, *, sheet: bool = False) -> Array:
    """Return the Mandel stiffness (..., v, v) of a Voigt stiffness (..., v, v); inverse of `stiffness_to_voigt`."""
    C = np.asarray(stiffness, float)
    f = voigt_factors(C.shape[-1], sheet=sheet)
    return C * (f[:, None] * f)


def compliance_to_voigt(compliance: ArrayLike, *, sheet: bool = False) -> Array:
    """Return the Voigt compliance (..., v, v) for engineering shear of a Mandel compliance (..., v, v)."""
    return stiffness_from_voigt(compliance, sheet=sheet)


def inverse(matrix: ArrayLike) -> Array:
    """Return the inverse (..., v, v) of symmetric positive definite matrices (..., v, v); not checked.

    >>> inverse(np.diag([2.0, 4.0]))
    array([[0.5 , 0.  ],
           [0.  , 0.25]])
    """
    M = np.ascontiguousarray(np.moveaxis(np.asarray(matrix, float), (-2, -1), (0, 1)))
    return np.ascontiguousarray(np.moveaxis(inverted(M), (0, 1), (-2, -1)))


def inverted(M: Array) -> Array:
    """Return the inverse of symmetric positive definite matrices (v, v, ...), row after row swept: no pivoting."""
    A = M.copy()
    product = np.empty_like(A)
    for k in range(len(A)):
        column, row = A[:, k].copy(), A[k] / A[k, k]
        A -= np.multiply(column[:, None], row, out=product)
        A[k], A[:, k] = row, -column / column[k]
        A[k, k] = 1.0 / column[k]
    return A


def eigenvalues(M: Array) -> Array:
    """Return the eigenvalues (v, ...) of symmetric matrices (v, v, ...) in no order, NaN where a matrix is.

    Cyclic Jacobi rotations (Jacobi 1846), each member until its own entries are diagonal to the last digit, so that
    small eigenvalues of positive definite matrices are as exact as large ones.
    """
    A = np.array(M)
    tiny = np.finfo(float).eps / 4.0
    pairs = [(p, q) for p in range(len(A)) for q in range(p + 1, len(A))]
    with np.errstate(all="ignore"):
        for _ in range(SWEEPS):
            turned = False
            for p, q in pairs:
                d = A[q, q] - A[p, p]
                open_ = A[p, q] ** 2 > tiny**2 * np.abs(A[p, p] * A[q, q])
                if not open_.any():
                    continue
                turned = True
                twice = 2.0 * A[p, q]
                t = np.where(open_, twice / (d + np.copysign(np.hypot(d, twice), d)), 0.0)
                c = 1.0 / np.sqrt(1.0 + t * t)
                s = t * c
                shift = t * A[p, q]
                A[p, p] -= shift
                A[q, q] += shift
                A[p, q] = A[q, p] = np.where(open_, 0.0, A[p, q])
                for r in range(len(A)):
                    if r not in (p, q):
                        A[r, p], A[r, q] = c * A[r, p] - s * A[r, q], s * A[r, p] + c * A[r, q]
                        A[p, r], A[q, r] = A[r, p], A[r, q]
            if not turned:
                break
    return np.array([A[i, i] for i in range(len(A))])


def fourth_order(matrix: ArrayLike) -> Array:
    """Return the full tensor (..., d, d, d, d) of a Mandel matrix (..., v, v), plane (3) or space (6)."""
    M = np.asarray(matrix, float)
    b = basis(2 if M.shape[-1] == 3 else 3)
    return np.asarray(np.einsum("vij,...vw,wkl->...ijkl", b, M, b))


def rotation(angle_deg: ArrayLike, *, axis: ArrayLike | None = None) -> Array:
    """Return proper rotations by `angle_deg`: (..., 2, 2) in the plane, or (..., 3, 3) about `axis` (3,) in space.

    Rodrigues' formula in space: R = I + sin a [k] + (1 - cos a) [k]^2.

    >>> np.round(rotation(90.0) @ np.array([1.0, 0.0]), 12)
    array([0., 1.])
    """
    a = np.radians(np.asarray(angle_deg, float))[..., None, None]
    if axis is None:
        quarter = np.array([[0.0, -1.0], [1.0, 0.0]])
        return np.asarray(np.cos(a) * np.eye(2) + np.sin(a) * quarter)
    k = np.asarray(axis, float) / np.linalg.norm(axis)
    cross = np.array([[0.0, -k[2], k[1]], [k[2], 0.0, -k[0]], [-k[1], k[0], 0.0]])
    return np.asarray(np.eye(3) + np.sin(a) * cross + (1.0 - np.cos(a)) * (cross @ cross))


def mandel_rotation(R: ArrayLike, *, sheet: bool = False) -> Array:
    """Return the orthogonal matrices (..., v, v) by which Mandel vectors turn when space turns by R (..., d, d).

    With `sheet`, R is the in-plane turn (..., 2, 2) and the result acts on membrane strain and curvature alike.
    """
    turn = np.asarray(R, float)
    b = basis(turn.shape[-1])
    Q = np.asarray(np.einsum("vij,...ik,wkl,...jl->...vw", b, turn, b, turn))
    if not sheet:
        return Q
    both = np.zeros(Q.shape[:-2] + (6, 6))
    both[..., :3, :3] = both[..., 3:, 3:] = Q
    return both


def rotate(matrix: ArrayLike, R: ArrayLike, *, sheet: bool = False) -> Array:
    """Return the Mandel matrix (..., v, v) of a body that was turned by R (..., d, d)."""
    Q = mandel_rotation(R, sheet=sheet)
    return np.asarray(Q @ np.asarray(matrix, float) @ np.swapaxes(Q, -1, -2))


def isotropic(modulus: ArrayLike, poisson: ArrayLike, *, d: int) -> Array:
    """Return the isotropic Mandel stiffness (..., v, v): plane stress for d = 2, solid for d = 3.

    C = 2 G (I - J) + d K J, J the projector on the spherical part; in plane stress K = E / (2 (1 - nu)), in space
    K = E / (3 (1 - 2 nu)) (Hooke's law).
    """
    E, nu = np.asarray(modulus, float), np.asarray(poisson, float)
    size = len(PAIRS[d])
    trace = np.array([1.0] * d + [0.0] * (size - d)) / np.sqrt(d)
    J = np.outer(trace, trace)
    two_G = (E / (1.0 + nu))[..., None, None]
    dK = (E / (1.0 - nu) if d == 2 else E / (1.0 - 2.0 * nu))[..., None, None]
    return np.asarray(two_G * (np.eye(size) - J) + dK * J)


def orthotropic(E1: ArrayLike, E2: ArrayLike, nu12: ArrayLike, G12: ArrayLike) -> Array:
    """Return the plane orthotropic Mandel stiffness (..., 3, 3) from engineering constants (MPa)."""
    e1, e2, nu, g = np.broadcast_arrays(*(np.asarray(x, float) for x in (E1, E2, nu12, G12)))
    S = np.zeros(e1.shape + (3, 3))
    S[..., 0, 0], S[..., 1, 1], S[..., 2, 2] = 1.0 / e1, 1.0 / e2, 0.5 / g
    S[..., 0, 1] = S[..., 1, 0] = -nu / e1
    return np.asarray(np.linalg.inv(S), float)
