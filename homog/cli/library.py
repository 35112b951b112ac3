"""Three commands that look things up: `families`, `materials`, `processes`."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Annotated

import typer

from homog.cli.options import app, console_, table_

if TYPE_CHECKING:
    pass


@app.command()
def families(
    id: Annotated[str | None, typer.Argument(metavar="ID", help="Family to explain; all are listed without.")] = None,
) -> int:
    """List the families of unit cells, or explain one: parameters, ranges, source, output quantities."""
    from homog.columns import COLUMNS, columns_of
    from homog.families import FAMILIES, family

    console = console_()
    if id is None:
        table = table_("id", "kind", "symmetry", "parameters")
        for found in FAMILIES.values():
            table.add_row(found.id, found.kind, found.symmetry, ", ".join(p.name for p in found.parameters))
        console.print(table)
        console.print("'homog families ID' explains one.")
        return 0
    found = family(id)
    console.print(f"{found.title}  ({found.id}; {found.kind}, effective symmetry {found.symmetry})", style="bold")
    if found.notes:
        console.print(found.notes)
    table = table_("parameter", "default", "allowed", "meaning", numeric=("default",))
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
    table = table_("output quantity", "meaning")
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

    console = console_()
    if name is not None:
        table = table_("quantity", "value", "low", "high", "status", "source", "note", numeric=("value", "low", "high"))
        for row in material_values(material(name).name):
            low, high = (f"{row[key]:g}" if math.isfinite(row[key]) else "" for key in ("low", "high"))
            value = f"{row['value']:g}" if math.isfinite(row["value"]) else "none"
            table.add_row(row["quantity"], value, low, high, row["status"], row["source"], row["note"])
    else:
        table = table_("name", "E MPa", "nu", "kg/m3", "yield MPa", numeric=("E MPa", "nu", "kg/m3", "yield MPa"))
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
    table = table_("name", *numeric, "status", "note", numeric=numeric)
    for p in known().values():
        cell = f"{p.max_cell_mm:g}" if math.isfinite(p.max_cell_mm) else ""
        lengths = (f"{mm:g}" for mm in (p.min_wall_mm, p.recommended_wall_mm, p.wall_tolerance_mm))
        table.add_row(p.name, *lengths, cell, p.status, p.note)
    console = console_()
    console.print(table)
    console.print(f"Lengths in mm. {CONFIRM}")
    return 0
