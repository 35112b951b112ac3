"""From a cell to its energy: freedoms, strain rows, and the quadratic form of motion and macroscopic strain together.

With element strains e = B u + (B A) v, u the nodal freedoms and v the macroscopic strains, the energy of a cell is
1/2 [u v]' M [u v] with

    M = [K  F]      K = B' W B,   F = B' W (B A),   D = (B A)' W (B A)
        [F' D]

so macroscopic strains are assembled as v more freedoms and the effective tensor is what is left of M when u is
eliminated (`effective`). The first point's translations are held, which takes the rigid translations out. Small cells
go through `dense` (batch axis last, loops only over local indices); cells of thousands of nodes through `sparse`.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from homog.cell import Block, Kind, UnitCell
from homog.elements import check_block, check_model, element, rotations
from homog.tensors import PAIRS

if TYPE_CHECKING:
    import scipy.sparse as sp

Array = NDArray[np.float64]
Index = NDArray[np.int64]

HALF = np.sqrt(0.5)


@dataclass(frozen=True)
class Freedoms:
    """Numbers of the freedoms of each point, -1 where there is none: (n, d + r), translations first."""

    numbers: Index
    count: int


def freedoms(cell: UnitCell) -> Freedoms:
    """Number the freedoms of a cell, point by point; rotations only where an element that turns is joined."""
    r = rotations(cell.d)
    held = np.zeros((cell.n, cell.d + r), bool)
    held[:, cell.d :] = True
    for block in cell.blocks:
        if element(block.kind).turns:
            held[np.unique(block.nodes), cell.d :] = False
    held[0, : cell.d] = True
    numbers = np.full(held.shape, -1, np.int64)
    count = int((~held).sum())
    numbers[~held] = np.arange(count)
    return Freedoms(numbers, count)


def strain_count(kind: Kind) -> int:
    """Number of macroscopic strains of a kind of cell."""
    return 3 if kind == "planar" else 6


def _affine_strains(kind: Kind, rows: Array, x: Array, middle: Array) -> Array:
    """Return the element strains (s, v, *) of unit macroscopic strains (Mandel), the exact B A.

    Membrane and spatial strain: u = E x. Curvature of a sheet: w = -x'Kx/2, u = z K x, rotation (-(Kx)2, (Kx)1, 0),
    z from `middle`. In the plane of periodicity positions count from the element's own first node: the difference
    is a rigid motion, which strains no element, and it keeps round-off small far from the origin.
    """
    d = len(x[0])
    y = x[1:] - x[0]
    rows = rows[:, 1:]
    out = np.empty((len(rows), strain_count(kind), *rows.shape[3:]))

    def sum_of(*terms: tuple[int, Array]) -> Array:
        """The strains (s, *) of motions (k - 1, *) of the nodes along or about their freedoms."""
        return np.asarray(sum(np.einsum("sk...,k...->s...", rows[:, :, f], motion) for f, motion in terms))

    for v, (i, j) in enumerate(PAIRS[2 if kind == "sheet" else d]):
        out[:, v] = sum_of((i, y[:, i])) if i == j else sum_of((j, y[:, i]), (i, y[:, j])) * HALF
    if kind != "sheet":
        return out
    (y1, y2), z = (y[:, 0], y[:, 1]), x[1:, 2] - middle
    out[:, 3] = sum_of((0, z * y1), (2, -0.5 * y1 * y1))
    out[:, 4] = sum_of((1, z * y2), (2, -0.5 * y2 * y2))
    out[:, 5] = sum_of((0, z * y2), (1, z * y1), (2, -y1 * y2)) * HALF
    if rows.shape[2] > d:
        out[:, 3] += sum_of((4, y1))
        out[:, 4] += sum_of((3, -y2))
        out[:, 5] += sum_of((3, -y1), (4, y2)) * HALF
    return out


@dataclass(frozen=True)
class Strained:
    """A block's kernels on real positions: rows (s, k, f, m, b), weights (s, s, m, b), affine strains (s, v, m, b)."""

    block: Block
    rows: Array
    weights: Array
    affine: Array


