"""Measure each model against solids of the true section, over families, shapes and slenderness; make the bands.

    python scripts/model_errors.py             needs the extra `solid`; two to four minutes on two cores
    python scripts/model_errors.py --again     the models again, with the solids that data/model_errors.csv holds:
                                               seconds; after a change of a model, a joint table or the figure

It writes data/model_errors.csv (every row), data/model_errors.svg and .png (the figure) and homog/bands.csv (the
envelope that the package reads), and prints the largest errors and how many fresh cells lie inside their band.

Rows are of five samples. `table`: the shapes below at six slendernesses, parent nu 0.3. `edge`: the corners of BOXES
with two extreme parents. `near`: sharp cells with hardly any plain wall left between two joints. `widen`: random shapes
within BOXES, random slenderness and parent, half of them deep. `check`: the same again with another seed, kept out of
the envelope that the others make; the share of them inside it is the coverage that is printed and documented. Cells
whose joints overlap are rejected by the package, and are left out of all but the rows.
"""

from __future__ import annotations

import argparse
import itertools
import json
import os
import platform
import sys
from collections.abc import Iterator
from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context
from pathlib import Path
from typing import Any

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # two processes, one thread each

import numpy as np
import pandas as pd
from rich.console import Console
from rich.progress import track
from rich.table import Table

import homog
from homog import bands
from homog.cell import Status, UnitCell
from homog.effective import Effective, Flag
from homog.errors import GeometryError
from homog.families import FAMILIES
from homog.joints import with_joints
from homog.materials import Material
from homog.plots import style
from homog.tensors import stiffness_to_voigt

ROOT = Path(__file__).resolve().parent.parent
DATA, PACKAGE = ROOT / "data", Path(bands.__file__).with_name(bands.TABLE)
SHORT = (0.05, 0.1, 0.2, 0.3)
SLENDERNESS = (0.02, 0.05, 0.1, 0.15, 0.2, 0.3)
MODELS = ("euler", "timoshenko", "joint")
FIXED = ("table", "edge", "near")
MAKE = (*FIXED, "widen")
MODULI, RATIOS = ("E1", "E2", "G12"), ("nu12", "nu21")
FLOOR = 1e-3  # least half width of a band: a tenth of a percent of E1, 0.001 of nu12
TARGET_PERCENT, TARGET_NU, TARGET_TO = 1.0, 0.01, 0.2
SEEDS = {"widen": 58217, "check": 90731}
COUNT = 30
PARENTS = ((0.0, False), (0.49, True))  # the ends of what random parents are drawn from

HEX, BOW, ARROW, CHIRAL = "hexagonal-honeycomb", "reentrant-honeycomb", "arrowhead", "anti-tetrachiral"
SHAPES: tuple[tuple[str, str, dict[str, Any]], ...] = (
    (HEX, "20 deg", {"angle": 20.0}),
    (HEX, "30 deg, regular", {"angle": 30.0}),
    (HEX, "30 deg, h/l 0.5", {"angle": 30.0, "vertical": 5.0}),
    (HEX, "30 deg, h/l 2", {"angle": 30.0, "vertical": 20.0}),
    (HEX, "30 deg, double", {"angle": 30.0, "vertical_thickness": 2.0}),
    (BOW, "-12 deg", {"angle": -12.0}),
    (BOW, "-20 deg", {"angle": -20.0}),
    (BOW, "-30 deg", {"angle": -30.0}),
    (BOW, "-35 deg", {"angle": -35.0}),
    (BOW, "-45 deg", {"angle": -45.0}),
    (BOW, "-20 deg, double", {"angle": -20.0, "vertical_thickness": 2.0}),
    (BOW, "-30 deg, double", {"angle": -30.0, "vertical_thickness": 2.0}),
    ("square-grid", "", {}),
    ("triangular-grid", "", {}),
    ("kagome-grid", "", {}),
    (ARROW, "30/60 deg", {"outer_angle": 30.0, "inner_angle": 60.0}),
    (ARROW, "20/40 deg", {"outer_angle": 20.0, "inner_angle": 40.0}),
    (ARROW, "45/75 deg", {"outer_angle": 45.0, "inner_angle": 75.0}),
    (CHIRAL, "rigid, r/L 0.25", {"node": "rigid"}),
    (CHIRAL, "rigid, r/L 0.15", {"node": "rigid", "node_radius": 1.5}),
    (CHIRAL, "ring, r/L 0.25", {"node": "ring"}),
    (CHIRAL, "ring, r/L 0.15", {"node": "ring", "node_radius": 1.5}),
)

