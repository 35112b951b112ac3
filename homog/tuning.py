"""Inverse design: the geometries of one family that have the properties asked for.

Every target is a range of an output quantity (a value is a range of no width). From many starts, all in one batch, a
Levenberg-Marquardt search with exact derivatives (`sensitivity`) brings down the sum of squared misses, each relative
to its target, moduli and lengths by their logarithm. Parameters are searched as logarithms of lengths and as angles,
and stay within their bounds by projection; what a family's rules call impossible is a wall that no step goes through.
What meets everything is sorted out by shape, so that geometries that are listed really differ, and ranked.

Many targets have a whole curve or surface of answers: the list is then a sample of it, not its optimum.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from homog.brief import Limit
from homog.cell import Status
from homog.columns import evaluate
from homog.effective import DEFAULT_MODEL, homogenize
from homog.errors import InputError
from homog.materials import UNIT, Material, Process
from homog.problem import Array, Asked, Problem, meets, posed, words
from homog.reasons import reason_level, reason_text
from homog.sensitivity import column_rates

if TYPE_CHECKING:
    import pandas as pd


INSIDE = 1e-4
"""A range is aimed at this share of its scale inside its ends, so that what is found keeps the range itself."""
DISTINCT = 0.05
"""Shapes differ if some ratio of lengths differs by this share, or some angle by as many radians (3 degrees)."""
STEPS, LONGEST = 60, 0.5
"""Most steps of a search; its longest step, in radians or as a logarithm of a length."""
SETTLED, LEAST_GAIN, STUCK = 1e-18, 1e-6, 1e8
"""A search ends with this sum of squared misses, a step that brings it down by less (relative), or this damping."""
PROBE = 0.02
"""A rule that stands so near on a search's way, in radians or as a logarithm of a length, is what stopped it."""
MOST_STARTS = 4096
DRAWS = 64
"""So many random geometries are tried for each start before a range counts as empty."""
Progress = Callable[[int, int], None]


@dataclass(frozen=True, eq=False)
class Tuning:
    """What came of it: distinct geometries that meet everything, best first, or the nearest and what is in its way.

    `found` and `nearest` have one row a geometry and every output quantity; `in_the_way` says in words which limits,
    bounds and rules hold the nearest one back, and is empty if something was found. `met` of `starts` searches ended
    with everything met, before equal shapes were put together.
    """

    problem: Problem
    found: pd.DataFrame
    nearest: pd.DataFrame
    in_the_way: tuple[str, ...]
    starts: int
    met: int


def tune(
    family_id: str,
    targets: Mapping[str, Asked],
    *,
    limits: Mapping[str, Asked] | None = None,
    fix: Mapping[str, Any] | None = None,
    within: Mapping[str, tuple[float, float]] | None = None,
    free: Sequence[str] = (),
    material: Material | str = UNIT,
    model: str = DEFAULT_MODEL,
    process: Process | str | None = None,
    rank: Mapping[str, str] | None = None,
    starts: int = 64,
    keep: int = 12,
    seed: int = 0,
    progress: Progress | None = None,
) -> Tuning:
    """Return geometries of a family whose output quantities are what is asked for.

    Parameters
    ----------
    family_id : str
    targets, limits : mapping of column to a value, or to (low, high) with None for no limit; both are kept alike
    fix : mapping of parameter to value; it stays there
    within : mapping of parameter to (low, high), instead of its whole range
    free : names of parameters that follow another by default (`vertical_thickness`) and shall vary by themselves
    material, model : as in `homog.build` and `homog.homogenize`; not the model `solid`
    process : Process or str; thinnest wall, largest cell, and the tolerance for the tolerance columns
    rank : mapping of column to `min` or `max`, the smallest density if not given
    starts, seed : number of random starts (Sobol points) and their seed
    keep : most geometries to return
    progress : called with (steps done, searches still running)

    Raises
    ------
    InputError
        Unknown or contradictory targets, limits or parameters; nothing to vary; no cell that exists in the ranges.

    Examples
    --------
    >>> found = tune("square-grid", {"E1_MPa": 0.04}, fix={"length": 10.0}, model="euler", starts=4)
    >>> found.found["thickness_mm"].round(6).tolist()  # E1 = E t/l
    [0.4]
    """
    problem = posed(
        family_id, targets, limits=limits or {}, fix=fix or {}, within=within or {}, free=free, material=material,
        model=model, process=process, rank=rank or {"density_kg_m3": "min"},
    )  # fmt: skip
    for name, value, most in (("starts", starts, MOST_STARTS), ("keep", keep, MOST_STARTS)):
        if not 1 <= value <= most:
            raise InputError(f"{name} = {value}; allowed: a whole number from 1 to {most}")
    x = first_points(problem, starts, seed)
    x, onward = search(problem, x, progress or (lambda step, running: None))
    return _sorted_out(problem, x, onward, keep)