def strained_blocks(cell: UnitCell, model: str) -> Iterator[Strained]:
    """Yield every block's rows, weights and affine strains of a flat batch (b,), its last axis the batch."""
    check_model(model)
    points = np.ascontiguousarray(np.moveaxis(cell.points, (-1, -2), (0, 1)))  # (d, n, b)
    lattice = np.ascontiguousarray(np.moveaxis(cell.lattice, 0, -1))
    middle = (points[-1].min(axis=0) + points[-1].max(axis=0)) / 2.0
    for block in cell.blocks:
        if not len(block):
            continue
        kind = element(block.kind)
        props = {}
        for name, value in block.props.items():
            shared = value[:1] if value.strides[0] == 0 else value  # the same for all members: one is enough
            props[name] = np.ascontiguousarray(np.moveaxis(shared, (0, 1), (-1, -2)))
        check_block(block.kind, cell.d, block.nodes.shape[1], props)
        x = np.empty((block.nodes.shape[1], cell.d, len(block), *points.shape[2:]))
        for k, (nodes, shifts) in enumerate(zip(block.nodes.T, block.shifts.swapaxes(0, 1), strict=True)):
            np.take(points, nodes, axis=1, out=x[k])
            away = np.flatnonzero(shifts.any(axis=1))
            if away.size:
                x[k][:, away] += np.einsum("mp,pdb->dmb", shifts[away].astype(float), lattice)
        rows = kind.rows(x, props)
        yield Strained(block, rows, kind.weights(x, props, model), _affine_strains(cell.kind, rows, x, middle))


@cache
def _places(
    numbers: tuple[tuple[int, ...], ...], first: int, v: int, strains: tuple[tuple[tuple[int, int], ...], ...]
) -> tuple[list[Any], list[Any], list[Any]]:
    """Say where an element's freedoms (k, f) go: copies of rows into columns, runs of columns, and the columns.

    Columns are the distinct numbers in order, then the macroscopic strains from `first` on. A copy is (node, freedom,
    end, column, whether it adds: an element may join a node to its own image), a run (column, end, number), a column
    (number, first strain, end); `strains` (k, f) says which strains a freedom may move, as first and end.
    """
    live = sorted({number for node in numbers for number in node if number >= 0})
    column = {number: c for c, number in enumerate(live)}
    copies: list[Any] = []
    filled: set[int] = set()
    for k, node in enumerate(numbers):
        for f, number in enumerate(node):
            if number < 0:
                continue
            adds = number in filled
            last = copies[-1] if copies else None
            if last and last[0] == k and last[2] == f and last[3] + f - last[1] == column[number] and last[4] == adds:
                last[2] = f + 1
            else:
                copies.append([k, f, f + 1, column[number], adds])
        filled |= set(node)
    targets = np.array([*live, *range(first, first + v)])
    breaks = np.flatnonzero(np.diff(targets) != 1) + 1
    starts = [0, *breaks.tolist()]
    runs = [(a, b, int(targets[a])) for a, b in zip(starts, [*starts[1:], len(targets)], strict=True)]
    moved: dict[int, list[tuple[int, int]]] = {}
    for node, of_node in zip(numbers, strains, strict=True):
        for number, span in zip(node, of_node, strict=True):
            moved.setdefault(number, []).append(span)
    everything = [span for of_node in strains for span in of_node]
    columns = []
    for number in targets.tolist():
        felt = moved.get(number, everything) if number < first else everything
        columns.append((number, min(low for low, _ in felt), max(high for _, high in felt)))
    return copies, runs, columns


