"""The effective tensor's derivative by the parameters of a family, without a second solution for each of them.

C is the least energy over all motions, so its derivative is that of the energy with the relaxed motion held (envelope
theorem; the adjoint method, whose adjoint here is the motion itself). With u* = -K^+ F and C = L L',

    L^-1 dC L^-T = d/dp (U' M(p) U / V(p)),     U = [u*; I] L^-T held

which is I before anything moves: energies relative to those of the undisturbed cell, so that soft and stiff strains are
equally exact. Families and elements stay plain functions; the right side is a central difference of fourth order over
cells built a little to either side, all in one batch and none of them solved. Thin walls whose direction turns make its
odd derivatives grow with (l/t)^2, which leaves about STEP^4 (l/t)^2 / 30: 2e-13 at t = l/10, 2e-9 at t = l/1000;
round-off adds as much.
"""

from __future__ import annotations

import dataclasses
import functools
import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from homog.assembly import energy_parts, freedoms, strained_blocks
from homog.cell import Status, UnitCell
from homog.effective import RANK_TOLERANCE, Effective, homogenize
from homog.errors import InputError
from homog.families import FAMILIES, Family
from homog.joints import applies, with_joints

Array = NDArray[np.float64]
Index = NDArray[np.int64]
Move = Mapping[str, float]
"""How fast each of some parameters moves, in its unit: {"thickness": 1.0} for the derivative by thickness alone."""

STEP = 5e-4
"""Step of the differences: share of a length, radians of an angle."""
STENCIL = (np.array([-2.0, -1.0, 1.0, 2.0]), np.array([1.0, -8.0, 8.0, -1.0]) / 12.0)
"""Steps and weights of the central difference of fourth order."""
WALL_STEP, WALL_STENCIL = 1e-4, (np.array([-1.0, 1.0]), np.array([-0.5, 0.5]))
"""The same of second order for a change of thickness alone: energies are then smooth powers of it, error 1e-8."""
CHUNK = 8192
"""Cells that are strained at a time."""


def numeric(family: Family) -> list[str]:
    """Return the names of a family's parameters that are numbers."""
    return [p.name for p in family.parameters if not p.choices]


def parameters_of(cell: UnitCell, index: Index) -> dict[str, Any]:
    """Return the parameters (b,) of some members (flat numbers) of a family's cell, words as words."""
    if cell.family not in FAMILIES:
        raise InputError(f"Cell '{cell.family}' is of no family: it has no parameters to differentiate by")
    out: dict[str, Any] = {}
    for p in FAMILIES[cell.family].parameters:
        value = np.broadcast_to(cell.parameters[p.name], cell.shape).reshape(-1)
        out[p.name] = str(value[0]) if p.choices else value[index].astype(float)
    return out


def sizes(family: Family, values: Mapping[str, Any], moves: Sequence[Move]) -> Array:
    """Return how far each move goes (q, b) until a length has doubled or an angle turned by a radian."""
    out = []
    for move in moves:
        each = [
            (np.degrees(1.0) if family.parameter(name).unit == "deg" else np.abs(values[name])) / abs(rate)
            for name, rate in move.items()
        ]
        out.append(np.minimum.reduce(np.broadcast_arrays(*each, values[numeric(family)[0]])[:-1]))
    return np.array(out)


@functools.cache
def _open(name: str) -> Family:
    """A family without the limits of its parameters' ranges, which a difference may step over."""
    found = FAMILIES[name]
    wide = (dataclasses.replace(p, low=-math.inf, high=math.inf) for p in found.parameters)
    return dataclasses.replace(found, parameters=tuple(wide))


def moved(cell: UnitCell, index: Index, moves: Sequence[Move], steps: Array) -> UnitCell:
    """Return the cells (q * k * b,) that some members (b,) become along each move, by its steps (q, k, b)."""
    given = parameters_of(cell, index)
    for name, value in given.items():
        if not isinstance(value, str):
            rates = np.array([move.get(name, 0.0) for move in moves])
            given[name] = (value + rates[:, None, None] * steps).reshape(-1)
    return _open(cell.family).build(given, cell.parent).at(slice(None))


def sound(effective: Effective) -> Index:
    """Return the flat numbers of the members that have a compliance."""
    v = effective.stiffness.shape[-1]
    ok = np.flatnonzero(effective.status.reshape(-1) == Status.OK)
    stable = np.linalg.eigvalsh(effective.stiffness.reshape(-1, v, v)[ok])[:, 0] > 0.0
    return np.asarray(ok[stable])


@dataclass(frozen=True, eq=False)
class Held:
    """Relaxed motions of macroscopic strains of unit energy, held: C = L L', `back` = L^-1, all of b members.

    `motion` (N + 1, v, b) has a last row of zeros for held freedoms, `strains` (v, v, b) are the columns of L^-T.
    """

    L: Array
    back: Array
    motion: Array
    strains: Array
    outside: NDArray[np.bool_]


