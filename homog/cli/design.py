"""Two commands of the command line: `sensitivity` (what moves what) and `tune` (inverse design)."""

from __future__ import annotations

import json
import re
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from homog import __version__
from homog.cli.options import (
    Assignments,
    Deep,
    FamilyId,
    MaterialName,
    Model,
    Modulus,
    Overwrite,
    Poisson,
    SolidDensity,
    app,
    console_,
    number_of,
    one_cell,
    parent_of,
    table_,
)
from homog.errors import InputError
from homog.terminal import teller

if TYPE_CHECKING:
    import pandas as pd

    from homog.families import Family
    from homog.problem import Asked
    from homog.tuning import Tuning

MAIN = ("density_kg_m3", "E1_MPa", "nu12")


@app.command()
def sensitivity(
    id: FamilyId,
    parameters: Assignments = None,
    column: Annotated[
        list[str] | None, typer.Option("--column", metavar="NAME", help="Output quantity; repeat it. All without.")
    ] = None,
    relative: Annotated[
        bool, typer.Option("--relative", help="Percent per percent instead of units per mm and degree.")
    ] = False,
    material: MaterialName = None,
    modulus: Modulus = None,
    poisson: Poisson = None,
    solid_density: SolidDensity = None,
    deep: Deep = False,
    model: Model = "joint",
    as_json: Annotated[bool, typer.Option("--json", help="Print one JSON object instead of a table.")] = False,
) -> int:
    """Show how every output quantity changes with every parameter, the others held: exact derivatives, one solution.

    Example: homog sensitivity reentrant-honeycomb angle=-30 thickness=1 --relative --column E1_MPa --column nu12
    """
    import numpy as np

    from homog.columns import COLUMNS, evaluate
    from homog.families import family
    from homog.gradient import numeric
    from homog.report import WHAT_IT_IS, number, plain
    from homog.sensitivity import chosen_columns, column_rates, elasticities

    found = family(id)
    parent = parent_of(material, modulus, poisson, solid_density, deep, family_id=id)
    names = chosen_columns(found, column)
    effective = one_cell(id, parameters, parent, model)
    values = evaluate(effective, names)
    rates = column_rates(effective, names)
    rates_now = np.stack([rates[name] for name in names])
    if relative:
        rates_now = elasticities(effective, names, rates_now)
    by = numeric(found)
    if as_json:
        entries = {
            name: {"value": plain(values[name][0]), "by": {p: plain(x) for p, x in zip(by, row, strict=True)}}
            for name, row in zip(names, rates_now[..., 0], strict=True)
        }
        now = {name: plain(value.reshape(-1)[0]) for name, value in effective.cell.parameters.items()}
        print(json.dumps({"family": id, "parameters": now, "material": parent.name, "model": effective.model,
                          "relative": relative, "columns": entries}, indent=2, allow_nan=False))  # fmt: skip
        return 0
    console = console_()
    verdict, codes = (evaluate(effective, ["verdict", "reasons"])[name][0] for name in ("verdict", "reasons"))
    console.print(f"{found.title}  ({id}), model {effective.model}:  {verdict}  {codes}".rstrip(), style="bold")
    now_words = (f"{p} {effective.cell.parameters[p].reshape(-1)[0]:g} {found.parameter(p).unit}" for p in by)
    console.print(", ".join(now_words))
    heads = [f"{p} {'%/%' if relative else f'per {found.parameter(p).unit}'}" for p in by]
    table = table_("quantity", "value", *heads, numeric=("value", *heads))
    for name, row in zip(names, rates_now[..., 0], strict=True):
        value = str(values[name][0]) if COLUMNS[name].text else number(values[name][0])
        if column or not np.isnan(row).all():
            floor = 0.0 if COLUMNS[name].text else 1e-9 * abs(float(values[name][0]))  # round-off of a zero
            table.add_row(name, value, *(number(x if not abs(x) < floor else 0.0) for x in row))
    console.print(table)
    console.print("Each parameter alone, the others held; - where there is no derivative (words, counts, directions).")
    console.print(WHAT_IT_IS, style="dim")
    return 0


