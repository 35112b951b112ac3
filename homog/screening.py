"""Candidates to rows to verdict to ranking, part by part.

A candidate meets the brief if it keeps every limit and nothing rejects it. Those that do are ranked by the brief's
columns in order, or only the Pareto front of them is kept; if none does, the nearest are those with the smallest sum of
misses, each relative to its limit. Only the best, the nearest, counts and a sample stay in memory (`ranking`); the
candidates themselves go to `parts` (`store`).
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import nullcontext
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa

from homog.brief import Brief
from homog.columns import columns_of
from homog.engine import Job, Plan, Workers, results, started
from homog.ranking import Fall, Ranking, Tally, check_goals, digest, sample_frame, shortlist
from homog.store import Memory, Nowhere, Parts, decoded, frame

if TYPE_CHECKING:
    import pandas as pd

Progress = Callable[[int], None]
Second = Callable[["pd.DataFrame", Brief], "pd.DataFrame"]
LOOKS = 2
"""Candidates that a second look gets for each that is kept."""


@dataclass(frozen=True, eq=False)
class Screening:
    """What a brief came to: the shortlist (best first), the nearest if none meets, counts, a sample, the parts."""

    brief: Brief
    shortlist: pd.DataFrame
    nearest: pd.DataFrame
    falls: tuple[Fall, ...]
    tally: Tally
    sample: pd.DataFrame
    parts: Parts
    looked: pd.DataFrame | None = None
    """What a second look made of the best, in the screen's order; those that no longer meet the brief too."""

    @property
    def met(self) -> int:
        """How many candidates meet the brief."""
        return self.tally.total("meets")

    @property
    def counts(self) -> dict[str, tuple[int, int]]:
        """How many candidates each family has, and how many of them meet the brief."""
        found = self.tally.families
        return {name: (found[name, "candidates"], found[name, "meets"]) for name in dict.fromkeys(n for n, _ in found)}

    def tables(self) -> Iterator[pa.Table]:
        """Yield every candidate's row, part by part in order."""
        return (self.parts.get(number) for number in self.parts.done())

    @property
    def candidates(self) -> pd.DataFrame:
        """Every candidate, one row each; all of them have to fit into memory."""
        return frame(pa.concat_tables(self.tables()).unify_dictionaries())


def screen(brief: Brief) -> pd.DataFrame:
    """Return the shortlist of a brief, best first, one row a candidate; empty if nothing meets it."""
    return run_screen(brief, parts=Nowhere()).shortlist


def run_screen(
    brief: Brief, *, parts: Parts | None = None, using: Workers | None = None, progress: Progress | None = None,
    second: Second | None = None,
) -> Screening:  # fmt: skip
    """Return the ranking of a brief, and leave its candidates in `parts`.

    Parameters
    ----------
    brief : Brief
    parts : Parts, optional
        Where the candidates go: `store.Memory()` unless given, a `store.Folder`, or `store.Nowhere()`. Parts that are
        there already are not computed again.
    using : Workers, optional
        What computes (`engine.started`); this process unless given.
    progress : callable, optional
        Called with the number of candidates done since the last call.
    second : callable, optional
        A second look: gets LOOKS times the shortlist and the brief, and returns those rows with what it changed
        (`meets` too); what still meets is ranked again.
    """
    parts = Memory() if parts is None else parts
    looks = 1 if second is None else LOOKS
    job = Job(Plan(brief), looks * min(brief.per_family, brief.keep))
    check_goals(job.plan.schema.names, brief)
    ranking = Ranking(brief, job.depth)
    there = parts.done()
    for number in there:
        table = parts.get(number)
        ranking.add(digest(table, brief, job.depth))
        if progress is not None:
            progress(len(table))
    missing = _others(job.plan, there)
    context = started(1, parts=len(job.plan)) if using is None else nullcontext(using)
    with context as ready:
        for done in results(job, missing, ready):
            parts.put(done.number, done.data)
            ranking.add(done.digest)
            if progress is not None:
                progress(done.rows)
    found = ranking.result()
    best, looked = _whole(shortlist(frame(found.best[0]), brief, times=looks), job, parts), None
    if second is not None and len(best):
        looked = second(best, brief)
        best = shortlist(looked[looked["meets"]].drop(columns="rank"), brief)
    near, sample = frame(found.near[0]), sample_frame(found)
    return Screening(brief, best, near, ranking.falls(), found.tally, sample, parts, looked)


def _whole(best: pd.DataFrame, job: Job, parts: Parts) -> pd.DataFrame:
    """Return the whole rows of ranked candidates, from their parts; those that nobody kept are computed again."""
    numbers, there, found = best["candidate"].to_numpy(), set(parts.done()), []
    held = np.array([job.plan.holding(int(number)) for number in numbers], np.int64)
    for part in np.unique(held).tolist():
        table = parts.get(part) if part in there else job.part(part)
        found.append(table.take(pa.array(numbers[held == part] - job.plan[part].first)))
    if not found:
        found = [job.plan.schema.empty_table()]
    rows = frame(pa.concat_tables(found).unify_dictionaries()).set_index("candidate", drop=False)
    rows = rows.loc[numbers].reset_index(drop=True)
    rows.insert(0, "rank", best["rank"].to_numpy())
    return rows


def _others(plan: Plan, there: list[int]) -> Iterator[int]:
    have = set(there)
    return (number for number in range(len(plan)) if number not in have)


def sweep_tables(
    plan: Plan, using: Workers, *, progress: Progress | None = None
) -> tuple[Iterator[pa.Table], pa.Schema]:
    """Return the candidates of one family in order, part by part, as `Effective.table` has them, and their schema."""
    first = plan.brief.candidates[0].family
    names = ["family", *(p.column for p in first.parameters), *columns_of(first.kind)]

    def tables() -> Iterator[pa.Table]:
        for done in results(Job(plan, 1), range(len(plan)), using, in_order=True):
            yield decoded(done.data).select(names)
            if progress is not None:
                progress(done.rows)

    return tables(), pa.schema([plan.schema.field(name) for name in names], metadata=plan.schema.metadata)


def records(table: pd.DataFrame) -> list[dict[str, Any]]:
    """Return the rows of a table as dictionaries by column name."""
    return [{str(name): value for name, value in row.items()} for row in table.to_dict("records")]
