"""What is remembered of a screen: the best, the nearest, the counts, and a bounded sample for the chart.

`digest` takes one part; digests merge in any order, at any division into parts, to the same: counts add, the best of a
union are the best of the bests, the Pareto front of a union is the front of the fronts, ties go to the lower candidate
number, and the sample is the candidates whose number hashes lowest.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from homog.brief import Brief, Goal, Limit
from homog.errors import InputError
from homog.store import frame

if TYPE_CHECKING:
    import pandas as pd

Array = NDArray[np.float64]
Index = NDArray[np.int64]

NEAREST = 5
SAMPLE = 50_000
"""Candidates kept for the chart of those that meet the brief, and as many of those that do not."""
LOOSE = 1000
"""Rows of the best, or of the nearest, that gather before they are merged."""
CHARTED = ("density_kg_m3", "E1_MPa")
BLOCK = 256


@dataclass(frozen=True, eq=False)
class Fall:
    """How many candidates missed one limit, and how many missed that limit alone."""

    limit: Limit
    missed: int
    alone: int


@dataclass
class Tally:
    """Counts of candidates: by (family, what), what being `candidates`, `meets` or a verdict; by reason; by limit."""

    families: Counter[tuple[str, str]] = field(default_factory=Counter)
    reasons: Counter[str] = field(default_factory=Counter)
    missed: Counter[str] = field(default_factory=Counter)
    alone: Counter[str] = field(default_factory=Counter)

    def add(self, other: Tally) -> None:
        """Count what another tally counts as well."""
        for mine, more in ((self.families, other.families), (self.reasons, other.reasons),
                           (self.missed, other.missed), (self.alone, other.alone)):  # fmt: skip
            mine.update(more)  # type: ignore[arg-type]

    def total(self, what: str) -> int:
        """Return the count of `candidates`, of those that meet (`meets`), or of a verdict, over all families."""
        return sum(count for (_, key), count in self.families.items() if key == what)


@dataclass(eq=False)
class Digest:
    """What one part, or several, leave behind: who is best and why, rows of the nearest, counts, a sample of points."""

    best: list[pa.Table]
    near: list[pa.Table]
    tally: Tally
    sample: list[pa.Table]


def number_column(table: pa.Table, name: str) -> Array:
    """Return a column as floating-point numbers, NaN where it has no value or the table no such column."""
    if name not in table.column_names:
        return np.full(len(table), np.nan)
    return np.asarray(table[name].to_numpy(), float)


def goal_keys(values: Sequence[Array], goals: Sequence[Goal]) -> Array:
    """Return the goals' values as columns (m, g) to be minimised, no value as the worst."""
    signed = [value * (1.0 if goal.better == "min" else -1.0) for value, goal in zip(values, goals, strict=True)]
    return np.nan_to_num(np.stack(signed, axis=1), nan=np.inf, posinf=np.inf, neginf=-np.inf)


def ranked(table: pa.Table, brief: Brief, depth: int) -> pa.Table:
    """Return who can still be shortlisted, in order: the front, or the first `depth` of each family.

    Of each only number, family and what ranks it: a front may be most of millions.
    """
    table = table.select(
        dict.fromkeys(["candidate", "family", *(g.column for g in brief.goals if g.column in table.column_names)])
    )
    keys = goal_keys([number_column(table, goal.column) for goal in brief.goals], brief.goals)
    order = np.lexsort((table["candidate"].to_numpy(), *keys.T[::-1]))
    if brief.front:
        return table.take(pa.array(order[pareto(keys[order])]))
    families = np.asarray(table["family"].to_pandas())[order]
    chosen = np.zeros(len(order), bool)
    for name in set(families):
        chosen[np.flatnonzero(families == name)[:depth]] = True
    return table.take(pa.array(order[chosen]))