# Boxes that random shapes are drawn from (thicknesses follow from the slenderness); `bands.measured` decides.
BOXES: dict[str, dict[str, tuple[float, float]]] = {
    HEX: {"angle": (5.0, 60.0), "vertical": (4.0, 25.0), "vertical_thickness": (0.5, 2.0)},
    BOW: {"angle": (-60.0, -5.0), "vertical": (8.0, 30.0), "vertical_thickness": (0.5, 2.0)},
    "square-grid": {},
    "triangular-grid": {},
    "kagome-grid": {},
    ARROW: {"outer_angle": (15.0, 60.0), "inner_angle": (30.0, 80.0)},
    CHIRAL: {"ligament_y": (6.0, 16.0), "node_radius": (1.0, 3.5)},
}
WORDS: dict[str, tuple[dict[str, str], ...]] = {CHIRAL: ({"node": "rigid"}, {"node": "ring"})}
POISSON = (0.0, 0.49)
SHARP: tuple[tuple[str, dict[str, Any]], ...] = (
    (BOW, {"angle": -45.0, "vertical_thickness": 2.0}),
    (BOW, {"angle": -55.0, "vertical": 25.0}),
    (BOW, {"angle": -60.0, "vertical": 30.0, "vertical_thickness": 2.0}),
    (ARROW, {"outer_angle": 15.0, "inner_angle": 30.0}),
    (ARROW, {"outer_angle": 20.0, "inner_angle": 40.0}),
    (ARROW, {"outer_angle": 30.0, "inner_angle": 60.0}),
    (ARROW, {"outer_angle": 45.0, "inner_angle": 75.0}),
    (ARROW, {"outer_angle": 60.0, "inner_angle": 80.0}),
)
PLAIN = (0.02, 0.15, 0.3)
EDGE_SLENDERNESS = (0.02, 0.05, 0.1, 0.2, 0.3)

Case = tuple[str, str, str, dict[str, Any], float, float, bool]  # sample, family, shape, given, t/l, nu, deep


def parent(poisson: float, deep: bool) -> Material:
    return Material("wall", 1.0, poisson, 1000.0, deep=deep)


def slender(family: str, given: dict[str, Any], slenderness: float) -> dict[str, Any]:
    """Return the parameters with their thicknesses (relative ones in `given`, else 1) scaled to a slenderness."""
    made = {p.name: float(given.get(p.name, 1.0)) for p in FAMILIES[family].parameters if p.made}
    thin = {name: 0.01 * value for name, value in made.items()}
    per = float(batch_of_one(family, {**given, **thin}, 0.3, False).slenderness[0]) / 0.01
    return {**given, **{name: float(f"{value * slenderness / per:.6g}") for name, value in made.items()}}


def table_cases() -> Iterator[Case]:
    for family, shape, given in SHAPES:
        for slenderness in SLENDERNESS:
            yield "table", family, shape, slender(family, given, slenderness), slenderness, 0.3, False


def edge_cases() -> Iterator[Case]:
    """Yield the possible shapes at the corners of BOXES, with both parents, at all slendernesses but the closest."""
    for family, spans in BOXES.items():
        corners = [dict(zip(spans, ends, strict=True)) for ends in itertools.product(*spans.values())]
        for words in WORDS.get(family, ({},)):
            for corner, slenderness, (nu, deep) in itertools.product(corners, EDGE_SLENDERNESS, PARENTS):
                given = slender(family, {**words, **corner}, slenderness)
                if fits(family, given, nu, deep):
                    yield "edge", family, "edge", given, slenderness, nu, deep


