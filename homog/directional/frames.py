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
from typing import NamedTuple

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
"""What is sought makes sign x component as large as possible, for nu sign x S nnmm/S nnnn."""
COMPONENT, SIGN = (np.array(x) for x in zip(*GOALS.values(), strict=True))

POINTS = 1024
"""Directions n of the grid over the half sphere."""
COVER = 0.064
"""A point of the grid lies within this angle of every direction, rad."""
NEIGHBOURS = 6
"""A grid point no lower than so many nearest ones is a summit; what is climbed from."""
STARTS = 12
"""At most so many summits, the highest ones, are climbed from."""
START_MARGIN = 0.02
"""Share of F's range within which a summit may lead to the maximum. Along a turn F is a trigonometric polynomial of
degree 4, so that it bends by at most 4^2/2 of its range (Bernstein) and loses at most 4 x 0.064^2 = 0.0164 of it over
COVER."""
FIRST_RADIUS, LAST_RADIUS = 0.15, 1e-7
"""Longest turn of one step in radians, and the one at which a climb gives up."""
ROUND_OFF = 1e-12
"""Curvature below this share of the largest is none."""
ESCAPE = 0.03
"""Share of the longest step that is taken at least where F is convex, so that no climb ends on a saddle."""
STEPS = 40
GAIN_TOLERANCE = 1e-8
"""A climb ends with the step that promises less than this (relative); what it still misses is far less."""
ROUND_TOLERANCE = 1e-9
"""The grid is searched again with the nu that was found until nu moves by less than this (relative to 1 + |nu|)."""
TIE_TOLERANCE = 1e-10
"""Extremes this close (relative for E and G, relative to 1 + |nu| for nu) are a tie: the smallest angle is reported."""

MIRROR_TOLERANCE = 1e-12
"""Components below this share of the largest do not break the mirror planes 1-2, 2-3, 1-3."""

UPPER = np.triu_indices(6)
SKEW = tuple(np.array([(i, j) for i, j in zip(*UPPER, strict=True) if j > 2 and i != j]).T)
"""Components of S that are zero if the three planes are mirrors."""
Index = NDArray[np.intp]


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
    stretch, *values = _on_grid(S, slice(None))
    mean, half, mixed, g_mean, g_half, g_mixed = values
    none = np.broadcast_to(0.0, stretch.shape)
    fields = (
        _Field(stretch, none, none, none),
        _Field(mean, half, mixed, np.sqrt(half**2 + mixed**2)),
        _Field(g_mean, g_half, g_mixed, np.sqrt(g_half**2 + g_mixed**2)),
    )
    best, angle = _seek(S, stretch, fields)

    share = _share(stretch, mean, fields[CROSS].swing, zero)
    nu_min, nu_max, soft, stiff, g_soft, g_stiff = best * [[-1.0], [1.0], [1.0], [-1.0], [1.0], [-1.0]]
    nu = (nu_min, angle[0], nu_max, angle[1])
    return np.array([*nu, 1.0 / soft, angle[2], 1.0 / stiff, angle[3], 0.25 / g_soft, 0.25 / g_stiff, share])


def auxetic_share(S: Array, zero: float) -> Array:
    """Return the share of pairs (n, m) with nu < 0 alone, (c,), the last row of `extremes`."""
    stretch, mean, half, mixed = _on_grid(S, slice(0, 4))
    return _share(stretch, mean, np.sqrt(half**2 + mixed**2), zero)


def _on_grid(S: Array, which: slice) -> Array:
    """Return the values (k, c, g) at the grid's directions of the components that `_grid` names."""
    weights = _grid()[1][:, which]
    found = S[:, *UPPER] @ weights.reshape(len(UPPER[0]), -1)
    return np.asarray(found.reshape(len(S), weights.shape[1], -1).transpose(1, 0, 2))


def _share(stretch: Array, mean: Array, swing: Array, zero: float) -> Array:
    above = (mean - zero * stretch.max(axis=1)[:, None])[:, :-1]
    swing = swing[:, :-1]
    share = np.where(above > 0.0, 1.0, np.where(above < 0.0, 0.0, 0.5))
    cut = np.abs(above) < swing  # elsewhere the sign is the same for every m
    share[cut] = np.arccos(-above[cut] / swing[cut]) / np.pi
    return np.asarray(share.mean(axis=1))


class _Field(NamedTuple):
    """A component on the grid, (c, g) each: mean over m, half difference, mixed part; swing about the mean."""

    mean: Array
    half: Array
    mixed: Array
    swing: Array