def pareto(keys: Array) -> Index:
    """Return the rows of keys (m, g), sorted lexicographically, that no other row equals or beats in every column.

    All columns are minimised; of equal rows the first stays. In lexicographic order nothing later can beat what came
    before, so blocks of rows are held against the front so far, then against themselves.
    """
    if keys.shape[1] == 2 and len(keys):
        second = keys[:, 1]
        better = second[1:] < np.minimum.accumulate(second)[:-1]
        return np.flatnonzero(np.concatenate([[True], better]))
    front, best = [np.empty(0, np.int64)], np.empty((0, keys.shape[1]))
    for start in range(0, len(keys), BLOCK):
        block = keys[start : start + BLOCK]
        alive = np.flatnonzero(~_beaten(best, block))
        block = block[alive]
        before = np.triu(np.ones((len(block), len(block)), bool), 1)
        stay = ~((block[:, None] <= block[None]).all(axis=-1) & before).any(axis=0)
        front.append(start + alive[stay])
        best = np.concatenate([best, block[stay]])
    return np.concatenate(front)


def _beaten(best: Array, block: Array) -> NDArray[np.bool_]:
    """Say which rows of a block (b, g) some row of the best (f, g) equals or beats."""
    found = np.zeros(len(block), bool)
    for start in range(0, len(best), 16 * BLOCK):
        found |= (best[start : start + 16 * BLOCK, None] <= block[None]).all(axis=-1).any(axis=0)
    return found


def nearest(table: pa.Table, brief: Brief) -> pa.Table:
    """Return the candidates that come nearest: not rejected, the smallest sum of misses over each limit's scale."""
    total = np.zeros(len(table))
    for limit in brief.limits:
        total += number_column(table, f"miss_{limit.column}") / limit.scale
    sound = np.asarray(table["verdict"].to_pandas() != "reject")
    total = np.where(np.isfinite(total) & sound, total, np.inf)
    order = np.lexsort((table["candidate"].to_numpy(), total))[:NEAREST]
    return table.take(pa.array(order[np.isfinite(total[order])]))


def tally(table: pa.Table, brief: Brief) -> Tally:
    """Return the counts of some candidates."""
    families, reasons = Counter[tuple[str, str]](), Counter[str]()
    meets = table["meets"].to_numpy()
    family, verdict = (table[name].combine_chunks().dictionary_encode() for name in ("family", "verdict"))
    codes = family.indices.to_numpy()
    for code, name in enumerate(family.dictionary.to_pylist()):
        mine = codes == code
        families[name, "candidates"] += int(mine.sum())
        families[name, "meets"] += int((mine & meets).sum())
        for level, word in enumerate(verdict.dictionary.to_pylist()):
            families[name, word] += int((mine & (verdict.indices.to_numpy() == level)).sum())
    for entry in table["reasons"].value_counts():
        for code in entry["values"].as_py().split():
            reasons[code] += entry["counts"].as_py()
    columns = [limit.column for limit in brief.limits]
    misses = [~(number_column(table, f"miss_{name}") == 0.0) for name in columns]
    missed = np.array(misses, bool).reshape(len(columns), len(table))
    alone = missed & (missed.sum(axis=0) == 1)
    counts = (Counter(dict(zip(columns, mask.sum(axis=1).tolist(), strict=True))) for mask in (missed, alone))
    return Tally(families, reasons, *counts)


