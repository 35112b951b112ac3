"""Measure the kernels as ratios in one run, each beside its target, and write the table to data/bench.txt.

    python scripts/bench.py            the whole table: some minutes on two cores
    python scripts/bench.py --quick    batches of 100,000 instead of a million, about a minute

`lapack` is numpy.linalg.solve on the same reduced systems, K u = F, already assembled; `tensor` the whole way from
points to effective stiffness; `all columns` from parameters to every output quantity, the verdict and Parquet files.
Times are processor time, the best of a few runs, so that other work on the machine does not count; `two workers` and
the whole of a million are elapsed time and read well on an idle machine only. Nothing here is a test.
"""

from __future__ import annotations

import argparse
import multiprocessing
import os
import platform
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # one core a process, so that ratios compare like with like

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import scipy

from homog import effective
from homog.assembly import dense, freedoms
from homog.cell import UnitCell
from homog.columns import evaluate
from homog.directional import space_extremes
from homog.effective import eliminate, homogenize
from homog.families import FAMILIES
from homog.materials import UNIT, material
from homog.tensors import inverse, mandel_rotation

SEED = 7741
CHUNK = 20_000
DATA = Path(__file__).parents[1] / "data"
PARENT = "PA12 laser-sintered"


def used() -> float:
    """Processor seconds so far of this process and of those it has waited for."""
    return sum(os.times()[:4])


def best(work: Callable[[], Any], repeats: int = 3, clock: Callable[[], float] = time.process_time) -> float:
    times = []
    for _ in range(repeats):
        start = clock()
        work()
        times.append(clock() - start)
    return min(times)


def drawn(family_id: str, words: dict[str, str], count: int) -> dict[str, Any]:
    """Return `count` parameter sets within 20 % of the defaults."""
    rng = np.random.default_rng(SEED)
    given: dict[str, Any] = dict(words)
    for p in FAMILIES[family_id].parameters:
        if not p.choices and not isinstance(p.default, str):
            given[p.name] = np.clip(p.default * rng.uniform(0.8, 1.2, count), p.low, p.high)
    return given


def cells(family_id: str, words: dict[str, str], count: int, repeats: tuple[int, ...] = ()) -> UnitCell:
    cell = FAMILIES[family_id].build(drawn(family_id, words, count), UNIT)
    return cell.supercell(repeats) if repeats else cell


def lapack(cell: UnitCell) -> float:
    """Return the seconds a member of numpy.linalg.solve on up to 20,000 of the assembled systems."""
    size = freedoms(cell).count
    M = np.moveaxis(dense(cell.at(slice(0, min(20_000, cell.shape[0]))), "timoshenko"), -1, 0)
    upper = M[:, :size, :size]
    K = np.ascontiguousarray(np.triu(upper) + np.swapaxes(np.triu(upper, 1), -1, -2))
    F = np.ascontiguousarray(M[:, :size, size:])
    return best(lambda: np.linalg.solve(K, F), 5) / len(K)


def safety(cell: UnitCell) -> float:
    """Return what pivot tests, null counts and doubtful ranks take of the tensor stage, as a share of the rest."""
    few = cell.at(slice(0, 2000))
    count = freedoms(few).count
    M = dense(few, "timoshenko")

    def bare() -> None:
        A = M.copy()
        L = np.empty((count, len(A), A.shape[-1]))
        for j in range(len(A)):
            k = min(j, count)
            if k:
                A[j, j:] -= np.einsum("kb,kib->ib", L[:k, j], A[:k, j:])
            if j < count:
                np.multiply(A[j, j + 1 :], 1.0 / A[j, j], out=L[j, j + 1 :])

    def judged() -> None:
        A = M.copy()
        eliminate(A, count)
        C = A[count:, count:]
        effective._null_count(C, np.diagonal(C).T)

    extra = best(judged, 20) - best(bare, 20)
    return extra / (best(lambda: homogenize(few, model="timoshenko"), 20) - extra)


def portion(job: tuple[int, int, str]) -> None:
    """All columns of a portion of re-entrant honeycombs, as one Parquet file."""
    start, stop, folder = job
    given = {name: value[start:stop] for name, value in drawn("reentrant-honeycomb", {}, GIVEN).items()}
    columns = evaluate(homogenize(FAMILIES["reentrant-honeycomb"].build(given, material(PARENT))))
    pq.write_table(pa.table(columns), Path(folder) / f"part-{start:07d}.parquet", compression="zstd")


GIVEN = 1_000_000


def screened(count: int, workers: int) -> tuple[float, float]:
    """Return elapsed and processor seconds of all columns of so many candidates, written as Parquet files."""
    before = used()
    with tempfile.TemporaryDirectory() as folder:
        pool = multiprocessing.get_context("fork").Pool(workers)
        jobs = [(start, min(start + CHUNK, count), folder) for start in range(0, count, CHUNK)]
        start = time.perf_counter()
        pool.map(portion, jobs, chunksize=1)
        elapsed = time.perf_counter() - start
        pool.close()
        pool.join()
    return elapsed, used() - before


