"""Candidates to rows to verdict to ranking, chunk by chunk.

A candidate meets the brief if it keeps every limit and nothing rejects it. Those that do are ranked by the brief's
columns in order, or only the Pareto front of them is kept; if none does, the nearest are those with the smallest sum of
misses, each relative to its limit.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from homog.brief import Brief, Candidates, Goal, Limit
from homog.columns import COLUMNS, evaluate, listed
from homog.effective import homogenize
from homog.errors import InputError

if TYPE_CHECKING:
    import pandas as pd

CHUNK = 8192
NEAREST = 5
LEADING = ("candidate", "family", "meets", "misses", "verdict", "reasons")

Progress = Callable[[int], None]


@dataclass(frozen=True, eq=False)
class Fall:
    """How many candidates missed one limit, and how many missed that limit alone."""

    limit: Limit
    missed: int
    alone: int


@dataclass(frozen=True, eq=False)
class Screening:
    """What a brief came to: every candidate, the shortlist (best first), the nearest if none meets, and the falls."""

    brief: Brief
    candidates: pd.DataFrame
    shortlist: pd.DataFrame
    nearest: pd.DataFrame
    falls: tuple[Fall, ...]

    @property
    def met(self) -> int:
        """How many candidates meet the brief."""
        return int(self.candidates["meets"].sum())


def screen(brief: Brief) -> pd.DataFrame:
    """Return the shortlist of a brief, best first, one row a candidate; empty if nothing meets it."""
    return run_screen(brief).shortlist


def run_screen(brief: Brief, *, progress: Progress | None = None) -> Screening:
    """Return every candidate of a brief with its columns, verdict and misses, and the ranking.

    Parameters
    ----------
    brief : Brief
    progress : callable, optional
        Called with the number of candidates done since the last call.
    """
    import pandas as pd

    parts: list[pd.DataFrame] = []
    for number, source, given in chunks(brief):
        part = pd.DataFrame(rows(brief, source, given))
        part.insert(0, "candidate", np.arange(number, number + len(part)))
        parts.append(part)
        if progress is not None:
            progress(len(part))
    table = ordered(pd.concat(parts, ignore_index=True))
    names = [f"miss_{limit.column}" for limit in brief.limits]
    missed = ~(table[names].to_numpy(float) == 0.0)
    falls = tuple(
        Fall(limit, int(missed[:, i].sum()), int((missed[:, i] & (missed.sum(axis=1) == 1)).sum()))
        for i, limit in enumerate(brief.limits)
    )
    meeting = table[table["meets"]]
    return Screening(brief, table, shortlist(meeting, brief), _nearest(table, brief), falls)


def chunks(brief: Brief, size: int = CHUNK) -> Iterator[tuple[int, Candidates, dict[str, Any]]]:
    """Yield (number of the first candidate, their source, their parameters), at most `size` at a time."""
    number = 1
    for source in brief.candidates:
        for start in range(0, source.count, size):
            yield number + start, source, source.take(start, start + size)
        number += source.count


def rows(brief: Brief, source: Candidates, given: dict[str, Any]) -> dict[str, Any]:
    """Return all columns of some candidates, with `meets`, `misses` and the miss of each limit, flat arrays by name."""
    cell = source.family.build({name: np.atleast_1d(v) if not isinstance(v, str) else v for name, v in given.items()},
                               brief.material)  # fmt: skip
    tolerance = brief.process.wall_tolerance_mm
    out = evaluate(homogenize(cell, model=brief.model), part=brief.part, tolerance=tolerance)
    count = len(out["family"])
    missed = {}
    for limit in brief.limits:
        miss = limit.miss(out.get(limit.column, np.full(count, np.nan)))
        out[f"miss_{limit.column}"] = miss
        missed[limit.column] = ~(miss == 0.0)
    out["misses"] = listed(missed, count)
    out["meets"] = (out["misses"] == "") & (out["verdict"] != "reject")
    return out


def ordered(table: pd.DataFrame) -> pd.DataFrame:
    """Return the table with its columns in reading order: who, verdict, parameters, quantities, misses."""
    names = [str(name) for name in table.columns]
    misses = [name for name in names if name.startswith("miss_")]
    parameters = [name for name in names if name not in COLUMNS and name not in LEADING and name not in misses]
    quantities = [name for name in COLUMNS if name in names and name not in LEADING]
    return table[[*LEADING, *parameters, *quantities, *misses]]


def _sort_keys(table: pd.DataFrame, goals: Sequence[Goal]) -> NDArray[np.float64]:
    """Return the goals' values as columns to be minimised, NaN last."""
    values = [table[g.column].to_numpy(float) * (1.0 if g.better == "min" else -1.0) for g in goals]
    return np.nan_to_num(np.stack(values, axis=1), nan=np.inf, posinf=np.inf, neginf=-np.inf)


