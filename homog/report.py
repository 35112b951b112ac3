"""What is handed over: tables, figures, a summary in an engineer's words, and the provenance beside them.

Every number a reader sees in words is made here; the candidates themselves are written by `store`, as they come.
"""

from __future__ import annotations

import dataclasses
import json
import math
import platform
import re
from collections.abc import Callable, Iterable, Mapping, Sequence
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa
import scipy

from homog.brief import Brief
from homog.cell import UnitCell
from homog.columns import COLUMNS, evaluate
from homog.effective import Effective, homogenize
from homog.engine import Plan
from homog.errors import InputError
from homog.families import FAMILIES
from homog.files import check_free, whole_file
from homog.materials import CONFIRM, Material
from homog.reasons import reason_level, reason_text
from homog.recheck import SCREENED, given
from homog.screening import Screening, records
from homog.store import sha256, write_tables
from homog.tensors import stiffness_to_voigt

if TYPE_CHECKING:
    import pandas as pd

WHAT_IT_IS = (
    "Linear elasticity at small strain of an infinite, perfect lattice at room temperature, computed from beam, bar "
    "and hinge models. Screening only, not design evidence: where failure can hurt someone, local codes and licensed "
    "practice decide."
)
TABLES = (".csv", ".parquet")
MOST_CSV = 100_000
"""Candidates up to which a screen writes candidates.csv unasked, some 60 MB."""
ZERO = 1e-12
SHOWN = ("density_kg_m3", "E1_MPa", "nu12", "auxetic_reach_deg", "E1_per_hexagon")


def provenance(version: str, model: str, material: Material, **more: Any) -> dict[str, Any]:
    """Return what a reader needs to make the same numbers again."""
    values = {k: v for k, v in dataclasses.asdict(material).items() if v == v}  # a NaN yield is left out
    return {
        "program": "homog-cells",
        "version": version,
        "python": platform.python_version(),
        "numpy": np.__version__,
        "scipy": scipy.__version__,
        "written": datetime.now(UTC).isoformat(timespec="seconds"),
        "model": model,
        "material": values,
        "note": WHAT_IT_IS,
        **more,
    }


def evaluation(effective: Effective) -> dict[str, Any]:
    """Return everything about the first member of a batch as plain JSON values, no value (NaN) as None.

    Keys: family, parameters, material, model, relative_density, mechanisms, stiffness (Voigt, engineering shear; MPa,
    or for sheets [A B; B D] in N/mm, N, N mm) and columns (every output quantity by name).
    """
    row = {name: values[0] for name, values in evaluate(effective).items()}
    member = effective.stiffness.reshape((-1,) + effective.stiffness.shape[-2:])[0]
    stiffness = stiffness_to_voigt(member, sheet=effective.kind == "sheet")
    cell = effective.cell
    return {
        "family": cell.family,
        "parameters": {name: plain(values.reshape(-1)[0]) for name, values in cell.parameters.items()},
        "material": {key: plain(value) for key, value in dataclasses.asdict(cell.parent).items()},
        "model": effective.model,
        "relative_density": plain(row["relative_density"]),
        "mechanisms": int(row["mechanisms"]),
        "stiffness": [[plain(x) for x in line] for line in stiffness],
        "columns": {name: plain(row[name]) for name in COLUMNS if name in row},
    }


def plain(value: Any) -> Any:
    """Return a number or word of a table as a plain JSON value, no value (NaN) as None."""
    if isinstance(value, str):
        return str(value)
    if isinstance(value, bool | np.bool_):
        return bool(value)
    if isinstance(value, int | np.integer):
        return int(value)
    return float(value) if math.isfinite(value) else None


def check_table(path: Path, *, overwrite: bool = False) -> Path:
    """Return where the provenance of a table goes; InputError for another suffix, or a file that is there already."""
    if path.suffix not in TABLES:
        raise InputError(f"Table '{path.name}' has the suffix '{path.suffix}'; allowed are {', '.join(TABLES)}")
    beside = path.with_name(path.stem + ".meta.json")
    for file in (path, beside):
        check_free(file, overwrite=overwrite)
    return beside


def write_table(table: pd.DataFrame, path: Path, meta: Mapping[str, Any], *, overwrite: bool = False) -> None:
    """Write a table as CSV or Parquet by its suffix, whole or not at all, and its provenance to NAME.meta.json.

    Raises
    ------
    InputError
        For another suffix, or a file that is there already.
    """
    whole = pa.Table.from_pandas(table, preserve_index=False)
    stream_table([whole], whole.schema, path, meta, overwrite=overwrite)


