"""The true section: how much solid a cell holds when every joint is counted once.

A planar section is the set of points within t/2 of a wall's centre line. Around a joint it splits into the sectors
between neighbouring walls, and in each sector the union of the two half walls has a closed form, so the area is the
sum of the walls less one term a sector: exact as long as neighbouring joints do not run into each other, which is
reported as `merged`. Round struts in space are treated the same way, cone by cone.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Index = NDArray[np.int64]

AZIMUTHS = 720  # points round a strut for its joints' volume; the integrand is continuous: error below 1e-5 of it


def _inner_corner(beta: Array, a: Array, b: Array, disc: Array) -> tuple[Array, NDArray[np.bool_]]:
    """Return how far along wall a its inner corner with wall b lies, and where one lies outside the joint's disc."""
    sine, cosine = np.sin(beta), np.cos(beta)
    with np.errstate(divide="ignore", invalid="ignore"):
        foot, other = (b + a * cosine) / sine, (a + b * cosine) / sine
    return foot, (beta < np.pi) & (foot >= 0.0) & (other >= 0.0) & (foot**2 + a**2 >= disc**2)


def sector_surplus(beta: Array, a: Array, b: Array, disc: Array) -> Array:
    """Return the area by which the union in a sector differs from two half walls, ndarray of the inputs' shape.

    Two walls of half thickness a and b leave a point at the angle beta (0 to 2 pi); the thickest wall of the joint has
    a round end of radius `disc`. Where the two faces meet in an inner corner outside the disc, the walls overlap by
    (a^2 + b^2) cot(beta)/2 + a b / sin(beta); elsewhere the disc bounds the section (elementary geometry).
    """
    meets = _inner_corner(beta, a, b, disc)[1]
    with np.errstate(divide="ignore", invalid="ignore"):
        corner = -(a**2 + b**2) * np.cos(beta) / (2.0 * np.sin(beta)) - a * b / np.sin(beta)
    wedge = beta - np.arcsin(a / disc) - np.arcsin(b / disc)
    flat = a * np.sqrt(disc**2 - a**2) + b * np.sqrt(disc**2 - b**2)
    return np.where(meets, corner, (disc**2 * wedge - flat) / 2.0)


def corner_cut(beta: Array, a: Array, b: Array, disc: Array) -> Array:
    """Return how far along wall a its face is swallowed by the corner with wall b or by the joint's disc."""
    foot, meets = _inner_corner(beta, a, b, disc)
    return np.where(meets, foot, np.sqrt(disc**2 - a**2))


def poking(beta: Array, a: Array, b: Array, disc: Array) -> tuple[Array, Array]:
    """Return what the thickest wall (half thickness b) holds beyond the far face of a thin neighbour (a), and its end.

    At a sharp angle a thick wall reaches past the thin one beside it, into the next sector: outside the joint's disc
    lies the area between its face, the thin wall's far face and the disc, (b s - a (q - w) - b^2 (pi/2 - beta -
    arcsin(a/b)))/2 with s = (b cos(beta) - a)/sin(beta) along the thick wall, q = (b - a cos(beta))/sin(beta) along
    the thin one, w = sqrt(b^2 - a^2) (elementary geometry). The end is q, how far the thin wall's far face is
    swallowed.
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        s, q = (b * np.cos(beta) - a) / np.sin(beta), (b - a * np.cos(beta)) / np.sin(beta)
        w = np.sqrt(np.clip(b**2 - a**2, 0.0, None))
        area = (b * s - a * (q - w) - b**2 * (np.pi / 2.0 - beta - np.arcsin(np.minimum(a / b, 1.0)))) / 2.0
    there = (beta < np.pi / 2.0) & (s > 0.0) & (b >= disc)
    return np.where(there, area, 0.0), np.where(there, q, 0.0)


def arms_of(n: int, nodes: Index) -> list[Sequence[tuple[int, int]]]:
    """Return for each point the (wall, end) pairs that meet there."""
    arms: list[list[tuple[int, int]]] = [[] for _ in range(n)]
    for wall, ends in enumerate(nodes):
        for end, point in enumerate(ends):
            arms[point].append((wall, end))
    return [tuple(found) for found in arms]


def element_vectors(points: Array, lattice: Array, nodes: Index, shifts: Index) -> Array:
    """Return the vector from first to second node of each two-node element, ndarray of shape (..., m, d)."""
    images = points[..., nodes, :] + np.einsum("mkp,...pd->...mkd", shifts.astype(float), lattice)
    return np.asarray(images[..., 1, :] - images[..., 0, :])


def wall_section(points: Array, lattice: Array, nodes: Index, shifts: Index, thickness: Array) -> tuple[Array, Array]:
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
    vectors = element_vectors(points, lattice, nodes, shifts)
    lengths = np.linalg.norm(vectors, axis=-1)
    half = np.broadcast_to(thickness, lengths.shape) / 2.0
    area = (2.0 * half * lengths).sum(axis=-1)
    cuts = np.zeros(lengths.shape + (2, 2))  # wall, end, left or right of its direction
    for arms in arms_of(points.shape[-2], nodes):
        walls = np.array([wall for wall, _ in arms])
        ends = np.array([end for _, end in arms])
        out = vectors[..., walls, :] * np.where(ends == 0, 1.0, -1.0)[:, None]
        direction = np.arctan2(out[..., 1], out[..., 0])
        order = np.argsort(direction, axis=-1, kind="stable")
        direction = np.take_along_axis(direction, order, -1)
        beta = np.diff(direction, axis=-1, append=direction[..., :1] + 2.0 * np.pi)
        wide = np.take_along_axis(half[..., walls], order, -1)
        after = np.roll(wide, -1, axis=-1)
        disc = np.broadcast_to(wide.max(axis=-1, keepdims=True), wide.shape)
        open_ = ~_inner_corner(beta, wide, after, disc)[1]  # behind an inner corner there is nothing left to hold
        over, far = (np.where(np.roll(open_, 1, axis=-1), x, 0.0) for x in poking(beta, wide, after, disc))
        under, near = (np.where(np.roll(open_, -1, axis=-1), x, 0.0) for x in poking(beta, after, wide, disc))
        area = area + (sector_surplus(beta, wide, after, disc) + over + under).sum(axis=-1)
        here = np.maximum(corner_cut(beta, wide, after, disc), np.roll(near, 1, axis=-1))
        there = np.maximum(corner_cut(beta, after, wide, disc), np.roll(far, -1, axis=-1))
        for arm, (wall, end) in enumerate(arms):
            found = order == arm  # where this arm stands in the counter-clockwise order
            left = np.where(found, here, 0.0).sum(axis=-1)
            right = np.where(found, np.roll(there, 1, axis=-1), 0.0).sum(axis=-1)
            cuts[..., wall, end, :] = np.stack([left, right] if end == 0 else [right, left], -1)
    merged = (cuts.sum(axis=-2) >= lengths[..., None]).any(axis=(-1, -2))
    return np.asarray(area), np.asarray(merged)


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
