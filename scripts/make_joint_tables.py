"""Make homog/joint_tables.npz: the corrections of every joint shape on its Chebyshev points, as coefficients.

    python scripts/make_joint_tables.py [SHAPE ...]        needs the extra `solid`; some five minutes on two cores

Each point is one solid (the correction is linear in nu). Afterwards the table is compared with solids at
random coordinates between the points, and the largest error is printed, relative to the largest entry of Delta.
"""

from __future__ import annotations

import itertools
import sys
import time
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

import numpy as np

from homog import joints
from homog.joint_solid import correction

SEED = 6173
CHECKS = 24
PATH = Path(joints.__file__).with_name(joints.TABLES)


def at(shape_name: str, coordinates: tuple[float, ...]) -> np.ndarray:
    shape = next(s for s in joints.SHAPES if s.name == shape_name)
    u = np.array(coordinates)
    return correction(np.array(shape.gaps(u), float), np.array(shape.thickness(u), float))


def main() -> None:
    wanted = sys.argv[1:] or [shape.name for shape in joints.SHAPES]
    tables = dict(np.load(PATH)) if PATH.exists() else {}
    rng = np.random.default_rng(SEED)
    with ProcessPoolExecutor(2) as pool:
        for shape in joints.SHAPES:
            if shape.name not in wanted:
                continue
            start, count = time.time(), 0
            for piece in shape.pieces():
                spans = shape.span(piece)
                axes = [
                    (low + high) / 2.0 + (high - low) / 2.0 * np.cos(np.pi * (np.arange(n) + 0.5) / n)
                    for low, high, n in spans
                ]
                points = list(itertools.product(*axes))
                count += len(points)
                found = np.array(list(pool.map(at, itertools.repeat(shape.name), points, chunksize=2)))
                values = np.moveaxis(found, 0, -1).reshape(found.shape[1:] + tuple(n for _, _, n in spans))
                for axis, (_, _, n) in enumerate(spans):  # discrete orthogonality on the Chebyshev points
                    k, j = np.arange(n)[:, None], np.arange(n)
                    to = 2.0 / n * np.cos(np.pi * k * (j + 0.5) / n)
                    to[0] /= 2.0
                    values = np.moveaxis(np.tensordot(to, values, axes=(1, 3 + axis)), 0, 3 + axis)
                tables[joints.table_name(shape, piece)] = values
                np.savez_compressed(PATH, **tables)
            joints._tables.cache_clear()
            print(f"{shape.name}: {count} points, {time.time() - start:.0f} s", flush=True)
            if shape.points:
                low, high = (np.array([edges[i] for edges in shape.edges]) for i in (0, -1))
                checks = low + (high - low) * rng.random((CHECKS, len(low)))
                exact = np.array(list(pool.map(at, itertools.repeat(shape.name), map(tuple, checks))))
                for nu in (0.0, 0.4):
                    table = joints.interpolated(shape, checks.T, np.full(CHECKS, nu))
                    solid = exact[:, 0] + nu * exact[:, 1]
                    error = np.abs(np.moveaxis(table, -1, 0) - solid).max(axis=(1, 2)) / np.abs(solid).max(axis=(1, 2))
                    worst = checks[np.argmax(error)].round(3)
                    print(f"  nu {nu}: median {np.median(error):.1e}, largest {error.max():.1e} at {worst}", flush=True)


if __name__ == "__main__":
    main()
