"""Condensed joints: what the small solid where walls meet adds to plain walls that run to a point.

A joint and the halves of its n walls are one element, its nodes (tips) at the middles of the walls. Its flexibility
(forces on tips 1 to n - 1, tip 0 held) is that of n Timoshenko half walls that meet at a point, plus a correction,

    F = F_walls + T' Delta T,        weight = F^-1

where T carries tip forces to the point. Delta belongs to the joint alone: what a solid star of walls is more flexible
than the same star of beams. Loaded at its cuts by the stresses of plain walls, it does not depend on where it is cut
(Saint-Venant), scales as 1/E with lengths in t, is linear in nu (Michell 1899: the stresses in a plane body without
holes do not depend on it), and varies smoothly with the angles. So it is computed once on Chebyshev points of ln
tan(gap/2) (`scripts/make_joint_tables.py`) and interpolated; shapes that no table has are computed on demand
(`joint_solid`).
"""

from __future__ import annotations

import dataclasses
import functools
import itertools
from collections.abc import Callable
from dataclasses import dataclass
from importlib import resources
from typing import Any

import numpy as np
from numpy.typing import NDArray

from homog.cell import Block, Status, UnitCell
from homog.errors import InputError
from homog.section import arms_of, corner_cut, element_vectors
from homog.stars import carried, star_flexibility

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

TABLES = "joint_tables.npz"
MATCH_TOLERANCE = 1e-9
"""Gaps (rad) and thickness ratios of a joint that a shape reproduces within this are that shape's."""
NEAR = 0.4
"""Plain wall between the inner corners of neighbouring joints, in thicknesses, below which they feel each other."""
MOST_ON_DEMAND = 200


# tables ----------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Shape:
    """Joints of one pattern: n walls whose gaps and thicknesses follow from a few coordinates.

    `gaps(coordinates (k, ...))` and `thickness` (over that of wall 0) give the joint, `coordinates(gaps, thickness)` is
    the way back, exact if the joint has the pattern; each coordinate has a range and a number of Chebyshev points.
    """

    name: str
    walls: int
    low: tuple[float, ...]
    high: tuple[float, ...]
    points: tuple[int, ...]
    gaps: Callable[[Array], list[Any]]
    thickness: Callable[[Array], list[Any]]
    coordinates: Callable[[Array, Array], list[Any]]

    def outside(self, u: Array) -> Mask:
        """Return where coordinates (k, b) are outside the table's range, (b,)."""
        low, high = (np.array(x)[:, None] for x in (self.low, self.high))
        return np.asarray(~((u >= low - MATCH_TOLERANCE) & (u <= high + MATCH_TOLERANCE)).all(axis=0))


def _open(gap: Any) -> Any:
    """The coordinate of a gap: ln tan(gap/2)."""
    return np.log(np.tan(gap / 2.0))


def _gap(coordinate: Any) -> Any:
    return 2.0 * np.arctan(np.exp(coordinate))


def _span(low_deg: float, high_deg: float) -> tuple[float, float]:
    return float(_open(np.radians(low_deg))), float(_open(np.radians(high_deg)))


FORK, CROSS, ELBOW = _span(9.0, 176.0), _span(14.0, 90.0), _span(9.0, 178.0)
NARROW, WIDE = _span(7.0, 80.0), _span(9.0, 162.0)
RATIO = (float(np.log(1.0 / 2.6)), float(np.log(2.6)))
TURN = 2.0 * np.pi