def near_cases() -> Iterator[Case]:
    """Yield sharp shapes, so thick that little plain wall is left between two joints (PLAIN, in thicknesses)."""
    for family, given in SHARP:
        for plain, (nu, deep) in itertools.product(PLAIN, PARENTS):
            inverse = []  # plain wall in thicknesses is linear in l/t
            for slenderness in (0.05, 0.1):
                cell = batch_of_one(family, slender(family, given, slenderness), nu, deep)
                inverse.append(float(with_joints(cell)[2][0]))
            slope = (inverse[0] - inverse[1]) / (1.0 / 0.05 - 1.0 / 0.1)
            slenderness = float(f"{1.0 / (1.0 / 0.1 + (plain - inverse[1]) / slope):.4g}")
            thick = slender(family, given, slenderness)
            if slenderness <= SLENDERNESS[-1] and fits(family, thick, nu, deep):
                yield "near", family, f"{plain:g} t plain", thick, slenderness, nu, deep


def random_cases(sample: str) -> Iterator[Case]:
    """Yield COUNT possible random cells of each group, a third of it for families of one shape."""
    span = np.log([SLENDERNESS[0], SLENDERNESS[-1]])
    for n, (family, spans) in enumerate(BOXES.items()):
        for m, words in enumerate(WORDS.get(family, ({},))):
            rng = np.random.default_rng([SEEDS[sample], n, m])
            left = COUNT if spans else COUNT // 3
            while left:
                shape = {name: float(f"{rng.uniform(*ends):.4g}") for name, ends in spans.items()}
                slenderness = float(f"{np.exp(rng.uniform(*span)):.4g}")
                nu, deep = float(f"{rng.uniform(*POISSON):.3g}"), bool(rng.integers(2))
                given = slender(family, {**words, **shape}, slenderness)
                if fits(family, given, nu, deep):
                    left -= 1
                    yield sample, family, "random", given, slenderness, nu, deep


def fits(family: str, given: dict[str, Any], nu: float, deep: bool) -> bool:
    """Say whether there is such a cell, and its shape is one that bands speak for."""
    cell = batch_of_one(family, given, nu, deep)
    return int(cell.status[0]) == Status.OK and bool(bands.measured(family, cell.parameters, nu).all())


def batch_of_one(family: str, given: dict[str, Any], nu: float, deep: bool) -> UnitCell:
    arrays = {name: value if isinstance(value, str) else np.array([value]) for name, value in given.items()}
    return FAMILIES[family].build(arrays, parent(nu, deep))


def constants(effective: Effective) -> dict[str, float]:
    S = np.linalg.inv(stiffness_to_voigt(effective.stiffness))
    S = S.reshape(3, 3)
    return {
        "E1": 1.0 / S[0, 0], "E2": 1.0 / S[1, 1], "G12": 1.0 / S[2, 2],
        "nu12": -S[1, 0] / S[0, 0], "nu21": -S[0, 1] / S[1, 1],
    }  # fmt: skip


def measured(case: Case) -> list[dict[str, Any]]:
    """Return the rows of a case, or one that says why there is none."""
    sample, family, shape, given, slenderness, nu, deep = case
    row: dict[str, Any] = {
        "sample": sample, "group": bands.group(family, given), "family": family, "shape": shape,
        "parameters": " ".join(f"{k}={v}" if isinstance(v, str) else f"{k}={v:.12g}" for k, v in given.items()),
        "poisson": nu, "deep": deep, "slenderness": slenderness, "note": "",
    }  # fmt: skip
    cell = batch_of_one(family, given, nu, deep)
    if int(cell.status[0]) != Status.OK:
        return [{**row, "note": "no such cell: its parts run into each other"}]
    try:
        solid = homog.homogenize(cell.at(0), model="solid")
    except GeometryError as fault:
        return [{**row, "note": f"no solid: {fault}"}]
    row |= {f"solid_{k}": v for k, v in constants(solid).items()}
    row |= {f"solid_{k}_spread_percent": 100.0 * float(solid.spread[k]) for k in MODULI}
    row |= {f"solid_{k}_spread": float(solid.spread[k]) for k in RATIOS}
    return compared(row)


