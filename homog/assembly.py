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
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from homog.cell import Block, Kind, UnitCell
from homog.elements import check_block, check_model, element, rotations
from homog.tensors import basis

if TYPE_CHECKING:
    import scipy.sparse as sp

Array = NDArray[np.float64]
Index = NDArray[np.int64]


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
    y = x - x[0]
    moved = np.einsum("skj...,ki...->sij...", rows[:, :, :d], y)  # strain per unit gradient u_j,i
    if kind == "planar" or kind == "spatial":
        return np.asarray(np.einsum("vij,sij...->sv...", basis(d), moved))
    E = basis(2)
    out = np.empty((rows.shape[0], 6) + rows.shape[3:])
    out[:, :3] = np.einsum("vij,sij...->sv...", E, moved[:, :2, :2])
    turned = np.einsum("vij,kj...->vki...", E, y[:, :2])  # K x
    u = (x[:, 2] - middle)[:, None] * turned
    w = -0.5 * np.einsum("vki...,ki...->vk...", turned, y[:, :2])
    out[:, 3:] = np.einsum("ski...,vki...->sv...", rows[:, :, :2], u) + np.einsum(
        "sk...,vk...->sv...", rows[:, :, 2], w
    )
    if rows.shape[2] > d:
        spin = np.stack([-turned[:, :, 1], turned[:, :, 0]], axis=2)
        out[:, 3:] += np.einsum("ski...,vki...->sv...", rows[:, :, 3:5], spin)
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
    points, lattice = (np.ascontiguousarray(np.moveaxis(x, 0, -1)) for x in (cell.points, cell.lattice))
    middle = (points[:, -1].min(axis=0) + points[:, -1].max(axis=0)) / 2.0
    for block in cell.blocks:
        if not len(block):
            continue
        kind = element(block.kind)
        props = {}
        for name, value in block.props.items():
            shared = value[:1] if value.strides[0] == 0 else value  # the same for all members: one is enough
            props[name] = np.ascontiguousarray(np.moveaxis(shared, (0, 1), (-1, -2)))
        check_block(block.kind, cell.d, block.nodes.shape[1], props)
        x = points[block.nodes] + np.einsum("mkp,pdb->mkdb", block.shifts.astype(float), lattice)
        x = np.ascontiguousarray(np.moveaxis(x, 0, 2))  # (k, d, m, b)
        rows = kind.rows(x, props)
        yield Strained(block, rows, kind.weights(x, props, model), _affine_strains(cell.kind, rows, x, middle))


def dense(cell: UnitCell, model: str) -> Array:
    """Return M of every member of a flat batch, ndarray of shape (N + v, N + v, b): freedoms, then macroscopic strains.

    Only the lower triangle is filled. Entries accumulate, so an element may join a node to its own image. Structural
    zeros of rows and weights are skipped, so a kernel need not say which of its entries vanish.
    """
    free = freedoms(cell)
    v = strain_count(cell.kind)
    M = np.zeros((free.count + v, free.count + v, *cell.shape))
    for part in strained_blocks(cell, model):
        rows, W, G = part.rows, part.weights, part.affine
        s = len(rows)
        active = ~(np.abs(rows).max(axis=(-2, -1)) == 0.0)  # (s, k, f); what is NaN in one member counts in the others
        coupled = ~(np.abs(W).max(axis=(-2, -1)) == 0.0)
        for e, nodes in enumerate(part.block.nodes):
            strain: list[dict[int, Array]] = []
            for i in range(s):
                row: dict[int, Array] = {}
                for k, f in zip(*np.nonzero(active[i]), strict=True):
                    number = int(free.numbers[nodes[k], f])
                    if number >= 0:
                        row[number] = row[number] + rows[i, k, f, e] if number in row else rows[i, k, f, e]
                for j in range(v):
                    row[free.count + j] = G[i, j, e]
                strain.append(row)
            for i in range(s):
                pull: dict[int, Array] = {}
                for other in np.flatnonzero(coupled[i]):
                    for number, value in strain[other].items():
                        term = W[i, other, e] * value
                        pull[number] = pull[number] + term if number in pull else term
                for a, value in strain[i].items():
                    for b, force in pull.items():
                        if b <= a:
                            M[a, b] += value * force
    return M


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