def looped(count: int) -> float:
    """Return the seconds a candidate of a loop that builds, homogenizes and evaluates one at a time."""
    given = drawn("reentrant-honeycomb", {}, count)
    family, parent = FAMILIES["reentrant-honeycomb"], material(PARENT)

    def loop() -> None:
        for i in range(count):
            evaluate(homogenize(family.build({name: value[i] for name, value in given.items()}, parent)))

    return best(loop, 2) / count


def started(*words: str) -> float:
    return best(lambda: subprocess.run([sys.executable, *words], check=True, stdout=subprocess.DEVNULL), 5, used)


def large(n: int) -> tuple[float, float]:
    """Return the seconds of the whole sparse path, and of its bare factorisation and solve, for a random cell."""
    from sparse_cost import direct, network, scaled

    cell = network(n)
    A, F, _ = scaled(cell)
    return best(lambda: homogenize(cell, model="timoshenko"), 2), best(lambda: direct(A, F), 2)


def lines(quick: bool) -> Iterator[tuple[str, str, float, str]]:
    """Yield what is measured, its target in words, the value, and a note."""
    many = 100_000 if quick else 1_000_000
    cell = cells("reentrant-honeycomb", {}, many)
    bare, tensor = lapack(cell), best(lambda: homogenize(cell, model="timoshenko")) / many
    yield "tensor/lapack, re-entrant, 4 freedoms", "<= 4", tensor / bare, f"{tensor * 1e6:.2f} us"
    joint = best(lambda: homogenize(cell)) / many
    yield "joint/timoshenko, re-entrant", "<= 3", joint / tensor, f"{joint * 1e6:.2f} us"
    yield "rank and mechanism safety, share of the rest", "<= 0.2", safety(cell), ""
    share = 10 if quick else 1
    for name, words, repeats, target, count in (
        ("kagome-grid", {}, (), "", 100_000),
        ("rotating-squares", {}, (), "", 50_000),
        ("miura-fold", {}, (), "", 50_000),
        ("octet", {}, (), "", 50_000),
        ("reentrant-honeycomb", {}, (2, 1), "<= 2.5", 50_000),
        ("anti-tetrachiral", {"node": "ring"}, (), "<= 2.5", 20_000),
        ("reentrant-honeycomb", {}, (3, 2), "<= 2", 20_000),
    ):
        some = cells(name, words, count // share, repeats)
        tensor = best(lambda c=some: homogenize(c, model="timoshenko")) / some.shape[0]
        label = f"tensor/lapack, {' '.join([name, *words.values()])}{' supercell' if repeats else ''}, "
        yield f"{label}{freedoms(some).count} freedoms", target, tensor / lapack(some), f"{tensor * 1e6:.2f} us"
    one, two = (screened(many // 10, workers)[0] for workers in (1, 2))
    yield "two workers against one (elapsed)", ">= 1.7", one / two, ""
    elapsed, spent = screened(many, 2)
    per = spent / many
    goal = 30.0 * many / 1e6
    yield f"all columns and Parquet, {many:,} re-entrant, elapsed s", f"<= {goal:g}", elapsed, "two workers"
    yield "the same, processor seconds over two cores", f"<= {goal:g}", spent / 2.0, f"{per * 1e6:.1f} us a candidate"
    slow = looped(20)
    yield "plain loop/batch, all columns", ">= 60", slow / per, f"{slow * 1e6:.0f} us a candidate"
    S = inverse(homogenize(cells("octet", {}, 256)).stiffness)
    R = mandel_rotation(np.linalg.qr(np.random.default_rng(SEED).normal(size=(3, 3)))[0])
    turned = R @ S @ R.T
    found, closed = best(lambda: space_extremes(turned), 1) / 256, best(lambda: space_extremes(S)) / 256
    yield "search/closed form, extremes in space, cubic", "", found / closed, f"{closed * 1e6:.0f} us"
    path, direct = large(41 if quick else 129)
    yield f"sparse path/bare solve, {'1e4' if quick else '1e5'} freedoms", "<= 1.5", path / direct, f"{path:.2f} s"
    base = started("-c", "import scipy.sparse.linalg, pandas")
    yield "homog --help/import of scipy and pandas", "<= 0.4", started("-m", "homog", "--help") / base, f"{base:.2f} s"
    evaluated = started("-m", "homog", "evaluate", "reentrant-honeycomb")
    yield "homog evaluate/import of scipy and pandas", "<= 1.2", evaluated / base, f"{evaluated:.2f} s"


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--quick", action="store_true", help="smaller batches")
    quick = parser.parse_args().quick
    text = [
        f"{os.cpu_count()} cores ({platform.machine()}), load {os.getloadavg()[0]:.1f}, Python "
        f"{platform.python_version()}, numpy {np.__version__}, scipy {scipy.__version__}{'; quick' if quick else ''}",
        f"{'':62}{'target':>8}{'measured':>10}",
    ]
    print("\n".join(text), flush=True)
    for what, target, value, note in lines(quick):
        text.append(f"{what:62}{target:>8}{value:10.2f}  {note}".rstrip())
        print(text[-1], flush=True)
    (DATA / "bench.txt").write_text("\n".join(text) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
