"""Measure candidates per second, as ratios in one run: against a plain loop, and against the bare batched LAPACK solve.

    python scripts/bench.py            about a minute on two cores

`tensor` is the whole way from points to effective stiffness; `build` makes the cells (points, lattice, true section);
`all columns` adds every output quantity and the verdict; `loop` is the plain per-candidate reference in
homog/reference.py; `lapack` is numpy.linalg.solve on the same reduced systems, already assembled. Times are the best of
three. Nothing here is a test.
"""

from __future__ import annotations

import os
import platform
import time
from collections.abc import Callable
from typing import Any

import numpy as np

from homog.assembly import dense, freedoms, strain_count
from homog.columns import evaluate
from homog.effective import homogenize
from homog.families import FAMILIES
from homog.materials import UNIT
from homog.reference import reference_stiffness

SEED = 7741
CASES = {  # family, words, batch
    "reentrant-honeycomb": ({}, 100_000),
    "kagome-grid": ({}, 50_000),
    "anti-tetrachiral": ({"node": "rigid"}, 50_000),
    "anti-tetrachiral ring": ({"node": "ring"}, 10_000),
    "rotating-squares": ({}, 20_000),
    "miura-fold": ({}, 20_000),
    "octet": ({}, 20_000),
}


def best(work: Callable[[], Any], repeats: int = 3) -> float:
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        work()
        times.append(time.perf_counter() - start)
    return min(times)


def drawn(family_id: str, words: dict[str, str], count: int) -> dict[str, Any]:
    """Return `count` parameter sets within 20 % of the defaults."""
    rng = np.random.default_rng(SEED)
    given: dict[str, Any] = dict(words)
    for p in FAMILIES[family_id].parameters:
        if not p.choices and not isinstance(p.default, str):
            given[p.name] = np.clip(p.default * rng.uniform(0.8, 1.2, count), p.low, p.high)
    return given


def main() -> None:
    print(f"{os.cpu_count()} cores, {platform.machine()}, Python {platform.python_version()}, numpy {np.__version__}")
    print("microseconds a candidate; ratios to the right\n")
    head = ("family", "freedoms", "build", "tensor", "all columns", "lapack", "loop")
    head += ("tensor/lapack", "loop/tensor", "loop/all")
    print("{:24}{:>9}{:>9}{:>9}{:>13}{:>9}{:>9}{:>15}{:>13}{:>10}".format(*head))
    for name, (words, count) in CASES.items():
        family = FAMILIES[name.split()[0]]
        given = drawn(family.id, words, count)
        build = best(lambda f=family, g=given: f.build(g, UNIT)) / count * 1e6
        cell = family.build(given, UNIT)
        tensor = best(lambda c=cell: homogenize(c)) / count * 1e6
        effective = homogenize(cell)
        columns = best(lambda e=effective: evaluate(e), 1 if family.kind == "spatial" else 3) / count * 1e6
        size = freedoms(cell).count
        M = np.moveaxis(dense(cell.at(slice(0, 10_000)), "timoshenko"), -1, 0)
        K = np.ascontiguousarray(np.tril(M[:, :size, :size]) + np.swapaxes(np.tril(M[:, :size, :size], -1), -1, -2))
        F = np.ascontiguousarray(np.swapaxes(M[:, size:, :size], -1, -2))
        lapack = best(lambda k=K, f=F: np.linalg.solve(k, f)) / len(K) * 1e6 if size else float("nan")
        few = [cell.at(i) for i in range(20)]
        loop = best(lambda cells=few: [reference_stiffness(c, "timoshenko") for c in cells]) / len(few) * 1e6
        whole = build + tensor + columns
        assert strain_count(cell.kind) == F.shape[-1]
        print(f"{name:24}{size:9d}{build:9.2f}{tensor:9.2f}{whole:13.2f}{lapack:9.2f}{loop:9.0f}"
              f"{tensor / lapack:15.2f}{loop / tensor:13.0f}{(loop + build) / whole:10.0f}")  # fmt: skip


if __name__ == "__main__":
    main()
