"""The engine: a brief in parts, each part computed from its number alone, here, in other processes or on a cluster.

A part is some candidates of one family, so many as fit the memory that a part may take; that depends on the brief only,
so parts are the same whatever computes them. A worker returns a part as the bytes of its file and its digest. Whatever
runs the parts is a `concurrent.futures.Executor`; no more of them are under way than it has use for.
"""

from __future__ import annotations

import bisect
import functools
import multiprocessing
import os
import pickle
import signal
import threading
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import (
    FIRST_COMPLETED,
    BrokenExecutor,
    CancelledError,
    Executor,
    Future,
    ProcessPoolExecutor,
    wait,
)
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import pyarrow as pa
from threadpoolctl import threadpool_limits

from homog.assembly import freedoms, strain_count
from homog.brief import Brief
from homog.candidates import Candidates
from homog.columns import quantities
from homog.effective import DENSE_LIMIT, homogenize
from homog.errors import HomogError, InputError, MissingExtra
from homog.ranking import Digest, digest
from homog.results import Words, listed
from homog.store import SCHEMA, encoded, schema, sha256, tabled
from homog.version import __version__

MOST_ROWS, LEAST_ROWS = 16_384, 16
PART_ENTRIES = 2**22
"""Numbers that the widest arrays of one part may hold, 32 MiB each."""
COLUMN_ENTRIES, ELEMENT_ENTRIES, DIRECTION_ENTRIES, SOLID_ENTRIES = 64, 16, 2**13, 2**18
"""What a candidate's columns, an element, the directions of a spatial cell, and a solid take of it."""
SERIAL_PARTS = 8
"""Parts for each worker below which starting one more does not pay."""


@dataclass(frozen=True)
class Part:
    """Some candidates of one source: start to stop - 1 of it; the first has the number `first` in the brief."""

    source: Candidates
    start: int
    stop: int
    first: int


