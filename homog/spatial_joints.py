"""Condensed joints in space: what the small solid where round struts meet adds to struts that run to a point.

As in the plane (`joints`), F = F_struts + T' Delta T, weight = F^-1, with Delta of the joint's pattern of directions
alone: scaled by 1/E and lengths in diameters, it depends on Poisson's ratio, and is tabulated on Chebyshev points of it
(`scripts/make_spatial_tables.py`). A pattern is found in a cell up to rotation; a new one needs its directions here and
a run of that script.

A cell of one point needs no middles of struts as points. It is symmetric about its point and about the middle of each
strut, so under a uniform strain the middles carry no moment and move affinely, and the chords of all struts follow from
those of three: the joint is then an element from the point to three of its images.
"""

from __future__ import annotations

import dataclasses
import functools
import itertools
from dataclasses import dataclass
from importlib import resources

import numpy as np
from numpy.typing import NDArray

from homog.cell import Block, Status, UnitCell
from homog.section import arms_of, element_vectors
from homog.spatial_stars import MATCH_TOLERANCE, cross_matrix, held, isometries, strut_scales, strut_shares

Array = NDArray[np.float64]
Index = NDArray[np.int64]
Mask = NDArray[np.bool_]

TABLES = "joint_tables_spatial.npz"
PLAIN_STRUT = ("diameter", "modulus", "poisson")
POISSON = (0.0, 0.49)
"""Range of the tables."""
POINTS = 5
"""Chebyshev points in it."""


@dataclass(frozen=True)
class Pattern:
    """Joints of one kind: equal round struts along fixed directions (n, 3), of which the first three span space."""

    name: str
    directions: Array

    @property
    def swallowed(self) -> float:
        """How far from the point the outermost crease lies, in diameters."""
        cosine = (self.directions @ self.directions.T)[~np.eye(len(self.directions), dtype=bool)].max()
        return float(0.5 * np.sqrt((1.0 + cosine) / (1.0 - cosine)))


def _pairs(half: list[tuple[int, int, int]]) -> Array:
    directions = np.array(half) / np.linalg.norm(half, axis=1)[:, None]
    return np.concatenate([directions, -directions])


PATTERNS = (Pattern("octet", _pairs([(0, 1, 1), (1, 0, 1), (1, 1, 0), (0, 1, -1), (1, 0, -1), (1, -1, 0)])),)


@functools.cache
def _table(name: str) -> Array:
    """Return the Chebyshev coefficients (k, 6n, 6n) of a pattern's Delta for unit diameter and modulus."""
    with resources.files("homog").joinpath(TABLES).open("rb") as file, np.load(file) as tables:
        return np.asarray(tables[name])


def _in_poisson(nu: Array) -> Array:
    """Return the Chebyshev polynomials (k, ...) at Poisson's ratios."""
    x = (2.0 * nu - POISSON[0] - POISSON[1]) / (POISSON[1] - POISSON[0])
    T = np.polynomial.chebyshev.chebvander(np.ravel(x), POINTS - 1).T
    return np.asarray(T.reshape(POINTS, *np.shape(nu)), np.float64)


def correction(pattern: Pattern, poisson: float) -> Array:
    """Return Delta (6n, 6n) of unit diameter and modulus, loads at the point, at one Poisson's ratio of the range."""
    return np.asarray(np.tensordot(_in_poisson(np.asarray(poisson)), _table(pattern.name), 1))


# the cell --------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class _Joint:
    """The struts of one point: arm i of the pattern, turned, is the end `ends[i]` of strut `struts[i]`."""

    pattern: Pattern
    struts: Index
    ends: Index


def _struts(cell: UnitCell) -> tuple[Index, Index, Array]:
    """Return nodes (m, 2), shifts (m, 2, p) and vectors (b, m, 3) of the struts of all blocks."""
    blocks = [block for block in cell.blocks if len(block)]
    nodes, shifts = (np.concatenate([getattr(block, name) for block in blocks]) for name in ("nodes", "shifts"))
    vectors = element_vectors(cell.points, cell.lattice, nodes, shifts)
    return nodes, shifts, np.broadcast_to(vectors, (*cell.shape, len(nodes), 3))


def _directions(vectors: Array) -> tuple[Array, Array]:
    """Return lengths (m, b) and directions (m, b, 3) of struts (b, m, 3)."""
    across = np.moveaxis(vectors, -2, 0)
    lengths = np.linalg.norm(across, axis=-1)
    return lengths, across / lengths[..., None]


def _joints(n: int, nodes: Index, e: Array) -> list[_Joint] | None:
    """Return the joints of n points whose struts have the directions e (m, 3), None if one has no table's pattern."""
    found = []
    for arms in arms_of(n, nodes):
        if not arms:
            return None
        struts, ends = (np.array(part, np.int64) for part in zip(*arms, strict=True))
        out = e[struts] * np.where(ends == 0, 1.0, -1.0)[:, None]
        patterns = [pattern for pattern in PATTERNS if len(pattern.directions) == len(out)]
        if np.isfinite(out).all():
            ways = ((pattern, order) for pattern in patterns for _, order in isometries(pattern.directions, out))
            way = next(ways, None)
        else:  # no cell, whatever its pattern
            way = (patterns[0], np.arange(len(out))) if patterns else None
        if way is None:
            return None
        found.append(_Joint(way[0], struts[way[1]], ends[way[1]]))
    return found