def records(table: pd.DataFrame) -> list[dict[str, Any]]:
    """Return the rows of a table as dictionaries by column name."""
    return [{str(name): value for name, value in row.items()} for row in table.to_dict("records")]


def shortlist(meeting: pd.DataFrame, brief: Brief) -> pd.DataFrame:
    """Return the ranked rows to keep: at most `per_family` of a family, `keep` in all; ties by candidate number.

    In order of rank, or of a Pareto front spread evenly over it. A candidate without a value to rank by counts as the
    worst.
    """
    missing = [g.column for g in brief.goals if g.column not in meeting]
    if missing:
        raise InputError(f"No candidate family has the column '{missing[0]}' to rank by; rank by another column")
    keys = _sort_keys(meeting, brief.goals)
    order = np.lexsort((meeting["candidate"].to_numpy(), *keys.T[::-1]))
    if brief.front:
        order = order[pareto(keys[order])]
    families = meeting["family"].to_numpy()[order]
    chosen = np.zeros(len(order), bool)
    for name in set(families):
        chosen[_kept(np.flatnonzero(families == name), brief.per_family, evenly=brief.front)] = True
    order = _kept(order[chosen], brief.keep, evenly=brief.front)
    found = meeting.iloc[order].reset_index(drop=True)
    found.insert(0, "rank", np.arange(1, len(found) + 1))
    return found


def _kept(rows: NDArray[np.int64], most: int, *, evenly: bool) -> NDArray[np.int64]:
    """Return at most so many of the ranked rows: the first, or spread evenly over them, so that both ends stay."""
    if len(rows) <= most or not evenly:
        return rows[:most]
    return np.asarray(rows[np.linspace(0, len(rows) - 1, most).round().astype(int)])


def pareto(keys: NDArray[np.float64]) -> NDArray[np.int64]:
    """Return the rows of keys (m, g), sorted lexicographically, that no other row equals or beats in every column.

    All columns are minimised; of equal rows the first stays. In lexicographic order nothing later can beat what came
    before, so one pass against the front so far is enough.
    """
    if keys.shape[1] == 2 and len(keys):
        second = keys[:, 1]
        better = second[1:] < np.minimum.accumulate(second)[:-1]
        return np.flatnonzero(np.concatenate([[True], better]))
    front: list[int] = []
    best = np.empty((0, keys.shape[1]))
    for i, row in enumerate(keys):
        if not (best <= row).all(axis=1).any():
            front.append(i)
            best = keys[front]
    return np.asarray(front, np.int64)


def _nearest(table: pd.DataFrame, brief: Brief) -> pd.DataFrame:
    """Return the candidates that come nearest: not rejected, the smallest sum of misses over each limit's scale."""
    total = np.zeros(len(table))
    for limit in brief.limits:
        total += table[f"miss_{limit.column}"].to_numpy(float) / limit.scale
    total = np.where(np.isfinite(total) & (table["verdict"] != "reject").to_numpy(), total, np.inf)
    order = np.argsort(total, kind="stable")[:NEAREST]
    return table.iloc[order[np.isfinite(total[order])]].reset_index(drop=True)
