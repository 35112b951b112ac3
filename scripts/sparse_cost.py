"""Measure what a large random cell costs against its number of freedoms, and draw it: data/sparse-cost.svg and .csv.

    python scripts/sparse_cost.py [LARGEST]      1e6 freedoms unless another largest is given: some minutes, 5 GB

Sizes that the .csv has already are not measured again: delete it for a fresh start, or stop and go on.

The cell is a regular honeycomb, n by n, whose joints are moved at random, model `timoshenko`. `whole` is the way from
the cell to its tensor, `factor and solve` the bare factorisation (SuperLU, minimum degree) and three solves of the same
scaled matrix, `multigrid` smoothed aggregation with conjugate gradients (pyamg, if installed) to 1e-10. Best of a few
runs, processor time of one core.
"""

from __future__ import annotations

import dataclasses
import resource
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import matplotlib
import numpy as np
import pandas as pd
import scipy.sparse as sp
from scipy.sparse.linalg import splu

import homog
from homog.assembly import freedoms, sparse
from homog.cell import UnitCell

matplotlib.use("svg")
matplotlib.rcParams["svg.hashsalt"] = "homog"
import matplotlib.pyplot as plt  # noqa: E402

SEED = 7741
SIZES = (13, 24, 41, 73, 129, 230, 408)
MULTIGRID_LIMIT = 110_000
DATA = Path(__file__).parents[1] / "data"


def network(n: int) -> UnitCell:
    """Return a honeycomb of n x n cells, 6 n^2 - 2 freedoms, each joint moved by up to a fifth of a wall."""
    big = homog.build("hexagonal-honeycomb", thickness=1.0).supercell((n, n))
    moved = big.points + np.random.default_rng(SEED).uniform(-2.0, 2.0, big.points.shape)
    return dataclasses.replace(big, points=moved, solid=np.nan)


def spent(work: Callable[[], Any], repeats: int) -> tuple[float, Any]:
    times = []
    for _ in range(repeats):
        start = time.process_time()
        found = work()
        times.append(time.process_time() - start)
    return min(times), found


def scaled(cell: UnitCell) -> tuple[sp.csc_matrix, np.ndarray, np.ndarray]:
    """Return K at unit diagonal, F and the scale, as the sparse path solves them."""
    K, F, _ = sparse(cell, "timoshenko")
    scale = 1.0 / np.sqrt(K.diagonal())
    return (sp.diags(scale) @ K @ sp.diags(scale)).tocsc(), F * scale[:, None], scale


def direct(A: sp.csc_matrix, F: np.ndarray) -> np.ndarray:
    options = {"SymmetricMode": True}
    return splu(A, permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options=options).solve(F)


def multigrid(cell: UnitCell, A: sp.csc_matrix, F: np.ndarray, scale: np.ndarray) -> np.ndarray:
    import pyamg

    numbers = freedoms(cell).numbers
    x, y = (cell.points - cell.points.mean(axis=0)).T
    one, none = np.ones_like(x), np.zeros_like(x)
    rigid = np.array([[one, none, none], [none, one, none], [-y, x, one]]).transpose(2, 1, 0)  # point, freedom, motion
    near = np.zeros((len(scale), 3))
    near[numbers[numbers >= 0]] = rigid[numbers >= 0]
    levels = pyamg.smoothed_aggregation_solver(A.tocsr(), B=near / scale[:, None], max_coarse=200)
    return np.stack([levels.solve(f, tol=1e-10, accel="cg", maxiter=1000) for f in F.T], axis=1)


def main() -> None:
    largest = float(sys.argv[1]) if len(sys.argv) > 1 else 1e6
    path = DATA / "sparse-cost.csv"
    table = pd.read_csv(path) if path.exists() else pd.DataFrame({"freedoms": pd.Series(dtype=int)})
    for n in SIZES:
        count = 6 * n * n - 2
        if count > largest or count in set(table["freedoms"]):
            continue
        cell = network(n)
        A, F, scale = scaled(cell)
        repeats = 5 if n < 60 else 2 if n < 200 else 1
        bare, x = spent(lambda A=A, F=F: direct(A, F), repeats)
        whole, _ = spent(lambda c=cell: homog.homogenize(c, model="timoshenko"), repeats)
        row = {"freedoms": count, "whole_s": whole, "factor_and_solve_s": bare, "ratio": whole / bare}
        try:
            if count <= MULTIGRID_LIMIT:
                row["multigrid_s"], y = spent(lambda: multigrid(cell, A, F, scale), 1)  # noqa: B023
                row["multigrid_error"] = np.abs(y - x).max() / np.abs(x).max()
        except ImportError:
            pass
        row["peak_GB"] = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
        table = pd.concat([table, pd.DataFrame([row])]).sort_values("freedoms", ignore_index=True)
        table.to_csv(path, index=False, float_format="%.4g")
        print("  ".join(f"{name} {value:.4g}" for name, value in row.items()), flush=True)
    large = table[table["freedoms"] > 5e3]
    exponent = np.polyfit(np.log(large["freedoms"]), np.log(large["whole_s"]), 1)[0]
    print(f"whole time grows like freedoms^{exponent:.2f} above 5000")
    figure, axes = plt.subplots(figsize=(6.4, 4.4), layout="constrained")
    for name, mark, words in (
        ("whole_s", "o-", f"cell to tensor, like freedoms$^{{{exponent:.2f}}}$"),
        ("factor_and_solve_s", "s--", "bare factorisation and solve (SuperLU)"),
        ("multigrid_s", "^:", "multigrid with conjugate gradients"),
    ):
        if name in table:
            known = table[table[name].notna()]
            axes.loglog(known["freedoms"], known[name], mark, label=words)
    axes.set(xlabel="freedoms", ylabel="processor time of one core, s", title="One large random honeycomb cell")
    axes.grid(alpha=0.3)
    axes.legend(frameon=False)
    figure.savefig(DATA / "sparse-cost.svg", metadata={"Date": None})


if __name__ == "__main__":
    main()
