"""Where the numbers of a shortlist stand on a chart: near their points, clear of each other, joined by short lines.

Everything is in inches on the page. Greedy: each label takes the cheapest of a fan of places about its point.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

TOGETHER = 0.07
"""Points nearer than this many inches share one label."""
CROWD = 20000
"""So many of the candidates are looked at to find empty paper."""


@dataclass(frozen=True, eq=False)
class Label:
    """A text, its middle and the point that it belongs to (2,), inches."""

    text: str
    middle: Array
    ring: Array


def place(points: Array, ranks: NDArray[np.int64], crowd: Array, size: Array) -> list[Label]:
    """Return a label for every group of points that lie together.

    Parameters
    ----------
    points : ndarray of shape (s, 2)
        Shortlisted candidates; those without a place are left out.
    ranks : ndarray of int of shape (s,)
    crowd : ndarray of shape (m, 2)
        All candidates.
    size : ndarray of shape (2,)
        Width and height of the axes.
    """
    groups: list[list[int]] = []
    for i in np.flatnonzero(np.isfinite(points).all(axis=1)):
        near = [g for g in groups if float(np.hypot(*(points[g].mean(axis=0) - points[i]))) < TOGETHER]
        if near:
            near[0].append(int(i))
        else:
            groups.append([int(i)])
    crowd = crowd[:: max(1, len(crowd) // CROWD)]
    rings = [np.asarray(points[g].mean(axis=0)) for g in groups]
    taken: list[tuple[Array, Array, Array]] = []
    found = []
    for group, ring in zip(groups, rings, strict=True):
        text = _runs(sorted(int(ranks[i]) for i in group))
        half = np.array([0.045 * len(text) + 0.05, 0.085])
        middle = _spot(ring, half, rings, taken, crowd, size)
        taken.append((middle - half, middle + half, ring))
        found.append(Label(text, middle, ring))
    return found


def _runs(ranks: list[int]) -> str:
    """Ranks as printed: 1–3, 5."""
    parts: list[list[int]] = []
    for rank in ranks:
        if parts and rank == parts[-1][-1] + 1:
            parts[-1].append(rank)
        else:
            parts.append([rank])
    said = [str(p[0]) if len(p) == 1 else f"{p[0]}, {p[1]}" if len(p) == 2 else f"{p[0]}–{p[-1]}" for p in parts]
    return ", ".join(said)


def _spot(ring: Array, half: Array, rings: list[Array], taken: list[tuple[Array, Array, Array]], crowd: Array,
          size: Array) -> Array:  # fmt: skip
    """The middle of a label near its ring: clear of rings, labels, their lines and edges, then where it is emptiest.

    `taken` holds the low corner, high corner and ring of each label that is placed.
    """
    best, found = math.inf, ring + np.array([0.3, 0.3])
    others = [r for r in rings if np.hypot(*(r - ring)) > 1e-9]
    for distance in (0.24, 0.34, 0.46, 0.6, 0.8, 1.05, 1.4):
        for angle in np.linspace(0.0, 2.0 * np.pi, 24, endpoint=False) + np.pi / 4.0:
            out = np.array([np.cos(angle), np.sin(angle)])
            spot = ring + distance * out + half * np.array([out[0], 0.0])
            low, high = spot - half - 0.04, spot + half + 0.04
            cost = distance + 10.0 * bool((low < 0.0).any() or (high > size).any())
            for a, b, end in taken:
                middle = (a + b) / 2.0
                cost += 5.0 * bool((low < b).all() and (high > a).all())
                cost += 1.5 * _cross(ring, spot, end, middle) + 3.0 * _near(spot, end, middle, half.max())
                cost += 3.0 * _near(middle, ring, spot, 0.1)
            for r in others:
                cost += 3.0 * bool((low - 0.08 < r).all() and (high + 0.08 > r).all()) + 1.5 * _near(
                    r, ring, spot, 0.08
                )
            cost += 0.15 * bool(((crowd > low) & (crowd < high)).all(axis=1).any())
            if cost < best - 1e-9:
                best, found = cost, spot
    return np.asarray(found)


def _near(point: Array, a: Array, b: Array, reach: float) -> bool:
    """Whether a point is within reach of the segment a-b."""
    along = float(np.clip((point - a) @ (b - a) / max(float((b - a) @ (b - a)), 1e-12), 0.0, 1.0))
    return bool(np.hypot(*(a + along * (b - a) - point)) < reach)


def _cross(a: Array, b: Array, c: Array, d: Array) -> bool:
    """Whether the segments a-b and c-d cross."""

    def side(p: Array, q: Array, r: Array) -> bool:
        return bool((q[0] - p[0]) * (r[1] - p[1]) > (q[1] - p[1]) * (r[0] - p[0]))

    return side(a, b, c) != side(a, b, d) and side(c, d, a) != side(c, d, b)