def stream_table(
    tables: Iterable[pa.Table], whole: pa.Schema, path: Path, meta: Mapping[str, Any], *, overwrite: bool = False
) -> None:
    """Write tables of one schema, one after the other as they come, into one file; otherwise as `write_table`."""
    beside = check_table(path, overwrite=overwrite)
    with whole_file(path, overwrite=overwrite) as temporary, whole_file(beside, overwrite=overwrite) as meta_file:
        meta_file.write_text(json.dumps(meta, indent=2, ensure_ascii=False) + "\n", encoding="utf-8")
        write_tables(tables, whole, temporary)


def write_screening(
    screening: Screening, place: Path, *, version: str, brief_name: str = "brief.toml", csv: bool = False,
    progress: Callable[[str], None] = lambda step: None, unlooked: str = "",
) -> None:  # fmt: skip
    """Write tables, a polar plot per shortlisted cell, the property chart, the summary and the brief.

    `place` is a folder that exists, usually that of `whole_folder`; what a stopped run left there is replaced. The
    candidates are in its parts; up to MOST_CSV of them, or with `csv`, also in candidates.csv. `progress` is told what
    is being written; `unlooked` says why nothing was looked at again as a solid.
    """
    from homog import plots

    brief = screening.brief
    meta = provenance(
        version, brief.model, brief.material, title=brief.title, brief_sha256=sha256(brief.text),
        candidates=brief.count, meeting=screening.met, seeds=sorted({c.seed for c in brief.candidates if c.sampled}),
    )  # fmt: skip
    if csv or brief.count <= MOST_CSV:
        progress("candidates.csv")
        whole = Plan(brief).schema
        stream_table(screening.tables(), whole, place / "candidates.csv", meta, overwrite=True)
    progress("shortlist.csv")
    write_table(screening.shortlist, place / "shortlist.csv", meta, overwrite=True)
    copy = place / (brief_name if brief_name.endswith(".toml") else "brief.toml")
    copy.write_bytes(brief.text.encode())
    shown = screening.shortlist if screening.met else screening.nearest
    if len(shown):
        progress("property chart")
        chart = plots.property_chart(
            screening.sample, shown, material=brief.material, limits=brief.limits, title=brief.title,
            counts=screening.counts, model=brief.model,
        )  # fmt: skip
        for suffix in (".svg", ".png"):
            plots.save(chart, place / f"chart{suffix}")
    figures = []
    for row in records(screening.shortlist):
        rank, family = row["rank"], FAMILIES[row["family"]]
        progress(f"polar plot {rank} of {len(screening.shortlist)}")
        figure = plots.polar_figure(
            homogenize(rebuilt(row, brief), model=row["model"]),
            limits=brief.limits, title=f"{rank}. {family.title}, candidate {row['candidate']}",
        )  # fmt: skip
        stem = f"polar-{rank:02d}-{family.id}"
        for suffix in (".svg", ".png"):
            plots.save(figure, place / f"{stem}{suffix}")
        figures.append(f"{stem}.png")
    progress("summary")
    (place / "summary.md").write_text(
        summary(screening, figures=figures, version=version, unlooked=unlooked), encoding="utf-8"
    )
    progress("")


def rebuilt(row: Mapping[str, Any], brief: Brief) -> UnitCell:
    """Return the cell of one row of a table."""
    return FAMILIES[row["family"]].build(given(row), brief.material)


def parameter_words(row: Mapping[str, Any]) -> str:
    """Return a row's parameters in words: `inclined 10 mm, angle -30 deg`."""
    words = []
    for p in FAMILIES[row["family"]].parameters:
        value = row[p.column]
        words.append(f"{p.name} {value if p.choices else number(value)}" + (f" {p.unit}" if p.unit else ""))
    return ", ".join(words)


def number(value: Any) -> str:
    """Return a number to four significant digits, plain where that reads well; round-off of a zero reads as 0."""
    x = float(value)
    if abs(x) < ZERO:
        return "0"
    if not math.isfinite(x):
        return "-"
    if 1e-3 <= abs(x) < 1e5:
        return f"{x:.4g}" if abs(x) < 1e4 else f"{x:.0f}"
    return f"{x:.3e}"


def markdown(header: Sequence[str], lines: Sequence[Sequence[str]]) -> str:
    """Return a Markdown table."""
    rows = [header, ["---"] * len(header), *lines]
    return "\n".join("| " + " | ".join(cell.replace("|", "\\|") for cell in row) + " |" for row in rows) + "\n"