def _jointed(cell: UnitCell, model: str) -> tuple[UnitCell, NDArray[np.bool_]]:
    """The cell that a model assembles, and where one of its joints is in no table."""
    if model == "joint" and applies(cell):
        joined, outside, _ = with_joints(cell)
        return joined, outside
    return cell, np.zeros(cell.shape, bool)


def held(effective: Effective, index: Index) -> Held:
    """Return the held motions of some members (flat numbers, all `sound`)."""
    v = effective.stiffness.shape[-1]
    L = np.linalg.cholesky(effective.stiffness.reshape(-1, v, v)[index])
    back = np.linalg.inv(L)
    whole = effective.cell
    cell = whole.at(np.unravel_index(index, whole.shape)) if whole.shape else whole.at(None)
    joined, outside = _jointed(cell, effective.model)
    count = freedoms(joined).count
    K, F, _ = energy_parts(joined, effective.model)
    F = F @ np.swapaxes(back, -1, -2)
    u = np.zeros((len(K), count + 1, v))
    loose = effective.mechanisms.reshape(-1)[index] > 0
    u[~loose, :count] = -np.linalg.solve(K[~loose], F[~loose])
    if loose.any():  # the smallest of the motions that relax it
        diagonal = np.diagonal(K[loose], axis1=-2, axis2=-1)
        scale = 1.0 / np.sqrt(np.where(diagonal > 0.0, diagonal, 1.0))[:, :, None]
        inverse = np.linalg.pinv(K[loose] * scale * np.swapaxes(scale, -1, -2), RANK_TOLERANCE, hermitian=True)
        u[loose, :count] = -scale * (inverse @ (scale * F[loose]))
    motion, strains = (np.ascontiguousarray(np.moveaxis(x, 0, -1)) for x in (u, np.swapaxes(back, -1, -2)))
    return Held(np.asarray(L), np.asarray(back), motion, strains, outside)


def energies(cell: UnitCell, model: str, still: Held) -> Iterator[tuple[str, Index, Array]]:
    """Yield kind, nodes and twice the energy (v, v, m, k, b) of the elements of each block of cells (k * b,)."""
    numbers = freedoms(cell).numbers
    members = still.motion.shape[-1]
    for part in strained_blocks(cell, model):
        (nodes, f), m = part.rows.shape[1:3], len(part.block)
        rows, affine, weights = (
            np.broadcast_to(x, (*x.shape[:-2], m, *cell.shape)).reshape(*x.shape[:-2], m, -1, members)
            for x in (part.rows, part.affine, part.weights)
        )
        u = still.motion[numbers[part.block.nodes][:, :, :f]]  # (m, nodes, f, v, b)
        e = np.einsum("svmkb,vwb->swmkb", affine, still.strains)
        for n in range(nodes):
            for i in range(f):
                if rows[:, n, i].any():
                    e += rows[:, None, n, i] * np.swapaxes(u[:, n, i], 0, 1)[:, :, None]
        force = np.einsum("stmkb,twmkb->swmkb", weights, e)
        yield part.block.kind, part.block.nodes, np.einsum("svmkb,swmkb->vwmkb", e, force)