def compared(row: dict[str, Any]) -> list[dict[str, Any]]:
    """Return a row for each model from one that holds a cell and what its solid is."""
    if row["note"]:
        return [row]
    cell = batch_of_one(row["family"], parameters(row["parameters"]), row["poisson"], row["deep"])
    rows = []
    for model in MODELS:
        found = homog.homogenize(cell, model=model)
        values, flags = constants(found), Flag(int(found.flags[0]))
        rows.append({
            **row, "model": model, "used": found.model, "outside": Flag.JOINT_OUTSIDE in flags,
            "near": Flag.JOINTS_NEAR in flags, "overlap": Flag.JOINTS_OVERLAP in flags,
            **{f"{k}_error_percent": 100.0 * (values[k] / row[f"solid_{k}"] - 1.0) for k in MODULI},
            **{f"{k}_error": values[k] - row[f"solid_{k}"] for k in RATIOS},
        })  # fmt: skip
    return rows


def parameters(words: str) -> dict[str, Any]:
    """Return a row's parameters by name.

    >>> parameters("node=ring thickness=0.5")
    {'node': 'ring', 'thickness': 0.5}
    """
    pairs = (pair.split("=") for pair in words.split())
    return {name: value if name == "node" else float(value) for name, value in pairs}


# the envelope ----------------------------------------------------------------------------------------------------


def sides(rows: pd.DataFrame) -> pd.DataFrame:
    """Return what the solid has against the model, widened by the solid's own error: factors of E1, shifts of nu12."""
    E1 = rows.solid_E1 * (1.0 + rows.E1_error_percent / 100.0)
    E2 = rows.solid_E2 * (1.0 + rows.E2_error_percent / 100.0)
    limit = np.sqrt(E1 / E2)
    off = rows.solid_E1_spread_percent / 100.0
    return pd.DataFrame({
        "E1_low": rows.solid_E1 / E1 * (1.0 - off), "E1_high": rows.solid_E1 / E1 * (1.0 + off),
        "nu12_low": (-rows.nu12_error - rows.solid_nu12_spread) / limit,
        "nu12_high": (-rows.nu12_error + rows.solid_nu12_spread) / limit,
    })  # fmt: skip


def models_of(rows: pd.DataFrame) -> Iterator[tuple[str, str, pd.DataFrame]]:
    """Yield group, model and rows of each line of the table, less those whose joints overlap or are outside a table."""
    rows = rows[(rows.note == "") & (rows.used == rows.model) & ~rows.outside & ~rows.overlap]
    for group, of_group in rows.groupby("group", sort=False):
        for model in MODELS:
            found = of_group[of_group.model == model]
            if len(found):
                yield str(group), model, found[~found.near]
                if model == "joint":
                    yield str(group), bands.NEAR, found[found.near]


def envelopes(rows: pd.DataFrame, samples: tuple[str, ...]) -> pd.DataFrame:
    """Return the envelope of each group and model at each slenderness, as far as there are cells.

    Near joints are rare: they have one envelope for all slendernesses of their group, or that of all groups where it
    has none. No band is narrower than FLOOR.
    """
    names, at = list(bands.ENTRIES), np.array(SLENDERNESS)
    neutral, way = np.array([1.0, 1.0, 0.0, 0.0]), np.array([-1.0, 1.0, -1.0, 1.0])
    parts = list(models_of(rows[rows["sample"].isin(samples)]))
    all_near = [found for _, model, found in parts if model == bands.NEAR and len(found)]
    lines = []
    for group, model, found in parts:
        nodes = at
        if model == bands.NEAR:
            if not all_near:
                continue
            found = found if len(found) else pd.concat(all_near)
        else:
            nodes = at[: np.searchsorted(at, found.slenderness.max()) + 1]
        needed = way * (sides(found)[names].to_numpy() - neutral)  # outwards
        excess = lifted(nodes, found, needed) if model != bands.NEAR else np.tile(needed.max(axis=0), (len(nodes), 1))
        excess = np.ceil(np.maximum(excess, FLOOR) * 1e4) / 1e4
        for slenderness, entry in zip(nodes, (neutral + way * excess).round(4), strict=True):
            named = dict(zip(names, entry, strict=True))
            lines.append({"group": group, "model": model, "slenderness": slenderness, **named})
    return pd.DataFrame(lines)