SHAPES = (
    # a stem (wall 0) between two equal arms: honeycombs
    Shape("fork", 3, (FORK[0], RATIO[0]), (FORK[1], RATIO[1]), (26, 12),
          lambda u: [_gap(u[0]), TURN - 2.0 * _gap(u[0]), _gap(u[0])],
          lambda u: [1.0 + 0.0 * u[1], np.exp(u[1]), np.exp(u[1])],
          lambda g, t: [_open(g[0]), np.log(t[1] / t[0])]),
    # two straight walls that cross: square, kagome
    Shape("cross", 4, CROSS[:1], CROSS[1:], (18,),
          lambda u: [_gap(u[0]), np.pi - _gap(u[0])] * 2, lambda u: [1.0 + 0.0 * u[0]] * 4,
          lambda g, t: [_open(g[0])]),
    # six equal walls: triangular
    Shape("hexad", 6, (), (), (), lambda u: [np.pi / 3.0] * 6, lambda u: [1.0] * 6, lambda g, t: []),
    # two pairs on one axis: arrowhead
    Shape("pairs", 4, (NARROW[0], WIDE[0]), (NARROW[1], WIDE[1]), (18, 20),
          lambda u: [_gap(u[0]), _gap(u[1]), _gap(u[0]), TURN - 2.0 * _gap(u[0]) - _gap(u[1])],
          lambda u: [1.0 + 0.0 * u[0]] * 4, lambda g, t: [_open(g[0]), _open(g[1])]),
    # two walls at an angle
    Shape("elbow", 2, ELBOW[:1], ELBOW[1:], (40,), lambda u: [_gap(u[0]), TURN - _gap(u[0])],
          lambda u: [1.0 + 0.0 * u[0]] * 2, lambda g, t: [_open(np.minimum(g[0], g[1]))]),
)  # fmt: skip


@functools.cache
def _table(name: str) -> Array:
    """Return the Chebyshev coefficients of a shape, (2, s, s, points...): Delta = A + nu B."""
    with resources.files("homog").joinpath(TABLES).open("rb") as file, np.load(file) as tables:
        return np.asarray(tables[name])


def chebyshev(u: Array, low: float, high: float, points: int) -> Array:
    """Return the Chebyshev polynomials T_0 to T_(points-1) (points, ...) at coordinates u (...) of a range."""
    x = (2.0 * u - low - high) / (high - low)
    T = np.ones((points, *np.shape(x)))
    if points > 1:
        T[1] = x
    for k in range(2, points):
        T[k] = 2.0 * x * T[k - 1] - T[k - 2]
    return T


def interpolated(shape: Shape, coordinates: Array, poisson: Array) -> Array:
    """Return Delta (s, s, b) of unit thickness of wall 0 at coordinates (k, b) of a shape's table."""
    C = _table(shape.name)
    nu = np.asarray(poisson)
    even = bool((nu == nu.flat[0]).all())
    parts = [C[0] + nu.flat[0] * C[1]] if even else [C[0], C[1]]
    values = []
    for part in parts:
        T = [chebyshev(coordinates[k], shape.low[k], shape.high[k], n) for k, n in enumerate(shape.points)]
        s = len(part)
        if not T:
            values.append(np.broadcast_to(part[..., None], (s, s, coordinates.shape[1])))
        elif len(T) == 1:
            values.append((part.reshape(s * s, -1) @ T[0]).reshape(s, s, -1))
        else:
            last = (part.reshape(-1, part.shape[-1]) @ T[1]).reshape(s * s, part.shape[2], -1)
            values.append(np.einsum("eib,ib->eb", last, T[0]).reshape(s, s, -1))
    return values[0] if even else values[0] + nu * values[1]


def matched(gaps: Array, ratio: Array) -> tuple[Shape, Array, NDArray[np.int64], float] | None:
    """Return the shape that a joint (gaps, thickness over the first's, (n, b)) has, None if none fits all members.

    With it come its coordinates (k, b), the order in which its walls are the shape's, and -1.0 for its mirror image.
    """
    n, partly = len(gaps), None
    for shape in SHAPES:
        if shape.walls != n:
            continue
        for mirror, start in itertools.product((1.0, -1.0), range(n)):
            order = (start + np.arange(n) * int(mirror)) % n
            g = gaps[order] if mirror > 0.0 else gaps[(order - 1) % n]
            t = ratio[order] / ratio[order[0]]
            with np.errstate(all="ignore"):
                found = shape.coordinates(g, t)
                u = np.array([np.broadcast_to(x, gaps.shape[1:]) for x in found]).reshape(len(found), *gaps.shape[1:])
                off = [np.abs(a - b) for a, b in zip([*shape.gaps(u), *shape.thickness(u)], [*g, *t], strict=True)]
            if all((x <= MATCH_TOLERANCE).all() for x in off):
                if not shape.outside(u).any():
                    return shape, u, order, mirror
                partly = partly or (shape, u, order, mirror)
    return partly


