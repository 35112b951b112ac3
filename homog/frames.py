"""Extremes of a spatial compliance over frames (n, m): the kernel behind `directional.space_extremes`.

In a frame n, m, k three components of S say everything: S nnnn = 1/E, S nnmm = -nu/E and S nmnm = 1/(4 G). On a grid of
directions n the best m is an eigenvector of a 2 x 2 form; from every grid point that may still lead to the extreme
Newton's method turns the whole frame. For nu it seeks the maximum of F = -S nnmm - nu S nnnn with the nu reached so
far: both are stationary together (Dinkelbach 1967), and F is as smooth as S, however sharp the peak of nu. Arrays only;
S must be finite and positive definite.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache

import numpy as np
from numpy.typing import NDArray

from homog import tensors
from homog.tensors import Array

STRETCH, CROSS, SHEAR = range(3)
"""The components S nnnn, S nnmm and S nmnm."""

PATCHES, PER_PATCH = 32, 32
"""The grid over the half sphere, in equal patches of near points; a point lies within 0.064 rad of every direction."""
STARTS = 8
"""At most so many patches, the best ones, are climbed from."""
START_MARGIN = 0.02
"""Share of F's range within which a patch is climbed from. Along a turn F is a trigonometric polynomial of degree 4, so
that it bends by at most 4^2/2 of its range (Bernstein) and loses at most 4 x 0.064^2 = 0.0164 of it over 0.064 rad."""
FIRST_RADIUS, LAST_RADIUS = 0.15, 1e-7
"""Longest turn of one step in radians, and the one at which a climb gives up."""
STEPS = 25
GAIN_TOLERANCE = 1e-8
"""A climb ends with the step that promises less than this (relative); what it still misses is far less."""
ROUND_TOLERANCE = 1e-9
"""The grid is searched again with the nu that was found until nu moves by less than this (relative to 1 + |nu|)."""
TIE_TOLERANCE = 1e-10
"""Extremes this close (relative for E and G, relative to 1 + |nu| for nu) are a tie: the smallest angle is reported."""

SHALLOW, DEEP = 1.25, 4.0
"""Where the least S nnnn is this much less than the grid's least, hollows of S up to so many times the least are tried."""

UPPER = np.triu_indices(6)
Starts = tuple[NDArray[np.intp], Array]
"""Members (p,) and frames (p, 3, 3)."""
Climbs = tuple[NDArray[np.intp], Array, Array]
"""Members (p,), heights (p,) and frames (p, 3, 3)."""


def extremes(S: Array, zero: float) -> Array:
    """Return nu_min, its angle, nu_max, its angle, E_min, .., E_max, .., G_min, G_max and the auxetic share, (11, c).

    Parameters
    ----------
    S : ndarray of shape (c, 6, 6)
        Mandel compliances.
    zero : float
        nu counts as negative where S nnmm exceeds this share of the largest of S nnnn.

    Returns
    -------
    ndarray of shape (11, c)
        Angles in degrees between n and axis 1, 0 to 90; the share of pairs (n, m) with nu < 0, exact in m.
    """
    _, weights = _grid()
    values = (S[:, *UPPER] @ weights.reshape(len(UPPER[0]), -1)).reshape(len(S), 7, -1).transpose(1, 0, 2)
    none = np.broadcast_to(0.0, values[0].shape)
    stretch, cross, shear = (values[0], none, none), tuple(values[1:4]), tuple(values[4:])

    E_max, E_max_deg, climbs = _seek(S, values[0], stretch, STRETCH, -1.0)
    E_min, E_min_deg, _ = _seek(S, values[0], stretch, STRETCH, 1.0)
    G_max, _, _ = _seek(S, values[0], shear, SHEAR, -1.0)
    G_min, _, _ = _seek(S, values[0], shear, SHEAR, 1.0)
    # where S nnnn all but vanishes nu may peak between the points of the grid: start there as well
    who, height, _ = climbs
    hollow = (-values[0].min(axis=1) < SHALLOW * E_max)[who] & (height > DEEP * E_max[who])
    nu_max, nu_max_deg, _ = _seek(S, values[0], cross, CROSS, -1.0, (who[hollow], climbs[2][hollow]))
    nu_min, nu_min_deg, _ = _seek(S, values[0], cross, CROSS, 1.0, (who[hollow], climbs[2][hollow]))

    mean, half, mixed = values[1:4, :, :-1]
    swing = np.sqrt(half**2 + mixed**2)
    above = mean - zero * values[0].max(axis=1)[:, None]
    cosine = np.clip(np.where(swing > 0.0, -above / swing, -np.sign(above)), -1.0, 1.0)
    share = np.arccos(cosine).mean(axis=1) / np.pi

    nu = (-nu_min, nu_min_deg, nu_max, nu_max_deg)
    return np.array([*nu, 1.0 / E_min, E_min_deg, -1.0 / E_max, E_max_deg, 0.25 / G_min, -0.25 / G_max, share])


