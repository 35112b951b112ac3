"""The second look: the best candidates of a screen again, each as the solid of its true section.

Solids take half a second each, so they run in processes of their own, a cell a task. A cell that cannot be meshed costs
itself a note, not the run. What has no section of its own (turning units, sheets, struts) keeps the numbers it has.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor, as_completed
from concurrent.futures.process import BrokenProcessPool
from dataclasses import dataclass, field
from multiprocessing import get_context
from typing import TYPE_CHECKING, Any

import numpy as np
from threadpoolctl import threadpool_limits

from homog.brief import Brief
from homog.columns import evaluate
from homog.effective import homogenize
from homog.engine import cores, start_worker
from homog.errors import HomogError, MissingExtra
from homog.families import FAMILIES, family
from homog.materials import Material
from homog.screening import records

if TYPE_CHECKING:
    import pandas as pd

MOST = 60
"""Candidates that are looked at again at most, whatever is kept: the best of them."""
SCREENED = ("E1_MPa", "E2_MPa", "G12_MPa", "nu12", "nu21")
"""Columns that keep the screen's number beside the solid's, as `screened_NAME`."""


Look = Callable[["Task"], "dict[str, Any] | str"]


@dataclass(frozen=True)
class Task:
    """One candidate: its family, parameters (numbers and words by name), parent, and what columns may know."""

    family: str
    given: Mapping[str, Any]
    material: Material
    known: Mapping[str, Any] = field(default_factory=dict)


def has_section(task: Task) -> bool:
    """Say whether a candidate is planar and all walls, so that it has a section to be taken as a solid."""
    cell = family(task.family).build(task.given, task.material)
    return cell.kind == "planar" and all(block.kind == "wall" for block in cell.blocks)


def given(row: Mapping[str, Any]) -> dict[str, Any]:
    """Return the family's parameters of one row of a table."""
    return {p.name: row[p.column] for p in FAMILIES[row["family"]].parameters}


def second_look(
    best: pd.DataFrame, brief: Brief, *, workers: int = 0, progress: Callable[[int], None] | None = None
) -> pd.DataFrame:
    """Return the rows of a ranking with the columns of their solids, and judged again.

    Rows of planar walls, MOST of them at most, get every column, `misses` and `meets` from the solid. `screened_...`
    keeps what the screen had and its model, and `note` says in a line why a solid could not be had.

    Parameters
    ----------
    best : DataFrame
        Rows as the screen has them, best first.
    brief : Brief
    workers, progress : as `looks`
    """
    again = best.reset_index(drop=True)
    for name in SCREENED:
        again[f"screened_{name}"] = again.get(name, np.nan)
    again["screened_model"], again["note"] = again["model"], ""
    tasks = {
        place: Task(str(row["family"]), given(row), brief.material, brief.known)
        for place, row in enumerate(records(best.head(MOST)))
    }
    tasks = {place: task for place, task in tasks.items() if has_section(task)}
    found = looks(list(tasks.values()), workers=workers, progress=progress)
    for place, answer in zip(tasks, found, strict=True):
        if isinstance(answer, str):
            again.loc[place, "note"] = answer
            continue
        misses = {limit.column: float(limit.miss(np.array(answer.get(limit.column, np.nan)))) for limit in brief.limits}
        missed = [name for name, miss in misses.items() if miss != 0.0]
        judged = {
            **{f"miss_{name}": miss for name, miss in misses.items()},
            "misses": " ".join(missed),
            "meets": not missed and answer["verdict"] != "reject",
        }
        for name, value in {**answer, **judged}.items():
            if name in again:
                again.loc[place, name] = value
    return again


def missing_extra() -> str:
    """Return why solids cannot be had here, or nothing."""
    try:
        import gmsh  # noqa: F401
        import shapely  # noqa: F401
    except (ImportError, OSError) as fault:  # OSError: a library of the system that the mesher needs is not there
        return f"{MissingExtra('The second look', 'solid')} ({fault})"
    return ""


def look(task: Task) -> dict[str, Any] | str:
    """Return every column of a candidate from its solid, or in a line why there is none."""
    try:
        with threadpool_limits(1):  # there are as many of these as cores
            effective = homogenize(family(task.family).build(task.given, task.material), model="solid")
    except HomogError as fault:
        return " ".join(str(fault).split())
    return {name: np.ravel(values)[0] for name, values in evaluate(effective, **task.known).items()}


def looks(
    tasks: Sequence[Task], *, workers: int = 0, progress: Callable[[int], None] | None = None, what: Look = look
) -> list[dict[str, Any] | str]:
    """Return `look` of every task, in their order.

    Parameters
    ----------
    tasks : sequence of Task
    workers : int
        Processes; 0 for one a core, 1 for none beside this one.
    progress : callable, optional
        Called with 1 for every task that is done.
    what : callable
        What is done with each task.
    """
    count = min(workers or cores(), len(tasks))
    if count <= 1:
        alone = []
        for task in tasks:
            alone.append(what(task))
            if progress is not None:
                progress(1)
        return alone
    found, lost = _gathered(tasks, range(len(tasks)), count, progress, what)
    for place in lost:  # some cell took its process down and the others with it: each alone, to tell which
        again, stopped = _gathered(tasks, [place], 1, progress, what)
        found[place] = "the solver's process died" if stopped else again[place]
    return [found[place] for place in range(len(tasks))]


def _gathered(
    tasks: Sequence[Task], places: Sequence[int], workers: int, progress: Callable[[int], None] | None, what: Look
) -> tuple[dict[int, dict[str, Any] | str], list[int]]:
    """Return what `look` finds for the tasks at some places, and the places that were lost with a process."""
    found: dict[int, dict[str, Any] | str] = {}
    lost = []
    # a fresh process: the mesher keeps a state of its own that does not survive a fork
    with ProcessPoolExecutor(workers, mp_context=get_context("spawn"), initializer=start_worker) as pool:
        pending = {pool.submit(what, tasks[place]): place for place in places}
        for future in as_completed(pending):
            try:
                found[pending[future]] = future.result()
            except BrokenProcessPool:
                lost.append(pending[future])
                continue
            if progress is not None:
                progress(1)
    return found, sorted(lost)