def corrections(gaps: Array, thickness: Array, poisson: Array) -> tuple[NDArray[np.int64], Array, Mask]:
    """Return what the joints (n, b) of one point add to beams, for E = 1 and forces at the point.

    Parameters
    ----------
    gaps, thickness : ndarray of shape (n, b)
        Angle from each wall to the next counter-clockwise, rad; thickness of each wall.
    poisson : ndarray of shape (b,)

    Returns
    -------
    order : ndarray of int, shape (n,), in which Delta takes the walls; order[0] is the one that is held
    delta : ndarray of shape (3n - 3, 3n - 3, b)
    outside : ndarray of bool, shape (b,); members that no table covers, Delta zero

    Raises
    ------
    MissingExtra
        For a joint that has no table's pattern, without the extra `solid`.
    InputError
        For more than MOST_ON_DEMAND different joints of no table's pattern.
    """
    n, members = gaps.shape
    order, none = np.arange(n), np.zeros(members, bool)
    if n == 2 and (np.abs(gaps - np.pi) <= MATCH_TOLERANCE).all() and (np.ptp(thickness, axis=0) == 0.0).all():
        return order, np.zeros((3, 3, members)), none  # a wall that runs on
    found = matched(gaps, thickness / thickness[0])
    if found is None:
        delta, outside, mirror = _on_demand(gaps, thickness / thickness[0], poisson), none, 1.0
    else:
        shape, u, order, mirror = found
        delta, outside = interpolated(shape, u, poisson), shape.outside(u)
    scale = np.ones((len(delta), members))
    scale[1::3], scale[2::3] = mirror, mirror / thickness[order[0]]
    return order, np.where(outside, 0.0, delta * scale[:, None] * scale), outside


def _on_demand(gaps: Array, ratio: Array, poisson: Array) -> Array:
    keys, where = np.unique(np.round(np.concatenate([gaps, ratio]), 9), axis=1, return_inverse=True)
    if keys.shape[1] > MOST_ON_DEMAND:
        raise InputError(
            f"{keys.shape[1]:,} different joints that no table has, at most {MOST_ON_DEMAND} in one batch: "
            "use model 'timoshenko', or fewer candidates"
        )
    from homog.joint_solid import cached_correction

    n = len(gaps)
    parts = np.stack([cached_correction(key[:n], key[n:]) for key in keys.T], axis=-1)[..., where.reshape(-1)]
    return np.asarray(parts[0] + poisson * parts[1])


# the cell --------------------------------------------------------------------------------------------------------


def applies(cell: UnitCell) -> bool:
    """Say whether a cell has condensed joints: planar, all straight walls that meet at their points, no end springs."""
    if cell.kind != "planar" or len(cell.blocks) != 1 or cell.blocks[0].kind != "wall":
        return False
    wall = cell.blocks[0]
    joined = np.bincount(wall.nodes.ravel(), minlength=cell.n)[wall.nodes].max(axis=1, initial=0) > 1
    return set(wall.props) <= {"thickness", "modulus", "poisson"} and bool(joined.all())