def _seek(
    S: Array, stretch: Array, field: Sequence[Array], component: int, sign: float, extra: Starts | None = None
) -> tuple[Array, Array, Climbs]:
    """Largest sign x component of each member (for nu of sign x S nnmm/S nnnn), its angle in degrees, and all climbs.

    stretch (c, g) is S nnnn on the grid, field the mean, half difference and mixed part (c, g) of the component. The
    search starts from the grid and, if given, from n of the extra frames.
    """
    frames, _ = _grid()
    mean, half, mixed = field
    centre, swing = sign * mean, np.sqrt(half**2 + mixed**2)
    score = (centre + swing) / stretch if component == CROSS else centre + swing
    level = score.max(axis=1)
    everyone = np.arange(len(S))
    # axis 1 is always tried, so that it wins a tie
    reached = [(everyone, score[:, -1], np.broadcast_to(np.eye(3), S.shape[:1] + (3, 3)))]
    if extra is not None:
        who, R = extra
        height, R = _climb(S[who], _best_across(S[who], R, sign), component, sign)
        reached.append((who, height, R))
        np.maximum.at(level, who, height)

    tried = np.zeros(score.shape, bool)
    searched = everyone
    while searched.size:
        lift = level[searched, None] * stretch[searched] if component == CROSS else 0.0
        top, bottom = (centre + swing)[searched] - lift, (centre - swing)[searched] - lift
        row, point = _starts(top[:, :-1], bottom[:, :-1].min(axis=1))
        fresh = ~tried[searched[row], point]
        who, point = searched[row[fresh]], point[fresh]
        tried[who, point] = True
        turn = np.arctan2(sign * mixed[who, point], sign * half[who, point])
        height, R = _climb(S[who], _turned(frames[point], 0.5 * turn), component, sign)
        reached.append((who, height, R))
        before = level.copy()
        np.maximum.at(level, who, height)
        moved = level > before + ROUND_TOLERANCE * (1.0 + np.abs(before))
        searched = np.flatnonzero(moved) if component == CROSS else everyone[:0]

    who, height, R = (np.concatenate(x) for x in zip(*reached, strict=True))
    best, angle = np.full(len(S), -np.inf), np.full(len(S), np.inf)
    np.maximum.at(best, who, height)
    tie = height >= (best - TIE_TOLERANCE * (np.abs(best) + (component == CROSS)))[who]
    np.minimum.at(angle, who[tie], np.degrees(np.arccos(np.minimum(np.abs(R[tie, 0, 0]), 1.0))))
    return best, angle, (who, height, R)


def _turned(frames: Array, angle: Array) -> Array:
    """Frames (p, 3, 3) turned about their n by angles (p,) in radians."""
    n, m, k = frames.transpose(1, 0, 2)
    c, s = np.cos(angle)[:, None], np.sin(angle)[:, None]
    return np.stack([n, c * m + s * k, c * k - s * m], axis=1)


def _best_across(S: Array, frames: Array, sign: float) -> Array:
    """Frames (p, 3, 3) turned about their n until sign x S nnmm is largest."""
    n, m, k = frames.transpose(1, 0, 2)
    row = np.einsum("pij,pj->pi", S, _pair(n, n))
    mixed, half = (row * _pair(m, k)).sum(axis=1), 0.5 * (row * (_pair(m, m) - _pair(k, k))).sum(axis=1)
    return _turned(frames, 0.5 * np.arctan2(sign * mixed, sign * half))


