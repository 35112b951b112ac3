"""The command line. Only this module prints and chooses exit codes; nobody imports it.

Exit status: 0 done, 1 an internal fault, 2 bad input (one line on standard error), 3 nothing in the brief's range
meets it. Heavy libraries load inside the commands, so that `--help` is quick.
"""

from __future__ import annotations

import json
import math
import os
import re
import signal
import sys
from collections.abc import Sequence
from itertools import product
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from homog import __version__
from homog.errors import HomogError, InputError
from homog.terminal import Stopped, kept, progress, teller

if TYPE_CHECKING:
    from pandas import DataFrame
    from rich.console import Console
    from rich.table import Table

    from homog.brief import Brief
    from homog.effective import Effective
    from homog.families import Family
    from homog.materials import Material

app = typer.Typer(
    name="homog",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode="rich",
    help="From a requirement to a lattice or folded sheet: stiffness in every direction, screened and ranked.",
    epilog="Start with 'homog families', then 'homog evaluate reentrant-honeycomb', then write a brief and "
    "'homog screen' it. Exit status: 0 done, 2 bad input, 3 nothing meets the brief. Screening only, not design "
    "evidence: local codes and licensed practice decide.",
)

Assignments = Annotated[
    list[str] | None,
    typer.Argument(metavar="PARAM=VALUE", help="Parameters of the family, mm and degrees; defaults otherwise."),
]
FamilyId = Annotated[str, typer.Argument(metavar="ID", help="Family identifier; 'homog families' lists them.")]
MaterialName = Annotated[
    str | None, typer.Option("--material", metavar="NAME", help="Parent by name ('homog materials').")
]
Modulus = Annotated[str | None, typer.Option("--modulus", metavar="MPA", help="Parent's Young's modulus, MPa.")]
Poisson = Annotated[str | None, typer.Option("--poisson", metavar="NU", help="Parent's Poisson's ratio.")]
SolidDensity = Annotated[str | None, typer.Option("--solid-density", metavar="KG_M3", help="Parent's density, kg/m3.")]
Yield = Annotated[str | None, typer.Option("--yield", metavar="MPA", help="Parent's yield or strength, MPa.")]
Deep = Annotated[
    bool, typer.Option("--deep", help="Planar cells deep along axis 3: plane strain instead of plane stress.")
]
Model = Annotated[
    str,
    typer.Option(
        "--model",
        metavar="M",
        help="joint (condensed joints), timoshenko or euler (walls to a point), solid (true section; planar walls).",
    ),
]
Fillet = Annotated[
    float, typer.Option("--fillet", metavar="MM", help="Radius of inner corners, mm; model solid only, else sharp.")
]
Quantity = Annotated[
    str, typer.Option("--quantity", metavar="Q", help="stiffness (E, nu, G), or yield (first yield of a wall's fibre).")
]
Overwrite = Annotated[bool, typer.Option("--overwrite", help="Replace a file that is there already.")]
FIGURES = (".svg", ".png", ".pdf")
STOPPED = "homog: stopped; nothing was written"
Processes = Annotated[
    int, typer.Option("--workers", metavar="N", min=0, max=999, help="Processes; 0: one a core, fewer for a small job.")
]
Cluster = Annotated[
    str, typer.Option("--cluster", metavar="ADDRESS", help="Dask scheduler (tcp://HOST:8786) to compute on instead.")
]


def _console() -> Console:
    from rich.console import Console

    return Console(width=None if sys.stdout.isatty() else 140, highlight=False, soft_wrap=False)


def _table(*headers: str, numeric: Sequence[str] = ()) -> Table:
    from rich import box
    from rich.table import Table

    table = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    for header in headers:
        table.add_column(header, justify="right" if header in numeric else "left", overflow="fold")
    return table


def _parent(
    name: str | None,
    modulus: str | None,
    poisson: str | None,
    density: str | None,
    deep: bool,
    strength: str | None = None,
) -> Material:
    from homog.materials import UNIT, material

    values: dict[str, Any] = {}
    given = (("modulus_MPa", "--modulus", modulus), ("poisson", "--poisson", poisson),
             ("density_kg_m3", "--solid-density", density), ("yield_MPa", "--yield", strength))  # fmt: skip
    for key, option, text in given:
        if text is not None:
            values[key] = _number(text, f"Option {option}", "give one number, such as 0.3 or 1600")
    parent = material(name) if name is not None else UNIT
    if values:
        parent = parent.replaced(**values)
        parent = parent.replaced(name="given values" if name is None else f"{parent.name}, changed")
    return parent.replaced(deep=True) if deep else parent