def lifted(at: Any, rows: pd.DataFrame, needed: Any) -> Any:
    """Return what bands need (k, 4) at slendernesses (k,), linear between them and never less when thicker.

    The largest of the fixed samples at each slenderness, linear between those that they have; any other row lifts both
    neighbours by what it lies outside of the line between them.
    """
    excess = np.zeros((len(at), 4))
    for sample in ("table", "edge"):
        here = (rows["sample"] == sample).to_numpy()
        t = np.unique(rows.slenderness[here])
        if len(t):
            most = np.array([needed[here & (rows.slenderness == x).to_numpy()].max(axis=0) for x in t])
            most = np.maximum.accumulate(most)
            excess = np.maximum(excess, np.stack([np.interp(at, t, values) for values in most.T], axis=1))
    free = ~rows["sample"].isin(["table", "edge"]).to_numpy()
    for slenderness, row in zip(rows.slenderness[free], needed[free], strict=True):
        i = int(np.clip(np.searchsorted(at, slenderness) - 1, 0, len(at) - 2))
        share = (slenderness - at[i]) / (at[i + 1] - at[i])
        excess[[i, i + 1]] += np.maximum(row - (1.0 - share) * excess[i] - share * excess[i + 1], 0.0)
    return np.maximum.accumulate(excess)


def inside(rows: pd.DataFrame) -> pd.Series:
    """Return whether the solid (its own error aside) lies in the band that the package gives each row."""
    result = pd.Series(False, rows.index)
    for (group, used), part in rows.groupby(["group", "used"]):
        E1, E2 = (part[f"solid_{k}"] * (1.0 + part[f"{k}_error_percent"] / 100.0) for k in ("E1", "E2"))
        nu12 = part.solid_nu12 + part.nu12_error
        found = bands.band(str(group), str(used), part.slenderness.to_numpy(), E1.to_numpy(), E2.to_numpy(),
                           nu12.to_numpy(), outside=part.outside, near=part.near)  # fmt: skip
        true, nu = part.solid_E1.to_numpy(), part.solid_nu12.to_numpy()
        hair = 1e-6
        result[part.index] = (
            (true >= found.E1_low * (1.0 - hair)) & (true <= found.E1_high * (1.0 + hair))
            & (nu >= found.nu12_low - hair) & (nu <= found.nu12_high + hair)
        )  # fmt: skip
    return result


def coverage(rows: pd.DataFrame, sample: str) -> dict[str, dict[str, list[int]]]:
    """Return how many of the random cells of a sample lie inside their band and how many there are, by group, model."""
    rows = rows[(rows["sample"] == sample) & (rows.note == "")]
    rows = rows[(rows.used == rows.model) & ~rows.overlap]
    ok = inside(rows)
    found: dict[str, dict[str, list[int]]] = {}
    for (group, model), part in rows.groupby(["group", "model"], sort=False):
        found.setdefault(str(group), {})[str(model)] = [int(ok[part.index].sum()), len(part)]
    return found


def in_words(covered: dict[str, dict[str, list[int]]]) -> str:
    """Return the coverage of fresh cells as it stands in the README."""
    sums = {m: np.sum([of[m] for of in covered.values() if m in of], axis=0) for m in MODELS}
    return ", ".join(f"{within} of {total} for `{model}`" for model, (within, total) in sums.items())


def write_bands(table: pd.DataFrame) -> None:
    part = PACKAGE.with_suffix(".part")
    table.to_csv(part, index=False, lineterminator="\n")
    os.replace(part, PACKAGE)
    bands._table.cache_clear()


# what is read ----------------------------------------------------------------------------------------------------


def worst(rows: pd.DataFrame, names: tuple[str, ...] = MODULI) -> float:
    """Return the error in percent that is largest in size, with its sign, over rows and moduli."""
    values = rows[[f"{k}_error_percent" for k in names]].to_numpy().ravel()
    return float(values[np.argmax(np.abs(values))]) if len(values) else float("nan")


