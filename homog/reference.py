"""The slow, obvious reference: one cell, one element after another, every freedom kept, nothing eliminated.

The element rows and weights are the registered kernels, which have their own tests against central differences; nothing
else is shared with the fast path. It writes down the strains of all elements under a square root of their weights,

    E(u, v) = W^(1/2) (B u + B A v)

and takes what least squares leaves of the columns of v: C V = min over u of |E|^2 = D - F' K^+ F, the same formula
without forming K, so that its round-off grows with the slenderness of the walls and not with its square. Its use is in
tests; it knows no batch and is slow for more than a few dozen points.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from homog.cell import STRAINS, UnitCell
from homog.elements import check_block, element, rotations
from homog.errors import InputError
from homog.tensors import basis

Array = NDArray[np.float64]

NULL_TOLERANCE = 1e-10
"""A singular value below this share of the largest, columns scaled to unit length, is a motion that costs nothing.

Singular values are square roots of energies: the softest mode of a wall is about t/l, round-off about 1e-15.
"""


def affine_motion(cell: UnitCell, where: Array, middle: float) -> Array:
    """Return A at one place (d,): its motion, translations then rotations, per macroscopic strain, (d + r, v).

    Plane and space: u = e x. Sheets also u = z K x, w = -x'Kx/2 with the slope's rotation (-(Kx)2, (Kx)1, 0),
    z counted from mid-height (classical plate theory; derived).
    """
    d = cell.d
    A = np.zeros((d + rotations(d), len(STRAINS[cell.kind])))
    for column, e in enumerate(basis(cell.p)):
        x = where[: cell.p]
        A[: cell.p, column] = e @ x
        if cell.kind == "sheet":
            slope = e @ x
            A[:2, 3 + column] = (where[2] - middle) * slope
            A[2, 3 + column] = -x @ slope / 2.0
            A[3:5, 3 + column] = -slope[1], slope[0]
    return A


def strain_matrix(cell: UnitCell, model: str) -> tuple[Array, Array]:
    """Return W^(1/2) B (s, f) and W^(1/2) B A (s, v) over all strains of all elements and all freedoms of all points.

    Freedoms that do not exist (rotations of points where no element turns) are left out.
    """
    cell.check()
    d, each = cell.d, cell.d + rotations(cell.d)
    exists = np.zeros((cell.n, each), bool)
    exists[:, :d] = True
    heights = cell.points[:, -1]
    middle = float(heights.min() + heights.max()) / 2.0
    all_rows, all_affine = [], []
    for block in cell.blocks:
        kind = element(block.kind)
        check_block(block.kind, d, block.nodes.shape[1], block.props)
        for e, (nodes, shifts) in enumerate(zip(block.nodes, block.shifts, strict=True)):
            x = cell.points[nodes] + shifts @ cell.lattice
            props = {name: np.moveaxis(value[e % len(value)][None], 0, -1) for name, value in block.props.items()}
            local = kind.rows(x[:, :, None], props)[..., 0]  # (s, k, f)
            size = local.shape[2]
            energy, axes = np.linalg.eigh(kind.weights(x[:, :, None], props, model)[..., 0])
            root = np.sqrt(np.maximum(energy, 0.0))[:, None] * axes.T
            rows, affine = np.zeros((len(local), cell.n, each)), np.zeros((len(local), len(STRAINS[cell.kind])))
            for k, node in enumerate(nodes):
                rows[:, node, :size] += local[:, k]  # accumulate: both ends may be images of one point
                affine += local[:, k] @ affine_motion(cell, x[k], middle)[:size]
                exists[node, d:] |= kind.turns
            all_rows.append(root @ rows.reshape(len(local), -1))
            all_affine.append(root @ affine)
    return np.concatenate(all_rows)[:, exists.ravel()], np.concatenate(all_affine)


def reference_stiffness(cell: UnitCell, model: str) -> tuple[Array, int]:
    """Return the Mandel stiffness (v, v) of a single cell, and how many motions cost no energy, translations aside.

    Raises
    ------
    InputError
        For a batch, or a cell whose blocks do not fit.
    """
    if cell.shape:
        raise InputError(f"The reference takes one cell at a time, got a batch of shape {cell.shape}; pick one by at()")
    B, affine = strain_matrix(cell, model)
    columns, values, _ = np.linalg.svd(B / _lengths(B), full_matrices=False)
    reached = columns[:, values > NULL_TOLERANCE * values.max(initial=0.0)]
    left = affine - reached @ (reached.T @ affine)
    left -= reached @ (reached.T @ left)  # once more, for what round-off left of a stiff part
    rank = reached.shape[1] + np.linalg.matrix_rank(left / _lengths(affine), tol=NULL_TOLERANCE)
    null = B.shape[1] - cell.d + affine.shape[1] - int(rank)
    return left.T @ left / float(cell.volume), null


def _lengths(matrix: Array) -> Array:
    """Return the lengths of the columns, 1 where a column is zero."""
    lengths = np.linalg.norm(matrix, axis=0)
    return np.asarray(np.where(lengths > 0.0, lengths, 1.0))
