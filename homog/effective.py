"""The effective tensor: eliminate the nodal freedoms, and report every motion that costs nothing.

The elimination is an LDL' factorisation written over the batch (batch axis last, loops over the few freedoms), and
the effective stiffness is the Schur complement of the macroscopic strains, C = (D - F' K^+ F) / V. The pivots tell
the rank: a pivot below RANK_TOLERANCE of its own diagonal entry is a null vector of K, dropped and counted as a
mechanism, never handed to a solver in the hope that it complains. The same test on C itself finds uniform strains
that cost nothing: there no Poisson's ratio exists, and the mode is named instead.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import IntFlag
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from homog import joints
from homog.assembly import dense, freedoms, sparse, strain_count
from homog.cell import STRAINS, Kind, Status, UnitCell
from homog.elements import check_model
from homog.errors import GeometryError, InputError, MechanismError
from homog.joints import NEAR
from homog.solid import homogenize_solid
from homog.tensors import voigt_factors

if TYPE_CHECKING:
    import pandas as pd

Array = NDArray[np.float64]

RANK_TOLERANCE = 1e-11
"""A pivot below this share of its diagonal entry (dense path) is a null vector: round-off leaves 1e-16 to 1e-13."""
DOUBTFUL = 1e-5
"""A pivot below this share leaves round-off above RANK_TOLERANCE behind it: the rank is then found by eigenvalues."""
SURE_LIMIT = 2500
"""Largest number of freedoms of a sparse cell whose doubtful rank is settled by eigenvalues (some seconds)."""
SPARSE_RANK_TOLERANCE = 1e-9
"""The same for the sparse path, where a null vector may be spread over 1e5 freedoms."""
SPARSE_SHIFT = 1e-15
"""Relative shift of the diagonal by which SuperLU survives an exactly singular matrix."""
DENSE_LIMIT = 240
"""Largest number of freedoms that goes through the dense batched path."""
CHUNK_ROWS = 20_000
"""Rows of M in one chunk of the batch: large enough that numpy's calls cost little, small enough for the cache."""
DEFAULT_MODEL = "joint"


class Flag(IntFlag):
    """What the model has to say about a member."""

    JOINT_OUTSIDE = 1  # a joint that no table covers was taken as a point
    JOINTS_NEAR = 2  # too little plain wall between two joints
    SOLID_COARSE = 4  # the solid's two meshes differ by more than half a percent
    JOINTS_OVERLAP = 8  # no plain wall at all between two joints: their corners overlap


@dataclass(frozen=True, eq=False)
class Effective:
    """What a cell, or each member of a batch, is as a homogeneous material.

    Parameters
    ----------
    stiffness : ndarray of shape (..., v, v)
        Mandel stiffness: MPa, or for sheets [A B; B D] in N/mm, N, N mm. NaN where `status` is IMPOSSIBLE.
    relative_density : ndarray of shape (...)
        Solid share, joints counted once.
    mechanisms : ndarray of int of shape (...)
        Motions that cost no energy: of the nodes at held macroscopic strain, plus uniform strains.
    status : ndarray of int of shape (...)
        `homog.cell.Status`.
    cell : UnitCell
        Where it came from.
    model : str
        The model that was used: `joint` falls back to `timoshenko` where a cell has no condensed joints.
    flags : ndarray of int of shape (...)
        `Flag`s of the model.
    spread : mapping of str to ndarray of shape (...)
        Of a solid, its own error estimate: relative for `E1`, `E2`, `G12`, absolute for `nu12`, `nu21`.
    """

    stiffness: Array
    relative_density: Array
    mechanisms: NDArray[np.int64]
    status: NDArray[np.int8]
    cell: UnitCell
    model: str
    flags: NDArray[np.int8] = field(default_factory=lambda: np.array(0, np.int8))
    spread: Mapping[str, Array] = field(default_factory=dict)

    @property
    def kind(self) -> Kind:
        """`planar`, `sheet` or `spatial`."""
        return self.cell.kind

    def table(self, columns: list[str] | None = None) -> pd.DataFrame:
        """Return the output quantities, one row a member, flattened in C order (all columns unless named)."""
        from homog.columns import table  # the data model's one door upwards

        return table(self, columns)