def _starts(top: Array, bottom: Array) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Members and grid points to climb from: the best of each patch, where it may still lead to the best of all.

    top (c, g) is F with the best m, bottom (c,) the least of F with any m.
    """
    patches = top.reshape(len(top), PATCHES, PER_PATCH)
    point = patches.argmax(axis=-1)
    value = np.take_along_axis(patches, point[..., None], axis=-1)[..., 0]
    best = np.argpartition(-value, STARTS, axis=1)[:, :STARTS]
    value = np.take_along_axis(value, best, axis=1)
    peak = value.max(axis=1)
    row, column = np.nonzero(value >= (peak - START_MARGIN * (peak - bottom))[:, None])
    patch = best[row, column]
    return row, patch * PER_PATCH + point[row, patch]


def _climb(S: Array, frames: Array, component: int, sign: float) -> tuple[Array, Array]:
    """Newton's method from frames (p, 3, 3): the height reached (p,), as in `_seek`, and the frames there."""
    R = frames.copy()
    local = _local(S, R)
    radius = np.full(len(S), FIRST_RADIUS)
    live = np.arange(len(S))
    for _ in range(STEPS):
        F = sign * local[live, component]
        size = np.abs(F[:, 0])
        if component == CROSS:
            f = local[live, STRETCH]
            F = F - (F[:, :1] / f[:, :1]) * f
            size = f[:, 0] + size
        if component == STRETCH:  # a turn about n changes nothing
            F[:, 4], F[:, 8:] = -size, 0.0
        step, gain = _step(F, radius[live])
        trial = _cayley(step) @ R[live]
        there = _local(S[live], trial)
        risen = sign * there[:, component, 0]
        if component == CROSS:
            risen = risen - sign * local[live, component, 0] / f[:, 0] * there[:, STRETCH, 0]
        better = risen >= F[:, 0]
        R[live[better]], local[live[better]] = trial[better], there[better]
        radius[live[~better]] *= 0.25
        live = live[np.where(better, gain > GAIN_TOLERANCE * size, radius[live] > LAST_RADIUS)]
        if not live.size:
            break
    height = sign * local[:, component, 0]
    return (height / local[:, STRETCH, 0] if component == CROSS else height), R


def _step(F: Array, radius: Array) -> tuple[Array, Array]:
    """Turn (p, 3) that raises F (value, gradient, Hessian: (p, 10)) and the gain (p,) it promises.

    Newton's step where F is concave and the step stays within the radius. Elsewhere the same along each principal axis
    of the Hessian, but uphill also where F is convex, and cut off one by one: an axis about which F hardly changes must
    not shorten the step about the others.
    """
    g = F[:, 1:4]
    a, b, c, d, e, f = F[:, 4:].T
    be, ad, cf = d * f - b * e, e * f - a * d, d * e - c * f
    adjugate = np.array([[b * c - d * d, cf, be], [cf, a * c - e * e, ad], [be, ad, a * b - f * f]])
    det = a * adjugate[0, 0] + f * cf + e * be
    step = -np.einsum("ijp,pj->pi", adjugate, g) / np.where(det < 0.0, det, 1.0)[:, None]
    concave = (a < 0.0) & (adjugate[2, 2] > 0.0) & (det < 0.0)
    rest = np.flatnonzero(~concave | ((step * step).sum(axis=1) > radius * radius))
    if rest.size:
        curvature, axes = np.linalg.eigh(F[rest[:, None, None], np.array([[4, 9, 8], [9, 5, 7], [8, 7, 6]])])
        slope = np.einsum("pi,pij->pj", g[rest], axes)
        flat = np.finfo(float).eps * np.abs(curvature).max(axis=1, keepdims=True) + np.finfo(float).tiny
        along = np.clip(slope / (np.abs(curvature) + flat), -radius[rest, None], radius[rest, None])
        step[rest] = np.einsum("pij,pj->pi", axes, along)
    x, y, z = step.T
    bend = a * x * x + b * y * y + c * z * z + 2.0 * (d * y * z + e * x * z + f * x * y)
    return step, (g * step).sum(axis=1) + 0.5 * bend


def _cayley(turn: Array) -> Array:
    """Rotations (p, 3, 3) by small vectors (p, 3), right to second order: I + 2 ([c] + [c]^2)/(1 + c.c), c = turn/2."""
    cross = 0.5 * np.einsum("cij,pc->pij", _spin(), turn)
    return np.asarray(np.eye(3) + 2.0 * (cross + cross @ cross) / (1.0 + 0.25 * (turn**2).sum(axis=1))[:, None, None])


def _spin() -> Array:
    """Generators (3, 3, 3) of the rotations about the three axes."""
    spin = np.zeros((3, 3, 3))
    for c, i, j in ((0, 1, 2), (1, 2, 0), (2, 0, 1)):
        spin[c, j, i], spin[c, i, j] = 1.0, -1.0
    return spin


