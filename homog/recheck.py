"""The second look: the best candidates of a screen again, each as the solid of its true section.

Solids take half a second each, so they run in processes of their own, a cell a task. A cell that cannot be meshed costs
itself a note, not the run. What has no section of its own (turning units, sheets, struts) keeps the numbers it has.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor, as_completed
from concurrent.futures.process import BrokenProcessPool
from dataclasses import dataclass
from multiprocessing import get_context
from typing import Any

import numpy as np

from homog.columns import evaluate
from homog.effective import homogenize
from homog.errors import HomogError, MissingExtra
from homog.families import family
from homog.materials import Material

MOST = 60
"""Candidates that are looked at again at most, whatever is kept."""
LOOKS = 2
"""Candidates that are looked at again for each that is kept."""


@dataclass(frozen=True)
class Task:
    """One candidate: its family, its parameters (numbers and words by name), its parent, the size of the part."""

    family: str
    given: Mapping[str, Any]
    material: Material
    part: tuple[float, ...] = ()


def has_section(task: Task) -> bool:
    """Say whether a candidate is planar and all walls, so that it has a section to be taken as a solid."""
    cell = family(task.family).build(task.given, task.material)
    return cell.kind == "planar" and all(block.kind == "wall" for block in cell.blocks)


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
        effective = homogenize(family(task.family).build(task.given, task.material), model="solid")
    except HomogError as fault:
        return " ".join(str(fault).split())
    return {name: np.ravel(values)[0] for name, values in evaluate(effective, part=task.part).items()}


def looks(
    tasks: Sequence[Task], *, workers: int = 0, progress: Callable[[int], None] | None = None
) -> list[dict[str, Any] | str]:
    """Return `look` of every task, in their order.

    Parameters
    ----------
    tasks : sequence of Task
    workers : int
        Processes; 0 for one a core, 1 for none beside this one.
    progress : callable, optional
        Called with 1 for every task that is done.
    """
    count = min(workers or os.cpu_count() or 1, len(tasks))
    if count <= 1:
        alone = []
        for task in tasks:
            alone.append(look(task))
            if progress is not None:
                progress(1)
        return alone
    found, lost = _gathered(tasks, range(len(tasks)), count, progress)
    for place in lost:  # some cell took its process down and the others with it: each alone, to tell which
        again, stopped = _gathered(tasks, [place], 1, progress)
        found[place] = "the solver's process died" if stopped else again[place]
    return [found[place] for place in range(len(tasks))]


def _gathered(
    tasks: Sequence[Task], places: Sequence[int], workers: int, progress: Callable[[int], None] | None
) -> tuple[dict[int, dict[str, Any] | str], list[int]]:
    """Return what `look` finds for the tasks at some places, and the places that were lost with a process."""
    found: dict[int, dict[str, Any] | str] = {}
    lost = []
    # a fresh process: the mesher keeps a state of its own that does not survive a fork
    with ProcessPoolExecutor(workers, mp_context=get_context("spawn")) as pool:
        pending = {pool.submit(look, tasks[place]): place for place in places}
        for future in as_completed(pending):
            try:
                found[pending[future]] = future.result()
            except BrokenProcessPool:
                lost.append(pending[future])
                continue
            if progress is not None:
                progress(1)
    return found, sorted(lost)
