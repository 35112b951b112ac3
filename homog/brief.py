"""The brief: a requirement in TOML, read and checked whole before anything is computed.

    title, material, process, part, limits on any output column, rank, and candidates: families with each parameter
    fixed, listed, spanned ({from, to, count}) or sampled ({from, to, sampled = true}; Sobol points with a seed).

Candidates are numbered and made from their number alone, so any slice of them can be had at any time.
"""

from __future__ import annotations

import itertools
import math
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from homog.columns import column
from homog.effective import DEFAULT_MODEL
from homog.elements import check_model
from homog.errors import InputError, unknown
from homog.families import Family, family
from homog.materials import Material, Process, material, process

KEYS = {
    "": ("title", "model", "material", "process", "part", "limits", "rank", "candidates"),
    "material": ("name", "modulus_MPa", "poisson", "density_kg_m3", "yield_MPa", "deep"),
    "process": ("name", "min_wall_mm", "recommended_wall_mm", "wall_tolerance_mm", "max_cell_mm"),
    "part": ("size_1_mm", "size_2_mm", "size_3_mm"),
    "rank": ("by", "front", "keep", "per_family"),
}
MOST_CANDIDATES = 50_000_000


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
class Candidates:
    """Numbered candidates of one family: the product of listed values, times the Sobol samples of sampled ranges."""

    family: Family
    words: Mapping[str, str]
    listed: Mapping[str, tuple[float, ...]]
    sampled: Mapping[str, tuple[float, float]]
    samples: int = 1
    seed: int = 0

    @property
    def count(self) -> int:
        """How many candidates there are."""
        return math.prod(len(values) for values in self.listed.values()) * self.samples

    @cached_property
    def _points(self) -> NDArray[np.float64]:
        from scipy.stats import qmc

        sobol = qmc.Sobol(len(self.sampled), scramble=True, rng=np.random.default_rng(self.seed))
        return np.asarray(sobol.random_base2(math.ceil(math.log2(max(self.samples, 1))))[: self.samples])

    def take(self, start: int, stop: int) -> dict[str, Any]:
        """Return the parameters of candidates start to stop - 1, arrays by name."""
        number = np.arange(start, min(stop, self.count))
        given: dict[str, Any] = dict(self.words)
        grid, sample = np.divmod(number, self.samples)
        sizes = [len(values) for values in self.listed.values()]
        where = np.unravel_index(grid, sizes) if sizes else ()
        for (name, values), index in zip(self.listed.items(), where, strict=True):
            given[name] = np.asarray(values)[index]
        for axis, (name, (low, high)) in enumerate(self.sampled.items()):
            given[name] = low + (high - low) * self._points[sample, axis]
        return given


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
    def count(self) -> int:
        """How many candidates the brief describes."""
        return sum(c.count for c in self.candidates)


def read_brief(path: str | Path) -> Brief:
    """Return the brief in a TOML file.

    Raises
    ------
    InputError
        One line: file, line, what is wrong, what is allowed.
    """
    try:
        text = Path(path).read_text(encoding="utf-8")
    except OSError as error:
        raise InputError(f"Brief '{path}' cannot be read: {error.strerror}; give a TOML file") from None
    except UnicodeDecodeError:
        raise InputError(f"Brief '{path}' is not a text file in UTF-8; give a TOML file") from None
    return parse_brief(text, name=Path(path).name)


def parse_brief(text: str, *, name: str = "brief") -> Brief:
    """Return the brief in a TOML text; errors as `read_brief`, with `name` in front."""
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"{name}: not valid TOML: {error}") from None
    return _Reader(text, name).brief(data)


