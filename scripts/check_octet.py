"""Compare the octet cell's models with a solid of the whole periodic cell; write data/octet_solid.csv.

    python scripts/check_octet.py [SIZE ...]        needs the extra `solid`; some minutes a size on two cores

The octet's cubic cell has mirrors through its nodes and on the diagonals of its faces: a prism of 1/32 of the cell,
with mirror or antimirror conditions on its five faces, has C11, C12 and C44 exactly as the periodic cell has them. Each
SIZE (element size over the standard one) is a mesh of its own; they show how far the numbers are from their limit.
Solids that the file has are taken from it, so that it can be resumed, and made again when the models have changed.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

import numpy as np
import pandas as pd

import homog
from homog.materials import Material
from homog.strut_solid import factor, lame, mesh_struts, stiffness_parts

CASES = (*((ratio, 0.3) for ratio in (0.2, 0.1, 0.15, 0.3, 0.4, 0.05)), (0.2, 0.0), (0.2, 0.45))
SIZES = (2.8, 2.0)
PATH = Path(__file__).parent.parent / "data" / "octet_solid.csv"
ORIGIN = """\
# Octet lattice of round struts: three-dimensional solid against the models of this package, E of the parent = 1.
# Origin: scripts/check_octet.py (ten-node tetrahedra, 1/32 of the cubic cell with mirror conditions); d = diameter and
# l = length of a strut, size = element size over the standard one; density_section is what the package reports.
"""


def solid(ratio: float, poisson: float, size: float) -> dict[str, float]:
    """Return density, C11, C12 and C44 of a parent of modulus 1 for struts of length 1."""
    h, d = np.sqrt(0.5), ratio
    corners = np.array([[0.0, 0.0, 0.0], [h, h, 0.0], [0.0, h, h], [h, 0.0, h]])
    pairs = [(0, 1), (0, 2), (1, 3)]
    e = np.array([(corners[b] - corners[a]) for a, b in pairs])
    starts = np.array([corners[a] for a, _ in pairs]) - 0.8 * d * e
    ends = np.array([corners[b] for _, b in pairs]) + 0.8 * d * e
    s = np.sqrt(0.5)
    axes = np.array([[1.0, 0.0, 0.0], [0.0, s, -s], [0.0, s, s]])  # rows 1 and 2 are normal to the diagonal mirrors
    mesh = mesh_struts(
        starts, ends, d,
        [(np.array([[0.0] * 3, [h] * 3]), np.eye(3)), (np.array([[0.0, 0.0, 0.0], [h, h, h * s]]), axes)],
        balls=np.zeros((0, 3)), size=size,
    )  # fmt: skip
    x, n, volume = mesh.points, len(mesh.points), h**3 / 4.0
    first, second, filled = stiffness_parts(mesh)
    lam, G = lame(poisson)
    K = lam * first + G * second

    def near(values: np.ndarray, at: float) -> np.ndarray:
        return np.abs(values - at) < 1e-7

    inclined = near(x @ axes[1], 0.0) | near(x @ axes[2], h * s)
    across = np.where(inclined[:, None, None], axes, np.eye(3))  # each node's own axes
    turn = _blocks(across)
    K = turn @ K @ turn.T
    flat_x, flat_z = near(x[:, 0], 0.0) | near(x[:, 0], h), near(x[:, 2], 0.0)

    def energy(u: np.ndarray, mirrored: bool, tests: list[np.ndarray]) -> list[float]:
        """Mean work of the stress under the affine motion u on each of the tests."""
        held = np.zeros((n, 3), bool)
        held[:, 0] = flat_x if mirrored else flat_x | flat_z
        held[flat_z & ~inclined, 2 if mirrored else 1] = True
        held[near(x @ axes[1], 0.0), 1] = True
        held[near(x @ axes[2], h * s), 2] = True
        held[flat_z & inclined, 1:] = True
        fixed, free = np.flatnonzero(held.ravel()), np.flatnonzero(~held.ravel())
        w = np.einsum("nij,nj->ni", across, u).ravel()
        force = K[:, fixed] @ w[fixed]
        motion = np.zeros(3 * n)
        motion[fixed] = w[fixed]
        motion[free] = -factor(K[free][:, free])(force[free][:, None])[:, 0]
        stress = K @ motion
        return [float(np.einsum("nij,nj->ni", across, v).ravel() @ stress / volume) for v in tests]

    zero = np.zeros(n)
    pull = np.stack([x[:, 0], zero, zero], -1)
    sides = np.stack([zero, x[:, 1], x[:, 2]], -1)
    shear = np.stack([zero, x[:, 2] / 2.0, x[:, 1] / 2.0], -1)
    C11, twice = energy(pull, True, [pull, sides])
    (C44,) = energy(shear, False, [shear])
    return {"freedoms": 3 * n, "density": filled / volume, "C11": C11, "C12": twice / 2.0, "C44": C44}


def _blocks(R: np.ndarray):
    """Return the block-diagonal sparse matrix of (n, 3, 3)."""
    from scipy.sparse import bsr_array

    n = len(R)
    return bsr_array((R, np.arange(n), np.arange(n + 1)), shape=(3 * n, 3 * n)).tocsr()


def constants(C11: float, C12: float, C44: float) -> dict[str, float]:
    nu = C12 / (C11 + C12)
    return {"E": (C11 - C12) * (C11 + 2.0 * C12) / (C11 + C12), "nu": nu, "G": C44}


def model(name: str, ratio: float, poisson: float) -> tuple[float, dict[str, float]]:
    cell = homog.build("octet", length=1.0, diameter=ratio, material=Material("unit", 1.0, poisson, 1000.0))
    found = homog.homogenize(cell, model=name)
    C = found.stiffness
    return float(found.relative_density), constants(C[0, 0], C[0, 1], C[5, 5] / 2.0)


def main() -> None:
    sizes = [float(word) for word in sys.argv[1:]] or SIZES
    old = pd.read_csv(PATH, comment="#").to_dict("records") if PATH.exists() else []
    kept = {(row["d_over_l"], row["poisson"], row["size"]): row for row in old}
    for size in sizes:
        for ratio, poisson in CASES:
            start = time.time()
            row = {"d_over_l": ratio, "poisson": poisson, "size": size}
            names = ("freedoms", "density_solid", "E_solid", "nu_solid", "G_solid")
            if (ratio, poisson, size) in kept:
                row |= {name: kept[ratio, poisson, size][name] for name in names}
            else:
                found = solid(ratio, poisson, size)
                values = constants(found["C11"], found["C12"], found["C44"])
                row |= dict(zip(names, (found["freedoms"], found["density"], *values.values()), strict=True))
            real = {name: row[f"{name}_solid"] for name in ("E", "nu", "G")}
            for name in ("euler", "timoshenko", "joint"):
                row["density_section"], beams = model(name, ratio, poisson)
                row |= {f"{key}_{name}": value for key, value in beams.items()}
            off = {}
            for name in ("euler", "timoshenko", "joint"):
                ratios = [row[f"{key}_{name}"] / real[key] - 1.0 for key in ("E", "G")]
                off[name] = [round(float(x), 4) for x in (*ratios, row[f"nu_{name}"] - real["nu"])]
            print(f"d/l {ratio} nu {poisson} size {size}: {row['freedoms']} freedoms, "
                  f"{time.time() - start:.0f} s; E {real['E']:.6g}, nu {real['nu']:.5f}, G {real['G']:.6g}; "
                  f"density off {row['density_section'] / row['density_solid'] - 1.0:.1e}; "
                  f"E, G, nu off: {off}", flush=True)  # fmt: skip
            kept[ratio, poisson, size] = row
            PATH.write_text(ORIGIN + pd.DataFrame(kept.values()).to_csv(index=False, float_format="%.7g"))


if __name__ == "__main__":
    main()