def homogenize(cell: UnitCell, *, model: str = DEFAULT_MODEL, fillet: float = 0.0) -> Effective:
    """Return the effective stiffness of a periodic cell or of every member of a batch.

    Parameters
    ----------
    cell : UnitCell
        With batch shape (...).
    model : str
        `euler`, `timoshenko`, `joint` or `solid` (see `homog.elements.MODELS`). `solid` needs the extra of that name
        and takes half a second a member.
    fillet : float
        Radius of inner corners, mm; only a `solid` has any.

    Returns
    -------
    Effective
        A bad member of a batch has a status and NaN and leaves its neighbours alone.

    Raises
    ------
    GeometryError, MechanismError
        For a single cell (batch shape ()) that is impossible, or that a uniform strain deforms at no energy.
    InputError
        For a cell whose blocks do not fit its points or their kinds, or that has no section for `solid`.

    Examples
    --------
    >>> import homog
    >>> cell = homog.build("square-grid", length=10.0, thickness=0.5)
    >>> float(homog.homogenize(cell, model="euler").stiffness[0, 0].round(6))  # E t/l
    0.05
    """
    check_model(model)
    cell.check()
    if model == "solid":
        return _solid(cell, fillet)
    if fillet != 0.0:
        raise InputError(f"Model '{model}' has sharp inner corners, fillet = {fillet:g} mm: use model 'solid'")
    shape = cell.shape
    flat = cell if len(shape) == 1 else cell.at(None) if not shape else _flattened(cell)
    members = flat.shape[0]
    with np.errstate(all="ignore"):
        volume, density = (np.broadcast_to(x, (members,)) for x in (flat.volume, flat.relative_density))
    good = np.broadcast_to((flat.status == Status.OK) & (volume > 0.0), (members,))
    v = strain_count(cell.kind)
    condensed = model == "joint" and joints.applies(cell)
    if model == "joint" and not condensed:
        model = "timoshenko"
    count = joints.freedoms(cell) if condensed else freedoms(flat).count
    flags = np.zeros(members, np.int8)
    C = np.empty((members, v, v))
    mechanisms = np.zeros(members, np.int64)
    status = np.full(members, Status.IMPOSSIBLE, np.int8)
    flat = dataclasses.replace(flat, parameters={})
    step = max(8, CHUNK_ROWS // (count + v)) if count <= DENSE_LIMIT else 1
    room = np.empty((count + v, count + v, min(step, members))) if count <= DENSE_LIMIT else None
    with np.errstate(all="ignore"):
        for start in range(0, members, step):
            part = slice(start, min(start + step, members))
            piece = flat.at(part)
            if condensed:
                piece, flags[part] = _joined(piece)
            if room is None:
                whole, upper, null = (x[..., None] for x in _sparse_member(piece.at(0), model))
            else:
                whole, upper, null = _dense_members(piece, model, count, good[part], room[..., : part.stop - start])
            whole /= volume[part]
            finite = good[part] & np.isfinite(whole.sum(axis=(0, 1)))
            whole[:, :, ~finite] = np.nan
            C[part] = np.moveaxis(whole, -1, 0)
            soft = _null_count(whole, upper / volume[part])
            mechanisms[part] = np.where(finite, null + soft, 0)
            status[part][finite] = np.where(soft > 0, Status.MECHANISM, Status.OK)[finite]
    finite = status != Status.IMPOSSIBLE
    density = np.where(finite, density, np.nan)
    effective = Effective(
        stiffness=C.reshape(shape + (v, v)),
        relative_density=density.reshape(shape),
        mechanisms=mechanisms.reshape(shape),
        status=status.reshape(shape),
        cell=cell,
        model=model,
        flags=flags.reshape(shape),
    )
    if not shape and status[0] == Status.IMPOSSIBLE:
        raise GeometryError(
            f"Cell '{cell.family}' has a value that is not finite or walls of no length; check its parameters"
        )
    if not shape and status[0] == Status.MECHANISM and flags[0] & (Flag.JOINTS_NEAR | Flag.JOINTS_OVERLAP):
        raise GeometryError(
            f"Cell '{cell.family}': its joints run into each other, which the joint model does not hold for; "
            "use model 'solid' or thinner walls"
        )
    if not shape and status[0] == Status.MECHANISM:
        mode = soft_mode(effective.stiffness, cell.kind)
        raise MechanismError(
            f"Cell '{cell.family}' has no resistance to the uniform strain {mode}; "
            "brace it, stiffen its joints, or read its stiffness from a batch of one"
        )
    return effective


def _dense_members(
    cell: UnitCell, model: str, count: int, good: NDArray[np.bool_], room: Array
) -> tuple[Array, Array, NDArray[np.int64]]:
    """Return V C (v, v, b), the affine stiffness' diagonal (v, b) and the number of null pivots (b,) of a chunk."""
    M = dense(cell, model, room)
    schur = M[count:, count:]
    upper = np.diagonal(schur).T.copy()
    null, least = eliminate(M, count)
    for i in range(1, len(schur)):
        schur[i, :i] = schur[:i, i]
    doubtful = np.flatnonzero(good & (least < DOUBTFUL) & np.isfinite(schur.sum(axis=(0, 1))))
    if len(doubtful):
        again = np.moveaxis(dense(cell.at(doubtful), model), -1, 0)
        whole, null[doubtful] = ranked(again, count)
        schur[:, :, doubtful] = np.moveaxis(whole, 0, -1)
    return schur, upper, null


def _solid(cell: UnitCell, fillet: float) -> Effective:
    """Return what the solid model finds, member by member; its errors are a single cell's, statuses in a batch."""
    shape = cell.shape
    members = int(np.prod(shape))
    C, density = np.full((members, 3, 3), np.nan), np.full(members, np.nan)
    status, flags = np.full(members, Status.IMPOSSIBLE, np.int8), np.zeros(members, np.int8)
    spread = {name: np.full(members, np.nan) for name in ("E1", "E2", "G12", "nu12", "nu21")}
    flat = _flattened(cell) if shape else cell.at(None)
    for i in range(members):
        try:
            found = homogenize_solid(flat.at(i), fillet=fillet)
        except GeometryError:
            if not shape:
                raise
            continue
        C[i], density[i], status[i] = found.stiffness, found.relative_density, Status.OK
        flags[i] = 0 if found.converged else Flag.SOLID_COARSE
        for name, values in spread.items():
            values[i] = found.error[name]
    return Effective(
        stiffness=C.reshape(*shape, 3, 3),
        relative_density=density.reshape(shape),
        mechanisms=np.zeros(shape, np.int64),
        status=status.reshape(shape),
        cell=cell,
        model="solid",
        flags=flags.reshape(shape),
        spread={name: values.reshape(shape) for name, values in spread.items()},
    )


def _joined(cell: UnitCell) -> tuple[UnitCell, NDArray[np.int8]]:
    joined, outside, plain = joints.with_joints(cell)
    overlap = plain < 0.0
    near = (plain < NEAR) & ~overlap
    flags = outside * Flag.JOINT_OUTSIDE + near * Flag.JOINTS_NEAR + overlap * Flag.JOINTS_OVERLAP
    return joined, flags.astype(np.int8)


def _flattened(cell: UnitCell) -> UnitCell:
    shape = cell.shape
    return cell.at(tuple(np.indices(shape).reshape(len(shape), -1)))


def eliminate(M: Array, count: int) -> tuple[NDArray[np.int64], Array]:
    """Eliminate the first `count` freedoms of symmetric matrices (N, N, b) in place.

    Left-looking LDL' on the upper triangle: afterwards M[count:, count:] holds the Schur complement in its upper
    triangle. Positive semi-definite matrices need no pivoting for the result: a null pivot has a null column. The count
    does where a tiny pivot comes first; so the least pivot is returned too, and `ranked` takes the doubtful ones.

    Returns
    -------
    null : ndarray of int of shape (b,), how many pivots were null
    least : ndarray of shape (b,), smallest pivot over its diagonal entry, 1 if there is none
    """
    b = M.shape[-1]
    dead, least = np.zeros(b, np.int64), np.ones(b)
    L = np.empty((count, len(M), b))  # L[k, i] is row k's pivot's share in row i
    for j in range(len(M)):
        k = min(j, count)
        diagonal = M[j, j].copy()
        if k:
            M[j, j:] -= np.einsum("kb,kib->ib", L[:k, j], M[:k, j:])
        if j < count:
            null = ~(M[j, j] > RANK_TOLERANCE * diagonal)
            dead += null
            np.fmin(least, M[j, j] / diagonal, out=least)
            np.multiply(M[j, j + 1 :], np.where(null, 0.0, 1.0 / M[j, j]), out=L[j, j + 1 :])
    return dead, least


def ranked(M: Array, count: int) -> tuple[Array, NDArray[np.int64]]:
    """Return Schur complements (b, v, v) and null counts of matrices (b, N, N) by eigenvalues of K at unit diagonal.

    Slower than `eliminate` and sure of the rank, whatever the order of the freedoms.
    """
    M = np.triu(M) + np.swapaxes(np.triu(M, 1), -1, -2)
    K, F, D = M[:, :count, :count], M[:, :count, count:], M[:, count:, count:]
    diagonal = np.diagonal(K, axis1=-2, axis2=-1)
    scale = 1.0 / np.sqrt(np.where(diagonal > 0.0, diagonal, 1.0))
    values, vectors = np.linalg.eigh(K * scale[:, :, None] * scale[:, None, :])
    null = values <= RANK_TOLERANCE * values[:, -1:]
    drive = np.swapaxes(vectors, -1, -2) @ (F * scale[:, :, None])
    drive *= np.where(null, 0.0, 1.0 / np.sqrt(np.where(null, 1.0, values)))[:, :, None]
    return np.asarray(D - np.swapaxes(drive, -1, -2) @ drive), null.sum(axis=-1)


def _null_count(C: Array, upper: Array) -> NDArray[np.int64]:
    """Return how many uniform strains cost nothing (b,), stiffness (v, v, b) against the affine upper bound (v, b)."""
    M = C.copy()
    size = len(M)
    null = np.zeros(C.shape[-1], np.int64)
    for j in range(size):
        soft = ~(M[j, j] > RANK_TOLERANCE * upper[j])
        null += soft
        factor = M[j, j + 1 :] * np.where(soft, 0.0, 1.0 / M[j, j])
        for i in range(j + 1, size):
            M[i, i:] -= factor[i - j - 1] * M[j, i:]
    return null


def _sparse_member(cell: UnitCell, model: str) -> tuple[Array, Array, NDArray[np.int64]]:
    """Return V C, the affine stiffness' diagonal and the number of null pivots of one large cell."""
    import scipy.sparse as sp
    from scipy.sparse.linalg import splu

    K, F, D = sparse(cell, model)
    diagonal = K.diagonal()
    scale = 1.0 / np.sqrt(np.where(diagonal > 0.0, diagonal, 1.0))
    if not (np.isfinite(diagonal).all() and np.isfinite(D).all()):
        return np.full_like(D, np.nan), np.diagonal(D), np.array(0)
    unit = sp.diags(scale) @ K @ sp.diags(scale) + SPARSE_SHIFT * sp.identity(len(scale))
    factor = splu(unit.tocsc(), permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True})
    pivots = np.abs(factor.U.diagonal())
    if pivots.min() < DOUBTFUL and len(scale) <= SURE_LIMIT:
        whole, null_count = ranked(np.block([[K.toarray(), F], [F.T, D]])[None], len(scale))
        return whole[0], np.diagonal(D), null_count[0]
    null = pivots < SPARSE_RANK_TOLERANCE
    right = F * scale[:, None]
    return D - right.T @ factor.solve(right), np.diagonal(D), np.array(null.sum())


def soft_mode(stiffness: Array, kind: Kind) -> str:
    """Return the softest uniform strain of one Mandel stiffness (v, v) in words, engineering shear.

    >>> soft_mode(np.diag([1.0, 1.0, 0.0]), "planar")
    'g12 +1.00'
    """
    if not np.isfinite(stiffness).all():
        raise InputError("The stiffness is not finite: it has no soft mode to name")
    size = np.sqrt(np.maximum(np.diagonal(stiffness), np.diagonal(stiffness).max() * RANK_TOLERANCE))
    if kind != "sheet":  # one unit: the mode of least energy for its size
        size = np.ones_like(size)
    values, vectors = np.linalg.eigh(stiffness / np.outer(size, size))
    mode = vectors[:, 0] / size * voigt_factors(len(size), sheet=kind == "sheet")
    mode = mode / mode[np.argmax(np.abs(mode))]
    named = [f"{name} {value:+.2f}" for name, value in zip(STRAINS[kind], mode, strict=True) if abs(value) > 5e-3]
    return " ".join(named)
