"""The brief: a requirement in TOML, read and checked whole before anything is computed.

title, material, process, part, limits on any output column, rank, and candidates: families with each parameter
fixed, listed, spanned ({from, to, count}) or sampled ({from, to, sampled = true}; Sobol points with a seed).
"""

from __future__ import annotations

import bisect
import itertools
import math
import re
import tomllib
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from homog.candidates import Candidates, Span
from homog.cell import Kind
from homog.columns import column
from homog.effective import DEFAULT_MODEL
from homog.elements import check_model
from homog.errors import InputError, unknown
from homog.families import family
from homog.materials import UNIT, Material, Process, material, process

KEYS = {
    "": ("title", "model", "material", "process", "part", "limits", "rank", "candidates"),
    "material": ("name", "modulus_MPa", "poisson", "density_kg_m3", "yield_MPa", "deep"),
    "process": ("name", "min_wall_mm", "recommended_wall_mm", "wall_tolerance_mm", "max_cell_mm"),
    "part": ("size_1_mm", "size_2_mm", "size_3_mm"),
    "rank": ("by", "front", "keep", "per_family"),
}
CANDIDATE_KEYS = ("family", "samples", "seed")
MOST_KEPT = 200
TOLERANCES = ("E1_tolerance_percent", "nu12_tolerance", "E1_scatter_percent", "nu12_scatter")
MOST_CANDIDATES = 1_000_000_000
"""Sobol' points are numbered with SOBOL_BITS digits; a screen of so many takes days and some 300 GB."""
_STATEMENT = re.compile(r"""\s*(\[|[\w"'][^=]*=)""")


@dataclass(frozen=True)
class Limit:
    """A limit on an output column: low <= value <= high."""

    column: str
    low: float = -math.inf
    high: float = math.inf
    origin: str = "brief"

    def miss(self, values: NDArray[Any]) -> NDArray[np.float64]:
        """Return by how much values (m,) miss the limit, in the column's unit: 0 where met, NaN where no value."""
        x = np.asarray(values, float)
        return np.asarray(np.maximum(np.maximum(self.low - x, x - self.high), 0.0))

    @property
    def scale(self) -> float:
        """What a miss is measured against when misses of different columns are compared."""
        given = [abs(bound) for bound in (self.low, self.high) if math.isfinite(bound)]
        return max(given) or 1.0

    @property
    def words(self) -> str:
        """The limit in words."""
        if self.low == -math.inf:
            return f"{self.column} at most {self.high:g}"
        if self.high == math.inf:
            return f"{self.column} at least {self.low:g}"
        return f"{self.column} from {self.low:g} to {self.high:g}"


@dataclass(frozen=True)
class Goal:
    """A column to rank by; `better` is `min` or `max`."""

    column: str
    better: str


@dataclass(frozen=True)
class Brief:
    """A requirement, checked."""

    title: str
    material: Material
    process: Process
    limits: tuple[Limit, ...]
    goals: tuple[Goal, ...]
    front: bool
    keep: int
    per_family: int
    part: tuple[float, ...]
    model: str
    candidates: tuple[Candidates, ...]
    text: str = field(repr=False, default="")

    @property
    def known(self) -> dict[str, Any]:
        """What columns may know of the brief (`columns.quantities`)."""
        limits = {limit.column: (limit.low, limit.high) for limit in self.limits}
        return {"part": self.part, "limits": limits, "tolerance": self.process.wall_tolerance_mm}

    @property
    def count(self) -> int:
        """How many candidates the brief describes."""
        return sum(c.count for c in self.candidates)


def bare_brief(candidates: Sequence[Candidates], material: Material, model: str) -> Brief:
    """Return a brief that asks for nothing: these candidates of this parent, without limits."""
    goal = Goal("density_kg_m3", "min")
    return Brief("sweep", material, Process("no process"), (), (goal,), False, 1, 1, (), model, tuple(candidates))


