"""Three commands on one family: `evaluate` one cell, `polar` to draw it, `sweep` over its parameters."""

from __future__ import annotations

import json
from itertools import product
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from homog import __version__
from homog.cli.options import (
    FIGURES,
    Assignments,
    Cluster,
    Deep,
    FamilyId,
    Fillet,
    MaterialName,
    Model,
    Modulus,
    Overwrite,
    Poisson,
    Processes,
    Quantity,
    SolidDensity,
    Yield,
    app,
    assigned,
    console_,
    one_cell,
    parent_of,
    table_,
)
from homog.errors import InputError
from homog.terminal import progress

if TYPE_CHECKING:
    pass


@app.command()
def evaluate(
    id: FamilyId,
    parameters: Assignments = None,
    material: MaterialName = None,
    modulus: Modulus = None,
    poisson: Poisson = None,
    solid_density: SolidDensity = None,
    yield_stress: Yield = None,
    deep: Deep = False,
    model: Model = "joint",
    fillet: Fillet = 0.0,
    as_json: Annotated[bool, typer.Option("--json", help="Print one JSON object instead of tables.")] = False,
) -> int:
    """Evaluate one unit cell: every output quantity, the whole stiffness, the verdict and its reasons.

    Example: homog evaluate reentrant-honeycomb angle=-30 thickness=1 --material "PA12 laser-sintered"
    """
    import numpy as np

    from homog.columns import COLUMNS
    from homog.reasons import reason_text
    from homog.report import WHAT_IT_IS, evaluation, number

    parent = parent_of(material, modulus, poisson, solid_density, deep, yield_stress, family_id=id)
    effective = one_cell(id, parameters, parent, model, fillet)
    card = evaluation(effective)
    given, quantities, stiffness = card["parameters"], card["columns"], np.array(card["stiffness"], float)
    if as_json:
        print(json.dumps(card, indent=2, allow_nan=False))
        return 0
    from homog.families import family

    console = console_()
    found = family(id)
    console.print(f"{found.title}  ({id}):  {quantities['verdict']}", style="bold")
    units = {p.name: p.unit for p in found.parameters}
    console.print(", ".join(f"{name} {value if isinstance(value, str) else f'{value:g}'} {units[name]}".strip()
                            for name, value in given.items()))  # fmt: skip
    deep_words = ", walls deep (plane strain)" if parent.deep else ""
    console.print(f"parent {parent.name}: E {parent.modulus_MPa:g} MPa, nu {parent.poisson:g}, "
                  f"{parent.density_kg_m3:g} kg/m3{deep_words}; model {effective.model}")  # fmt: skip
    table = table_("quantity", "value", "meaning", numeric=("value",))
    for name, value in quantities.items():
        if COLUMNS[name].text or value is None:
            continue
        table.add_row(name, number(value), COLUMNS[name].meaning)
    console.print(table)
    unit = "[A B; B D] in N/mm, N, N mm" if effective.kind == "sheet" else "MPa"
    axes = ["11", "22", "12"] if effective.kind == "planar" else ["11", "22", "33", "23", "13", "12"]
    axes = ["N11", "N22", "N12", "M11", "M22", "M12"] if effective.kind == "sheet" else axes
    console.print(f"stiffness, {unit} (Voigt, engineering shear)", style="bold")
    table = table_("", *axes, numeric=axes)
    floor = 1e-12 * float(np.abs(stiffness).max())
    for axis, line in zip(axes, stiffness, strict=True):
        table.add_row(axis, *(number(x if abs(x) > floor else 0.0) for x in line))
    console.print(table)
    if quantities["soft_mode"]:
        console.print(f"soft mode: {quantities['soft_mode']}")
    for code in quantities["reasons"].split():
        console.print(f"{code}: {reason_text(code)}")
    console.print(WHAT_IT_IS, style="dim")
    return 0


@app.command()
def polar(
    id: FamilyId,
    out: Annotated[Path, typer.Option("--out", metavar="FILE", help="Figure to write: .svg, .png or .pdf.")],
    parameters: Assignments = None,
    material: MaterialName = None,
    modulus: Modulus = None,
    poisson: Poisson = None,
    solid_density: SolidDensity = None,
    yield_stress: Yield = None,
    deep: Deep = False,
    model: Model = "joint",
    quantity: Quantity = "stiffness",
    overwrite: Overwrite = False,
) -> int:
    """Draw E, nu and G of one cell, or its first yield, against direction, with the cell beside them.

    Example: homog polar reentrant-honeycomb angle=-30 thickness=1 --material PLA --out bow-tie.png
    """
    from homog.families import family
    from homog.files import check_free, whole_file

    if out.suffix not in FIGURES:
        raise InputError(f"Figure '{out}' has the suffix '{out.suffix}'; allowed are {', '.join(FIGURES)}")
    check_free(out, overwrite=overwrite)
    parent = parent_of(material, modulus, poisson, solid_density, deep, yield_stress, family_id=id)
    effective = one_cell(id, parameters, parent, model)
    from homog import plots

    figure = plots.polar_figure(effective, quantity=quantity, title=family(id).title)
    with whole_file(out, overwrite=overwrite) as temporary:
        plots.save(figure, temporary)
    print(f"wrote {out}")
    return 0


@app.command()
def sweep(
    id: FamilyId,
    out: Annotated[Path, typer.Option("--out", metavar="FILE", help="Table to write: .csv or .parquet.")],
    parameters: Annotated[
        list[str] | None,
        typer.Argument(
            metavar="PARAM=LOW:HIGH:COUNT", help="Spans; also PARAM=VALUE and PARAM=A,B,C. All combinations."
        ),
    ] = None,
    material: MaterialName = None,
    modulus: Modulus = None,
    poisson: Poisson = None,
    solid_density: SolidDensity = None,
    yield_stress: Yield = None,
    deep: Deep = False,
    model: Model = "joint",
    overwrite: Overwrite = False,
    workers: Processes = 0,
    cluster: Cluster = "",
) -> int:
    """Evaluate all combinations of some parameters and write one row each, every output quantity a column.

    Example: homog sweep arrowhead outer_angle=20:40:21 inner_angle=50:80:31 --material PLA --out sweep.csv
    """
    from homog.brief import MOST_CANDIDATES, bare_brief
    from homog.candidates import Candidates
    from homog.engine import Plan, started
    from homog.families import family
    from homog.report import check_table, provenance, stream_table
    from homog.screening import sweep_tables

    check_table(out, overwrite=overwrite)
    found = family(id)
    parent = parent_of(material, modulus, poisson, solid_density, deep, yield_stress, family_id=id)
    given = assigned(found, parameters)
    words = {name: values for name, values in given.items() if found.parameter(name).choices}
    spans = {name: values for name, values in given.items() if name not in words}
    choices = (dict(zip(words, choice, strict=True)) for choice in product(*words.values()))
    sources = [Candidates(found, choice, spans, {}) for choice in choices]
    count = sum(source.count for source in sources)
    if count > MOST_CANDIDATES:
        raise InputError(f"{count:,} combinations; at most {MOST_CANDIDATES:,} in one sweep: lower a COUNT")
    plan = Plan(bare_brief(sources, parent, model))
    with started(workers, cluster, parts=len(plan)) as using, progress(count, f"sweeping {id}") as advance:
        tables, whole = sweep_tables(plan, using, progress=advance)
        about = provenance(__version__, model, parent, family=id, rows=count)
        stream_table(tables, whole, out, about, overwrite=overwrite)
    print(f"wrote {out}: {count:,} rows")
    return 0
