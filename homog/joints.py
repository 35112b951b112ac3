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
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from importlib import resources
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from homog import spatial_joints
from homog.cell import Block, Status, UnitCell
from homog.errors import InputError
from homog.section import arms_of, corner_cuts
from homog.stars import carried, star_of
from homog.tensors import inverted

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

TABLES = "joint_tables.npz"
MATCH_TOLERANCE = 1e-9
"""Gaps (rad) and thickness ratios of a joint that a shape reproduces within this are that shape's."""
SAME = 1e-12
"""Joints whose gaps, thicknesses, lengths and moduli agree within this (relative) are computed once."""
NEAR = 0.5
"""Plain wall between the inner corners of neighbouring joints, in thicknesses, below which they feel each other. Below
none the joints overlap and the model fails: moduli come out wrong by any factor, even negative."""
MOST_ON_DEMAND = 200
PLAIN_WALL = ("thickness", "modulus", "poisson")


# tables ----------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Shape:
    """Joints of one pattern: n walls whose gaps and thicknesses follow from a few coordinates.

    `gaps(coordinates (k, ...))` and `thickness` (over that of wall 0) give the joint, `coordinates(gaps, thickness)` is
    the way back, exact if the joint has the pattern. The range of each coordinate is cut at `edges` into pieces with so
    many Chebyshev `points` each: where two walls come to lie in line, or another wall becomes the thickest, an inner
    corner turns into an outer one and the correction has a kink.
    """

    name: str
    walls: int
    edges: tuple[tuple[float, ...], ...]
    points: tuple[tuple[int, ...], ...]
    gaps: Callable[[Array], list[Any]]
    thickness: Callable[[Array], list[Any]]
    coordinates: Callable[[Array, Array], list[Any]]

    def pieces(self) -> list[tuple[int, ...]]:
        """Return the number of the piece along each coordinate, of every piece of the table."""
        return list(itertools.product(*(range(len(points)) for points in self.points)))

    def span(self, piece: tuple[int, ...]) -> list[tuple[float, float, int]]:
        """Return low and high end and number of points along each coordinate of a piece."""
        return [(e[i], e[i + 1], p[i]) for e, p, i in zip(self.edges, self.points, piece, strict=True)]

    def outside(self, u: Array) -> Mask:
        """Return where coordinates (k, b) are outside the table's range, (b,)."""
        low, high = (np.array([edges[i] for edges in self.edges])[:, None] for i in (0, -1))
        return np.asarray(~((u >= low - MATCH_TOLERANCE) & (u <= high + MATCH_TOLERANCE)).all(axis=0))


def _open(gap: Any) -> Any:
    """The coordinate of a gap: ln tan(gap/2)."""
    return np.log(np.tan(gap / 2.0))


def _gap(coordinate: Any) -> Any:
    return 2.0 * np.arctan(np.exp(coordinate))


def _forked(gap: Any) -> list[Any]:
    return [gap, TURN - 2.0 * gap, gap]


def _span(low_deg: float, high_deg: float) -> tuple[float, float]:
    return float(_open(np.radians(low_deg))), float(_open(np.radians(high_deg)))


FORK, CROSS, ELBOW = _span(9.0, 176.0), _span(14.0, 90.0), _span(9.0, 178.0)
NARROW, WIDE = _span(7.0, 80.0), _span(9.0, 162.0)
RATIO = float(np.log(2.6))
TURN = 2.0 * np.pi

SHAPES = (
    # a stem (wall 0) between two arms, all equal: honeycombs
    Shape("even-fork", 3, ((FORK[0], 0.0, FORK[1]),), ((20, 24),),
          lambda u: _forked(_gap(u[0])),
          lambda u: [1.0 + 0.0 * u[0]] * 3, lambda g, t: [_open(g[0])]),
    # a stem of twice the arms' thickness; the corners pass its round end at 120 and 150 degrees
    Shape("double-fork", 3, ((FORK[0], 0.0, *_span(120.0, 150.0), FORK[1]),), ((16, 12, 12, 16),),
          lambda u: [_gap(u[0]), TURN - 2.0 * _gap(u[0]), _gap(u[0])],
          lambda u: [1.0 + 0.0 * u[0], 0.5 + 0.0 * u[0], 0.5 + 0.0 * u[0]], lambda g, t: [_open(g[0])]),
    # a stem (wall 0) of another thickness between two equal arms
    Shape("fork", 3, ((FORK[0], 0.0, FORK[1]), (-RATIO, 0.0, RATIO)), ((14, 16), (8, 8)),
          lambda u: _forked(_gap(u[0])),
          lambda u: [1.0 + 0.0 * u[1], np.exp(u[1]), np.exp(u[1])],
          lambda g, t: [_open(g[0]), np.log(t[1] / t[0])]),
    # two straight walls that cross: square, kagome
    Shape("cross", 4, (CROSS,), ((18,),),
          lambda u: [_gap(u[0]), np.pi - _gap(u[0])] * 2, lambda u: [1.0 + 0.0 * u[0]] * 4,
          lambda g, t: [_open(g[0])]),
    # six equal walls: triangular
    Shape("hexad", 6, (), (), lambda u: [np.pi / 3.0] * 6, lambda u: [1.0] * 6, lambda g, t: []),
    # two pairs on one axis: arrowhead
    Shape("pairs", 4, (NARROW, WIDE), ((18,), (20,)),
          lambda u: [_gap(u[0]), _gap(u[1]), _gap(u[0]), TURN - 2.0 * _gap(u[0]) - _gap(u[1])],
          lambda u: [1.0 + 0.0 * u[0]] * 4, lambda g, t: [_open(g[0]), _open(g[1])]),
    # two walls at an angle
    Shape("elbow", 2, (ELBOW,), ((40,),), lambda u: [_gap(u[0]), TURN - _gap(u[0])],
          lambda u: [1.0 + 0.0 * u[0]] * 2, lambda g, t: [_open(np.minimum(g[0], g[1]))]),
)  # fmt: skip


