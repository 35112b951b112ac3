"""What the commands share: the application, the options that several take, and how words become cells."""

from __future__ import annotations

import re
import sys
from collections.abc import Sequence
from typing import TYPE_CHECKING, Annotated, Any

import typer

from homog.errors import InputError

if TYPE_CHECKING:
    from rich.console import Console
    from rich.table import Table

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
Processes = Annotated[
    int, typer.Option("--workers", metavar="N", min=0, max=999, help="Processes; 0: one a core, fewer for a small job.")
]
Cluster = Annotated[
    str, typer.Option("--cluster", metavar="ADDRESS", help="Dask scheduler (tcp://HOST:8786) to compute on instead.")
]


def console_() -> Console:
    from rich.console import Console

    return Console(width=None if sys.stdout.isatty() else 140, highlight=False, soft_wrap=False)


def table_(*headers: str, numeric: Sequence[str] = ()) -> Table:
    from rich import box
    from rich.table import Table

    table = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    for header in headers:
        table.add_column(header, justify="right" if header in numeric else "left", overflow="fold")
    return table


def parent_of(
    name: str | None,
    modulus: str | None,
    poisson: str | None,
    density: str | None,
    deep: bool,
    strength: str | None = None,
    *,
    family_id: str,
) -> Material:
    from homog.families import family
    from homog.materials import UNIT, material

    kind = family(family_id).kind
    if deep and kind != "planar":
        raise InputError(f"--deep is for planar cells, whose walls may be deep along axis 3; '{family_id}' is {kind}")
    values: dict[str, Any] = {}
    given = (("modulus_MPa", "--modulus", modulus), ("poisson", "--poisson", poisson),
             ("density_kg_m3", "--solid-density", density), ("yield_MPa", "--yield", strength))  # fmt: skip
    for key, option, text in given:
        if text is not None:
            values[key] = number_of(text, f"Option {option}", "give one number, such as 0.3 or 1600")
    parent = material(name) if name is not None else UNIT
    if values:
        parent = parent.replaced(**values)
        parent = parent.replaced(name="given values" if name is None else f"{parent.name}, changed")
    return parent.replaced(deep=True) if deep else parent


def number_of(text: str, what: str, remedy: str) -> float:
    try:
        return float(text)
    except ValueError:
        raise InputError(f"{what} = {text!r} is not a number; {remedy}") from None


def assigned(found: Family, words: Sequence[str] | None) -> dict[str, Any]:
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
            low, high, count = number_of(parts[0], what, remedy), number_of(parts[1], what, remedy), int(parts[2])
            if not 1 <= count <= MOST_CANDIDATES:
                raise InputError(f"{what} = {text!r}: COUNT must be 1 (0 is an empty range) to {MOST_CANDIDATES:,}")
            if low > high:
                raise InputError(f"{what} = {text!r}: an empty range, {low:g} is above {high:g}; swap them")
            given[name] = Span(low, high, count)
            found.values({name: [low, high]})
        else:
            given[name] = [number_of(part, what, remedy) for part in text.split(",")]
            found.values({name: given[name]})
    return given


def one_cell(
    family_id: str, words: Sequence[str] | None, parent: Material, model: str, fillet: float = 0.0
) -> Effective:
    """Return one evaluated cell, as a batch of one but for a solid, so that a mechanism is reported and not raised."""
    import numpy as np

    from homog.effective import homogenize
    from homog.families import family

    found = family(family_id)
    given = {}
    for name, values in assigned(found, words).items():
        if len(values) > 1:
            raise InputError(f"Parameter '{name}' has {len(values)} values; give one, or use 'homog sweep'")
        given[name] = values[0]
    cell = found.build(given, parent)  # raises where the cell cannot exist
    if model == "solid" or fillet != 0.0:
        return homogenize(cell, model=model, fillet=fillet)
    first = next(p.name for p in found.parameters if not p.choices)
    return homogenize(found.build({**given, first: np.reshape(cell.parameters[first], (1,))}, parent), model=model)