class _Reader:
    """Checks a parsed brief and says on which line a fault stands."""

    def __init__(self, text: str, name: str) -> None:
        self.lines, self.name, self.text = text.splitlines(), name, text

    def line(self, table: str, key: str, index: int = 0) -> int:
        """Return the line (from 1) where a key of a table (or of the index-th [[table]]) stands; 0 if not found."""
        current, seen, header = "", -1, 0
        for number, raw in enumerate(self.lines, 1):
            line = raw.strip()
            if line.startswith("["):
                heading = line.split("#")[0].strip().strip("[] \t")
                current = heading
                if heading == table or heading.startswith(table + "."):
                    seen += line.startswith("[[")
                    header = header or number
                    if not key and (not line.startswith("[[") or seen == index):
                        return number
                if heading == f"{table}.{key}":
                    return number
                continue
            here = current == table and (seen == index or seen < 0)
            if here and line.split("=")[0].strip().strip("\"'") == key:
                return number
            if not current and line.split("=")[0].strip() in (table, f"{table}.{key}"):
                header = header or number
        return header

    def fault(self, message: str, table: str, key: str = "", index: int = 0) -> InputError:
        line = self.line(table, key, index)
        return InputError(f"{self.name}{f', line {line}' if line else ''}: {message}")

    def brief(self, data: dict[str, Any]) -> Brief:
        for key in data:
            if key not in KEYS[""]:
                raise self.fault(str(unknown("key", key, KEYS[""])), "", key)
        tables = {}
        for table in ("material", "process", "part", "rank"):
            given = data.get(table, {})
            if not isinstance(given, dict):
                given = {"name": given} if table in ("material", "process") else given
            if not isinstance(given, dict):
                raise self.fault(f"'{table}' must be a table [{table}]", "", table)
            for key in given:
                if key not in KEYS[table]:
                    raise self.fault(str(unknown(f"key of [{table}]", key, KEYS[table])), table, key)
            tables[table] = given
        if not data.get("candidates"):
            raise self.fault("no [[candidates]]: name at least one family to try", "candidates")
        if not isinstance(data["candidates"], list):
            raise self.fault("'candidates' must be a list of tables: write [[candidates]]", "candidates")
        title = data.get("title", "untitled brief")
        model = data.get("model", DEFAULT_MODEL)
        if not isinstance(title, str) or not isinstance(model, str):
            raise self.fault("title and model must be text in quotes", "", "title")
        made_by = self._process(tables["process"])
        limits = _merged([*self._limits(data.get("limits", {})), *_process_limits(made_by)])
        goals, front, keep, per_family = self._rank(tables["rank"])
        parts = [self._candidates(given, i) for i, given in enumerate(data["candidates"])]
        candidates = tuple(itertools.chain.from_iterable(parts))
        total = sum(c.count for c in candidates)
        if total > MOST_CANDIDATES:
            raise self.fault(
                f"{total:,} candidates; at most {MOST_CANDIDATES:,} in one run: lower a count", "candidates"
            )
        try:
            check_model(model)
        except InputError as error:
            raise self.fault(str(error), "", "model") from None
        return Brief(
            title, self._material(tables["material"]), made_by, limits, goals, front, keep, per_family,
            self._part(tables["part"]), model, candidates, self.text,
        )  # fmt: skip

    def _number(self, value: Any, what: str, table: str, key: str, index: int = 0) -> float:
        if isinstance(value, bool) or not isinstance(value, (int, float)) or not math.isfinite(value):
            raise self.fault(f"{what} = {value!r} is not a finite number", table, key, index)
        return float(value)

    def _material(self, given: Mapping[str, Any]) -> Material:
        values = dict(given)
        name = values.pop("name", None)
        try:
            if name is not None:
                return material(str(name)).replaced(**values)
            missing = [key for key in KEYS["material"][1:4] if key not in values]
            if missing:
                raise InputError(f"[material] needs a name or {', '.join(missing)}; 'homog materials' lists the names")
            return Material("given values", **values)
        except InputError as error:
            raise self.fault(str(error), "material", "name" if name is not None else "") from None

    def _process(self, given: Mapping[str, Any]) -> Process:
        values = dict(given)
        name = values.pop("name", None)
        try:
            if name is not None:
                return process(str(name)).replaced(**values)
            return Process("given limits" if values else "no process", **values)
        except InputError as error:
            raise self.fault(str(error), "process", "name" if name is not None else "") from None

    def _part(self, given: Mapping[str, Any]) -> tuple[float, ...]:
        sizes = []
        for key in KEYS["part"]:
            if key not in given:
                break
            size = self._number(given[key], key, "part", key)
            if size <= 0.0:
                raise self.fault(f"{key} = {size:g} mm; allowed: more than 0", "part", key)
            sizes.append(size)
        if len(sizes) != len(given):
            raise self.fault("[part] gives sizes in order: size_1_mm, then size_2_mm, then size_3_mm", "part")
        return tuple(sizes)

    def _limits(self, given: Any) -> list[Limit]:
        if not isinstance(given, dict):
            raise self.fault("'limits' must be a table: COLUMN = { min = ..., max = ... }", "", "limits")
        limits = []
        for name, spec in given.items():
            try:
                found = column(name)
            except InputError as error:
                raise self.fault(str(error), "limits", name) from None
            if found.text:
                raise self.fault(f"column '{name}' holds text and takes no limit", "limits", name)
            if not isinstance(spec, dict) or not spec or set(spec) - {"min", "max"}:
                raise self.fault(f"limit on '{name}' = {spec!r}; write {{ min = ... }}, {{ max = ... }} or both",
                                 "limits", name)  # fmt: skip
            given_bounds = {key: self._number(value, f"{name} {key}", "limits", name) for key, value in spec.items()}
            low, high = given_bounds.get("min", -math.inf), given_bounds.get("max", math.inf)
            if low > high:
                raise self.fault(f"limit on '{name}': min {low:g} is above max {high:g}", "limits", name)
            limits.append(Limit(name, low, high))
        return limits

    def _rank(self, given: Mapping[str, Any]) -> tuple[tuple[Goal, ...], bool, int, int]:
        by = given.get("by", {"density_kg_m3": "min"})
        if not isinstance(by, dict) or not by:
            raise self.fault('by must name columns: by = { density_kg_m3 = "min" }', "rank", "by")
        goals = []
        for name, better in by.items():
            try:
                found = column(name)
            except InputError as error:
                raise self.fault(str(error), "rank", "by") from None
            if found.text or better not in ("min", "max"):
                raise self.fault(
                    f'rank by \'{name}\' = {better!r}: allowed are "min" and "max" on numbers', "rank", "by"
                )
            goals.append(Goal(name, better))
        front, keep, per_family = given.get("front", False), given.get("keep", 12), given.get("per_family", 0)
        if not isinstance(front, bool):
            raise self.fault(f"front = {front!r}; allowed: true or false", "rank", "front")
        for key, value, least in (("keep", keep, 1), ("per_family", per_family, 0)):
            if isinstance(value, bool) or not isinstance(value, int) or not least <= value <= 200:
                raise self.fault(f"{key} = {value!r}; allowed: a whole number from {least} to 200", "rank", key)
        return tuple(goals), front, keep, per_family or keep

    def _candidates(self, given: Any, index: int) -> list[Candidates]:
        table = "candidates"
        if not isinstance(given, dict) or "family" not in given:
            raise self.fault("[[candidates]] needs a family; 'homog families' lists them", table, "", index)
        try:
            found = family(str(given["family"]))
        except InputError as error:
            raise self.fault(str(error), table, "family", index) from None
        samples, seed = given.get("samples", 0), given.get("seed", 0)
        for key, value in (("samples", samples), ("seed", seed)):
            if isinstance(value, bool) or not isinstance(value, int) or not 0 <= value <= 10_000_000:
                raise self.fault(f"{key} = {value!r}; allowed: a whole number up to 10,000,000", table, key, index)
        words: dict[str, list[str]] = {}
        listed: dict[str, tuple[float, ...]] = {}
        sampled: dict[str, tuple[float, float]] = {}
        for name, spec in given.items():
            if name in ("family", "samples", "seed"):
                continue
            try:
                parameter = found.parameter(name)
            except InputError as error:
                raise self.fault(str(error), table, name, index) from None
            if parameter.choices:
                words[name] = [spec] if isinstance(spec, str) else list(spec) if isinstance(spec, list) else [str(spec)]
                tried: list[Any] = words[name]
            elif isinstance(spec, dict) and spec.get("sampled"):
                sampled[name] = self._span(spec, {"from", "to", "sampled"}, name, index)
                tried = [list(sampled[name])]
            else:
                listed[name] = self._listed(spec, name, index)
                tried = [list(listed[name])]
            for value in tried:
                try:
                    found.values({name: value})
                except InputError as error:
                    raise self.fault(str(error), table, name, index) from None
        if bool(sampled) != bool(samples):
            raise self.fault("sampled ranges and 'samples' (how many points, with a seed) belong together",
                             table, "samples", index)  # fmt: skip
        return [
            Candidates(found, dict(zip(words, choice, strict=True)), listed, sampled, samples or 1, seed)
            for choice in itertools.product(*words.values())
        ]

    def _span(self, spec: dict[str, Any], keys: set[str], name: str, index: int) -> tuple[float, float]:
        if set(spec) != keys:
            raise self.fault(
                f"'{name}' = {spec!r}; write a number, a list, {{ from, to, count }} or {{ from, to, sampled = true }}",
                "candidates", name, index,
            )  # fmt: skip
        low, high = (self._number(spec[key], f"'{name}' {key}", "candidates", name, index) for key in ("from", "to"))
        if low > high:
            raise self.fault(f"'{name}': empty range, from {low:g} is above to {high:g}", "candidates", name, index)
        return low, high

    def _listed(self, spec: Any, name: str, index: int) -> tuple[float, ...]:
        if isinstance(spec, dict):
            low, high = self._span(spec, {"from", "to", "count"}, name, index)
            count = spec["count"]
            if isinstance(count, bool) or not isinstance(count, int) or not 1 <= count <= 1_000_000:
                raise self.fault(f"'{name}': count = {count!r}; allowed: a whole number from 1 (0 is an empty range)",
                                 "candidates", name, index)  # fmt: skip
            return tuple(np.linspace(low, high, count).tolist())
        values: Sequence[Any] = spec if isinstance(spec, list) else [spec]
        if not values:
            raise self.fault(f"'{name}': empty list; give at least one value", "candidates", name, index)
        return tuple(self._number(value, f"'{name}'", "candidates", name, index) for value in values)


def _process_limits(made_by: Process) -> list[Limit]:
    """Return what a process asks of every candidate."""
    limits = []
    if made_by.min_wall_mm > 0.0:
        limits.append(Limit("thinnest_mm", low=made_by.min_wall_mm, origin="process"))
    if math.isfinite(made_by.max_cell_mm):
        limits.append(Limit("largest_cell_mm", high=made_by.max_cell_mm, origin="process"))
    return limits


def _merged(limits: list[Limit]) -> tuple[Limit, ...]:
    """Return one limit a column, the tighter of each bound."""
    merged: dict[str, Limit] = {}
    for limit in limits:
        other = merged.get(limit.column, limit)
        origin = other.origin if other.origin == limit.origin else f"{other.origin} and {limit.origin}"
        merged[limit.column] = Limit(limit.column, max(other.low, limit.low), min(other.high, limit.high), origin)
    return tuple(merged.values())