@app.command()
def tune(
    id: FamilyId,
    target: Annotated[
        list[str],
        typer.Option("--target", metavar="COLUMN=VALUE", help="What is wanted; also COLUMN=LOW:HIGH, LOW: or :HIGH."),
    ],
    limit: Annotated[
        list[str] | None, typer.Option("--limit", metavar="COLUMN<VALUE", help="What must be kept; also COLUMN>VALUE.")
    ] = None,
    fix: Annotated[
        list[str] | None, typer.Option("--fix", metavar="PARAM=VALUE", help="Parameter that keeps its value.")
    ] = None,
    within: Annotated[
        list[str] | None, typer.Option("--within", metavar="PARAM=LOW:HIGH", help="Narrower range of a parameter.")
    ] = None,
    free: Annotated[
        list[str] | None,
        typer.Option("--free", metavar="PARAM", help="Parameter that else follows another (vertical_thickness)."),
    ] = None,
    process: Annotated[
        str | None, typer.Option("--process", metavar="NAME", help="How it is made ('homog processes').")
    ] = None,
    min_wall: Annotated[str | None, typer.Option("--min-wall", metavar="MM", help="Thinnest wall, mm.")] = None,
    max_cell: Annotated[str | None, typer.Option("--max-cell", metavar="MM", help="Largest repeat, mm.")] = None,
    rank: Annotated[
        str, typer.Option("--rank", metavar="COLUMN=min|max", help="What comes first in the list.")
    ] = "density_kg_m3=min",
    starts: Annotated[int, typer.Option("--starts", metavar="N", help="Random geometries to start from.")] = 64,
    keep: Annotated[int, typer.Option("--keep", metavar="K", help="Most geometries to list.")] = 12,
    seed: Annotated[int, typer.Option("--seed", metavar="N", help="Seed of the random starts.", min=0)] = 0,
    material: MaterialName = None,
    modulus: Modulus = None,
    poisson: Poisson = None,
    solid_density: SolidDensity = None,
    deep: Deep = False,
    model: Model = "joint",
    as_json: Annotated[bool, typer.Option("--json", help="Print one JSON object instead of a table.")] = False,
    out: Annotated[
        Path | None, typer.Option("--out", metavar="FILE", help="Table to write as well: .csv or .parquet.")
    ] = None,
    overwrite: Overwrite = False,
) -> int:
    """Find geometries of a family that have the properties asked for: many searches at once, different shapes listed.

    Exit status 3 if none is found: the nearest is shown, and what is in its way.

    Example: homog tune reentrant-honeycomb --target nu12=-0.8 --target E1_MPa=3: --limit "density_kg_m3<200"
    --material "PA12 laser-sintered" --process "powder-bed polymer"
    """

    from homog.families import family
    from homog.materials import Process
    from homog.materials import process as named
    from homog.problem import words
    from homog.report import check_table, provenance, write_table
    from homog.tuning import tune as search

    if out is not None:
        check_table(out, overwrite=overwrite)
    found = family(id)
    parent = parent_of(material, modulus, poisson, solid_density, deep, family_id=id)
    made_by = named(process) if process is not None else Process("given limits")
    for key, option, text in (("min_wall_mm", "--min-wall", min_wall), ("max_cell_mm", "--max-cell", max_cell)):
        if text is not None:
            made_by = made_by.replaced(**{key: number_of(text, f"Option {option}", "give one number of mm")})
    column, _, better = rank.partition("=")
    tell = teller()
    result = search(
        id, _targets(target), limits=_limits(limit or ()), fix=_fixed(found, fix or ()),
        within={name: _both(name, text) for name, text in _pairs("--within", within or (), "PARAM=LOW:HIGH").items()},
        free=free or (), material=parent, model=model, process=made_by, rank={column: better or "min"},
        starts=starts, keep=keep, seed=seed, progress=lambda step, running: tell(f"step {step}: {running} searches"),
    )  # fmt: skip
    tell("")
    if as_json:
        print(json.dumps(_card(result), indent=2, allow_nan=False))
    else:
        _show(result)
    if out is not None and len(result.found):
        asked = [words(one) for one in result.problem.limits]
        meta = provenance(__version__, model, parent, family=id, asked=asked, starts=result.starts, seed=seed)
        write_table(result.found, out, meta, overwrite=overwrite)
        if not as_json:
            print(f"wrote {out}: {len(result.found)} rows")
    return 0 if len(result.found) else 3


def _pairs(option: str, given: Sequence[str], form: str) -> dict[str, str]:
    """Return NAME=TEXT arguments by name."""
    out: dict[str, str] = {}
    for word in given:
        name, equals, text = (part.strip() for part in word.partition("="))
        if not (equals and name and text):
            raise InputError(f"{option} {word!r} is not {form}")
        if name in out:
            raise InputError(f"{option}: '{name}' is given twice; give it once")
        out[name] = text
    return out


def _range(what: str, text: str) -> tuple[float | None, float | None]:
    """Return LOW:HIGH, LOW: or :HIGH as two numbers, None for an open end."""
    low, _, high = text.partition(":")
    remedy = "write LOW:HIGH, LOW: or :HIGH"
    ends = tuple(number_of(end, what, remedy) if end.strip() else None for end in (low, high))
    return ends[0], ends[1]


def _targets(given: Sequence[str]) -> dict[str, Asked]:
    out: dict[str, Asked] = {}
    for name, text in _pairs("--target", given, "COLUMN=VALUE, COLUMN=LOW:HIGH, COLUMN=LOW: or COLUMN=:HIGH").items():
        what = f"Target '{name}'"
        out[name] = _range(what, text) if ":" in text else number_of(text, what, "give a value, or LOW:HIGH")
    return out