@functools.cache
def _tables() -> dict[str, Array]:
    """Return the Chebyshev coefficients of every piece, (2, s, s, points...): Delta = A + nu B."""
    with resources.files("homog").joinpath(TABLES).open("rb") as file, np.load(file) as tables:
        return dict(tables)


def table_name(shape: Shape, piece: tuple[int, ...]) -> str:
    """Return the name of a piece in the file of tables."""
    return "-".join([shape.name, *map(str, piece)])


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
    members = coordinates.shape[1]
    nu = np.broadcast_to(poisson, (members,))
    where = np.zeros((len(shape.edges), members), np.int64)
    for k, edges in enumerate(shape.edges):
        where[k] = np.searchsorted(edges[1:-1], coordinates[k])
    s = 3 * shape.walls - 3
    out = np.empty((s, s, members))
    for piece in shape.pieces():
        here = (where == np.array(piece, np.int64).reshape(-1, 1)).all(axis=0)
        if here.all():
            return _polynomial(_tables()[table_name(shape, piece)], shape.span(piece), coordinates, nu)
        if here.any():
            part = _tables()[table_name(shape, piece)]
            out[..., here] = _polynomial(part, shape.span(piece), coordinates[:, here], nu[here])
    return out


def _polynomial(C: Array, spans: list[tuple[float, float, int]], coordinates: Array, nu: Array) -> Array:
    """Return the sum (s, s, b) of a piece's polynomials with coefficients C (2, s, s, points...)."""
    even = bool((nu == nu[0]).all())
    parts = [C[0] + nu[0] * C[1]] if even else [C[0], C[1]]
    T = [chebyshev(x, *span) for x, span in zip(coordinates, spans, strict=True)]
    values = []
    for part in parts:
        s = len(part)
        if not T:
            values.append(np.repeat(part[..., None], coordinates.shape[1], axis=2))
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
    sound = np.isfinite(gaps).all(axis=0) & np.isfinite(ratio).all(axis=0)
    one = np.flatnonzero(sound)[:1]  # a pattern that this member has not need not be tried on the others
    n, partly = len(gaps), None
    for shape in SHAPES:
        if shape.walls != n:
            continue
        for mirror, start in itertools.product((1.0, -1.0), range(n)):
            order = (start + np.arange(n) * int(mirror)) % n
            turned = order if mirror > 0.0 else (order - 1) % n
            if _fit(shape, gaps[turned[:, None], one], ratio[order[:, None], one])[1].all():
                u, fits = _fit(shape, gaps[turned], ratio[order])
                if fits[sound].all():
                    if not shape.outside(u)[sound].any():
                        return shape, u, order, mirror
                    partly = partly or (shape, u, order, mirror)
    return partly


def _fit(shape: Shape, gaps: Array, ratio: Array) -> tuple[Array, Mask]:
    """Return the coordinates (k, b) that a shape gives joints (n, b), and where they reproduce them, (b,)."""
    t = ratio / ratio[0]
    with np.errstate(all="ignore"):
        found = shape.coordinates(gaps, t)
        u = np.array([np.broadcast_to(x, gaps.shape[1:]) for x in found]).reshape(len(found), *gaps.shape[1:])
        fits = np.ones(gaps.shape[1:], bool)
        for made, given in zip([*shape.gaps(u), *shape.thickness(u)], [*gaps, *t], strict=True):
            fits &= np.abs(made - given) <= MATCH_TOLERANCE
    return u, fits


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
    if n == 2:
        straight = (np.abs(gaps - np.pi) <= MATCH_TOLERANCE) & (np.ptp(thickness, axis=0) == 0.0)
        if (straight | ~np.isfinite(gaps)).all():
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
    joint = np.round(np.concatenate([gaps, ratio]), 9)
    sound = np.isfinite(joint).all(axis=0)
    keys, where = np.unique(joint[:, sound], axis=1, return_inverse=True)
    if keys.shape[1] > MOST_ON_DEMAND:
        raise InputError(
            f"{keys.shape[1]:,} different joints that no table has, at most {MOST_ON_DEMAND} in one batch: "
            "use model 'timoshenko', or fewer candidates"
        )
    from homog.joint_solid import cached_correction

    n = len(gaps)
    parts = np.full((2, 3 * n - 3, 3 * n - 3, joint.shape[1]), np.nan)
    if len(keys.T):
        found = np.stack([cached_correction(key[:n], key[n:]) for key in keys.T], axis=-1)
        parts[..., sound] = found[..., where.reshape(-1)]
    return np.asarray(parts[0] + poisson * parts[1])


