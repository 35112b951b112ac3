"""Make homog/joint_tables_spatial.npz: the corrections of every pattern of round struts, as Chebyshev coefficients.

    python scripts/make_spatial_tables.py [PATTERN ...]        needs the extra `solid`; some minutes on one core

Afterwards the table is compared with solids at Poisson's ratios between its points, and with one that is cut farther
out; the largest errors are printed, relative to the largest entry of Delta.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

import numpy as np

from homog import spatial_joints
from homog.spatial_joints import PATTERNS, POINTS, POISSON
from homog.strut_solid import corrections

CHECKS = (0.25, 0.42)
FARTHER = 0.5
DIGITS = 7
"""Decimals that are kept: the mesh leaves errors of 1e-3, and equal entries stay equal and pack well."""
PATH = Path(spatial_joints.__file__).with_name(spatial_joints.TABLES)


def main() -> None:
    wanted = sys.argv[1:] or [pattern.name for pattern in PATTERNS]
    tables = dict(np.load(PATH)) if PATH.exists() else {}
    low, high = POISSON
    nodes = np.cos(np.pi * (np.arange(POINTS) + 0.5) / POINTS)
    poisson = [*((low + high) / 2.0 + (high - low) / 2.0 * nodes), *CHECKS]
    for pattern in PATTERNS:
        if pattern.name not in wanted:
            continue
        start = time.time()
        found = corrections(pattern.directions, poisson)
        to = np.linalg.inv(np.polynomial.chebyshev.chebvander(nodes, POINTS - 1))
        tables[pattern.name] = np.round(np.tensordot(to, found[:POINTS], 1), DIGITS) + 0.0
        np.savez_compressed(PATH, **tables)
        spatial_joints._table.cache_clear()
        print(f"{pattern.name}: {len(poisson)} solids, {time.time() - start:.0f} s", flush=True)
        farther = corrections(pattern.directions, CHECKS[:1], plain=FARTHER)
        for name, nu, exact in [*(("between", nu, x) for nu, x in zip(CHECKS, found[POINTS:], strict=True)),
                                ("cut farther out", CHECKS[0], farther[0])]:  # fmt: skip
            error = np.abs(spatial_joints.correction(pattern, nu) - exact).max() / np.abs(exact).max()
            print(f"  {name}, nu {nu}: {error:.1e}", flush=True)


if __name__ == "__main__":
    main()
