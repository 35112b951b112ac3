"""The true section: how much solid a cell holds when every joint is counted once.

A planar section is the set of points within t/2 of a wall's centre line. Around a joint it splits into the sectors
between neighbouring walls, and in each sector the union of the two half walls has a closed form, so the area is the
sum of the walls less one term a sector: exact as long as neighbouring joints do not run into each other, which is
reported as `merged`. Round struts in space are treated the same way, cone by cone.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Index = NDArray[np.int64]
Mask = NDArray[np.bool_]

CHUNK = 2048
"""Members of a batch at a time, so that the work stays in cache."""
AZIMUTHS = 720  # points round a strut for its joints' volume; the integrand is continuous: error below 1e-5 of it


class Corners(NamedTuple):
    """The inner corners of sectors between walls a and b: how far along each wall, and where they are the section's."""

    sine: Array
    cosine: Array
    along_a: Array
    along_b: Array
    bounds_a: Mask
    bounds_b: Mask


def corners(beta: Array, a: Array, b: Array, disc: Array) -> Corners:
    """Return the inner corners of walls of half thickness a and b at the angle beta, outside the joint's disc if any
    (the same condition for both walls, each from its own side)."""
    sine, cosine = np.sin(beta), np.cos(beta)
    with np.errstate(divide="ignore", invalid="ignore"):
        foot, other = (b + a * cosine) / sine, (a + b * cosine) / sine
        meets = (beta < np.pi) & (foot >= 0.0) & (other >= 0.0)
        limit = disc**2
        return Corners(sine, cosine, foot, other, meets & (foot**2 + a**2 >= limit), meets & (other**2 + b**2 >= limit))


def sector_surplus(beta: Array, a: Array, b: Array, disc: Array) -> Array:
    """Return the area by which the union in a sector differs from two half walls, ndarray of the inputs' shape.

    Two walls of half thickness a and b leave a point at the angle beta (0 to 2 pi); the thickest wall of the joint has
    a round end of radius `disc`. Where the two faces meet in an inner corner outside the disc, the walls overlap by
    (a^2 + b^2) cot(beta)/2 + a b / sin(beta); elsewhere the disc bounds the section (elementary geometry).
    """
    beta, a, b, disc = np.broadcast_arrays(beta, a, b, disc)
    return _surplus(beta, a, b, disc, corners(beta, a, b, disc))


def _surplus(beta: Array, a: Array, b: Array, disc: Array, at: Corners) -> Array:
    with np.errstate(divide="ignore", invalid="ignore"):
        out = np.asarray(-((a**2 + b**2) * at.cosine / 2.0 + a * b) / at.sine)
    open_ = ~at.bounds_a
    beta, a, b, disc = (x[open_] for x in (beta, a, b, disc))
    wedge = beta - np.arcsin(a / disc) - np.arcsin(b / disc)
    flat = a * np.sqrt(disc**2 - a**2) + b * np.sqrt(disc**2 - b**2)
    out[open_] = (disc**2 * wedge - flat) / 2.0
    return out


def corner_cuts(beta: Array, a: Array, b: Array, disc: Array) -> tuple[Array, Array]:
    """Return how far along walls a and b their faces are swallowed by their corner or by the joint's disc."""
    return _cuts(a, b, disc, corners(beta, a, b, disc))


def _cuts(a: Array, b: Array, disc: Array, at: Corners) -> tuple[Array, Array]:
    return (
        np.where(at.bounds_a, at.along_a, np.sqrt(disc**2 - a**2)),
        np.where(at.bounds_b, at.along_b, np.sqrt(disc**2 - b**2)),
    )


def _poking(beta: Array, a: Array, b: Array, disc: Array, at: Corners) -> tuple[Array, Array]:
    """Return what the thickest wall (half thickness b) holds beyond the far face of a thin neighbour (a), and its end.

    At a sharp angle a thick wall reaches past the thin one beside it, into the next sector: outside the joint's disc
    lies the area between its face, the thin wall's far face and the disc, (b s - a (q - w) - b^2 (pi/2 - beta -
    arcsin(a/b)))/2 with s = (b cos(beta) - a)/sin(beta) along the thick wall, q = (b - a cos(beta))/sin(beta) along
    the thin one, w = sqrt(b^2 - a^2) (elementary geometry). The end is q, how far the thin wall's far face is
    swallowed.
    """
    area, end = np.zeros(beta.shape), np.zeros(beta.shape)
    there = (beta < np.pi / 2.0) & (b >= disc) & (b * at.cosine > a)
    beta, a, b, sine, cosine = (x[there] for x in (beta, a, b, at.sine, at.cosine))
    s, q = (b * cosine - a) / sine, (b - a * cosine) / sine
    w = np.sqrt(np.clip(b**2 - a**2, 0.0, None))
    area[there] = (b * s - a * (q - w) - b**2 * (np.pi / 2.0 - beta - np.arcsin(np.minimum(a / b, 1.0)))) / 2.0
    end[there] = q
    return area, end