def dense(cell: UnitCell, model: str, out: Array | None = None) -> Array:
    """Return M of every member of a flat batch, ndarray of shape (N + v, N + v, b): freedoms, then macroscopic strains.

    Only the upper triangle is filled. Entries accumulate, so an element may join a node to its own image. `out` is
    room for M that is used again.
    """
    free = freedoms(cell)
    v = strain_count(cell.kind)
    M = np.empty((free.count + v, free.count + v, *cell.shape)) if out is None else out
    for i in range(len(M)):
        M[i, i:] = 0.0
    for part in strained_blocks(cell, model):
        s, k, f, _, b = part.rows.shape
        coupled = not _uncoupled(part.weights)
        strains = _strains(part.rows)
        room = np.empty((2, s, k * f + v, b))
        for e, nodes in enumerate(part.block.nodes):
            numbers = tuple(map(tuple, free.numbers[nodes, :f].tolist()))
            copies, runs, columns = _places(numbers, free.count, v, strains)
            B, pull = room[:, :, : len(columns)]
            for node, start, stop, c, adds in copies:
                if adds:
                    B[:, c : c + stop - start] += part.rows[:, node, start:stop, e]
                else:
                    B[:, c : c + stop - start] = part.rows[:, node, start:stop, e]
            B[:, len(columns) - v :] = part.affine[:, :, e]
            W = part.weights[:, :, e]
            if coupled:
                for c, (_, low, high) in enumerate(columns):
                    np.einsum("ijb,jb->ib", W[:, low:high], B[low:high, c], out=pull[:, c])
            else:
                for i in range(s):
                    np.multiply(W[i, i], B[i], out=pull[i])
            for c, (number, low, high) in enumerate(columns):
                force = np.einsum("ib,icb->cb", B[low:high, c], pull[low:high, c:])
                for start, stop, first in runs:
                    if stop > c:
                        begin = max(start, c)
                        M[number, first + begin - start : first + stop - start] += force[begin - c : stop - c]
    return M


def energy_parts(cell: UnitCell, model: str) -> tuple[Array, Array, Array]:
    """Return K (b, N, N), F (b, N, v) and D (b, v, v) of every member of a flat batch, whole and symmetric."""
    count = freedoms(cell).count
    M = np.moveaxis(dense(cell, model), -1, 0)
    M = np.triu(M) + np.swapaxes(np.triu(M, 1), -1, -2)
    return M[:, :count, :count], M[:, :count, count:], M[:, count:, count:]


def _strains(rows: Array) -> tuple[tuple[tuple[int, int], ...], ...]:
    """Return first and end of the strains that each freedom of rows (s, k, f, m, b) moves in any element and member."""
    s, k, f = rows.shape[:3]
    some = (rows[:, :, :, :1, :1] != 0.0).any(axis=(-2, -1))
    for index in np.argwhere(~some).tolist():
        some[tuple(index)] = rows[tuple(index)].any()
    first, end = some.argmax(axis=0), s - some[::-1].argmax(axis=0)
    alive = some.any(axis=0)
    return tuple(
        tuple((int(first[n, j]), int(end[n, j])) if alive[n, j] else (0, s) for j in range(f)) for n in range(k)
    )


def _uncoupled(W: Array) -> bool:
    """Say whether weights (s, s, m, b) are diagonal in all elements."""
    s = len(W)
    return not any(W[i, j].any() for i in range(s) for j in range(s) if i != j)


def sparse(cell: UnitCell, model: str) -> tuple[sp.csc_matrix, Array, Array]:
    """Return K (N, N) sparse, F (N, v) and D (v, v) of one cell."""
    import scipy.sparse as sp

    free = freedoms(cell)
    v = strain_count(cell.kind)
    F, D = np.zeros((free.count + 1, v)), np.zeros((v, v))
    entries: list[tuple[Index, Index, Array]] = []
    for part in strained_blocks(cell.at(None), model):
        rows, W, G = part.rows[..., 0], part.weights[..., 0], part.affine[..., 0]
        s, k, f, m = rows.shape
        numbers = free.numbers[part.block.nodes][:, :, :f].reshape(m, k * f)
        rows = rows.reshape(s, k * f, m)
        pull = np.einsum("ijm,jam->iam", W, rows)
        Ke = np.einsum("iam,ibm->mab", rows, pull)
        Fe = np.einsum("iam,ivm->mav", pull, G)
        D += np.einsum("ivm,ijm,jwm->vw", G, W, G)
        np.add.at(F, numbers, Fe)  # held freedoms carry -1: the spare last row
        a = np.broadcast_to(numbers[:, :, None], Ke.shape)
        b = np.broadcast_to(numbers[:, None, :], Ke.shape)
        live = (a >= 0) & (b >= 0) & (Ke != 0.0)
        entries.append((a[live], b[live], Ke[live]))
    i, j, values = (np.concatenate(parts) for parts in zip(*entries, strict=True))
    K = sp.coo_matrix((values, (i, j)), shape=(free.count, free.count)).tocsc()
    return K, F[:-1], D