def _limits(given: Sequence[str]) -> dict[str, Asked]:
    ends: dict[str, list[float | None]] = {}
    for word in given:
        match = re.fullmatch(r"\s*(\w+)\s*(<=?|>=?)\s*(\S+)\s*", word)
        if not match:
            raise InputError(f"--limit {word!r} is not COLUMN<VALUE or COLUMN>VALUE; put it in quotes")
        name, sign, text = match.groups()
        side = 1 if sign.startswith("<") else 0
        pair = ends.setdefault(name, [None, None])
        if pair[side] is not None:
            raise InputError(f"--limit on '{name}' is given twice with '{sign}'; give it once")
        pair[side] = number_of(text, f"Limit on '{name}'", "give one number")
    return {name: (low, high) for name, (low, high) in ends.items()}


def _fixed(found: Family, given: Sequence[str]) -> dict[str, Any]:
    out: dict[str, Any] = {}
    for name, text in _pairs("--fix", given, "PARAM=VALUE").items():
        if found.parameter(name).choices:
            out[name] = text
        else:
            out[name] = number_of(text, f"Parameter '{name}'", "give one value; --within takes a range")
    return out


def _both(name: str, text: str) -> tuple[float, float]:
    low, high = _range(f"Range of '{name}'", text)
    if low is None or high is None:
        raise InputError(f"--within {name}={text} has an open end; write {name}=LOW:HIGH")
    if low > high:
        raise InputError(f"--within {name}={text}: an empty range, {low:g} is above {high:g}; swap them")
    return low, high


def _card(result: Tuning) -> dict[str, Any]:
    """Return a result as plain JSON values."""
    from homog.columns import COLUMNS
    from homog.problem import words
    from homog.report import plain
    from homog.screening import records

    def rows(table: pd.DataFrame) -> list[dict[str, Any]]:
        return [
            {"parameters": {p.name: plain(row[p.column]) for p in result.problem.family.parameters},
             "columns": {name: plain(row[name]) for name in COLUMNS if name in row}}
            for row in records(table)
        ]  # fmt: skip

    return {
        "family": result.problem.family.id,
        "material": result.problem.material.name,
        "model": result.problem.model,
        "asked": [{"words": words(one), "from": one.origin} for one in result.problem.limits],
        "starts": result.starts,
        "met": result.met,
        "found": rows(result.found),
        "nearest": rows(result.nearest),
        "in_the_way": list(result.in_the_way),
    }


def _head(name: str) -> str:
    """Return a long name in two lines, so that a table stays narrow."""
    return name.replace("_", "_\n", 1) if len(name) > 10 else name


def _show(result: Tuning) -> None:
    from homog.problem import words
    from homog.reasons import reason_text
    from homog.report import WHAT_IT_IS, number
    from homog.screening import records
    from homog.tuning import DISTINCT

    problem, console = result.problem, console_()
    console.print(f"{problem.family.title}  ({problem.family.id}), {problem.material.name}, model {problem.model}",
                  style="bold")  # fmt: skip
    console.print("asked: " + "; ".join(f"{words(one)} ({one.origin})" for one in problem.limits))
    shown = result.found if len(result.found) else result.nearest
    names = [v.name for v in problem.variables]
    fixed = [f"{name} {value if isinstance(value, str) else f'{value:g}'}" for name, value in problem.fixed.items()]
    tied = [f"{p.name} as {p.default}" for p in problem.family.parameters
            if isinstance(p.default, str) and not p.choices and p.name not in {*names, *problem.fixed}]  # fmt: skip
    if fixed or tied:
        console.print("held: " + ", ".join([*fixed, *tied]))
    if len(result.found):
        first = "smallest" if problem.goals[0].better == "min" else "largest"
        count = f"{len(shown)} different shapes (by over {DISTINCT:.0%})" if len(shown) > 1 else "all of one shape"
        console.print(f"{result.met} of {result.starts} searches met everything, {count}; {first} "
                      f"{problem.goals[0].column} first:")  # fmt: skip
    else:
        console.print(f"None of {result.starts} searches met everything. The nearest:")
    columns = list(dict.fromkeys([*(one.column for one in problem.limits), *(g.column for g in problem.goals), *MAIN]))
    columns = [name for name in columns if name != "thinnest_mm"]  # the thicknesses stand beside it
    heads = [*(f"{_head(name)}\n{problem.family.parameter(name).unit}" for name in names), *map(_head, columns)]
    table = table_("", *heads, "cautions", numeric=heads)
    for i, row in enumerate(records(shown), 1):
        values = [number(row[problem.family.parameter(name).column]) for name in names]
        table.add_row(str(i), *values, *(number(row[name]) for name in columns), row["reasons"])
    console.print(table)
    for line in result.in_the_way:
        console.print(f"in the way: {line}")
    for code in sorted({code for words_ in shown["reasons"] for code in str(words_).split()}):
        console.print(f"{code}: {reason_text(code)}")
    console.print(WHAT_IT_IS, style="dim")