def _seek(S: Array, stretch: Array, fields: Sequence[_Field]) -> tuple[Array, Array]:
    """What is reached of each goal by each member, and the angle between n and axis 1 in degrees, (6, c) each."""
    frames, _ = _grid()
    # an orthotropic tensor looks the same in all octants, and so does axis 1
    skew = np.abs(S[:, *SKEW]).max(axis=1) > MIRROR_TOLERANCE * np.abs(S).max(axis=(1, 2))
    shut = ~skew[:, None] & (frames[:-1, 0] < -COVER).any(axis=1)

    everyone, level = np.arange(len(S)), np.empty((len(GOALS), len(S)))
    reached: list[tuple[Index, Index, Array, Array]] = []
    for aim, (component, sign) in enumerate(GOALS.values()):
        score = sign * fields[component].mean + fields[component].swing
        score = score / stretch if component == CROSS else score
        level[aim] = score.max(axis=1)
        # axis 1 is always tried, so that it wins a tie
        reached.append((np.full(len(S), aim), everyone, score[:, -1], np.ones(len(S))))

    crown = np.empty((*level.shape, 3, 3))  # the best frame so far
    tried = np.zeros((len(GOALS), 2, *shut.shape), bool)
    searched, again = np.ones(level.shape, bool), False
    while searched.any():
        begun: list[tuple[Index, Index, Array]] = []
        for aim, (component, sign) in enumerate(GOALS.values()):
            members = np.flatnonzero(searched[aim])
            pick = slice(None) if searched[aim].all() else members
            mean, half, mixed, swing = fields[component]
            centre = sign * mean[pick, :-1]
            if component == CROSS:
                centre = centre - level[aim, pick, None] * stretch[pick, :-1]
            top, bottom = centre + swing[pick, :-1], centre - swing[pick, :-1]
            row, point, quarter = _starts(np.where(shut[pick], -np.inf, top), bottom)
            fresh = ~tried[aim, quarter, members[row], point]
            who, point, quarter = members[row[fresh]], point[fresh], quarter[fresh]
            tried[aim, quarter, who, point] = True
            turn = 0.5 * (np.arctan2(sign * mixed[who, point], sign * half[who, point]) + np.pi * quarter)
            begun.append((np.full(who.size, aim), who, _turned(frames[point], turn)))
            if again:  # where one m did best the other may do better yet, although it did not on the grid
                other = _turned(crown[aim, members], np.full(members.size, 0.5 * np.pi))
                begun.append((np.full(members.size, aim), members, other))
        goal, who, R = (np.concatenate(x) for x in zip(*begun, strict=True))
        height, R = _climb(S[who], R, COMPONENT[goal], SIGN[goal])
        reached.append((goal, who, height, R[:, 0, 0]))

        rising = np.argsort(height)
        goal, who, height, R = goal[rising], who[rising], height[rising], R[rising]
        higher = height >= level[goal, who]
        crown[goal[higher], who[higher]] = R[higher]
        before = level.copy()
        np.maximum.at(level, (goal, who), height)
        moved = level > before + ROUND_TOLERANCE * (1.0 + np.abs(before))
        searched, again = moved & (COMPONENT == CROSS)[:, None], True

    goal, who, height, along = (np.concatenate(x) for x in zip(*reached, strict=True))
    best, angle = np.full(level.shape, -np.inf), np.full(level.shape, np.inf)
    np.maximum.at(best, (goal, who), height)
    tie = height >= (best - TIE_TOLERANCE * (np.abs(best) + (COMPONENT == CROSS)[:, None]))[goal, who]
    np.minimum.at(angle, (goal[tie], who[tie]), np.degrees(np.arccos(np.minimum(np.abs(along[tie]), 1.0))))
    return best, angle


def _turned(frames: Array, angle: Array) -> Array:
    """Frames (p, 3, 3) turned about their n by angles (p,) in radians."""
    n, m, k = frames.transpose(1, 0, 2)
    c, s = np.cos(angle)[:, None], np.sin(angle)[:, None]
    return np.stack([n, c * m + s * k, c * k - s * m], axis=1)


def _starts(top: Array, bottom: Array) -> tuple[Index, Index, Index]:
    """Where to climb from: members, grid points, and 0 or 1 for the best m or the one a quarter turn from it.

    top and bottom (c, g) are F with the best and with the worst m. Wanted are the summits of the grid, with either m,
    that may still lead to the maximum.
    """
    peak = top.max(axis=1)
    enough = peak - START_MARGIN * (peak - bottom.min(axis=1))
    row, point = np.nonzero(top >= enough[:, None])
    height = top[row, point]
    summit = (height[:, None] >= top[row[:, None], _neighbours()[point]]).all(axis=1)
    order = np.flatnonzero(summit)[np.lexsort((-height[summit], row[summit]))]
    row, point = row[order], point[order]
    highest = np.arange(row.size) - np.searchsorted(row, row) < STARTS
    row, point = row[highest], point[highest]
    low = bottom[row, point]
    either = (low >= enough[row]) & (low < top[row, point])
    quarter = np.repeat([0, 1], [row.size, int(either.sum())])
    return np.concatenate([row, row[either]]), np.concatenate([point, point[either]]), quarter