def short_table(rows: pd.DataFrame) -> list[list[str]]:
    """Return the lines of the short table: group, model, error of E1 (of all moduli) at a few slendernesses."""
    rows = rows[(rows["sample"] == "table") & (rows.note == "")]
    lines = []
    for group, of_group in rows.groupby("group", sort=False):
        for model in ("timoshenko", "joint"):
            found = of_group[(of_group.model == model) & (of_group.used == model)]
            if len(found):
                cells = []
                for slenderness in SHORT:
                    part = found[found.slenderness == slenderness]
                    kept = part[~part.overlap]
                    mark = " †" if len(kept) < len(part) else ""
                    words = f"{rounded(worst(kept, ('E1',)))} ({rounded(worst(kept))}){mark}"
                    cells.append(words if len(kept) else "joints overlap" if len(part) else "no cell")
                lines.append([str(group), model, *cells])
    return lines


def rounded(percent: float) -> str:
    """Return a tenth of a percent, a hundredth below 1, with a true minus sign.

    >>> rounded(-12.34), rounded(-0.123), rounded(0.001)
    ('−12.3', '−0.12', '0.00')
    """
    text = f"{percent:.1f}" if abs(percent) >= 0.995 else f"{percent:.2f}"
    return text.replace("-0.00", "0.00").replace("-", "−")


def markdown(rows: pd.DataFrame) -> str:
    """Return the short table as it stands in the README."""
    head = ["family", "model", *(f"t/l {x:g}" for x in SHORT)]
    lines = [head, ["---"] * len(head), *short_table(rows)]
    return "\n".join("| " + " | ".join(line) + " |" for line in lines)


def joint_rows(rows: pd.DataFrame) -> pd.DataFrame:
    """Return the rows of cells that have condensed joints, by the joint model."""
    return rows[(rows.note == "") & (rows.model == "joint") & (rows.used == "joint")]


def misses(rows: pd.DataFrame) -> pd.DataFrame:
    """Return the rows of the joint model that miss its target: 1 % of a modulus, 0.01 of a Poisson's ratio."""
    found = joint_rows(rows)
    moduli = found[[f"{k}_error_percent" for k in MODULI]].abs().max(axis=1)
    ratios = found[[f"{k}_error" for k in RATIOS]].abs().max(axis=1)
    return found[(moduli > TARGET_PERCENT) | (ratios > TARGET_NU)]


def shown(console: Console, rows: pd.DataFrame, covered: dict[str, Any]) -> None:
    table = Table(title="Error against the solid, percent: E1 (largest of E1, E2, G12) over the shapes")
    for name in ("group", "model", *(f"t/l {x:g}" for x in SHORT)):
        table.add_column(name, justify="left" if name in ("group", "model") else "right")
    for line in short_table(rows):
        table.add_row(*line)
    console.print(table)
    joined, missed = joint_rows(rows[rows["sample"] == "table"]), misses(rows)
    for title, few in (
        (f"Joint model: cells that miss its target (t/l to {TARGET_TO:g})", missed[missed.slenderness <= TARGET_TO]),
        (f"Joint model: what is left at t/l {SLENDERNESS[-1]:g}", joined[joined.slenderness > TARGET_TO]),
    ):  # fmt: skip
        table = Table(title=title)
        for name in ("group", "shape", "t/l", "E1 %", "E2 %", "G12 %", "nu12", "nu21", "joints"):
            table.add_column(name)
        for r in few.itertuples():
            table.add_row(
                r.group, str(r.shape if r.sample == "table" else r.parameters), f"{r.slenderness:g}",
                *(f"{getattr(r, f'{k}_error_percent'):.2f}" for k in MODULI),
                *(f"{getattr(r, f'{k}_error'):.4f}" for k in RATIOS),
                " ".join(word for word in ("near", "overlap", "outside") if getattr(r, word)),
            )  # fmt: skip
        console.print(table if len(few) else f"{title}: none")
    for note, part in rows[rows.note != ""].groupby("note"):
        console.print(f"{note}: " + "; ".join(f"{r.group} {r.shape} {r.parameters}" for r in part.itertuples()))
    table = Table(title="Random cells inside their band, of how many")
    for name in ("group", "sample and envelope", *MODELS):
        table.add_column(name)
    for title, of in covered.items():
        for group, by_model in of.items():
            table.add_row(group, title, *("{} of {}".format(*by_model[m]) if m in by_model else "" for m in MODELS))
    console.print(table)


