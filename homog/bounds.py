"""What no cell can exceed: stability, limits of Poisson's ratio, and the Voigt and Hashin-Shtrikman bounds.

Each function returns a value over its bound (1 is the bound itself), so that a report can give the figures; `report`
collects them and says which are exceeded. A cell that exceeds one is not a find: its model or its density is wrong.
With J the projector on the spherical part, an isotropic tensor is C = d K J + 2 G (1 - J), d = 2 in plane stress.
Arrays only; nothing here knows a cell.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from homog.errors import InputError
from homog.tensors import Array, eigenvalues

BOUND_TOLERANCE = 1e-6
"""A bound is exceeded when the value is over it by more than this, relative: round-off and summed joints aside."""
ISOTROPY_TOLERANCE = 1e-3
"""A tensor counts as isotropic within this relative distance of one that is."""
SINGULAR_TOLERANCE = 1e-14
"""A smallest eigenvalue below this share of the largest is not told from zero in double precision."""


class Moduli(NamedTuple):
    """Bulk, shear and Young's modulus, ndarrays of shape (...), in the parent's unit."""

    K: Array
    G: Array
    E: Array


def positive_definite(stiffness: ArrayLike, *, sheet: bool = False) -> Array:
    """Return the smallest eigenvalue over the largest of Mandel stiffnesses (..., v, v): positive for a stable cell.

    With `sheet`, [A B; B D] is scaled to unit diagonal first, because its entries have different units.

    >>> from homog.tensors import isotropic
    >>> float(np.round(positive_definite(isotropic(1.0, 0.5, d=2)), 9))  # 2 G / 2 K = (1 - nu)/(1 + nu)
    0.333333333
    """
    C = _square(stiffness)
    if sheet:
        diagonal = np.diagonal(C, axis1=-2, axis2=-1)
        size = np.sqrt(np.where(diagonal == 0.0, 1.0, np.abs(diagonal)))
        C = C / (size[..., :, None] * size[..., None, :])
    low, high = _ends(C)
    return _ratio(low, high)


def voigt_excess(stiffness: ArrayLike, relative_density: ArrayLike, modulus: ArrayLike, poisson: ArrayLike) -> Array:
    """Return the largest stiffness over the Voigt bound rho C_s, of any strain.

    Parameters
    ----------
    stiffness : ndarray of shape (..., 3, 3) or (..., 6, 6), Mandel
    relative_density, modulus, poisson : ndarray of shape (...)
        Density, and the isotropic parent C_s: plane stress for 3 x 3, solid for 6 x 6. Modulus in the stiffness's unit.

    Returns
    -------
    ndarray of shape (...)
        The largest eigenvalue of C_s^-1/2 C C_s^-1/2 over rho; at most 1, since rho C_s - C is positive semi-definite
        for every cell (Voigt).

    >>> from homog.tensors import isotropic
    >>> float(np.round(voigt_excess(0.2 * isotropic(3.0, 0.3, d=3), 0.4, 3.0, 0.3), 9))
    0.5
    """
    C = _square(stiffness)
    K, G = _parent(modulus, poisson, _dimension(C))
    spherical, deviatoric = (1.0 / np.sqrt(x)[..., None, None] for x in (_dimension(C) * K, 2.0 * G))
    root = deviatoric * np.eye(C.shape[-1]) + (spherical - deviatoric) * _projector(C.shape[-1])
    return _ratio(_ends(root @ C @ root)[1], np.asarray(relative_density, float))


def isotropic_moduli(stiffness: ArrayLike) -> Moduli:
    """Return K, G and E of the isotropic tensor nearest to Mandel stiffnesses (..., v, v), plane stress or space."""
    C = _square(stiffness)
    d, size = _dimension(C), C.shape[-1]
    spherical = (C * _projector(size)).sum(axis=(-2, -1))
    deviatoric = (np.trace(C, axis1=-2, axis2=-1) - spherical) / (size - 1)
    return Moduli(spherical / d, 0.5 * deviatoric, _young(spherical / d, 0.5 * deviatoric, d))


def isotropy_error(stiffness: ArrayLike) -> Array:
    """Return the relative Frobenius distance (...) of Mandel stiffnesses (..., v, v) from the isotropic ones."""
    C = _square(stiffness)
    d, size = _dimension(C), C.shape[-1]
    K, G, _ = isotropic_moduli(C)
    J = _projector(size)
    nearest = (d * K)[..., None, None] * J + (2.0 * G)[..., None, None] * (np.eye(size) - J)
    return _ratio(np.sqrt(((C - nearest) ** 2).sum(axis=(-2, -1))), np.sqrt((C**2).sum(axis=(-2, -1))))


def hashin_shtrikman(relative_density: ArrayLike, modulus: ArrayLike, poisson: ArrayLike, *, d: int) -> Moduli:
    """Return the upper bounds of K, G and E of isotropic cells of an isotropic parent, ndarrays of shape (...).

    d = 2, plane stress (Hashin 1965, J. Mech. Phys. Solids 13, 119):
        K <= rho K_s G_s/(G_s + (1 - rho) K_s)
        G <= rho K_s G_s/(K_s + (1 - rho) (K_s + 2 G_s))
    d = 3 (Hashin & Shtrikman 1963, J. Mech. Phys. Solids 11, 127):
        K <= 4 G_s K_s rho/(4 G_s + 3 (1 - rho) K_s)
        G <= rho G_s (9 K_s + 8 G_s)/(15 K_s + 20 G_s - 6 rho (K_s + 2 G_s))
    E rises with both, so that its bound is that of K and G at theirs; in the plane rho E_s/(3 - 2 rho) for any nu_s.

    >>> float(np.round(hashin_shtrikman(0.1, 1.0, 0.3, d=3).E, 7))
    0.0525185
    """
    if d not in (2, 3):
        raise InputError(f"Dimension d = {d} is neither 2 (plane stress) nor 3 (space)")
    rho = np.asarray(relative_density, float)
    Ks, Gs = _parent(modulus, poisson, d)
    if d == 2:
        K = rho * Ks * Gs / (Gs + (1.0 - rho) * Ks)
        G = rho * Ks * Gs / (Ks + (1.0 - rho) * (Ks + 2.0 * Gs))
    else:
        K = 4.0 * Gs * Ks * rho / (4.0 * Gs + 3.0 * (1.0 - rho) * Ks)
        G = rho * Gs * (9.0 * Ks + 8.0 * Gs) / (15.0 * Ks + 20.0 * Gs - 6.0 * rho * (Ks + 2.0 * Gs))
    return Moduli(np.asarray(K), np.asarray(G), _young(K, G, d))


def isotropic_poisson_excess(stiffness: ArrayLike) -> Array:
    """Return nu of the nearest isotropic tensor over its limit (...): -1 below; 1 in the plane, 1/2 in space above."""
    C = _square(stiffness)
    d = _dimension(C)
    K, G, _ = isotropic_moduli(C)
    nu = _ratio(d * K - 2.0 * G, d * (d - 1) * K + 2.0 * G)
    return np.where(nu > 0.0, (d - 1) * nu, -nu)


def orthotropic_poisson_excess(stiffness: ArrayLike) -> Array:
    """Return the largest of the limits on nu along the axes, value over bound (...), of stiffnesses (..., v, v).

    nu_ij^2 < E_i/E_j, hence nu_ij nu_ji < 1; in space also nu12 nu21 + nu23 nu32 + nu13 nu31 + 2 nu21 nu32 nu13 < 1
    (Lempriere 1968, AIAA J. 6, 2226; from memory). With r_ij = S_ij/sqrt(S_ii S_jj) these are r_ij^2 and the sum of
    the three less 2 r12 r23 r13: principal minors of S, so that they hold for coupled tensors as well.
    """
    C = _square(stiffness)
    if C.shape[-1] == 3:  # cofactors: the determinant cancels
        C11, C22, C12, C66, C16, C26 = (C[..., i, j] for i, j in ((0, 0), (1, 1), (0, 1), (2, 2), (0, 2), (1, 2)))
        S11, S22, S12 = C22 * C66 - C26**2, C11 * C66 - C16**2, C16 * C26 - C12 * C66
        return _ratio(S12**2, np.abs(S11 * S22))
    S = _inverse(C)[..., :3, :3]
    size = np.sqrt(np.abs(np.diagonal(S, axis1=-2, axis2=-1)))
    r = _ratio(S[..., [0, 1, 0], [1, 2, 2]], size[..., [0, 1, 0]] * size[..., [1, 2, 2]])
    pairs = (r * r).max(axis=-1)
    return np.asarray(np.maximum(pairs, (r * r).sum(axis=-1) - 2.0 * r.prod(axis=-1)))


@dataclass(frozen=True)
class Report:
    """Values over bounds, one ndarray of shape (...) a field; NaN where a bound does not apply or the cell is NaN.

    `stability` is the smallest eigenvalue over the largest. The Hashin-Shtrikman ratios are NaN unless the tensor is
    isotropic. A comparison with NaN is false: nothing is said to be exceeded where nothing is known.
    """

    stability: Array
    voigt_ratio: Array
    isotropy_error: Array
    bulk_ratio: Array
    shear_ratio: Array
    young_ratio: Array
    nu_ratio: Array

    @property
    def hashin_shtrikman_ratio(self) -> Array:
        """The larger of `bulk_ratio` and `shear_ratio`; E exceeds its bound only if one of them does."""
        return np.maximum(self.bulk_ratio, self.shear_ratio)

    @property
    def not_positive(self) -> NDArray[np.bool_]:
        """Where a strain would release energy or cost none."""
        return np.asarray(self.stability <= SINGULAR_TOLERANCE)

    @property
    def above_voigt(self) -> NDArray[np.bool_]:
        """Where some strain meets more stiffness than the parent has at this density."""
        return np.asarray(self.voigt_ratio > 1.0 + BOUND_TOLERANCE)

    @property
    def above_hashin_shtrikman(self) -> NDArray[np.bool_]:
        """Where an isotropic cell is stiffer than any can be; one that is off isotropy by e obeys it to within e."""
        return np.asarray(self.hashin_shtrikman_ratio > 1.0 + BOUND_TOLERANCE + self.isotropy_error)

    @property
    def nu_outside(self) -> NDArray[np.bool_]:
        """Where a Poisson's ratio is outside what a stable material can have."""
        return np.asarray(self.nu_ratio > 1.0 + BOUND_TOLERANCE)


