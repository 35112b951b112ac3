"""What an inverse design asks of a family, checked: limits on output quantities, what varies between which bounds.

A target, a limit and what a process asks are all one thing, a range of a column; a value is a range of no width.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from homog.brief import Goal, Limit, process_limits
from homog.cell import Status
from homog.columns import column
from homog.effective import Effective, homogenize
from homog.errors import InputError
from homog.families import Family, family
from homog.gradient import Move
from homog.materials import Material, Process
from homog.materials import material as named_material
from homog.materials import process as named_process

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Asked = float | tuple[float | None, float | None]

VALUE_TOLERANCE = 1e-3
"""A value is met within this share of it (within this, if it is 0)."""
SPREAD, SPREAD_MADE = (0.25, 4.0), (0.1, 2.5)
"""Where starts lie without a range of their own, times the default: lengths, and thicknesses to be made."""


@dataclass(frozen=True)
class Variable:
    """A parameter that is varied, from low to high (`origin`: who says so), started from the range `first`."""

    name: str
    unit: str
    low: float
    high: float
    first: tuple[float, float]
    low_origin: str
    move: Move

    def coordinate(self, value: Any) -> Any:
        """The coordinate it is searched by: the logarithm of a length, an angle in radians."""
        return np.radians(value) if self.unit == "deg" else np.log(value)

    def value(self, x: Any) -> Any:
        return np.degrees(x) if self.unit == "deg" else np.exp(x)

    def slope(self, x: Any) -> Any:
        """d value / d coordinate."""
        return np.degrees(1.0) + 0.0 * x if self.unit == "deg" else np.exp(x)


@dataclass(frozen=True, eq=False)
class Problem:
    """What is asked of a family, checked."""

    family: Family
    limits: tuple[Limit, ...]
    variables: tuple[Variable, ...]
    fixed: Mapping[str, Any]
    material: Material
    model: str
    process: Process
    goals: tuple[Goal, ...]

    def given(self, x: Array) -> dict[str, Any]:
        """Return the parameters of coordinates (variable, b)."""
        out: dict[str, Any] = {}
        for variable, row in zip(self.variables, x, strict=True):
            value = np.clip(variable.value(row), variable.low, variable.high)
            out.update(dict.fromkeys(variable.move, value))
        return {**self.fixed, **out}

    def effective(self, x: Array) -> Effective:
        """Return the effective material of cells that exist, coordinates (variable, b)."""
        return homogenize(self.family.build(self.given(x), self.material), model=self.model)

    def exists(self, x: Array) -> Mask:
        """Return which coordinates (variable, b) describe a cell."""
        return np.asarray(self.family.build(self.given(x), self.material).status == Status.OK)

    def rule(self, x: Array) -> NDArray[Any]:
        """Return the code of what makes the cells of coordinates (variable, b) impossible, (b,)."""
        found = np.full(x.shape[1], "walls-merge", dtype=object)
        for code, broken in self.family.impossible(self.family.values(self.given(x)), self.material).items():
            found[np.broadcast_to(broken, found.shape)] = code
        return found

    @cached_property
    def box(self) -> tuple[Array, Array]:
        """Bounds of the coordinates, (variable, 1) each."""
        low = [v.coordinate(v.low) for v in self.variables]
        high = [v.coordinate(v.high) for v in self.variables]
        return np.array(low)[:, None], np.array(high)[:, None]


def posed(
    family_id: str,
    targets: Mapping[str, Asked],
    *,
    limits: Mapping[str, Asked],
    fix: Mapping[str, Any],
    within: Mapping[str, tuple[float, float]],
    free: Sequence[str],
    material: Material | str,
    model: str,
    process: Process | str | None,
    rank: Mapping[str, str],
) -> Problem:
    """Return the problem, checked; parameters and errors as `homog.tune`."""
    found = family(family_id)
    if model == "solid":
        raise InputError("Model 'solid' is meshed and has no derivatives; use 'joint', 'timoshenko' or 'euler'")
    made_by = named_process(process) if isinstance(process, str) else process or Process("no process")
    if not targets:
        raise InputError("No target: name an output quantity, such as nu12=-0.5; 'homog families ID' lists them")
    asked = [limit_of(found, name, value, "target") for name, value in targets.items()]
    asked += [limit_of(found, name, value, "limit") for name, value in limits.items()]
    kept = merged([*asked, *process_limits(made_by)])
    for name, better in rank.items():
        if column(name).text or found.kind not in column(name).kinds:
            raise InputError(f"Rank by '{name}': '{found.id}' has no such number; rank by density_kg_m3 or another")
        if better not in ("min", "max"):
            raise InputError(f"Rank by '{name}' = {better!r}; allowed: 'min' or 'max'")
    variables, fixed = _variables(found, fix, within, free, made_by)
    parent = named_material(material) if isinstance(material, str) else material
    goals = tuple(Goal(name, better) for name, better in rank.items())
    return Problem(found, kept, variables, fixed, parent, model, made_by, goals)


def limit_of(found: Family, name: str, asked: Asked, origin: str) -> Limit:
    """Return a target as a limit on a column of a family, checked."""
    known, what = column(name), f"{origin.capitalize()} '{name}'"
    if found.kind not in known.kinds:
        raise InputError(
            f"{what}: '{found.id}' is {found.kind} and has no such quantity; 'homog families ID' lists them"
        )
    if not known.smooth:
        why = "text" if known.text else "a count, a direction, a band, a tolerance or a yield, which has no derivative"
        raise InputError(f"{what} is {why}; aim at a number such as nu12, E1_MPa or density_kg_m3")
    low, high = asked if isinstance(asked, tuple) else (asked, asked)
    low, high = -math.inf if low is None else float(low), math.inf if high is None else float(high)
    if math.isnan(low) or math.isnan(high) or (math.isinf(low) and math.isinf(high)):
        raise InputError(f"{what} = {asked!r} is no number or range; give a value, or one or both ends of a range")
    if low > high:
        raise InputError(f"{what}: the range is empty, {low:g} is above {high:g}; swap them")
    return Limit(name, low, high, origin)


def merged(limits: Sequence[Limit]) -> tuple[Limit, ...]:
    """Return one limit a column, the tighter of each end; InputError where they contradict each other."""
    out: dict[str, Limit] = {}
    for limit in limits:
        other = out.get(limit.column)
        if other is None:
            out[limit.column] = limit
            continue
        low, high = max(other.low, limit.low), min(other.high, limit.high)
        if low > high:
            raise InputError(f"{words(other)} ({other.origin}), but {words(limit)} ({limit.origin}); drop one of them")
        out[limit.column] = Limit(limit.column, low, high, other.origin)
    return tuple(out.values())


def words(limit: Limit) -> str:
    """Return a limit in words; a range of no width is a value."""
    return f"{limit.column} = {limit.low:g}" if limit.low == limit.high else limit.words


def _variables(
    found: Family,
    fix: Mapping[str, Any],
    within: Mapping[str, tuple[float, float]],
    free: Sequence[str],
    made_by: Process,
) -> tuple[tuple[Variable, ...], dict[str, Any]]:
    """Return what varies and what is fixed, checked against ranges and process."""
    for name in (*fix, *within, *free):
        found.parameter(name)
    for name in set(fix) & (set(within) | set(free)):
        raise InputError(f"Parameter '{name}' is fixed and shall vary; drop one of the two")
    fixed = dict(fix)
    found.values(fixed)
    followers: dict[str, list[str]] = {}
    for p in found.parameters:
        leader = p.default
        if isinstance(leader, str) and not p.choices and not {p.name} & {*fix, *within, *free}:
            followers.setdefault(leader, []).append(p.name)
    variables = []
    defaults: dict[str, float] = {}
    for p in found.parameters:
        if p.choices:
            fixed.setdefault(p.name, p.default)
            continue
        defaults[p.name] = default = defaults[p.default] if isinstance(p.default, str) else p.default
        if p.made and p.name in fix and float(fix[p.name]) < made_by.min_wall_mm:
            raise InputError(f"Parameter '{p.name}' = {float(fix[p.name]):g} mm is fixed, but the process makes no "
                             f"wall under {made_by.min_wall_mm:g} mm; raise it or choose another process")  # fmt: skip
        if p.name in fix or any(p.name in names for names in followers.values()):
            continue
        low, high = within.get(p.name, (p.low, p.high))
        found.values({p.name: [low, high]})
        origin = "its range"
        if p.made and made_by.min_wall_mm > low:
            low, origin = made_by.min_wall_mm, "process"
        if low > high:
            raise InputError(f"Parameter '{p.name}': nothing from {low:g} ({origin}) to {high:g} {p.unit}; widen it")
        first = (low, high)
        if p.name not in within and p.unit != "deg":
            least, most = SPREAD_MADE if p.made else SPREAD
            first = (min(max(low, least * default), high), max(min(high, most * default), low))
            first = (first[0], max(first[1], min(2.0 * first[0], high)))
        move = dict.fromkeys((p.name, *followers.get(p.name, ())), 1.0)
        variables.append(Variable(p.name, p.unit, float(low), float(high), first, origin, move))
    if not variables:
        raise InputError(f"Every parameter of '{found.id}' is fixed: nothing to tune; leave one free")
    return tuple(variables), fixed


def meets(limit: Limit, values: NDArray[Any]) -> Mask:
    """Return where values keep a limit; a range of no width is met within VALUE_TOLERANCE."""
    slack = VALUE_TOLERANCE * limit.scale if limit.low == limit.high else 0.0
    return np.asarray(limit.miss(values) <= slack)