def read_brief(path: str | Path) -> Brief:
    """Return the brief in a TOML file.

    Raises
    ------
    InputError
        One line: file, line, what is wrong, what is allowed.
    """
    try:
        text = Path(path).read_bytes().decode("utf-8-sig")  # as it stands, so that the copy handed over is the same
    except OSError as error:
        raise InputError(f"Brief '{path}' cannot be read: {error.strerror}; give a TOML file") from None
    except UnicodeDecodeError as error:
        line = error.object.count(b"\n", 0, error.start) + 1
        raise InputError(f"Brief '{path}', line {line}: not text in UTF-8; save the file as UTF-8") from None
    return parse_brief(text, name=Path(path).name)


def parse_brief(text: str, *, name: str = "brief") -> Brief:
    """Return the brief in a TOML text; errors as `read_brief`, with `name` in front."""
    try:
        data = tomllib.loads(text)
    except RecursionError:
        raise InputError(f"{name}: lists or tables are nested too deep; a brief needs four levels") from None
    except ValueError as error:  # also a number of more digits than Python reads
        what, _, place = str(error).rstrip(")").partition(" (at ")
        line = place.split(",")[0].replace("end of document", f"line {len(text.rstrip().splitlines())}")
        where = f"{name}, {line}" if line else name
        raise InputError(f"{where}: not valid TOML: {what}; write text in quotes, KEY = VALUE a line") from None
    return _Reader(text, name).brief(data)


def line_of(text: str, place: Sequence[str | int]) -> int:
    """Return the line (from 1) where the statement begins that makes a place in the data of a valid TOML text.

    Whatever stands before a statement is valid TOML too, so the place is looked for in ever better chosen beginnings of
    the text; 0 if it is nowhere.

    >>> line_of("[limits]\\nnu12 = { max = 0 }", ("limits", "nu12", "max"))
    2
    """
    lines = text.split("\n")
    starts = [n for n, line in enumerate(lines) if _STATEMENT.match(line)]  # and some lines inside a longer text

    def there(number: int) -> bool:
        for end in [*starts[number + 1 :], len(lines)]:
            try:
                data: Any = tomllib.loads("\n".join(lines[:end]))
            except ValueError:  # the statement goes on
                continue
            for part in place:
                try:
                    data = data[part]
                except (LookupError, TypeError):
                    return False
            break
        return True

    number = bisect.bisect_left(range(len(starts)), True, key=there)
    return starts[number] + 1 if number < len(starts) else 0