def report(
    stiffness: ArrayLike,
    relative_density: ArrayLike,
    modulus: ArrayLike,
    poisson: ArrayLike,
    *,
    sheet: bool = False,
) -> Report:
    """Return all values over bounds of Mandel stiffnesses (..., v, v) of cells of an isotropic parent.

    Parameters
    ----------
    stiffness : ndarray of shape (..., 3, 3), plane stress per gross area, or (..., 6, 6), space
    relative_density, modulus, poisson : ndarray of shape (...)
        As in `voigt_excess`.
    sheet : bool
        The 6 x 6 is a sheet's [A B; B D]: only stability applies, the rest is NaN.

    Returns
    -------
    Report
    """
    C = _square(stiffness)
    stability = positive_definite(C, sheet=sheet)
    if sheet:
        none = np.full(stability.shape, np.nan)
        return Report(stability, none, none, none, none, none, none)
    error = isotropy_error(C)
    isotropic = error <= ISOTROPY_TOLERANCE
    bound = hashin_shtrikman(relative_density, modulus, poisson, d=_dimension(C))
    K, G, E = (
        np.where(isotropic, _ratio(value, limit), np.nan)
        for value, limit in zip(isotropic_moduli(C), bound, strict=True)
    )
    nu = np.fmax(orthotropic_poisson_excess(C), np.where(isotropic, isotropic_poisson_excess(C), np.nan))
    return Report(stability, voigt_excess(C, relative_density, modulus, poisson), error, K, G, E, nu)