def _sound(e: Array, status: NDArray[np.int8]) -> int:
    """Return the first member that is a cell: it gives the pattern of all."""
    return int(np.argmax(np.isfinite(e).all(axis=(0, 2)) & (status == Status.OK)))


def applies(cell: UnitCell) -> bool:
    """Say whether a spatial cell has condensed joints: plain round struts only, every point with a table's pattern.

    The members of a batch must have the same directions.
    """
    blocks = [block for block in cell.blocks if len(block)]
    if cell.kind != "spatial" or not blocks or any(block.kind != "strut" for block in blocks):
        return False
    if any(np.any(value) for block in blocks for name, value in block.props.items() if name not in PLAIN_STRUT):
        return False
    nodes, _, vectors = _struts(cell)
    with np.errstate(all="ignore"):
        e = _directions(vectors.reshape(-1, len(nodes), 3))[1]
        first = e[:, _sound(e, np.broadcast_to(cell.status, cell.shape).ravel())]
        same = ~(np.abs(e - first[:, None]) > MATCH_TOLERANCE).any()  # what is not finite is no cell: it does not count
    return bool(same and np.isfinite(first).all()) and _joints(cell.n, nodes, first) is not None


def freedoms(cell: UnitCell) -> int:
    """Return how many freedoms `with_joints` leaves a cell."""
    return 3 if cell.n == 1 else 6 * sum(len(block) for block in cell.blocks) - 3


def with_joints(cell: UnitCell) -> tuple[UnitCell, Mask, Array]:
    """Return a cell of struts as condensed joints; see `joints.with_joints`.

    A cell of one point keeps it; others have the middles of their struts as points.
    """
    (members,), struts = cell.shape, [block for block in cell.blocks if len(block)]
    d, E, nu = (
        np.concatenate([np.broadcast_to(b.props[name], (members, len(b))) for b in struts], axis=1).T
        for name in PLAIN_STRUT
    )
    ends_of, shifts_of, vectors = _struts(cell)
    lengths, e = _directions(vectors)
    joints = _joints(cell.n, ends_of, e[:, _sound(e, np.broadcast_to(cell.status, cell.shape))])
    assert joints is not None, "joints apply to this cell"
    plain = lengths.copy()
    for joint in joints:
        np.subtract.at(plain, joint.struts, joint.pattern.swallowed * d[joint.struts])
    outside, least = _missed(joints, d, E, nu), np.asarray((plain / d).min(axis=0))
    if cell.n == 1:
        scale = np.where(outside, 0.0, _in_poisson(nu[0]))
        element = _one_point(joints[0], shifts_of[:, 1] - shifts_of[:, 0], lengths, d, E, nu, scale)
        return dataclasses.replace(cell, blocks=(element,)), outside, least
    home = cell.points[..., ends_of[:, 0], :] + np.einsum(
        "mp,...pd->...md", shifts_of[:, 0].astype(float), cell.lattice
    )
    blocks: dict[int, list[tuple[Index, Index, Array]]] = {}
    for joint in joints:
        k = joint.struts
        scale = np.where(outside, 0.0, _in_poisson(nu[k[0]]))
        F = _star(joint.pattern, lengths[k] / 2.0, d[k], E[k], nu[k], scale)
        tips = joint.pattern.directions[:3, :, None] * (lengths[k[:3]] / 2.0)[:, None]
        weight = _framed(np.asarray(np.linalg.inv(np.moveaxis(F, -1, 0))), tips)
        blocks.setdefault(len(k), []).append((k, -shifts_of[k, joint.ends], weight))
    return (
        dataclasses.replace(
            cell,
            points=home + vectors / 2.0,
            blocks=tuple(
                Block("joint", np.stack(nodes), np.stack(shifts), {"weight": np.stack(weights, axis=1)})
                for nodes, shifts, weights in (zip(*found, strict=True) for found in blocks.values())
            ),
        ),
        outside,
        least,
    )


def _missed(joints: list[_Joint], d: Array, E: Array, nu: Array) -> Mask:
    """Return which members (b,) have a joint of unequal struts or a Poisson's ratio outside the tables."""
    missed = [~((nu >= POISSON[0]) & (nu <= POISSON[1])).all(axis=0)]
    missed += [np.ptp(x[joint.struts], axis=0) > 0.0 for joint in joints for x in (d, E, nu)]
    return np.asarray(np.logical_or.reduce(missed))