# the cell --------------------------------------------------------------------------------------------------------


def applies(cell: UnitCell) -> bool:
    """Say whether a cell has condensed joints: planar, all straight walls that meet at their points, no end springs.

    Or in space, plain round struts whose points all have a table's pattern (`spatial_joints`).
    """
    if cell.kind == "spatial":
        return spatial_joints.applies(cell)
    walls = [block for block in cell.blocks if len(block)]
    if cell.kind != "planar" or not walls or any(block.kind != "wall" for block in walls):
        return False
    nodes = np.concatenate([block.nodes for block in walls])
    joined = np.bincount(nodes.ravel(), minlength=cell.n)[nodes].max(axis=1) > 1
    others = (np.any(value) for block in walls for name, value in block.props.items() if name not in PLAIN_WALL)
    return not any(others) and bool(joined.all())


def freedoms(cell: UnitCell) -> int:
    """Return how many freedoms `with_joints` leaves a cell to which joints apply."""
    if cell.kind == "spatial":
        return spatial_joints.freedoms(cell)
    return 3 * sum(len(block) for block in cell.blocks) - 2


def with_joints(cell: UnitCell) -> tuple[UnitCell, Mask, Array]:
    """Return a cell of straight walls as joints with half walls: its points are the middles of the walls.

    Parameters
    ----------
    cell : UnitCell
        A flat batch (b,) to which joints apply (`applies`).

    Returns
    -------
    joined : UnitCell
    outside : ndarray of bool, shape (b,); members with a joint that no table covers
    plain : ndarray of shape (b,); least plain wall between two joints, in thicknesses of the wall; negative where the
        inner corners of two joints overlap: no such pair of joints exists
    """
    if cell.kind == "spatial":
        return spatial_joints.with_joints(cell)
    blocks, (members,) = [block for block in cell.blocks if len(block)], cell.shape
    ends_of, shifts_of = (np.concatenate([getattr(b, name) for b in blocks]) for name in ("nodes", "shifts"))
    m = len(ends_of)
    t, E, nu = (_by_wall([b.props[name] for b in blocks], [len(b) for b in blocks]) for name in PLAIN_WALL)
    t = np.broadcast_to(t, (m, members))
    points, lattice = (np.ascontiguousarray(np.moveaxis(x, (-1, -2), (0, 1))) for x in (cell.points, cell.lattice))
    reach = np.einsum("mkp,dpb->dkmb", shifts_of.astype(float), lattice)
    home = points[:, ends_of[:, 0]] + reach[:, 0]
    vectors = np.broadcast_to(points[:, ends_of[:, 1]] + reach[:, 1] - home, (2, m, members))
    lengths, directions = np.hypot(*vectors), np.arctan2(vectors[1], vectors[0])
    units = vectors / lengths
    plain = lengths.copy()
    outside = np.zeros(members, bool)
    joints: dict[int, tuple[list[Any], list[Any], list[NDArray[Any]]]] = {}
    sound = int(
        np.argmax(np.isfinite(directions).all(axis=0) & (cell.status == Status.OK))
    )  # it gives the order of walls
    known: list[_Joint] = []
    for arms in arms_of(cell.n, ends_of):
        if len(arms) < 2:  # a free end: half a wall that carries nothing
            continue
        walls, ends = (np.array(part) for part in zip(*arms, strict=True))
        angles = directions[walls] + np.where(ends == 0, 0.0, np.pi)[:, None]
        first = np.argsort(np.mod(angles[:, sound], TURN), kind="stable")  # the order round a joint is the topology's
        walls, ends, angles = walls[first], ends[first], angles[first]
        gaps = np.roll(angles, -1, axis=0) - angles
        gaps -= TURN * np.floor(gaps / TURN)
        there = (np.abs(gaps.sum(axis=0) - TURN) < 1e-6) & (cell.status == Status.OK)
        gaps[:, ~there] = np.nan  # another order, or no cell at all: no such joint
        given = (gaps, t[walls], lengths[walls] / 2.0, E[walls], nu[walls])
        start, joint = next(
            ((start, joint) for joint in known if (start := _same(joint.given, given, sound)) is not None), (0, None)
        )
        walls, ends = (np.roll(part, -start) for part in (walls, ends))
        if joint is None:
            joint = _joint(given, units[:, walls] * np.where(ends == 0, 1.0, -1.0)[:, None])
            known.append(joint)
        for wall, cut in zip(walls, joint.cut, strict=True):  # both ends of a wall may meet here
            plain[wall] -= cut
        outside |= joint.outside
        walls, ends = walls[joint.order], ends[joint.order]
        shifts = -shifts_of[walls, ends]  # of the wall's middle, seen from this end
        nodes, images, weights = joints.setdefault(len(walls), ([], [], []))
        nodes.append(walls)
        images.append(shifts)
        weights.append(joint.weight)
    joined = dataclasses.replace(
        cell,
        points=np.moveaxis(home + vectors / 2.0, (0, 1), (-1, -2)),
        blocks=tuple(
            Block("joint", np.array(nodes), np.array(images),
                  {"weight": np.moveaxis(np.stack(weights, axis=2), (-1, -2), (0, 1))})
            for nodes, images, weights in joints.values()
        ),
    )  # fmt: skip
    return joined, outside, np.asarray((plain / t).min(axis=0))