def figure(rows: pd.DataFrame) -> Any:
    """Return the figure: error of each modulus against slenderness, a panel for each group, the solid's own below."""
    rows = rows[(rows["sample"] == "table") & (rows.note == "")]
    groups = list(dict.fromkeys(rows.group))
    columns, width, height = 4, 2.15, 1.75
    lines = -(-len(groups) // columns)
    page = style.blank_figure(columns * (width + 0.22) + 0.75, lines * (height + 0.42) + 1.5)
    top = float(page.get_size_inches()[1])
    style.write(page, 0.2, top - 0.15, "How far each model is off a solid of the true section", fontsize=style.TITLE)
    words = ("Largest error of E₁, E₂ and G₁₂, %, against the largest t/l of the cell. Line: the worst of the shapes; "
             "shade: down to the best. Cells whose joints overlap are left out.")  # fmt: skip
    style.write(page, 0.2, top - 0.47, words, color=style.GREY)
    marks = {
        "euler": {"color": style.OCHRE, "marker": "s", "linestyle": (0, (1, 1.2)), "markerfacecolor": "white"},
        "timoshenko": {"color": style.BLUE, "marker": "o", "linestyle": (0, (4, 1.5))},
        "joint": {"color": style.INK, "marker": "D", "linestyle": "-"},
    }
    for n, group in enumerate(groups):
        line, column = divmod(n, columns)
        ax = style.axes_at(page, 0.75 + column * (width + 0.22), top - 0.98 - height - line * (height + 0.42),
                           width, height, f"errors {group}")  # fmt: skip
        part = rows[rows.group == group]
        for model, look in marks.items():
            found = part[(part.model == model) & (part.used == model)]
            if not len(found):
                ax.text(0.03, 0.05, "no joint tables: falls back\nto timoshenko", transform=ax.transAxes,
                        fontsize=style.SMALL, color=style.GREY)  # fmt: skip
                continue
            found = found[~found.overlap]
            off = found[[f"{k}_error_percent" for k in MODULI]].abs().max(axis=1).groupby(found.slenderness)
            if model != "euler":
                ax.fill_between(off.min().index, off.min(), off.max(), color=look["color"], alpha=0.12, linewidth=0.0)
            ax.plot(off.max().index, off.max(), markersize=3.6, linewidth=1.3, label=model, **look)
        own = part[[f"solid_{k}_spread_percent" for k in MODULI]].max(axis=1).groupby(part.slenderness).max()
        ax.plot(
            own.index, own, color=style.GREY, linewidth=0.9, linestyle=(0, (6, 2, 1, 2)), label="solid's own estimate"
        )
        ax.axhline(TARGET_PERCENT, color=style.RULE, linewidth=0.9, zorder=0)
        ax.set(xscale="log", yscale="log", xlim=(0.017, 0.36), ylim=(3e-3, 150.0))
        ax.set_xticks([0.02, 0.05, 0.1, 0.2, 0.3], ["0.02", "0.05", "0.1", "0.2", "0.3"])
        ax.set_yticks([0.01, 0.1, 1.0, 10.0, 100.0], ["0.01", "0.1", "1", "10", "100"])
        ax.minorticks_off()
        if column:
            ax.set_yticklabels([])
        else:
            ax.set_ylabel("error, %", fontsize=style.SMALL, color=style.GREY)
        if line == lines - 1:
            ax.set_xlabel("t/l", fontsize=style.SMALL, color=style.GREY, labelpad=2.0)
        ax.tick_params(labelsize=style.SMALL, length=2.5, color=style.GREY)
        ax.set_title(group, fontsize=style.PLAIN, loc="left", color=style.INK, pad=3.0)
        for side in ("top", "right"):
            ax.spines[side].set_visible(False)
        if n == 0:
            handles, labels = ax.get_legend_handles_labels()
    page.legend(handles, labels, loc="upper left", bbox_to_anchor=(0.2 / page.get_size_inches()[0], 1.0 - 0.6 / top),
                ncols=4, frameon=False, fontsize=style.SMALL, borderaxespad=0.0, handlelength=3.2)  # fmt: skip
    style.foot(page, "Parent nu 0.3, plane stress; solids of six-node triangles, a coarser mesh gives their own "
               "estimate; the pale rule is the joint model's target of 1 %")  # fmt: skip
    return page


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--processes", type=int, default=2, help="solids at a time (2)")
    parser.add_argument("--again", action="store_true", help="with the solids of data/model_errors.csv")
    options = parser.parse_args()
    if options.processes < 1:
        parser.error(f"--processes = {options.processes}: give at least 1")
    console, path = Console(), DATA / "model_errors.csv"
    if options.again and not path.exists():
        parser.error(f"{path} is not there; run without --again first")
    found: list[dict[str, Any]] = []
    if options.again:
        cells = read(path).drop_duplicates(["sample", "group", "shape", "parameters", "poisson", "deep"])
        rows_of = [{str(name): value for name, value in row.items()} for row in cells.to_dict("records")]
        for row in track(rows_of, "models", console=Console(file=sys.stderr)):
            found += compared(row)
    else:
        cases = [*table_cases(), *edge_cases(), *near_cases(), *random_cases("widen"), *random_cases("check")]
        # fresh processes: the mesher keeps a state of its own that does not survive a fork
        with ProcessPoolExecutor(options.processes, mp_context=get_context("spawn")) as pool:
            results = pool.map(measured, cases, chunksize=2)
            for part in track(results, "solids", len(cases), console=Console(file=sys.stderr)):
                found += part
    part_path = path.with_suffix(".part")
    pd.DataFrame(found).to_csv(part_path, index=False, float_format="%.9g", lineterminator="\n")
    os.replace(part_path, path)
    rows = read(path)
    covered = {}
    for samples, check in ((("table",), "widen"), (FIXED, "widen"), (MAKE, "check")):
        write_bands(envelopes(rows, samples))
        covered[f"{check} in {' + '.join(samples)}"] = coverage(rows, check)
    meta = {
        "made_by": "scripts/model_errors.py", "homog": homog.__version__, "python": platform.python_version(),
        "numpy": np.__version__, "rows": len(rows), "seeds": SEEDS,
        "what": "Error of each model (model / solid - 1 in percent; nu: model - solid) against the solid model of the "
                "same cell, parent modulus 1 MPa; solid_* are the solid's values and its own error estimate. Own "
                "computation: no measured or published value enters.",
        "samples": {"table": "fixed shapes, nu 0.3", "edge": "corners of the shapes, nu 0 and 0.49 deep",
                    "near": "sharp shapes with less than 0.4 t of plain wall",
                    "widen": "random shapes that widen homog/bands.csv", "check": "random shapes kept out of it"},
        "inside_their_band": covered,
    }  # fmt: skip
    (DATA / "model_errors.meta.json").write_text(json.dumps(meta, indent=1) + "\n", encoding="utf-8")
    page = figure(rows)
    for suffix in (".svg", ".png"):
        style.save(page, DATA / f"model_errors{suffix}")
    shown(console, rows, covered)
    words = in_words(covered[f"check in {' + '.join(MAKE)}"])
    console.print(f"\nFor the README:\n{words}\n{markdown(rows)}", highlight=False, soft_wrap=True)


def read(path: Path) -> pd.DataFrame:
    rows = pd.read_csv(path, keep_default_na=True)
    for name in ("note", "shape", "model", "used"):
        rows[name] = rows[name].fillna("")
    for name in ("outside", "near", "overlap"):
        rows[name] = rows[name].isin([True, "True"])
    return rows


if __name__ == "__main__":
    main()