def arms_of(n: int, nodes: Index) -> list[Sequence[tuple[int, int]]]:
    """Return for each point the (wall, end) pairs that meet there."""
    arms: list[list[tuple[int, int]]] = [[] for _ in range(n)]
    for wall, ends in enumerate(nodes):
        for end, point in enumerate(ends):
            arms[point].append((wall, end))
    return [tuple(found) for found in arms]


def element_vectors(points: Array, lattice: Array, nodes: Index, shifts: Index) -> Array:
    """Return the vector from first to second node of each two-node element, ndarray of shape (..., m, d)."""
    first, last = (np.moveaxis(x, (-1, -2), (0, 1)) for x in (points, lattice))  # the batch last: long loops
    out = np.ascontiguousarray(first)[:, nodes[:, 1]] - np.ascontiguousarray(first)[:, nodes[:, 0]]
    apart = shifts[:, 1] - shifts[:, 0]
    if apart.any():
        moved = np.einsum("mp,dp...->dm...", apart.astype(float), np.ascontiguousarray(last))
        ndim = max(out.ndim, moved.ndim)  # the batches stand to the right: fill up between
        out, moved = (x.reshape(*x.shape[:2], *(1,) * (ndim - x.ndim), *x.shape[2:]) for x in (out, moved))
        out = out + moved
    return np.asarray(np.moveaxis(out, (0, 1), (-1, -2)))


def wall_section(points: Array, lattice: Array, nodes: Index, shifts: Index, thickness: Array) -> tuple[Array, Mask]:
    """Return the area of the union of straight walls and whether their joints run into each other.

    Parameters
    ----------
    points, lattice : ndarray of shape (..., n, 2), (..., 2, 2)
    nodes, shifts : ndarray of int, shape (m, 2), (m, 2, 2)
    thickness : ndarray of shape (..., m)

    Returns
    -------
    area : ndarray of shape (...), mm2 per cell
    merged : ndarray of bool, shape (...); there the area is not exact and the void beside a wall has closed
    """
    shape, parts = _sections(points, lattice, nodes, shifts, thickness)
    members = int(np.prod(shape))
    area, merged = np.empty(members), np.empty(members, bool)
    for part, found, lengths, cuts in parts:
        area[part], merged[part] = found, (cuts.sum(axis=0) >= lengths).any(axis=(0, 1))
    return area.reshape(shape), merged.reshape(shape)


def wall_cuts(points: Array, lattice: Array, nodes: Index, shifts: Index, thickness: Array) -> Array:
    """Return how much of each straight wall the corners and discs at its ends swallow, ndarray (..., m, 2), mm.

    Arguments as of `wall_section`; of the two sides of a wall the one that loses more.
    """
    shape, parts = _sections(points, lattice, nodes, shifts, thickness)
    out = np.empty((int(np.prod(shape)), len(nodes), 2))
    for part, _, _, cuts in parts:
        out[part] = np.moveaxis(cuts.max(axis=1), (0, 1, 2), (2, 1, 0))
    return out.reshape(*shape, len(nodes), 2)


def _sections(
    points: Array, lattice: Array, nodes: Index, shifts: Index, thickness: Array
) -> tuple[tuple[int, ...], Iterator[tuple[slice, Array, Array, Array]]]:
    """Return the batch's shape, and chunk by chunk area (b,), lengths (m, b) and cuts (end, side, m, b)."""
    shape = np.broadcast_shapes(points.shape[:-2], lattice.shape[:-2], thickness.shape[:-1])
    n, m, members = points.shape[-2], len(nodes), int(np.prod(shape))
    P = np.broadcast_to(points, (*shape, n, 2)).reshape(-1, n, 2)
    L = np.broadcast_to(lattice, (*shape, 2, 2)).reshape(-1, 2, 2)
    t = np.broadcast_to(thickness, (*shape, m)).reshape(-1, m)
    arms: dict[int, list[Sequence[tuple[int, int]]]] = {}
    for found in arms_of(n, nodes):
        arms.setdefault(len(found), []).append(found)
    joints = [np.array(alike).transpose(2, 1, 0) for size, alike in arms.items() if size]  # (wall or end, n, joints)

    def parts() -> Iterator[tuple[slice, Array, Array, Array]]:
        for start in range(0, members, CHUNK):
            part = slice(start, start + CHUNK)
            vectors = np.moveaxis(element_vectors(P[part], L[part], nodes, shifts), (-1, -2), (0, 1))
            yield part, *_section(np.ascontiguousarray(vectors), np.ascontiguousarray(t[part].T) / 2.0, joints)

    return shape, parts()