def _asked(brief: Brief) -> str:
    m, p = brief.material, brief.process
    lines = [[limit.words, limit.origin] for limit in brief.limits]
    deep = "; walls deep along axis 3 (plane strain)" if m.deep else ""
    goals = ", ".join(f"{'smallest' if g.better == 'min' else 'largest'} {g.column}" for g in brief.goals)
    part = " x ".join(f"{s:g}" for s in brief.part)
    return "\n".join([
        "## What was asked\n",
        markdown(["limit", "from"], lines) if lines else "No limits.\n",
        f"- Parent: {m.name}, E {m.modulus_MPa:g} MPa, nu {m.poisson:g}, {m.density_kg_m3:g} kg/m3{deep}. {CONFIRM}",
        f"- Process: {p.name}" + (f", wall +-{p.wall_tolerance_mm:g} mm" if p.wall_tolerance_mm else "")
        + (f"; recommended wall {p.recommended_wall_mm:g} mm" if p.recommended_wall_mm else "") + ".",
        *([f"- Part: {part} mm."] if part else []),
        f"- Ranked by {goals}" + (", Pareto front" if brief.front else "") + f"; {brief.keep} kept"
        + (f", at most {brief.per_family} of a family" if brief.per_family < brief.keep else "") + ".",
        f"- Model: {brief.model}.\n",
    ])  # fmt: skip


def _shown_columns(brief: Brief, table: pd.DataFrame) -> list[str]:
    names = [*(limit.column for limit in brief.limits), *(goal.column for goal in brief.goals), *SHOWN]
    return [name for name in dict.fromkeys(names) if name in table]


def _cells(table: pd.DataFrame, brief: Brief, *, misses: bool) -> str:
    columns = _shown_columns(brief, table)
    lines = []
    for i, row in enumerate(records(table), 1):
        miss = []
        for limit in brief.limits:
            amount = row[f"miss_{limit.column}"]
            if amount != 0.0:
                miss.append(f"{limit.column} by {number(amount)}" if amount > 0.0 else f"{limit.column} has no value")
        lines.append([str(i), str(row["candidate"]), row["family"], parameter_words(row),
                      *(number(row[name]) for name in columns), row["reasons"].replace(" ", ", ") or "none",
                      *(["; ".join(miss)] if misses else [])])  # fmt: skip
    header = ["rank", "no.", "family", "parameters", *columns, "cautions"]
    return markdown([*header, "misses"] if misses else header, lines)


def _falls(screening: Screening) -> str:
    count, tally = screening.brief.count, screening.tally
    lines = [[f.limit.words, f"{f.missed:,}", f"{f.missed / count:.1%}", f"{f.alone:,}"] for f in screening.falls]
    rejected = tally.total("reject")
    lines.append(["verdict not reject", f"{rejected:,}", f"{rejected / count:.1%}", ""])
    families = [
        [name, *(f"{tally.families[name, what]:,}" for what in ("candidates", "meets", "ok", "caution", "reject"))]
        for name in sorted(screening.counts)
    ]
    return (
        "## How many fell to what\n\n" + markdown(["limit", "missed", "share", "missed this alone"], lines) + "\n"
        + markdown(["family", "candidates", "meet", "ok", "caution", "reject"], families) + "\n"
        + markdown(["reason", "verdict", "candidates", "meaning"], [
            [f"`{code}`", reason_level(code), f"{count:,}", reason_text(code)] for code, count in _reasons(screening)
        ])
    )  # fmt: skip


def _reasons(screening: Screening) -> list[tuple[str, int]]:
    """Return each reason with the number of candidates it speaks against, rejects first, the most common first."""
    counts = screening.tally.reasons
    return sorted(counts.items(), key=lambda item: (reason_level(item[0]) != "reject", -item[1], item[0]))


def _tolerance(screening: Screening) -> str:
    brief, table = screening.brief, screening.shortlist
    tolerance = brief.process.wall_tolerance_mm
    if not tolerance or not len(table):
        return ""
    walls = table["thinnest_mm"].to_numpy(float)
    below = (
        f"Walls under the {brief.process.recommended_wall_mm:g} mm that the process recommends: "
        f"{int((walls < brief.process.recommended_wall_mm).sum())} of {len(walls)} shortlisted cells."
    )
    share = tolerance / walls.min()
    lines = [
        f"A wall that is {tolerance:g} mm off everywhere is {share:.0%} of the thinnest shortlisted wall "
        f"({number(walls.min())} mm)."
    ]
    names = ("E1_tolerance_percent", "nu12_tolerance", "E1_scatter_percent")
    together, nu, apart = (_range(table[name]) for name in names)
    if together:
        lines.append(
            f"To first order that moves E1 of the shortlisted cells by {together} % and nu12 by {nu} (`{names[0]}`, "
            f"`{names[1]}` of each); the cube of a bending wall makes it more upwards and less downwards."
        )
    if apart:
        lines.append(f"Where each wall of a cell is off by itself, E1 moves by {apart} %, and less over many cells.")
    return "## What the wall tolerance does\n\n" + " ".join([*lines, "Make and measure a coupon first.", below]) + "\n"


def _range(values: pd.Series[float]) -> str:
    """Return the least and the largest of some numbers in words, or nothing if there are none."""
    known = values.dropna()
    if known.empty:
        return ""
    low, high = number(known.min()), number(known.max())
    return low if low == high else f"{low} to {high}"