def _square(stiffness: ArrayLike) -> Array:
    """The batch, with NaN throughout a member that is not finite."""
    C = np.asarray(stiffness, float)
    if C.ndim < 2 or C.shape[-2:] not in ((3, 3), (6, 6)):
        raise InputError(f"stiffness has shape {C.shape}; it must end in (3, 3) (plane) or (6, 6) (space), Mandel")
    return np.where(np.isfinite(C.sum(axis=(-2, -1)))[..., None, None], C, np.nan)


def _dimension(C: Array) -> int:
    return 2 if C.shape[-1] == 3 else 3


def _projector(size: int) -> Array:
    """J, the projector on the spherical part of Mandel vectors."""
    d = 2 if size == 3 else 3
    trace = np.array([1.0] * d + [0.0] * (size - d))
    return np.outer(trace, trace) / d


def _parent(modulus: ArrayLike, poisson: ArrayLike, d: int) -> tuple[Array, Array]:
    """K and G of the parent: K = E/(2 (1 - nu)) in plane stress, E/(3 (1 - 2 nu)) in space."""
    E, nu = np.asarray(modulus, float), np.asarray(poisson, float)
    return np.asarray(E / (d * (1.0 - (d - 1) * nu))), np.asarray(E / (2.0 * (1.0 + nu)))


def _young(K: Array, G: Array, d: int) -> Array:
    """E = 4 K G/(K + G) in plane stress, 9 K G/(3 K + G) in space."""
    return _ratio(4.0 * K * G, K + G) if d == 2 else _ratio(9.0 * K * G, 3.0 * K + G)


def _ratio(value: Array, bound: Array) -> Array:
    """value/bound without a warning where the bound is zero or next to it, or either is NaN."""
    with np.errstate(divide="ignore", over="ignore", invalid="ignore"):
        return np.asarray(value / bound)


def _ends(M: Array) -> tuple[Array, Array]:
    """Smallest and largest eigenvalue (...) of symmetric matrices (..., v, v), NaN where they are NaN."""
    if M.shape[-1] == 3:
        values = eigenvalues(np.ascontiguousarray(np.moveaxis(M, (-2, -1), (0, 1))))
        return np.asarray(values.min(axis=0)), np.asarray(values.max(axis=0))
    known = ~np.asarray(np.isnan(M).any(axis=(-2, -1)))[..., None]
    values = np.where(known, np.linalg.eigvalsh(np.where(known[..., None], M, np.eye(M.shape[-1]))), np.nan)
    return values[..., 0], values[..., -1]


def _inverse(C: Array) -> Array:
    """Inverse of a batch, NaN where a member is NaN or singular."""
    unit = np.eye(C.shape[-1])
    known = ~np.asarray(np.isnan(C).any(axis=(-2, -1)))[..., None, None]
    size = np.abs(np.linalg.eigvalsh(np.where(known, C, unit)))
    regular = known & (size.min(axis=-1) > SINGULAR_TOLERANCE * size.max(axis=-1))[..., None, None]
    return np.where(regular, np.linalg.inv(np.where(regular, C, unit)), np.nan)