class _Reader:
    """Checks a parsed brief and says on which line a fault stands."""

    def __init__(self, text: str, name: str) -> None:
        self.name, self.text = name, text

    def fault(self, message: str | InputError, *place: str | int) -> InputError:
        """Return the error for a place in the data, with the line of the innermost part of it that is written down."""
        line = next(filter(None, (line_of(self.text, place[:size]) for size in range(len(place), 0, -1))), 0)
        words = " ".join(str(message).split())  # a quoted name may hold a line break
        return InputError(f"{self.name}{f', line {line}' if line else ''}: {words}")

    @contextmanager
    def at(self, *place: str | int) -> Iterator[None]:
        """Put the line of a place in front of a fault that the block finds."""
        try:
            yield
        except InputError as error:
            raise self.fault(error, *place) from None

    def brief(self, data: dict[str, Any]) -> Brief:
        self._known(data, "key", "")
        tables = {}
        for table in ("material", "process", "part", "rank"):
            given = data.get(table, {})
            if isinstance(given, str) and table in ("material", "process"):
                given = {"name": given}
            if not isinstance(given, dict):
                raise self.fault(f"'{table}' = {_short(given)} must be a table: [{table}]", table)
            self._known(given, f"key of [{table}]", table)
            tables[table] = given
        listed = data.get("candidates", [])
        if not isinstance(listed, list):
            raise self.fault("'candidates' must be a list of tables: write [[candidates]]", "candidates")
        if not listed:
            raise self.fault("no [[candidates]]: name at least one family to try", "candidates")
        model = self._text(data.get("model", DEFAULT_MODEL), "model")
        with self.at("model"):
            check_model(model)
        candidates = tuple(itertools.chain.from_iterable(self._candidates(one, i) for i, one in enumerate(listed)))
        total = sum(c.count for c in candidates)
        if total > MOST_CANDIDATES:
            raise self.fault(
                f"{total:,} candidates; at most {MOST_CANDIDATES:,} in one run: lower a count", "candidates"
            )
        kinds = {c.family.kind for c in candidates}
        made_by = self._process(tables["process"])
        limits = self._merged([*self._limits(data.get("limits", {}), kinds), *process_limits(made_by)])
        goals, front, keep, per_family = self._rank(tables["rank"], kinds)
        parent, part = self._material(tables["material"]), self._part(tables["part"])
        asked = [(("limits", limit.column), limit.column) for limit in limits if limit.column in data.get("limits", {})]
        for place, name in [*asked, *((("rank", "by"), goal.column) for goal in goals)]:
            lack = _lack(name, parent, made_by, part)
            if lack:
                raise self.fault(f"no candidate can have a value of '{name}': {lack}", *place)
        return Brief(
            " ".join(self._text(data.get("title", "untitled brief"), "title").split()),
            parent, made_by, limits, goals, front, keep, per_family, part, model, candidates, self.text,
        )  # fmt: skip

    def _known(self, given: Mapping[str, Any], what: str, table: str) -> None:
        for key in given:
            if key not in KEYS[table]:
                raise self.fault(unknown(what, key, KEYS[table]), *((table, key) if table else (key,)))

    def _text(self, value: Any, *place: str | int) -> str:
        if not isinstance(value, str):
            raise self.fault(f"{place[-1]} = {_short(value)} must be text in quotes", *place)
        return value

    def _number(self, value: Any, what: str, *place: str | int) -> float:
        try:
            number = math.nan if isinstance(value, bool) or not isinstance(value, (int, float)) else float(value)
        except OverflowError:
            number = math.inf
        if not math.isfinite(number):
            raise self.fault(f"{what} = {_short(value)} is not a finite number", *place)
        return number

    def _count(self, value: Any, what: str, low: int, high: int, *place: str | int) -> int:
        if isinstance(value, bool) or not isinstance(value, int) or not low <= value <= high:
            raise self.fault(f"{what} = {_short(value)}; allowed: a whole number from {low} to {high:,}", *place)
        return value

    def _column(self, name: str, kinds: set[Kind], *place: str | int) -> None:
        """Check that a limit or a rank can be put on a column."""
        with self.at(*place):
            found = column(name)
        if found.text:
            raise self.fault(f"column '{name}' holds text: limits and ranks are for numbers", *place)
        if not kinds & set(found.kinds):
            raise self.fault(
                f"no candidate family has the column '{name}'; {' and '.join(found.kinds)} cells do", *place
            )

    def _material(self, given: Mapping[str, Any]) -> Material:
        values = dict(given)
        if not isinstance(values.get("deep", False), bool):
            raise self.fault(f"deep = {_short(values['deep'])}; allowed: true or false", "material", "deep")
        named = self._text(values.pop("name"), "material", "name") if "name" in values else None
        missing = [key for key in KEYS["material"][1:4] if key not in values]
        if named is None and missing:
            raise self.fault(
                f"[material] needs a name or {', '.join(missing)}; 'homog materials' lists the names", "material"
            )
        with self.at("material", "name"):
            found = UNIT.replaced(name="given values") if named is None else material(named)
        for key, value in values.items():
            with self.at("material", key):
                found = found.replaced(**{key: value})
        return found.replaced(name=f"{found.name}, changed") if named and set(values) - {"deep"} else found

    def _process(self, given: Mapping[str, Any]) -> Process:
        values = dict(given)
        named = self._text(values.pop("name"), "process", "name") if "name" in values else None
        with self.at("process", "name"):
            found = Process("given limits" if values else "no process") if named is None else process(named)
        for key, value in values.items():
            with self.at("process", key):
                found = found.replaced(**{key: value})
        return found.replaced(name=f"{found.name}, changed") if named and values else found

    def _part(self, given: Mapping[str, Any]) -> tuple[float, ...]:
        sizes = []
        for key in KEYS["part"][: len(given)]:
            if key not in given:
                raise self.fault("[part] gives sizes in order: size_1_mm, then size_2_mm, then size_3_mm", "part")
            size = self._number(given[key], key, "part", key)
            if size <= 0.0:
                raise self.fault(f"{key} = {size:g} mm; allowed: more than 0", "part", key)
            sizes.append(size)
        return tuple(sizes)

    def _limits(self, given: Any, kinds: set[Kind]) -> list[Limit]:
        if not isinstance(given, dict):
            raise self.fault("'limits' must be a table: COLUMN = { min = ..., max = ... }", "limits")
        limits = []
        for name, spec in given.items():
            place = ("limits", name)
            self._column(name, kinds, *place)
            if not isinstance(spec, dict) or not spec:
                raise self.fault(f"limit on '{name}' = {_short(spec)}; write {{ min = ... }}, {{ max = ... }} or both",
                                 *place)  # fmt: skip
            for key in spec:
                if key not in ("min", "max"):
                    raise self.fault(unknown(f"key of the limit on '{name}'", key, ("min", "max")), *place, key)
            bound = {key: self._number(value, f"{name} {key}", *place, key) for key, value in spec.items()}
            limit = Limit(name, bound.get("min", -math.inf), bound.get("max", math.inf))
            if limit.low > limit.high:
                raise self.fault(f"limit on '{name}': min {limit.low:g} is above max {limit.high:g}", *place)
            limits.append(limit)
        return limits

    def _merged(self, limits: list[Limit]) -> tuple[Limit, ...]:
        """Return one limit a column, the tighter of each bound."""
        merged: dict[str, Limit] = {}
        for limit in limits:
            other = merged.get(limit.column, limit)
            origin = other.origin if other.origin == limit.origin else f"{other.origin} and {limit.origin}"
            both = Limit(limit.column, max(other.low, limit.low), min(other.high, limit.high), origin)
            if both.low > both.high:
                raise self.fault(f"{other.words}, but the process asks for {limit.words}", "limits", limit.column)
            merged[limit.column] = both
        return tuple(merged.values())

    def _rank(self, given: Mapping[str, Any], kinds: set[Kind]) -> tuple[tuple[Goal, ...], bool, int, int]:
        by = given.get("by", {"density_kg_m3": "min"})
        if not isinstance(by, dict) or not by:
            raise self.fault('by must name columns: by = { density_kg_m3 = "min" }', "rank", "by")
        for name, better in by.items():
            self._column(name, kinds, "rank", "by", name)
            if better not in ("min", "max"):
                raise self.fault(f"rank by '{name}' = {_short(better)}; allowed: 'min' or 'max'", "rank", "by", name)
        front = given.get("front", False)
        if not isinstance(front, bool):
            raise self.fault(f"front = {_short(front)}; allowed: true or false", "rank", "front")
        keep = self._count(given.get("keep", 12), "keep", 1, MOST_KEPT, "rank", "keep")
        per_family = self._count(given.get("per_family", keep), "per_family", 1, MOST_KEPT, "rank", "per_family")
        return tuple(Goal(name, better) for name, better in by.items()), front, keep, per_family

    def _candidates(self, given: Any, index: int) -> list[Candidates]:
        here = ("candidates", index)
        if not isinstance(given, dict) or "family" not in given:
            raise self.fault("[[candidates]] needs a family; 'homog families' lists them", *here)
        named = self._text(given["family"], *here, "family")
        with self.at(*here, "family"):
            found = family(named)
        samples = self._count(given.get("samples", 1), "samples", 1, MOST_CANDIDATES, *here, "samples")
        seed = self._count(given.get("seed", 0), "seed", 0, 2**63 - 1, *here, "seed")
        words: dict[str, list[str]] = {}
        listed: dict[str, tuple[float, ...] | Span] = {}
        sampled: dict[str, tuple[float, float]] = {}
        known = [p.name for p in found.parameters]
        for name, spec in given.items():
            if name in CANDIDATE_KEYS:
                continue
            if name not in known:
                raise self.fault(unknown(f"parameter of '{found.id}'", name, [*known, *CANDIDATE_KEYS]), *here, name)
            if spec == []:
                raise self.fault(f"'{name}': empty list; give at least one value", *here, name)
            tried: list[Any]
            if found.parameter(name).choices:
                tried = spec if isinstance(spec, list) else [spec]
                words[name] = [self._text(word, *here, name) for word in tried]
            elif isinstance(spec, dict) and spec.get("sampled") is True:
                sampled[name] = self._span(spec, "sampled", *here, name)
                tried = [list(sampled[name])]
            else:
                values = listed[name] = self._listed(spec, *here, name)
                tried = [[values.low, values.high] if isinstance(values, Span) else list(values)]
            for value in tried:
                with self.at(*here, name):
                    found.values({name: value})
        if bool(sampled) != ("samples" in given):
            raise self.fault("sampled ranges and 'samples' (how many points, with a seed) belong together",
                             *here, "samples")  # fmt: skip
        return [
            Candidates(found, dict(zip(words, choice, strict=True)), listed, sampled, samples, seed)
            for choice in itertools.product(*words.values())
        ]

    def _span(self, spec: dict[str, Any], last: str, *place: str | int) -> tuple[float, float]:
        name = place[-1]
        for key in spec:
            if key not in ("from", "to", "count", "sampled"):
                raise self.fault(unknown(f"key of '{name}'", key, ("from", "to", "count", "sampled")), *place, key)
        if set(spec) != {"from", "to", last}:
            raise self.fault(
                f"'{name}' = {_short(spec)}; write a number, a list, {{ from, to, count }} or "
                "{ from, to, sampled = true }", *place,
            )  # fmt: skip
        low, high = (self._number(spec[key], f"'{name}' {key}", *place, key) for key in ("from", "to"))
        if low > high:
            raise self.fault(f"'{name}': empty range, from {low:g} is above to {high:g}; swap them", *place)
        return low, high

    def _listed(self, spec: Any, *place: str | int) -> tuple[float, ...] | Span:
        name = place[-1]
        if isinstance(spec, dict):
            low, high = self._span(spec, "count", *place)
            count = self._count(spec["count"], f"'{name}' count", 1, MOST_CANDIDATES, *place, "count")
            return Span(low, high, count)
        if isinstance(spec, list):
            return tuple(self._number(value, f"'{name}'", *place, i) for i, value in enumerate(spec))
        return (self._number(spec, f"'{name}'", *place),)