def _local(S: Array, R: Array) -> Array:
    """The three components with gradient and Hessian, (p, 3, 10), in frames R (p, 3, 3) with rows n, m, k.

    Hessians are in the order 11, 22, 33, 23, 13, 12 of the axes n, m, k about which the frame turns.
    """
    i, j = np.array(tensors.PAIRS[3]).T
    scale = np.where(i == j, 1.0, tensors.SQRT2)
    # Mandel rotation: Q_vw = (R_ik R_jl + R_il R_jk) scale_v scale_w / 2 with v = (i, j), w = (k, l)
    at_i, at_j = R[:, i], R[:, j]
    Q = (at_i[:, :, i] * at_j[:, :, j] + at_i[:, :, j] * at_j[:, :, i]) * (0.5 * scale[:, None] * scale)
    T = Q @ S @ Q.transpose(0, 2, 1)
    return (T[:, *UPPER] @ _derivatives()).reshape(len(S), 3, 10)


@cache
def _grid() -> tuple[Array, Array]:
    """Frames (g, 3, 3), rows n, m, k, and weights (21, 7, g) of S's upper components; the last frame is the axes.

    n are Fibonacci points on the half sphere, sorted into patches by halving along the longest side. The seven values
    at n: S nnnn; mean, half difference and mixed part of S nnmm over m and k; the same of S nmnm.
    """
    count = PATCHES * PER_PATCH
    i = np.arange(count)
    z, turn = (i + 0.5) / count, i * np.pi * (3.0 - np.sqrt(5.0))
    radius = np.sqrt(1.0 - z * z)
    patches = [np.stack([radius * np.cos(turn), radius * np.sin(turn), z], axis=-1)]
    while len(patches) < PATCHES:
        ordered = [p[np.argsort(p[:, np.ptp(p, axis=0).argmax()])] for p in patches]
        patches = [half for p in ordered for half in np.split(p, 2)]
    n = np.concatenate([*patches, [[1.0, 0.0, 0.0]]])
    m = np.cross(n, np.eye(3)[np.abs(n).argmin(axis=1)])
    m /= np.linalg.norm(m, axis=1)[:, None]
    k = np.cross(n, m)
    nn, mm, kk, mk, nm, nk = (_pair(*two) for two in ((n, n), (m, m), (k, k), (m, k), (n, m), (n, k)))
    forms = [_form(nn, nn), _form(nn, mm + kk) / 2, _form(nn, mm - kk) / 2, _form(nn, mk)]
    forms += [(_form(nm, nm) + _form(nk, nk)) / 2, (_form(nm, nm) - _form(nk, nk)) / 2, _form(nm, nk)]
    return np.stack([n, m, k], axis=1), np.ascontiguousarray(np.array(forms).transpose(2, 0, 1))


def _pair(a: Array, b: Array) -> Array:
    """Mandel vectors of the symmetric part of a b."""
    return tensors.vector(0.5 * (a[:, :, None] * b[:, None, :] + b[:, :, None] * a[:, None, :]))


def _form(left: Array, right: Array) -> Array:
    """Weights (g, 21) of S's upper components in left.S.right."""
    both = left[:, :, None] * right[:, None, :] + right[:, :, None] * left[:, None, :]
    return np.asarray(both[:, *UPPER] * np.where(UPPER[0] == UPPER[1], 0.5, 1.0))


@cache
def _derivatives() -> Array:
    """Weights (21, 30) of S's upper components in the three components, their gradients and their Hessians.

    A body that turns by a small w changes S in a fixed frame by [w.L, S] + [w.L, [w.L, S]]/2, L the generators of the
    Mandel rotations.
    """
    b = tensors.basis(3)
    L = 2.0 * np.einsum("vij,cik,wkj->cvw", b, _spin(), b)
    rows = []
    for i, j in zip(*UPPER, strict=True):
        S = np.zeros((6, 6))
        S[i, j] = S[j, i] = 1.0
        first = [g @ S - S @ g for g in L]
        again = [[g @ T - T @ g for T in first] for g in L]
        second = [0.5 * (again[c][d] + again[d][c]) for c, d in tensors.PAIRS[3]]
        rows.append([[T[0, 0], T[0, 1], 0.5 * T[5, 5]] for T in (S, *first, *second)])
    return np.ascontiguousarray(np.array(rows).transpose(0, 2, 1).reshape(len(rows), 30))