def hashed(number: Index) -> NDArray[np.uint64]:
    """Return well mixed 64-bit numbers (Steele, Lea & Flood 2014, the finaliser of SplitMix)."""
    x = number.astype(np.uint64) * np.uint64(0x9E3779B97F4A7C15)
    x = (x ^ (x >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    x = (x ^ (x >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return x ^ (x >> np.uint64(31))


def sampled(table: pa.Table, size: int) -> pa.Table:
    """Return the `size` candidates of lowest hash of those that meet the brief, and of those that do not."""
    meets, chance = table["meets"].to_numpy(), hashed(table["candidate"].to_numpy())
    keep = []
    for mine in (np.flatnonzero(meets), np.flatnonzero(~meets)):
        keep.append(mine if len(mine) <= size else mine[np.argpartition(chance[mine], size - 1)[:size]])
    return table if sum(map(len, keep)) == len(table) else table.take(pa.array(np.sort(np.concatenate(keep))))


def digest(table: pa.Table, brief: Brief, depth: int) -> Digest:
    """Return what a part leaves behind; `depth` is how many of a family may still be shortlisted."""
    charted = [name for name in ("candidate", "family", "meets", *CHARTED) if name in table.column_names]
    met = table.filter(table["meets"])
    return Digest([ranked(met, brief, depth)], [nearest(table, brief)], tally(table, brief),
                  [sampled(table.select(charted), SAMPLE)])  # fmt: skip


class Ranking:
    """The digests of a run as they come, merged; bounded by the front or the k best, NEAREST and SAMPLE."""

    def __init__(self, brief: Brief, depth: int) -> None:
        self.brief, self.depth = brief, depth
        self._kept = Digest([], [], Tally(), [])

    def add(self, found: Digest) -> None:
        """Take the digest of one more part."""
        kept = self._kept
        kept.tally.add(found.tally)
        for mine, more in ((kept.best, found.best), (kept.near, found.near), (kept.sample, found.sample)):
            mine += more
        self._settle(kept)

    def _settle(self, kept: Digest, *, now: bool = False) -> None:
        """Merge what has gathered, once it is as much again as what was kept: the work stays in proportion."""
        if now or _loose(kept.best) > max(LOOSE, len(kept.best[0])):
            kept.best = [ranked(_joined(kept.best), self.brief, self.depth)]
        if now or _loose(kept.near) > LOOSE:
            kept.near = [nearest(_joined(kept.near), self.brief)]
        if now or _loose(kept.sample) > SAMPLE:
            kept.sample = [sampled(_joined(kept.sample), SAMPLE)]

    def result(self) -> Digest:
        """Return the digest of all parts so far, each list one table: best in rank, sample by candidate number."""
        self._settle(self._kept, now=True)
        kept = self._kept
        kept.sample = [kept.sample[0].sort_by("candidate")]
        return kept

    def falls(self) -> tuple[Fall, ...]:
        """Return how many fell to each limit."""
        counts = self._kept.tally
        return tuple(Fall(limit, counts.missed[limit.column], counts.alone[limit.column])
                     for limit in self.brief.limits)  # fmt: skip


def _loose(tables: list[pa.Table]) -> int:
    return sum(map(len, tables[1:]))


def _joined(tables: list[pa.Table]) -> pa.Table:
    return pa.concat_tables(tables).unify_dictionaries().combine_chunks()


def check_goals(names: Sequence[str], brief: Brief) -> None:
    """Raise InputError for a goal that no candidate has a column for."""
    missing = [goal.column for goal in brief.goals if goal.column not in names]
    if missing:
        raise InputError(f"No candidate family has the column '{missing[0]}' to rank by; rank by another column")


def shortlist(meeting: pd.DataFrame, brief: Brief, *, times: int = 1) -> pd.DataFrame:
    """Return the ranked rows to keep: at most `per_family` of a family, `keep` in all; ties by candidate number.

    In order of rank, or of a Pareto front spread evenly over it. A candidate without a value to rank by counts as the
    worst. With `times`, so many times as many are kept.
    """
    check_goals([str(name) for name in meeting.columns], brief)
    keys = goal_keys([meeting[goal.column].to_numpy(float) for goal in brief.goals], brief.goals)
    order = np.lexsort((meeting["candidate"].to_numpy(), *keys.T[::-1]))
    if brief.front:
        order = order[pareto(keys[order])]
    families = meeting["family"].to_numpy()[order]
    chosen = np.zeros(len(order), bool)
    for name in set(families):
        chosen[_kept(np.flatnonzero(families == name), times * brief.per_family, evenly=brief.front)] = True
    order = _kept(order[chosen], times * brief.keep, evenly=brief.front)
    found = meeting.iloc[order].reset_index(drop=True)
    found.insert(0, "rank", np.arange(1, len(found) + 1))
    return found


def _kept(rows: Index, most: int, *, evenly: bool) -> Index:
    """Return at most so many of the ranked rows: the first, or spread evenly over them, so that both ends stay."""
    if len(rows) <= most or not evenly:
        return rows[:most]
    return np.asarray(rows[np.linspace(0, len(rows) - 1, most).round().astype(int)])


def sample_frame(found: Digest) -> pd.DataFrame:
    """Return the sample of a settled digest as a DataFrame."""
    return frame(found.sample[0])