def with_joints(cell: UnitCell) -> tuple[UnitCell, Mask, Mask]:
    """Return a cell of straight walls as joints with half walls: its points are the middles of the walls.

    Parameters
    ----------
    cell : UnitCell
        A flat batch (b,) to which joints apply (`applies`).

    Returns
    -------
    joined : UnitCell
    outside : ndarray of bool, shape (b,); members with a joint that no table covers
    near : ndarray of bool, shape (b,); members with less than NEAR t of plain wall between two joints
    """
    wall, (members,) = cell.blocks[0], cell.shape
    m = len(wall)
    t, E, nu = (np.broadcast_to(wall.props[name], (members, m)).T for name in ("thickness", "modulus", "poisson"))
    vectors = element_vectors(cell.points, cell.lattice, wall.nodes, wall.shifts)
    home = cell.points[..., wall.nodes[:, 0], :] + np.einsum(
        "mp,...pd->...md", wall.shifts[:, 0].astype(float), cell.lattice
    )
    x, y = np.moveaxis(np.broadcast_to(vectors, (members, m, 2)), -1, 0).swapaxes(1, 2)
    lengths, directions = np.hypot(x, y), np.arctan2(y, x)
    plain = lengths.copy()
    outside = np.zeros(members, bool)
    blocks: dict[int, tuple[list[Any], list[Any], list[NDArray[Any]]]] = {}
    sound = int(
        np.argmax(np.isfinite(directions).all(axis=0) & (cell.status == Status.OK))
    )  # it gives the order of walls
    for arms in arms_of(cell.n, wall.nodes):
        if len(arms) < 2:  # a free end: half a wall that carries nothing
            continue
        walls, ends = (np.array(part) for part in zip(*arms, strict=True))
        angles = directions[walls] + np.where(ends == 0, 0.0, np.pi)[:, None]
        first = np.argsort(np.mod(angles[:, sound], TURN), kind="stable")  # the order round a joint is the topology's
        walls, ends, angles = walls[first], ends[first], angles[first]
        gaps = np.mod(np.roll(angles, -1, axis=0) - angles, TURN)
        gaps = np.where(np.abs(gaps.sum(axis=0) - TURN) < 1e-6, gaps, np.nan)  # another order: no such joint
        _swallow(plain, walls, gaps, t[walls])
        order, delta, missed = corrections(gaps, t[walls], nu[walls[0]])
        outside |= missed
        walls, ends, angles = walls[order], ends[order], angles[order]
        half = lengths[walls] / 2.0
        F = star_flexibility(angles, half, t[walls], E[walls[0]], nu[walls[0]]) + carried(delta / E[walls[0]], half)
        tips = half * np.exp(1j * angles)
        R = _turns(angles - np.angle(tips[1] - tips[0]))
        weight = np.linalg.inv(R @ np.moveaxis(F, -1, 0) @ np.swapaxes(R, -1, -2))
        weight = (weight + np.swapaxes(weight, -1, -2)) / 2.0
        shifts = -wall.shifts[walls, ends]  # of the wall's middle, seen from this end
        nodes, images, weights = blocks.setdefault(len(walls), ([], [], []))
        nodes.append(walls)
        images.append(shifts)
        weights.append(weight)
    joined = dataclasses.replace(
        cell,
        points=home + vectors / 2.0,
        blocks=tuple(
            Block("joint", np.array(nodes), np.array(images), {"weight": np.stack(weights, axis=1)})
            for nodes, images, weights in blocks.values()
        ),
    )
    return joined, outside, (plain < NEAR * t).any(axis=0)


def _swallow(plain: Array, walls: NDArray[np.int64], gaps: Array, thickness: Array) -> None:
    """Take from the plain lengths (m, b) what the corners of one joint swallow of its walls."""
    half = thickness / 2.0
    disc = half.max(axis=0)
    after, before = np.roll(half, -1, axis=0), np.roll(half, 1, axis=0)
    cut = np.maximum(corner_cut(gaps, half, after, disc), corner_cut(np.roll(gaps, 1, axis=0), half, before, disc))
    np.subtract.at(plain, walls, cut)


def _turns(angles: Array) -> Array:
    """Return the matrices (b, s, s) that turn the freedoms of walls 1 to n - 1 by angles (n, b)."""
    n, members = angles.shape
    R = np.zeros((members, 3 * n - 3, 3 * n - 3))
    for i in range(1, n):
        c, s, k = np.cos(angles[i]), np.sin(angles[i]), 3 * i - 3
        R[:, k, k], R[:, k, k + 1], R[:, k + 1, k], R[:, k + 1, k + 1], R[:, k + 2, k + 2] = c, -s, s, c, 1.0
    return R