def tensor_rates(effective: Effective, moves: Sequence[Move]) -> tuple[Array, Array]:
    """Return how fast stiffness and compliance change along each move.

    Parameters
    ----------
    effective : Effective
        What `homogenize` made of a family's cell, any batch (b members when flattened); not of the model `solid`.
    moves : sequence of q mappings from parameter to rate
        The parameters that move together; all others stay.

    Returns
    -------
    dC, dS : ndarray of shape (q, b, v, v)
        Mandel, per unit of the move (mm, deg). NaN for members without a compliance, and where a joint enters or
        leaves its table within the difference.
    """
    check_differentiable(effective)
    v = effective.stiffness.shape[-1]
    dC, dS = np.full((2, len(moves), effective.status.size, v, v), np.nan)
    good = sound(effective)
    size = max(1, CHUNK // (len(STENCIL[0]) * len(moves)))
    for start in range(0, len(good), size):
        index = good[start : start + size]
        still = held(effective, index)
        # a batch takes one table for all its joints, and equal walls have a table of their own
        parts = [[move] for move in moves] if effective.model == "joint" else [moves]
        G = np.concatenate([_relative_rates(effective, index, still, part) for part in parts])
        dC[:, index] = still.L @ G @ np.swapaxes(still.L, -1, -2)
        dS[:, index] = -np.swapaxes(still.back, -1, -2) @ G @ still.back
    return dC, dS


def _relative_rates(effective: Effective, index: Index, still: Held, moves: Sequence[Move]) -> Array:
    """L^-1 dC L^-T (q, b, v, v) of some members, whose relaxed motions are held, along each move."""
    cell, model, v = effective.cell, effective.model, still.L.shape[-1]
    h = STEP * sizes(FAMILIES[cell.family], parameters_of(cell, index), moves)
    near = moved(cell, index, moves, STENCIL[0][:, None] * h[:, None])
    joined, missed = _jointed(near, model)
    total = sum(energy.sum(axis=2) for _, _, energy in energies(joined, model, still))
    total = (total / near.volume.reshape(-1, len(index))).reshape(v, v, len(moves), -1, len(index))
    rates = np.moveaxis(np.einsum("vwqkb,k->vwqb", total, STENCIL[1]) / h, (2, 3), (0, 1))
    crossed = (missed.reshape(len(moves), -1, len(index)) != still.outside).any(axis=1)
    return np.where(crossed[..., None, None], np.nan, rates)


def check_differentiable(effective: Effective) -> None:
    """Raise InputError for a model or a cell that has no derivatives."""
    if effective.model == "solid":
        raise InputError("Model 'solid' is meshed and has no derivatives; use 'joint', 'timoshenko' or 'euler'")
    if effective.cell.family not in FAMILIES:
        raise InputError(f"Cell '{effective.cell.family}' is of no family: it has no parameters to differentiate by")


def wall_rates(effective: Effective) -> tuple[Array, Array, Array]:
    """Return how fast the compliance changes with the thickness of all walls together, and of each wall apart.

    Parameters
    ----------
    effective : Effective
        Of a family's cell, b members when flattened; not of the model `solid`.

    Returns
    -------
    together : ndarray of shape (b, v, v)
        dS per mm by which everything that has to be made (thicknesses, ligaments, diameters, a sheet) is thicker; as of
        a slab, whose compliance grows with its height.
    apart : ndarray of shape (w, b, v, v)
        dS per mm of each wall of the cell alone, with walls that run from point to point (`timoshenko`, where joints
        are condensed: a joint of unequal walls is in no table). NaN for a sheet, which is of one piece.
    plain : ndarray of shape (b, v, v)
        The compliance of which `apart` is the derivative.
    """
    check_differentiable(effective)
    v, cell = effective.stiffness.shape[-1], effective.cell
    family = FAMILIES[cell.family]
    bias = [{p.name: 1.0 for p in family.parameters if p.made}]
    pointwise = effective if effective.model != "joint" else homogenize(cell, model="timoshenko")
    good = np.intersect1d(sound(effective), sound(pointwise))
    together, plain = np.full((2, effective.status.size, v, v), np.nan)
    plain[good] = np.linalg.inv(pointwise.stiffness.reshape(-1, v, v)[good])
    parts: list[Array] = []
    for start in range(0, len(good), CHUNK // 2):
        index = good[start : start + CHUNK // 2]
        h = WALL_STEP * sizes(family, parameters_of(cell, index), bias)
        near = moved(cell, index, bias, WALL_STENCIL[0][:, None] * h[:, None])
        height = np.broadcast_to(cell.height, cell.shape).reshape(-1)[index]
        volume = near.volume.reshape(-1, len(index)) * (near.height.reshape(-1, len(index)) / height)
        alone: list[Array] = []
        for one in (effective,) if effective is pointwise else (effective, pointwise):
            still = held(one, index)
            joined, missed = _jointed(near, one.model)
            total = np.zeros((v, v, len(index)))
            alone = []
            for kind, nodes, energy in energies(joined, one.model, still):
                rates = np.einsum("vwmkb,k->vwmb", energy / volume, WALL_STENCIL[1]) / h[0]
                total += rates.sum(axis=2)
                alone += [rates[:, :, group].sum(axis=2) for group in _walls(kind, nodes)]
            crossed = (missed.reshape(-1, len(index)) != still.outside).any(axis=0)
            rates = np.moveaxis(np.stack([np.where(crossed, np.nan, total), *alone]), -1, 1)
            dS = -np.swapaxes(still.back, -1, -2) @ rates @ still.back
            if one is effective:
                together[index] = dS[0]
        parts.append(dS[1:])
    if cell.kind == "sheet" or not parts:
        return together, np.full((1, *together.shape), np.nan), plain
    apart = np.full((len(parts[0]), *together.shape), np.nan)
    apart[:, good] = np.concatenate(parts, axis=1)
    return together, apart, plain


def _walls(kind: str, nodes: Index) -> list[Index]:
    """The elements of a block that are one made thing each: walls and struts, and both hinges of one ligament."""
    if kind == "hinge":
        return [np.flatnonzero(nodes[:, 1] == pin) for pin in np.unique(nodes[:, 1])]
    return [np.array([i]) for i in range(len(nodes))] if kind in ("wall", "strut") else []
