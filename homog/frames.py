"""Extremes of a spatial compliance over frames (n, m): the kernel behind `directional.space_extremes`.

In a frame n, m, k three components of S say everything: S nnnn = 1/E, S nnmm = -nu/E and S nmnm = 1/(4 G). On a grid of
directions n the best m is an eigenvector of a 2 x 2 form; from every grid point that may still lead to the extreme
Newton's method turns the whole frame. For nu it seeks the maximum of F = -S nnmm - nu S nnnn with the nu reached so
far: both are stationary together (Dinkelbach 1967), and F is as smooth as S, however sharp the peak of nu. Arrays only;
S must be finite and positive definite.
"""

from __future__ import annotations

from functools import cache

import numpy as np
from numpy.typing import NDArray

from homog import tensors
from homog.tensors import Array

STRETCH, CROSS, SHEAR = range(3)
"""The components S nnnn, S nnmm and S nmnm."""
GOALS = {
    "nu_min": (CROSS, 1.0),
    "nu_max": (CROSS, -1.0),
    "E_min": (STRETCH, 1.0),
    "E_max": (STRETCH, -1.0),
    "G_min": (SHEAR, 1.0),
    "G_max": (SHEAR, -1.0),
}
"""What is sought: the component, and the sign with which it is as large as possible."""

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
GAIN_TOLERANCE = 1e-10
"""A climb ends with the step that promises less than this (relative); what it still misses is far less."""
ROUND_TOLERANCE = 1e-9
"""The grid is searched again with the nu that was found until nu moves by less than this (relative to 1 + |nu|)."""
TIE_TOLERANCE = 1e-10
"""Extremes this close (relative for E and G, relative to 1 + |nu| for nu) are a tie: the smallest angle is reported."""

UPPER = np.triu_indices(6)


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
    stretch, fields = values[0], (values[:1], values[1:4], values[4:])
    found = {name: _seek(S, stretch, fields[field], field, sign) for name, (field, sign) in GOALS.items()}

    mean, half, mixed = values[1:4, :, :-1]
    swing = np.sqrt(half**2 + mixed**2)
    above = mean - zero * stretch.max(axis=1)[:, None]
    share = np.arccos(np.clip(np.where(swing > 0.0, -above / swing, -np.sign(above)), -1.0, 1.0)).mean(axis=1) / np.pi

    (nu_min, nu_min_deg), (nu_max, nu_max_deg) = found["nu_min"], found["nu_max"]
    (soft, E_min_deg), (stiff, E_max_deg) = found["E_min"], found["E_max"]
    G_min, G_max = 0.25 / found["G_min"][0], -0.25 / found["G_max"][0]
    return np.array(
        [-nu_min, nu_min_deg, nu_max, nu_max_deg, 1.0 / soft, E_min_deg, -1.0 / stiff, E_max_deg, G_min, G_max, share]
    )


def _seek(S: Array, stretch: Array, field: Array, component: int, sign: float) -> tuple[Array, Array]:
    """Largest sign x component (for nu of sign x S nnmm/S nnnn) of each member and its angle in degrees, (c,) each.

    stretch (c, g) is S nnnn on the grid, field (1 or 3, c, g) the component: mean, half difference and mixed part.
    """
    frames, _ = _grid()
    centre = sign * field[0]
    swing = np.sqrt(field[1] ** 2 + field[2] ** 2) if len(field) == 3 else np.zeros((1, 1))
    score = (centre + swing) / stretch if component == CROSS else centre + swing
    everyone = np.arange(len(S))
    reached = [(everyone, score[:, -1], np.zeros(len(S)))]  # axis 1 is always tried, so that it wins a tie

    level = score.max(axis=1)
    tried = np.zeros(score.shape, bool)
    searched = everyone
    while searched.size:
        top, bottom = centre[searched] + swing[searched % len(swing)], centre[searched] - swing[searched % len(swing)]
        if component == CROSS:
            lift = level[searched, None] * stretch[searched]
            top, bottom = top - lift, bottom - lift
        row, point = _starts(top[:, :-1], bottom[:, :-1].min(axis=1))
        who = searched[row]
        fresh = ~tried[who, point]
        who, point = who[fresh], point[fresh]
        if not who.size:
            break
        tried[who, point] = True
        n, m, k = frames[point].transpose(1, 0, 2)
        if len(field) == 3:
            turn = 0.5 * np.arctan2(sign * field[2, who, point], sign * field[1, who, point])[:, None]
            m, k = np.cos(turn) * m + np.sin(turn) * k, np.cos(turn) * k - np.sin(turn) * m
        height, cosine = _climb(S[who], np.stack([n, m, k], axis=1), component, sign)
        reached.append((who, height, np.degrees(np.arccos(np.minimum(np.abs(cosine), 1.0)))))
        if component != CROSS:
            break
        before = level.copy()
        np.maximum.at(level, who, height)
        searched = np.flatnonzero(level > before + ROUND_TOLERANCE * (1.0 + np.abs(before)))

    who, height, degrees = (np.concatenate(x) for x in zip(*reached, strict=True))
    best, angle = np.full(len(S), -np.inf), np.full(len(S), np.inf)
    np.maximum.at(best, who, height)
    tie = height >= (best - TIE_TOLERANCE * (np.abs(best) + (component == CROSS)))[who]
    np.minimum.at(angle, who[tie], degrees[tie])
    return best, angle


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
    """Newton's method from frames (p, 3, 3): the height reached (as in `_seek`) and n's component along axis 1."""
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
    return (height / local[:, STRETCH, 0] if component == CROSS else height), R[:, 0, 0]


def _step(F: Array, radius: Array) -> tuple[Array, Array]:
    """Turn (p, 3) that raises F (value, gradient, Hessian: (p, 10)) and the gain (p,) it promises.

    Newton's step along each principal axis of the Hessian, uphill also where F is convex, and no longer than the radius:
    an axis about which F hardly changes must not shorten the step about the others.
    """
    H = F[:, np.array([[4, 9, 8], [9, 5, 7], [8, 7, 6]])]
    curvature, axes = np.linalg.eigh(H)
    slope = np.einsum("pi,pij->pj", F[:, 1:4], axes)
    flat = np.finfo(float).eps * np.abs(curvature).max(axis=1, keepdims=True) + np.finfo(float).tiny
    step = np.clip(slope / (np.abs(curvature) + flat), -radius[:, None], radius[:, None])
    gain = (slope * step + 0.5 * curvature * step**2).sum(axis=1)
    return np.einsum("pij,pj->pi", axes, step), gain


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