def _short(value: Any) -> str:
    """Return a value as it is quoted in a message: in TOML's words, and cut if it is long."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, int) and abs(value) >= 10**18:
        return "a whole number of more than 18 digits"
    words = repr(value)
    return words if len(words) <= 60 else words[:57] + "..."


def _lack(name: str, parent: Material, made_by: Process, part: tuple[float, ...]) -> str:
    """Return what a brief would have to say for a column to have values, or nothing."""
    if name.startswith("yield") and not math.isfinite(parent.yield_MPa):
        return f"the parent {parent.name} has no yield; give yield_MPa in [material]"
    if name == "cells_across" and not part:
        return "the part's size is not known; give size_1_mm, size_2_mm in [part]"
    if name in TOLERANCES and not made_by.wall_tolerance_mm > 0.0:
        return "the process has no tolerance; give wall_tolerance_mm in [process]"
    return ""


def process_limits(made_by: Process) -> list[Limit]:
    """Return what a process asks of every candidate."""
    limits = []
    if made_by.min_wall_mm > 0.0:
        limits.append(Limit("thinnest_mm", low=made_by.min_wall_mm, origin="process"))
    if math.isfinite(made_by.max_cell_mm):
        limits.append(Limit("largest_cell_mm", high=made_by.max_cell_mm, origin="process"))
    return limits