def _number(text: str, what: str, remedy: str) -> float:
    try:
        return float(text)
    except ValueError:
        raise InputError(f"{what} = {text!r} is not a number; {remedy}") from None


def _assigned(found: Family, words: Sequence[str] | None) -> dict[str, Any]:
    """Return the numbers or words of each PARAM=VALUE, PARAM=A,B,C or PARAM=LOW:HIGH:COUNT, checked."""
    from homog.brief import MOST_CANDIDATES
    from homog.candidates import Span

    given: dict[str, Any] = {}
    for word in words or ():
        name, equals, text = word.partition("=")
        if not equals or not name or not text:
            raise InputError(f"'{word}' is not PARAM=VALUE; write for example length=12.5, without blanks")
        if name in given:
            raise InputError(f"Parameter '{name}' is given twice; give it once")
        what, remedy = f"Parameter '{name}'", f"write {name}=VALUE, in a sweep also LOW:HIGH:COUNT or A,B,C"
        if found.parameter(name).choices:
            given[name] = text.split(",")
            for choice in given[name]:
                found.values({name: choice})
            continue
        if ":" in text:
            parts = text.split(":")
            if len(parts) != 3 or not re.fullmatch(r"[+-]?\d{1,18}", parts[2]):
                raise InputError(f"{what} = {text!r} is no range; write {name}=LOW:HIGH:COUNT, COUNT a whole number")
            low, high, count = _number(parts[0], what, remedy), _number(parts[1], what, remedy), int(parts[2])
            if not 1 <= count <= MOST_CANDIDATES:
                raise InputError(f"{what} = {text!r}: COUNT must be 1 (0 is an empty range) to {MOST_CANDIDATES:,}")
            if low > high:
                raise InputError(f"{what} = {text!r}: an empty range, {low:g} is above {high:g}; swap them")
            given[name] = Span(low, high, count)
            found.values({name: [low, high]})
        else:
            given[name] = [_number(part, what, remedy) for part in text.split(",")]
            found.values({name: given[name]})
    return given


def _one(family_id: str, words: Sequence[str] | None, parent: Material, model: str, fillet: float = 0.0) -> Effective:
    """Return one evaluated cell, as a batch of one but for a solid, so that a mechanism is reported and not raised."""
    import numpy as np

    from homog.effective import homogenize
    from homog.families import family

    found = family(family_id)
    given = {}
    for name, values in _assigned(found, words).items():
        if len(values) > 1:
            raise InputError(f"Parameter '{name}' has {len(values)} values; give one, or use 'homog sweep'")
        given[name] = values[0]
    cell = found.build(given, parent)  # raises where the cell cannot exist
    if model == "solid" or fillet != 0.0:
        return homogenize(cell, model=model, fillet=fillet)
    first = next(p.name for p in found.parameters if not p.choices)
    return homogenize(found.build({**given, first: np.reshape(cell.parameters[first], (1,))}, parent), model=model)


@app.command()
def families(
    id: Annotated[str | None, typer.Argument(metavar="ID", help="Family to explain; all are listed without.")] = None,
) -> int:
    """List the families of unit cells, or explain one: parameters, ranges, source, output quantities."""
    from homog.columns import COLUMNS, columns_of
    from homog.families import FAMILIES, family

    console = _console()
    if id is None:
        table = _table("id", "kind", "symmetry", "parameters")
        for found in FAMILIES.values():
            table.add_row(found.id, found.kind, found.symmetry, ", ".join(p.name for p in found.parameters))
        console.print(table)
        console.print("'homog families ID' explains one.")
        return 0
    found = family(id)
    console.print(f"{found.title}  ({found.id}; {found.kind}, effective symmetry {found.symmetry})", style="bold")
    if found.notes:
        console.print(found.notes)
    table = _table("parameter", "default", "allowed", "meaning", numeric=("default",))
    for p in found.parameters:
        default = p.default if isinstance(p.default, str) else f"{p.default:g} {p.unit}".strip()
        table.add_row(
            p.name, f"= {default}" if isinstance(p.default, str) and not p.choices else default, p.allowed, p.meaning
        )
    console.print(table)
    if found.rules:
        console.print("Impossible where:")
        for rule in found.rules:
            console.print(f"  {rule.code}: {rule.words}")
    console.print(f"Source: {found.source}")
    table = _table("output quantity", "meaning")
    for name in columns_of(found.kind):
        table.add_row(name, COLUMNS[name].meaning)
    console.print(table)
    return 0