def _framed(weight: Array, tips: Array) -> Array:
    """Return weights (b, s, s), in the pattern's axes, in the frame of an element with nodes at tips (3, 3, b)."""
    first, second = (np.moveaxis(tips[k] - tips[0], -1, 0) for k in (1, 2))
    e1 = first / np.linalg.norm(first, axis=-1, keepdims=True)
    e3 = np.cross(e1, second)
    e3 /= np.linalg.norm(e3, axis=-1, keepdims=True)
    frame = np.stack([e1, np.cross(e3, e1), e3], axis=1)[:, None]
    members, s = weight.shape[:2]
    for _ in range(2):  # from the left, and since it is symmetric from the right
        weight = (frame @ weight.reshape(members, s // 3, 3, s)).reshape(members, s, s).swapaxes(1, 2)
    return weight


def _star(pattern: Pattern, half: Array, d: Array, E: Array, nu: Array, scale: Array) -> Array:
    """Return the flexibility (6n - 6, 6n - 6, b) of half struts (n, b) with their joint, tip 0 held, at their tips."""
    n, members = half.shape
    H = held(n)
    delta = _sized(np.tensordot(H.T @ _table(pattern.name) @ H, scale, (0, 0)), d[0], E[0])
    scales = strut_scales(half, d, E, nu)
    scales[2] *= -1.0  # for loads at the point: the moment at the tip is what is left of theirs
    F = np.zeros_like(delta)
    for i in range(n):
        arm = np.einsum("kb,kij->ijb", scales[:, i], strut_shares(pattern.directions[i]))
        if i == 0:
            F += np.tile(arm, (n - 1, n - 1, 1))
        else:
            F[6 * i - 6 : 6 * i, 6 * i - 6 : 6 * i] += arm
    F += delta
    for _ in range(2):  # T' F T: to the tips, from the left and, since it is symmetric, from the right
        for i in range(1, n):
            force, moment = slice(6 * i - 6, 6 * i - 3), slice(6 * i - 3, 6 * i)
            F[force] += half[i] * np.einsum("ji,jsb->isb", cross_matrix(pattern.directions[i]), F[moment])
        F = F.swapaxes(0, 1)
    return F


def _sized(delta: Array, d: Array, E: Array) -> Array:
    """Return Delta (6n, 6n, b) of diameter d and modulus E for that of unit ones: moments are forces times lengths."""
    turns = np.tile(np.repeat([0.0, 1.0], 3), len(delta) // 6)
    return np.asarray(delta / (E * d ** (1.0 + turns[:, None] + turns)[..., None]))


def _one_point(joint: _Joint, shifts: Index, lengths: Array, d: Array, E: Array, nu: Array, scale: Array) -> Block:
    """Return the joint of a cell of one point as an element from it to its images along three of its struts (m, p)."""
    m, members = lengths.shape
    p = joint.pattern.directions
    arm = np.array([np.flatnonzero((joint.struts == j) & (joint.ends == 0))[0] for j in range(m)])
    back = np.array([np.flatnonzero((joint.struts == j) & (joint.ends == 1))[0] for j in range(m)])
    # unit forces on each strut's middle, out and back, as loads at the point: forces, and moments per half length
    forces, moments = np.zeros((2, 6 * len(p), 3 * m))
    for j in range(m):
        column = slice(3 * j, 3 * j + 3)
        for end, sign in ((arm[j], 1.0), (back[j], -1.0)):
            forces[6 * end : 6 * end + 3, column] = sign * np.eye(3)
            moments[6 * end + 3 : 6 * end + 6, column] = cross_matrix(p[arm[j]])
    table = _table(joint.pattern.name)
    arms = np.repeat(lengths / 2.0, 3, axis=0) / d[0]
    F, mixed, turned = (
        np.tensordot(a.T @ table @ b, scale, (0, 0))
        for a, b in ((forces, forces), (forces, moments), (moments, moments))
    )
    turned *= arms
    turned += mixed.swapaxes(0, 1)
    turned *= arms[:, None]
    mixed *= arms
    F += mixed
    F += turned
    F /= E[0] * d[0]
    scales = strut_scales(lengths / 2.0, d, E, nu)
    for j in range(m):
        k = slice(3 * j, 3 * j + 3)
        F[k, k] += 2.0 * np.einsum("kb,kij->ijb", scales[:2, j], strut_shares(p[arm[j]])[:2, :3, :3])
    three = next(t for t in map(list, itertools.combinations(range(m), 3)) if abs(np.linalg.det(shifts[t])) > 0.5)
    share = np.linalg.solve(shifts[three].T.astype(float), shifts.T).T  # of the chords of the three in each chord
    spread = np.kron(share, np.eye(3))
    forces_of = np.linalg.solve(np.moveaxis(F, -1, 0), np.broadcast_to(spread, (members, *spread.shape)))
    ends = p[arm[three[:2]], :, None] * lengths[three[:2], None]
    small = _framed(spread.T @ forces_of, np.concatenate([np.zeros((1, 3, members)), ends]))
    weight = np.zeros((members, 1, 3, 2, 3, 3, 2, 3))  # rotations of images are the point's own: no strain, no weight
    weight[:, 0, :, 0, :, :, 0] = small.reshape(members, 3, 3, 3, 3)
    images = np.concatenate([np.zeros((1, 3), np.int64), shifts[three]])
    return Block("joint", np.zeros((1, 4), np.int64), images[None], {"weight": weight.reshape(members, 1, 18, 18)})