def _by_wall(values: Sequence[Array], lengths: Sequence[int]) -> Array:
    """Return a property (..., m) of several blocks, wall by wall: (m, b), or (m, 1) where all members share it."""
    shared = all(value.ndim == 1 or value.strides[0] == 0 for value in values)
    rows = [value[None] if value.ndim == 1 else value[:1] if shared else value for value in values]
    members = max(len(row) for row in rows)
    return np.concatenate([np.broadcast_to(r, (members, n)).T for r, n in zip(rows, lengths, strict=True)])


class _Joint(NamedTuple):
    """What one joint is given, (n, b) each, and what follows from it; weight (s, s, b), cut (n, b), outside (b,)."""

    given: tuple[Array, ...]
    order: NDArray[np.int64]
    weight: Array
    cut: Array
    outside: Mask


def _joint(given: tuple[Array, ...], units: Array) -> _Joint:
    """Return the joint of walls with gaps, thickness, half lengths, modulus and Poisson's ratio (n, b), and directions
    (2, n, b) outwards: weights in the frame of the line from the first to the second tip."""
    gaps, t, half, E, nu = given
    order, delta, outside = corrections(gaps, t, nu[0])
    units, l = units[:, order], half[order]
    F = star_of(*_turn(units[:, 0], units), l, t[order], E[order[0]], nu[order[0]]) + carried(delta / E[order[0]], l)
    chord = l[1] * units[:, 1] - l[0] * units[:, 0]
    c, s = _turn(chord / np.hypot(*chord), units)
    W = inverted(F)
    for turned in (W, W.swapaxes(0, 1)):  # rows, then columns, from each wall's frame to the line's
        for i in range(1, len(l)):
            along, across = turned[3 * i - 3], turned[3 * i - 2]
            turned[3 * i - 3], turned[3 * i - 2] = c[i] * along - s[i] * across, s[i] * along + c[i] * across
    W = (W + W.swapaxes(0, 1)) / 2.0  # round-off of the stretch counts beside the bending
    return _Joint(given, order, W, _swallowed(gaps, t), outside)


def _turn(first: Array, second: Array) -> tuple[Array, Array]:
    """Return cosine and sine (n, b) of the angle from a unit vector (2, b) to others (2, n, b)."""
    return first[0] * second[0] + first[1] * second[1], first[0] * second[1] - first[1] * second[0]


def _same(known: tuple[Array, ...], given: tuple[Array, ...], sound: int) -> int | None:
    """Return by how many walls a joint must be turned to be the known one in every sound member, None if it is not."""
    n = len(given[0])
    if len(known[0]) != n:
        return None
    there = np.isfinite(given[0][0]) & np.isfinite(known[0][0])
    for start in range(n):
        turned = (np.arange(n) + start) % n
        for members in (slice(sound, sound + 1), slice(None)):
            if any(
                ((np.abs(a[turned, members] - b[:, members]) > SAME * b[:, members]) & there[members]).any()
                for a, b in zip(given, known, strict=True)
            ):
                break
        else:
            return start
    return None


def _swallowed(gaps: Array, thickness: Array) -> Array:
    """Return how much of each wall's plain length (n, b) the corners of one joint swallow."""
    half = thickness / 2.0
    disc = half.max(axis=0)
    here, there = corner_cuts(gaps, half, np.roll(half, -1, axis=0), disc)
    return np.maximum(here, np.roll(there, 1, axis=0))