@app.command()
def materials(
    name: Annotated[str | None, typer.Argument(metavar="NAME", help="Parent to show with ranges and sources.")] = None,
) -> int:
    """List the parent materials, or show one with the range, source and status of every value."""
    from homog.materials import CONFIRM, material, material_values
    from homog.materials import materials as known

    console = _console()
    if name is not None:
        table = _table("quantity", "value", "low", "high", "status", "source", "note", numeric=("value", "low", "high"))
        for row in material_values(material(name).name):
            low, high = (f"{row[key]:g}" if math.isfinite(row[key]) else "" for key in ("low", "high"))
            value = f"{row['value']:g}" if math.isfinite(row["value"]) else "none"
            table.add_row(row["quantity"], value, low, high, row["status"], row["source"], row["note"])
    else:
        table = _table("name", "E MPa", "nu", "kg/m3", "yield MPa", numeric=("E MPa", "nu", "kg/m3", "yield MPa"))
        for m in known().values():
            strength = f"{m.yield_MPa:g}" if math.isfinite(m.yield_MPa) else "none"
            table.add_row(m.name, f"{m.modulus_MPa:g}", f"{m.poisson:g}", f"{m.density_kg_m3:g}", strength)
    console.print(table)
    console.print(CONFIRM)
    return 0


@app.command()
def processes() -> int:
    """List the manufacturing processes with the walls and tolerances they can hold."""
    from homog.materials import CONFIRM
    from homog.materials import processes as known

    numeric = ("min wall", "recommended", "tolerance +-", "max cell")
    table = _table("name", *numeric, "status", "note", numeric=numeric)
    for p in known().values():
        cell = f"{p.max_cell_mm:g}" if math.isfinite(p.max_cell_mm) else ""
        lengths = (f"{mm:g}" for mm in (p.min_wall_mm, p.recommended_wall_mm, p.wall_tolerance_mm))
        table.add_row(p.name, *lengths, cell, p.status, p.note)
    console = _console()
    console.print(table)
    console.print(f"Lengths in mm. {CONFIRM}")
    return 0


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

    parent = _parent(material, modulus, poisson, solid_density, deep, yield_stress)
    effective = _one(id, parameters, parent, model, fillet)
    card = evaluation(effective)
    given, quantities, stiffness = card["parameters"], card["columns"], np.array(card["stiffness"], float)
    if as_json:
        print(json.dumps(card, indent=2, allow_nan=False))
        return 0
    from homog.families import family

    console = _console()
    found = family(id)
    console.print(f"{found.title}  ({id}):  {quantities['verdict']}", style="bold")
    units = {p.name: p.unit for p in found.parameters}
    console.print(", ".join(f"{name} {value if isinstance(value, str) else f'{value:g}'} {units[name]}".strip()
                            for name, value in given.items()))  # fmt: skip
    deep_words = ", walls deep (plane strain)" if parent.deep else ""
    console.print(f"parent {parent.name}: E {parent.modulus_MPa:g} MPa, nu {parent.poisson:g}, "
                  f"{parent.density_kg_m3:g} kg/m3{deep_words}; model {effective.model}")  # fmt: skip
    table = _table("quantity", "value", "meaning", numeric=("value",))
    for name, value in quantities.items():
        if COLUMNS[name].text or value is None:
            continue
        table.add_row(name, number(value), COLUMNS[name].meaning)
    console.print(table)
    unit = "[A B; B D] in N/mm, N, N mm" if effective.kind == "sheet" else "MPa"
    axes = ["11", "22", "12"] if effective.kind == "planar" else ["11", "22", "33", "23", "13", "12"]
    axes = ["N11", "N22", "N12", "M11", "M22", "M12"] if effective.kind == "sheet" else axes
    console.print(f"stiffness, {unit} (Voigt, engineering shear)", style="bold")
    table = _table("", *axes, numeric=axes)
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
    parent = _parent(material, modulus, poisson, solid_density, deep, yield_stress)
    effective = _one(id, parameters, parent, model)
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
    found, parent = family(id), _parent(material, modulus, poisson, solid_density, deep, yield_stress)
    given = _assigned(found, parameters)
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