def _second(screening: Screening, unlooked: str) -> str:
    """Return what the second look found: both numbers of each candidate, and where the two models part."""
    table = screening.looked
    head = "## The second look, as solids\n\n"
    if table is None:
        return f"{head}Nothing was looked at again: {unlooked}.\n" if unlooked else ""
    again = table[table["model"] == "solid"]
    lines = []
    for row in records(again):
        pairs = [f"{number(row[f'screened_{name}'])} -> {number(row[name])}" for name in SCREENED]
        what = "meets" if row["meets"] else f"misses {row['misses']}" if row["misses"] else "rejected"
        lines.append([str(row["rank"]), str(row["candidate"]), str(row["family"]), *pairs, what])
    words = (
        f"Of the {len(table)} best of the screen, the {len(again)} that are planar walls were looked at again, each as "
        "the two-dimensional solid of its true section, meshed twice. The shortlist is judged and ranked by the solids "
        "where there are any. Both numbers, the screen's first:\n\n"
    )
    gone = again[~again["meets"]]
    after = [f"{len(gone)} of them no longer meet the brief." if len(gone) else "All of them still meet the brief."]
    for model, group in again.groupby("screened_model", sort=True):
        off = [(group[n] / group[f"screened_{n}"] - 1.0).abs().max() for n in SCREENED if not n.startswith("nu")]
        nu = max(float((group[n] - group[f"screened_{n}"]).abs().max()) for n in SCREENED if n.startswith("nu"))
        after.append(
            f"Of the {len(group)} that the screen took by the model `{model}`, stiffness was off by {max(off):.2%} at "
            f"most, Poisson's ratio by {nu:.4f}."
        )
    notes = [f"- candidate {row['candidate']}: {row['note']}" for row in records(table[table["note"] != ""])]
    header = ["was", "no.", "family", *SCREENED, "now"]
    return head + words + markdown(header, lines) + "\n" + " ".join(after) + "\n" + "\n".join([*notes, ""])


def summary(screening: Screening, *, figures: Sequence[str], version: str, unlooked: str = "") -> str:
    """Return the summary of a screening in Markdown: asked, found, fallen, and what the numbers are and are not."""
    brief, met = screening.brief, screening.met
    parts = [f"# {brief.title}\n"]
    if met:
        kept = len(screening.shortlist)
        which = f"{kept} of their Pareto front" if brief.front else f"the {kept} best"
        parts.append(f"**{met:,} of {brief.count:,} candidates meet the brief**; {which} are listed here.\n")
    else:
        parts.append(f"**Nothing meets the brief**: none of {brief.count:,} candidates.\n")
    parts.append(_asked(brief))
    if met:
        parts += [
            "## What was found\n",
            _cells(screening.shortlist, brief, misses=False),
            "![property chart](chart.png)\n",
            _second(screening, unlooked),
        ]
        reasons = screening.shortlist["reasons"]
    else:
        parts.append("## What is in the way\n")
        worst = sorted((fall for fall in screening.falls if fall.missed), key=lambda fall: -fall.missed)
        parts += [f"- {f.limit.words}: {f.missed:,} miss it, {f.alone:,} of them nothing else" for f in worst]
        rejected = screening.tally.total("reject")
        counts = [(code, n) for code, n in _reasons(screening) if reason_level(code) == "reject"]
        why = f" ({', '.join(f'{code} {n:,}' for code, n in counts)})" if counts else ""
        parts.append(f"- verdict not reject: {rejected:,} miss it{why}")
        parts.append(
            "\nEvery candidate is rejected, and no limit can help: look at what rejects them, and move the ranges.\n"
            if rejected == brief.count
            else "\nA limit that many candidates miss alone is the one to relax first, or to widen the ranges for.\n"
        )
        parts.append("## Nearest candidates\n")
        if len(screening.nearest):
            parts += [_cells(screening.nearest, brief, misses=True), "![property chart](chart.png)\n"]
        else:
            parts.append("None: every candidate is rejected, or has no value for one of the limits.\n")
        reasons = screening.nearest["reasons"]
    found = sorted({code for text in reasons for code in text.split()})
    if found:
        parts += ["## What the cautions mean\n", *(f"- `{code}`: {reason_text(code)}." for code in found), "\n"]
    parts += [_falls(screening), _tolerance(screening)]
    if figures:
        parts += ["## Every direction\n", *(f"![{name}]({name})\n" for name in figures)]
    parts += [
        "## What these numbers are, and are not\n",
        f"{WHAT_IT_IS} Directions, signs and ratios are firmer than absolute stiffness; `reasons` in the tables says "
        "what speaks against each cell. Columns are explained by `homog families ID`.\n",
        f"homog-cells {version}.\n",
    ]
    return re.sub(r"\n{3,}", "\n\n", "\n".join(part for part in parts if part))