def first_points(problem: Problem, starts: int, seed: int) -> Array:
    """Return coordinates (variable, starts) of random cells that exist, spread by Sobol points."""
    from scipy.stats import qmc

    sobol = qmc.Sobol(len(problem.variables), scramble=True, rng=np.random.default_rng(seed))
    low = np.array([v.coordinate(v.first[0]) for v in problem.variables])[:, None]
    high = np.array([v.coordinate(v.first[1]) for v in problem.variables])[:, None]
    size = 2 ** math.ceil(math.log2(max(4 * starts, 16)))
    x = np.empty((len(low), 0))
    for _ in range(max(1, DRAWS * starts // size)):
        new = low + (high - low) * sobol.random(size).T
        x = np.concatenate([x, new[:, problem.exists(new)]], axis=1)
        if x.shape[1] >= starts:
            break
    if not x.shape[1]:
        why = Counter(problem.rule(new)).most_common(1)[0][0]
        raise InputError(
            f"No cell of '{problem.family.id}' exists in these ranges (most break '{why}'); widen them, or ask less of "
            "the process"
        )
    return x[:, :starts]


@dataclass(frozen=True, eq=False)
class Misses:
    """How residuals come from columns: logarithms where all is positive, shares of the target's scale elsewhere."""

    limits: tuple[Limit, ...]
    logs: tuple[bool, ...]

    def of(self, y: Array, slopes: Array) -> tuple[Array, Array, Array]:
        """Return residuals (limit, b), zero within a range, their slopes (limit, variable, b) and sum of squares (b,).

        `y` are the columns and `slopes` theirs; the sum is infinite where something is not finite.
        """
        r, J = np.empty_like(y), np.empty_like(slopes)
        with np.errstate(all="ignore"):
            for i, (limit, log) in enumerate(zip(self.limits, self.logs, strict=True)):
                margin = min(INSIDE * limit.scale, 0.25 * (limit.high - limit.low))
                low, high = limit.low + margin, limit.high - margin
                if log:
                    g, by, low, high = np.log(y[i]), y[i], np.log(low) if low > 0.0 else -np.inf, np.log(high)
                else:
                    g, by, low, high = (x / limit.scale for x in (y[i], limit.scale**2 + 0.0 * y[i], low, high))
                r[i] = g - np.clip(g, low, high)
                J[i] = np.where(r[i] != 0.0, slopes[i] / by, 0.0)
            sound = np.isfinite(r).all(axis=0) & np.isfinite(J).all(axis=(0, 1))
            return r, J, np.where(sound, (r**2).sum(axis=0), np.inf)


def _solved(problem: Problem, x: Array) -> tuple[Array, Array]:
    """Return limited columns (limit, b) and their slopes (limit, variable, b), NaN where there is no cell."""
    names = [limit.column for limit in problem.limits]
    cell = problem.family.build(problem.given(x), problem.material)
    there = np.asarray(cell.status == Status.OK)
    y, slopes = np.full((len(names), x.shape[1]), np.nan), np.full((len(names), *x.shape), np.nan)
    if there.any():
        effective = homogenize(cell.at(np.flatnonzero(there)), model=problem.model)
        row = evaluate(effective, names)
        rates = column_rates(effective, names, moves=[v.move for v in problem.variables])
        y[:, there] = [np.asarray(row[name], float) for name in names]
        along = np.array([v.slope(one) for v, one in zip(problem.variables, x[:, there], strict=True)])
        slopes[:, :, there] = np.array([rates[name] for name in names]) * along
    return y, slopes


def search(problem: Problem, x: Array, progress: Progress) -> tuple[Array, Array]:
    """Return where searches from coordinates (variable, b) end, and the direction in which each would go on."""
    low, high = problem.box
    x = np.clip(x, low, high)
    members = x.shape[1]
    y, slopes = _solved(problem, x)
    misses = Misses(problem.limits, tuple(
        all(end > 0.0 for end in (limit.low, limit.high) if math.isfinite(end)) and not (values <= 0.0).any()
        for limit, values in zip(problem.limits, y, strict=True)
    ))  # fmt: skip
    r, J, cost = misses.of(y, slopes)
    damping = np.full(members, 1e-3)
    running = np.isfinite(cost) & (cost > SETTLED)
    for step in range(STEPS):
        progress(step, int(running.sum()))
        live = np.flatnonzero(running)
        if not len(live):
            break
        trial = _step(x[:, live], r[:, live], J[:, :, live], damping[live], low, high)
        y, slopes = _solved(problem, trial)
        r_new, J_new, cost_new = misses.of(y, slopes)
        better = cost_new < cost[live]
        won, lost = live[better], live[~better]
        gain = (cost[won] - cost_new[better]) / cost[won]
        x[:, won], r[:, won], J[:, :, won], cost[won] = (a[..., better] for a in (trial, r_new, J_new, cost_new))
        damping[won] = np.maximum(damping[won] / 5.0, 1e-12)
        damping[lost] *= 8.0
        running[won] = (cost[won] > SETTLED) & (gain > LEAST_GAIN)
        running[lost] = damping[lost] < STUCK
    return x, -np.einsum("knb,kb->nb", J, r)


def _step(x: Array, r: Array, J: Array, damping: Array, low: Array, high: Array) -> Array:
    """Return the next trial coordinates (variable, b); a bound that the descent presses against holds its variable."""
    gradient = np.einsum("knb,kb->nb", J, r)
    held = ((x <= low) & (gradient > 0.0)) | ((x >= high) & (gradient < 0.0))
    J = np.where(held, 0.0, J)
    A = np.einsum("kib,kjb->bij", J, J)
    size = np.maximum(np.trace(A, axis1=1, axis2=2), 1e-300)
    A += (damping * size)[:, None, None] * np.eye(len(x))
    step = -np.linalg.solve(A, np.where(held, 0.0, gradient).T[..., None])[..., 0].T
    step *= np.minimum(1.0, LONGEST / np.maximum(np.abs(step).max(axis=0), 1e-300))
    return np.clip(x + step, low, high)


def _sorted_out(problem: Problem, x: Array, onward: Array, keep: int) -> Tuning:
    """Evaluate where the searches ended, put equal shapes together and rank; or say what is in the way."""
    import pandas as pd

    effective = problem.effective(x)
    table = pd.DataFrame(evaluate(effective, tolerance=problem.process.wall_tolerance_mm))
    kept = np.array([meets(limit, table[limit.column].to_numpy(float)) for limit in problem.limits])
    good = kept.all(axis=0) & (table["verdict"] != "reject").to_numpy()
    keys = [table[g.column].to_numpy(float) * (1.0 if g.better == "min" else -1.0) for g in problem.goals]
    order = np.lexsort(keys[::-1])
    chosen = distinct(problem, x, order[good[order]], keep)
    found = table.iloc[chosen].reset_index(drop=True)
    found.insert(0, "rank", np.arange(1, len(found) + 1))
    total = np.zeros(x.shape[1])
    for limit in problem.limits:
        total += limit.miss(table[limit.column].to_numpy(float)) / limit.scale
    total = np.where((effective.status == Status.OK) & np.isfinite(total), total, np.inf)
    best = int(np.argmin(np.where(good, np.inf, total + 1e-6 * (table["verdict"] == "reject").to_numpy())))
    nearest = table.iloc[[] if len(chosen) else [best]].reset_index(drop=True)
    hindrances = () if len(chosen) else _in_the_way(problem, x[:, [best]], onward[:, [best]], nearest)
    return Tuning(problem, found, nearest, hindrances, x.shape[1], int(good.sum()))


def shapes(problem: Problem, x: Array) -> Array:
    """Return what tells shapes apart (variable, b): angles, and logarithms of lengths less the mean of all lengths'."""
    values = problem.family.values(problem.given(x))
    mean = np.mean([np.log(values[p.name]) for p in problem.family.parameters if p.unit == "mm"], axis=0)
    return np.array([row - (0.0 if v.unit == "deg" else mean) for v, row in zip(problem.variables, x, strict=True)])


def distinct(problem: Problem, x: Array, order: NDArray[np.int64], keep: int) -> list[int]:
    """Return, in order, at most `keep` members whose shapes differ by DISTINCT from every one before."""
    z = shapes(problem, x)
    chosen: list[int] = []
    for i in order:
        if all(np.abs(z[:, i] - z[:, j]).max() > DISTINCT for j in chosen):
            chosen.append(int(i))
            if len(chosen) == keep:
                break
    return chosen


def _in_the_way(problem: Problem, x: Array, onward: Array, nearest: pd.DataFrame) -> tuple[str, ...]:
    """Return in words what holds the nearest geometry back: misses, ends of limits and ranges, a rule, a rejection."""
    found = []
    for limit in problem.limits:
        value = float(nearest[limit.column].iloc[0])
        if not meets(limit, np.array(value)):
            found.append(f"{words(limit)} ({limit.origin}): missed, it is {value:.4g}")
        elif limit.low < limit.high and min(value - limit.low, limit.high - value) <= 2.0 * INSIDE * limit.scale:
            found.append(f"{words(limit)} ({limit.origin}): at its end")
    low, high = problem.box
    for i, v in enumerate(problem.variables):
        for at, end, origin, side in ((low, v.low, v.low_origin, "lowest"), (high, v.high, "its range", "highest")):
            if abs(x[i, 0] - at[i, 0]) < 1e-9:
                found.append(f"{v.name} is at its {side}, {end:g} {v.unit} ({origin})")
    further = np.clip(x + PROBE * onward / max(float(np.abs(onward).max()), 1e-300), low, high)
    if not problem.exists(further)[0]:
        code = str(problem.rule(further)[0])
        found.append(f"{code}: {reason_text(code)}")
    codes = str(nearest["reasons"].iloc[0]).split()
    found += [f"rejected, {code}: {reason_text(code)}" for code in codes if reason_level(code) == "reject"]
    return tuple(found)