def _section(vectors: Array, half: Array, joints: Sequence[Index]) -> tuple[Array, Array, Array]:
    """Area (b,), lengths (m, b), cuts (end, side, m, b) of walls with vectors (2, m, b), half thicknesses (m, b)."""
    lengths = np.sqrt(vectors[0] ** 2 + vectors[1] ** 2)
    forth = np.arctan2(vectors[1], vectors[0])
    directions = np.stack([forth, np.where(forth > 0.0, forth - np.pi, forth + np.pi)])
    area = 2.0 * (half * lengths).sum(axis=0)
    cuts = np.zeros((2, 2, *lengths.shape))  # end, left or right of its direction, wall
    for walls, ends in joints:
        direction, wide = directions[ends, walls], half[walls]
        order = direction[:, :, :1].argsort(axis=0, kind="stable")  # of the first member, mostly that of all
        if (np.diff(direction[order[..., 0], np.arange(walls.shape[1])], axis=0) < 0.0).any():
            order = direction.argsort(axis=0, kind="stable")
        direction, wide = _ordered(direction, order), _ordered(wide, order)
        beta = np.roll(direction, -1, axis=0) - direction
        beta[-1] += 2.0 * np.pi
        after, disc = np.roll(wide, -1, axis=0), np.broadcast_to(wide.max(axis=0), wide.shape)
        at = corners(beta, wide, after, disc)
        here, there = _cuts(wide, after, disc, at)
        surplus = _surplus(beta, wide, after, disc, at)
        if (half != half[0]).any():  # behind an inner corner there is nothing left to hold
            open_ = ~at.bounds_a
            over, far = (np.where(np.roll(open_, 1, axis=0), x, 0.0) for x in _poking(beta, wide, after, disc, at))
            under, near = (np.where(np.roll(open_, -1, axis=0), x, 0.0) for x in _poking(beta, after, wide, disc, at))
            surplus += over + under
            here = np.maximum(here, np.roll(near, 1, axis=0))
            there = np.maximum(there, np.roll(far, -1, axis=0))
        area += surplus.sum(axis=(0, 1))
        back = order.argsort(axis=0)
        cuts[ends, ends, walls] = _ordered(here, back)
        cuts[ends, 1 - ends, walls] = _ordered(np.roll(there, 1, axis=0), back)
    return area, lengths, cuts


def _ordered(values: Array, order: Index) -> Array:
    """Values (n, j, b) in an order (n, j, b) along the first axis, or (n, j, 1) if it is that of all members."""
    if order.shape[-1] == values.shape[-1]:
        return np.take_along_axis(values, order, axis=0)
    return np.asarray(values[order[..., 0], np.arange(values.shape[1])])


def strut_volume(points: Array, lattice: Array, nodes: Index, shifts: Index, diameter: Array) -> Array:
    """Return the volume (...,) of the union of round struts of one diameter per cell, joints counted once, mm3.

    Around a joint each strut owns the cone of directions nearer to it than to its neighbours. The part of the strut
    (of radius r) outside its cone has the volume r^3/3 times the integral over the azimuth of cot(chi), chi the
    cone's half angle there; between struts at the angle b, cot(chi) = cot(b/2) cos(azimuth from the neighbour).
    Where a strut has no neighbour on a side (chi > 90 deg) its round end adds a part of a ball (elementary geometry).
    """
    vectors = element_vectors(points, lattice, nodes, shifts)
    lengths = np.linalg.norm(vectors, axis=-1)
    r = np.asarray(diameter) / 2.0
    volume = np.pi * r**2 * lengths.sum(axis=-1)
    azimuth = 2.0 * np.pi * np.arange(AZIMUTHS) / AZIMUTHS
    for arms in arms_of(points.shape[-2], nodes):
        walls = np.array([wall for wall, _ in arms])
        sign = np.array([1.0 if end == 0 else -1.0 for _, end in arms])
        out = vectors[..., walls, :] * sign[:, None] / lengths[..., walls, None]
        for i in range(len(arms)):
            axis = out[..., i, :]
            side = np.where(np.abs(axis[..., 2:]) > 0.9, [1.0, 0.0, 0.0], [0.0, 0.0, 1.0])
            e2 = np.cross(side, axis)
            e2 /= np.linalg.norm(e2, axis=-1, keepdims=True)
            e3 = np.cross(axis, e2)
            cot = np.full(axis.shape[:-1] + (AZIMUTHS,), -np.inf)
            for j in range(len(arms)):
                if j == i:
                    continue
                cosine = np.einsum("...d,...d->...", axis, out[..., j, :])[..., None]
                towards = np.einsum("...d,...d->...", e2, out[..., j, :])[..., None] * np.cos(azimuth) + np.einsum(
                    "...d,...d->...", e3, out[..., j, :]
                )[..., None] * np.sin(azimuth)
                cot = np.maximum(cot, towards / (1.0 - cosine))
            lost = np.where(cot > 0.0, cot, -1.0 / np.sqrt(1.0 + np.minimum(cot, -1e-30) ** -2.0))
            volume = volume - r**3 / 3.0 * 2.0 * np.pi * lost.mean(axis=-1)
    return np.asarray(volume)