@app.command()
def screen(
    brief: Annotated[Path, typer.Argument(metavar="BRIEF", help="The requirement, a TOML file.")],
    out: Annotated[Path, typer.Option("--out", metavar="FOLDER", help="New folder for tables, figures and summary.")],
    resume: Annotated[bool, typer.Option("--resume", help="Go on with a run into FOLDER that has stopped.")] = False,
    csv: Annotated[bool, typer.Option("--csv", help="Write candidates.csv whatever its size.")] = False,
    solids: Annotated[bool, typer.Option(help="Look at the best again as solids, and rank by what they say.")] = True,
    workers: Processes = 0,
    cluster: Cluster = "",
) -> int:
    """Screen a brief: every candidate evaluated, the ones that meet it ranked, drawn and summed up.

    Writes the candidates as Parquet parts below candidates/ (up to 100,000 also as candidates.csv), shortlist.csv, a
    polar plot per shortlisted cell, a property chart, summary.md and a copy of the brief. FOLDER appears when all is
    there; until then the run grows in FOLDER.partial, and --resume goes on with it after a stop of any kind.

    Twice as many as are kept, 60 at most, are looked at again as solids of their true section where they are planar
    walls and the extra `solid` is installed; the shortlist is ranked by the result and shows both numbers.

    Exit status 3 if nothing meets the brief: the summary then says what is in the way.
    """
    from homog.brief import read_brief
    from homog.engine import Plan, started
    from homog.files import whole_folder
    from homog.recheck import MOST, missing_extra, second_look
    from homog.report import write_screening
    from homog.screening import run_screen
    from homog.store import Folder, has_parts

    asked = read_brief(brief)
    with whole_folder(out, resume=resume, worth=has_parts) as place:
        parts = Folder(place, Plan(asked).about())
        unlooked = "it was not asked for" if not solids else missing_extra() if asked.model != "solid" else ""

        def second(best: DataFrame, asked: Brief) -> DataFrame:
            with progress(min(len(best), MOST), "solids") as advance:
                return second_look(best, asked, workers=workers, progress=advance)

        looks = None if unlooked or asked.model == "solid" else second
        with (
            kept(place),
            started(workers, cluster, parts=parts.missing()) as using,
            progress(asked.count, "screening", parts=parts, computing=using.words) as advance,
        ):
            found = run_screen(asked, parts=parts, using=using, progress=advance, second=looks)
        with kept(place):
            write_screening(found, place, version=__version__, brief_name=brief.name, csv=csv, progress=teller(),
                            unlooked=unlooked)  # fmt: skip
    if len(found.shortlist):
        best = found.shortlist.iloc[0]
        print(f"{found.met:,} of {asked.count:,} candidates meet the brief; "
              f"first: {best['family']} (candidate {best['candidate']}).")  # fmt: skip
    elif found.met:
        print(f"{found.met:,} of {asked.count:,} candidates meet the brief by the screen's model, none of the best as "
              "a solid.")  # fmt: skip
    else:
        worst = max(found.falls, key=lambda fall: fall.missed, default=None)
        why = f"most miss: {worst.limit.words}" if worst and worst.missed else "every one is rejected"
        print(f"nothing of {asked.count:,} candidates meets the brief; {why}.")
    print(f"Results: {out / 'summary.md'}")
    return 0 if len(found.shortlist) else 3


@app.callback(invoke_without_command=True)
def _root(
    version: Annotated[bool, typer.Option("--version", help="Print the version and stop.")] = False,
) -> None:
    if version:
        print(f"homog-cells {__version__}")
        raise typer.Exit(0)


def main(argv: Sequence[str] | None = None) -> int:
    """Run the command line on `argv` (the process's own arguments if None) and return the exit status."""
    import homog.cli_tune  # noqa: F401  # its commands register themselves

    try:
        status = app(args=list(sys.argv[1:] if argv is None else argv), prog_name="homog", standalone_mode=False)
        if status == 130:  # what the parser makes of an interrupt, or else an Abort
            print(STOPPED, file=sys.stderr)
        return int(status or 0)
    except Stopped as stop:
        print(f"homog: {stop}", file=sys.stderr)
        return stop.status
    except HomogError as error:
        print(f"homog: {' '.join(str(error).split())}", file=sys.stderr)
        return 2
    except SystemExit as stop:  # the parser's answer to a reader that stopped reading, which is no fault
        if not isinstance(stop.__context__, BrokenPipeError):
            raise
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except Exception as error:
        if hasattr(error, "format_message"):  # the option parser's own complaints
            message = " ".join(str(error.format_message()).split())
            if not message:
                return 0
            command = getattr(getattr(error, "ctx", None), "command_path", "homog")
            print(f"homog: {message.rstrip('.')}; try '{command} --help'", file=sys.stderr)
            return 2
        if type(error).__name__ == "Abort":
            print(STOPPED, file=sys.stderr)
            return 130
        import traceback

        traceback.print_exc()
        fault = f"{type(error).__name__}: {error}"
        print(f"homog: internal fault: {fault}; please report it with the command", file=sys.stderr)
        return 1


def entry() -> None:
    """Run as the installed command; being told to stop leaves nothing half-written."""
    signal.signal(signal.SIGTERM, lambda *_: sys.exit(143))
    sys.exit(main())