def _climb(S: Array, frames: Array, component: Index, sign: Array) -> tuple[Array, Array]:
    """Newton's method from frames (p, 3, 3) towards goals (p,): the height reached (p,) and the frames there."""
    R, every = frames.copy(), np.arange(len(S))
    local = _local(S, R)
    radius = np.full(len(S), FIRST_RADIUS)
    live = every
    for _ in range(STEPS):
        c, ratio = component[live], component[live] == CROSS
        here, f = sign[live, None] * local[live, c], local[live, STRETCH]
        nu = np.where(ratio, here[:, 0] / f[:, 0], 0.0)
        F = here - nu[:, None] * f
        size = np.abs(here[:, 0]) + np.where(ratio, f[:, 0], 0.0)
        round_ = c == STRETCH  # a turn about n changes nothing
        F[round_, 4], F[np.ix_(round_, [8, 9])] = -size[round_], 0.0
        step, gain = _step(F, radius[live])
        trial = _cayley(step) @ R[live]
        there = _local(S[live], trial)
        better = sign[live] * there[every[: live.size], c, 0] - nu * there[:, STRETCH, 0] >= F[:, 0]
        R[live[better]], local[live[better]] = trial[better], there[better]
        radius[live[~better]] *= 0.25
        live = live[np.where(better, gain > GAIN_TOLERANCE * size, radius[live] > LAST_RADIUS)]
        if not live.size:
            break
    height = sign * local[every, component, 0]
    return np.where(component == CROSS, height / local[:, STRETCH, 0], height), R


def _step(F: Array, radius: Array) -> tuple[Array, Array]:
    """Turn (p, 3) that raises F (value, gradient, Hessian: (p, 10)) and the gain (p,) it promises.

    Newton's step where F is concave and the step stays within the radius. Elsewhere the same about each principal axis
    of the Hessian, cut off one by one, since an axis about which F hardly changes must not shorten the step about the
    others; where F is convex, uphill and at least by ESCAPE.
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
        slope, longest = np.einsum("pi,pij->pj", g[rest], axes), radius[rest, None]
        bend = np.abs(curvature)
        flat = ROUND_OFF * bend.max(axis=1, keepdims=True) + np.finfo(float).tiny
        along = np.minimum(np.abs(slope) / (bend + flat), longest)
        along = np.copysign(np.where(curvature > flat, np.maximum(along, ESCAPE * longest), along), slope)
        step[rest] = np.einsum("pij,pj->pi", axes, along)
    x, y, z = step.T
    second = a * x * x + b * y * y + c * z * z + 2.0 * (d * y * z + e * x * z + f * x * y)
    return step, (g * step).sum(axis=1) + 0.5 * second


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

    n are Fibonacci points on the half sphere. The seven values at n: S nnnn; mean, half difference and mixed part of
    S nnmm over m and k; the same of S nmnm.
    """
    i = np.arange(POINTS)
    z, turn = (i + 0.5) / POINTS, i * np.pi * (3.0 - np.sqrt(5.0))
    radius = np.sqrt(1.0 - z * z)
    n = np.concatenate([np.stack([radius * np.cos(turn), radius * np.sin(turn), z], axis=-1), [[1.0, 0.0, 0.0]]])
    m = np.cross(n, np.eye(3)[np.abs(n).argmin(axis=1)])
    m /= np.linalg.norm(m, axis=1)[:, None]
    k = np.cross(n, m)
    nn, mm, kk, mk, nm, nk = (pair(*two) for two in ((n, n), (m, m), (k, k), (m, k), (n, m), (n, k)))
    forms = [_form(nn, nn), _form(nn, mm + kk) / 2, _form(nn, mm - kk) / 2, _form(nn, mk)]
    forms += [(_form(nm, nm) + _form(nk, nk)) / 2, (_form(nm, nm) - _form(nk, nk)) / 2, _form(nm, nk)]
    return np.stack([n, m, k], axis=1), np.ascontiguousarray(np.array(forms).transpose(2, 0, 1))


def pair(a: Array, b: Array) -> Array:
    """Return the Mandel vectors (..., v) of the symmetric part of a b, from vectors (..., d)."""
    return tensors.vector(0.5 * (a[..., :, None] * b[..., None, :] + b[..., :, None] * a[..., None, :]))


@cache
def _neighbours() -> Index:
    """Nearest grid points (g, NEIGHBOURS) of each grid point, n and -n being the same direction."""
    n = _grid()[0][:-1, 0]
    near = np.abs(n @ n.T)
    np.fill_diagonal(near, 0.0)
    return np.argpartition(-near, NEIGHBOURS, axis=1)[:, :NEIGHBOURS]


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