class Plan:
    """A brief's parts, numbered from 0, made when they are asked for."""

    def __init__(self, brief: Brief) -> None:
        self.brief = brief
        self.sizes = [part_rows(source, brief) for source in brief.candidates]
        self._parts, self._rows = [0], [0]
        for source, size in zip(brief.candidates, self.sizes, strict=True):
            self._parts.append(self._parts[-1] - (-source.count // size))
            self._rows.append(self._rows[-1] + source.count)

    def __len__(self) -> int:
        return self._parts[-1]

    def __getitem__(self, number: int) -> Part:
        which = bisect.bisect_right(self._parts, number) - 1
        source, size = self.brief.candidates[which], self.sizes[which]
        start = (number - self._parts[which]) * size
        return Part(source, start, min(start + size, source.count), self._rows[which] + start + 1)

    def holding(self, candidate: int) -> int:
        """Return the number of the part that holds a candidate, by the candidate's number in the brief (from 1)."""
        which = bisect.bisect_right(self._rows, candidate - 1) - 1
        return self._parts[which] + (candidate - 1 - self._rows[which]) // self.sizes[which]

    def about(self) -> dict[str, Any]:
        """Return what a run is of, as plain values: the same for the same brief and version."""
        brief = self.brief
        return {
            "program": "homog-cells", "version": __version__, "schema": SCHEMA, "title": brief.title,
            "brief_sha256": sha256(brief.text), "model": brief.model, "material": brief.material.name,
            "seeds": sorted({source.seed for source in brief.candidates if source.sampled}),
            "candidates": brief.count, "parts": len(self), "sizes": self.sizes,
            "note": "Linear, small strain, infinite perfect lattice, room temperature. Screening only, not design "
            "evidence.",
        }  # fmt: skip

    @cached_property
    def schema(self) -> pa.Schema:
        """The schema of every part."""
        return schema(self.brief, self.about())


def part_rows(source: Candidates, brief: Brief) -> int:
    """Return how many candidates of a source make a part: a power of two that the size of the cell decides."""
    cell = source.family.build(_batched(source, source.take(0, 1)), brief.material)
    size = freedoms(cell).count + strain_count(cell.kind)
    entries = COLUMN_ENTRIES + min(size, DENSE_LIMIT) ** 2 + ELEMENT_ENTRIES * sum(len(b) for b in cell.blocks)
    entries += DIRECTION_ENTRIES * (cell.kind == "spatial") + SOLID_ENTRIES * (brief.model == "solid")
    entries += max(size - DENSE_LIMIT, 0) * DENSE_LIMIT
    return int(np.clip(2 ** int(np.log2(PART_ENTRIES / entries)), LEAST_ROWS, MOST_ROWS))


def _batched(source: Candidates, given: dict[str, Any]) -> dict[str, Any]:
    """Return parameters of which at least one is an array, so that a bad cell is a row and not an error."""
    if any(not isinstance(value, str) for value in given.values()):
        return given
    first = next(p for p in source.family.parameters if not isinstance(p.default, str))
    return {**given, first.name: np.array([first.default])}


def rows(brief: Brief, part: Part) -> dict[str, Any]:
    """Return all columns of a part's candidates, with `meets`, `misses` and the miss of each limit, by name."""
    given = _batched(part.source, part.source.take(part.start, part.stop))
    cell = part.source.family.build(given, brief.material)
    out: dict[str, Any] = quantities(homogenize(cell, model=brief.model), **brief.known)
    count = part.stop - part.start
    missed = {}
    for limit in brief.limits:
        miss = limit.miss(out.get(limit.column, np.full(count, np.nan)))
        out[f"miss_{limit.column}"] = miss
        missed[limit.column] = ~(miss == 0.0)
    verdict: Words = out["verdict"]
    rejected = np.array([word == "reject" for word in verdict.words])[verdict.codes]
    out["misses"] = listed(missed, count)
    out["meets"] = ~np.logical_or.reduce([*missed.values(), rejected])
    out["candidate"] = np.arange(part.first, part.first + count)
    for name, value in part.source.words.items():
        out[part.source.family.parameter(name).column] = Words(np.zeros(count, np.int64), (value,))
    return out


@dataclass(frozen=True, eq=False)
class Job:
    """What a worker has to know: the brief in its parts, and how deep the ranking of each family goes."""

    plan: Plan
    depth: int

    def part(self, number: int) -> pa.Table:
        """Compute one part."""
        return tabled(rows(self.plan.brief, self.plan[number]), self.plan.schema)


@dataclass(frozen=True, eq=False)
class Done:
    """A part that was computed: its number, its rows, the bytes of its file, its digest."""

    number: int
    rows: int
    data: bytes
    digest: Digest


def compute(packed: bytes, number: int, version: str = __version__) -> Done:
    """Compute one part of a packed job; this is what workers run."""
    if version != __version__:
        raise HomogError(f"A worker has homog-cells {__version__}, this is {version}; install the same there")
    job = _unpacked(packed)
    table = job.part(number)
    return Done(number, len(table), encoded(table), digest(table, job.plan.brief, job.depth))


@functools.lru_cache(maxsize=4)
def _unpacked(packed: bytes) -> Job:
    job: Job = pickle.loads(packed)
    return job


def compute_alone(packed: bytes, number: int, version: str) -> Done:
    """Compute one part in a process that is a worker and nothing else: its numerical libraries keep to one thread."""
    _one_thread()
    return compute(packed, number, version)


@functools.cache
def _one_thread() -> Any:
    # once and for all: tasks that run side by side in a process would undo each other's limits
    return threadpool_limits(1)


@dataclass(frozen=True, eq=False)
class Workers:
    """An executor, the task to give it, and how many of them it has use for at a time."""

    executor: Executor
    task: Callable[[bytes, int, str], Done]
    wanted: Callable[[], int]
    words: str


class Here(Executor):
    """An executor that does the work at once, in this process."""

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        future: Future[Any] = Future()
        future.set_result(fn(*args, **kwargs))
        return future


def cores() -> int:
    """Return how many cores this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


@contextmanager
def started(count: int = 0, cluster: str = "", *, parts: int) -> Iterator[Workers]:
    """Yield what computes parts: this process, processes beside it, or a cluster.

    Parameters
    ----------
    count : int
        Processes; 0 for one a core, or fewer if there are few parts. 1 computes in this process.
    cluster : str
        Address of a Dask scheduler (`tcp://HOST:8786`) whose workers are used instead.
    parts : int
        How many parts there are to compute.

    Raises
    ------
    InputError
        No scheduler answers at the address.
    MissingExtra
        A cluster is asked for and `distributed` is not installed.
    HomogError
        A worker was lost for good.
    """
    count = count or max(1, min(cores(), parts // SERIAL_PARTS))
    if cluster:
        yield from _on_cluster(cluster)
    elif count == 1:
        with threadpool_limits(1):
            yield Workers(Here(), compute, lambda: 1, "in this process")
    else:
        yield from _in_processes(count)


def _in_processes(count: int) -> Iterator[Workers]:
    before = set(multiprocessing.active_children())
    # fresh processes: a fork of one that has threads may hang
    pool = ProcessPoolExecutor(count, multiprocessing.get_context("spawn"), initializer=start_worker)
    try:
        with _held_interrupts():
            for _ in range(count):
                pool.submit(_ready)
        yield Workers(pool, compute_alone, lambda: 2 * count, f"{count} workers")
    except BrokenExecutor as error:
        raise HomogError("A worker process was killed, perhaps for want of memory; use fewer --workers") from error
    finally:
        pool.shutdown(wait=False, cancel_futures=True)
        for child in set(multiprocessing.active_children()) - before:
            child.terminate()


def _ready() -> None:
    """Do nothing: a task that makes the pool start a worker."""


def start_worker() -> None:
    """Leave interrupts to the main process, and end with it, however it ends."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    parent = multiprocessing.parent_process()

    def follow() -> None:
        if parent is not None:
            parent.join()
        os._exit(1)

    threading.Thread(target=follow, daemon=True).start()


@contextmanager
def _held_interrupts() -> Iterator[None]:
    """Hold interrupts back, here and in the processes that start now, until they have said what to do with them."""
    if not hasattr(signal, "pthread_sigmask"):
        yield
        return
    before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)


def _on_cluster(address: str) -> Iterator[Workers]:
    try:
        import distributed
    except ImportError:
        raise MissingExtra("A cluster", "cluster") from None
    try:
        client: Any = distributed.Client(address, set_as_default=False)  # type: ignore[no-untyped-call]
    except (OSError, ValueError) as error:
        raise InputError(f"No scheduler answers at '{address}' ({type(error).__name__}); start one with "
                         "'dask scheduler', workers with 'dask worker ADDRESS'") from None  # fmt: skip

    def wanted() -> int:
        return max(2, 2 * int(sum(client.nthreads().values())))

    try:
        yield Workers(client.get_executor(pure=False), compute_alone, wanted, f"the cluster at {address}")
    except CancelledError as error:
        raise HomogError(f"The scheduler at '{address}' was lost; start it again") from error
    except Exception as error:
        if type(error).__module__.startswith("distributed."):
            raise HomogError(f"The cluster at '{address}' failed: {' '.join(str(error).split())}") from error
        raise
    finally:
        with suppress(Exception):
            client.close(timeout=5)


def results(job: Job, numbers: Iterable[int], using: Workers, *, in_order: bool = False) -> Iterator[Done]:
    """Yield the parts of those numbers as they are done, or in order.

    No more are under way, or done and not yet taken, than the workers have use for.
    """
    packed, waiting = pickle.dumps(job), iter(numbers)
    pending: deque[Future[Done]] = deque()
    wanted, more = using.wanted(), True
    try:
        while more or pending:
            while more and len(pending) < wanted:
                number = next(waiting, None)
                more = number is not None
                if number is not None:
                    pending.append(using.executor.submit(using.task, packed, number, __version__))
            if not pending:
                return
            if in_order:
                yield pending.popleft().result()
                continue
            ready, _ = wait(pending, return_when=FIRST_COMPLETED)
            pending = deque(future for future in pending if future not in ready)
            for future in ready:
                yield future.result()
            wanted = using.wanted()
    finally:
        for future in pending:
            future.cancel()
