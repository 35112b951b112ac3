"""Parent materials and processes: what cells are made of, and what can be made.

Both are small frozen values that check themselves. The defaults are in `materials.csv` (one row a value, with its
range and whether it was read or is from memory) and `processes.csv` beside this file; every value can be replaced. A
parent is one isotropic linear solid at room temperature: no creep, no build direction, no rate.
"""

from __future__ import annotations

import csv
import dataclasses
import math
from functools import cache
from numbers import Real
from typing import Any, NamedTuple, TypedDict, TypeVar

from homog.errors import InputError, unknown

CONFIRM = "These values are defaults, to be confirmed by the supplier's sheet or a test."

MaterialRow = TypedDict(
    "MaterialRow",
    {
        "name": str,
        "class": str,
        "quantity": str,
        "value": float,
        "low": float,
        "high": float,
        "status": str,
        "source": str,
        "note": str,
    },
)


class _Allowed(NamedTuple):
    """The closed range of a number, and what a value below or above it probably is."""

    low: float
    high: float
    below: str = ""
    above: str = ""


_ALLOWED = {
    "modulus_MPa": _Allowed(0.01, 2e6, "is it in GPa? 1 GPa = 1000 MPa", "is it in Pa? 1 MPa = 1e6 Pa"),
    "poisson": _Allowed(-0.9999, 0.4999, "an isotropic solid is unstable below -1", "rubber is about 0.49"),
    "density_kg_m3": _Allowed(20.0, 3e4, "is it in g/cm3? 1 g/cm3 = 1000 kg/m3", "is it in g/m3? 1 kg/m3 = 1000 g/m3"),
    "yield_MPa": _Allowed(1e-3, 1e5, "is it in GPa? 1 GPa = 1000 MPa", "is it in Pa? 1 MPa = 1e6 Pa"),
    "min_wall_mm": _Allowed(0.0, 100.0, "0 is no limit", "is it in micrometres? 1 mm = 1000 micrometres"),
    "recommended_wall_mm": _Allowed(0.0, 100.0, "0 is no limit", "is it in micrometres? 1 mm = 1000 micrometres"),
    "wall_tolerance_mm": _Allowed(0.0, 10.0, "give half the band, without sign", "is it in micrometres?"),
    "max_cell_mm": _Allowed(1e-3, math.inf, "is it in m? 1 m = 1000 mm", "leave it out for no limit"),
}
_MAY_BE_NAN = {"yield_MPa"}

Value = TypeVar("Value", "Material", "Process")


def _check(thing: Material | Process) -> None:
    """Turn every number of `thing` into a float; raise InputError for the first that is not allowed."""
    owner = f"{type(thing).__name__} '{thing.name}'"
    if not isinstance(thing.name, str) or not thing.name.strip():
        raise InputError(f"{type(thing).__name__} name = {thing.name!r} is not a name; give some text")
    for field, allowed in _ALLOWED.items():
        if not hasattr(thing, field):
            continue
        value = getattr(thing, field)
        span = f"{allowed.low:g} to {allowed.high:g}"
        if isinstance(value, bool) or not isinstance(value, Real):
            raise InputError(f"{owner}: {field} = {value!r} is not a number; allowed: {span}")
        number = float(value)
        object.__setattr__(thing, field, number)
        if math.isnan(number) and field in _MAY_BE_NAN:
            continue
        if not allowed.low <= number <= allowed.high:
            hint = allowed.below if number < allowed.low else allowed.above
            advice = f"; {hint}" if math.isfinite(number) else "; give a finite number"
            raise InputError(f"{owner}: {field} = {number:g} is outside {span}{advice}")


def _replaced(thing: Value, values: dict[str, Any]) -> Value:
    """Return a checked copy of `thing` with some fields replaced."""
    fields = [field.name for field in dataclasses.fields(thing)]
    for key in values:
        if key not in fields:
            raise unknown(f"{type(thing).__name__.lower()} value", key, fields)
    return dataclasses.replace(thing, **values)


@dataclasses.dataclass(frozen=True)
class Material:
    """An isotropic parent solid.

    Parameters
    ----------
    name : str
    modulus_MPa : float, Young's modulus at small strain, 0.01 to 2e6 MPa
    poisson : float, -0.9999 to 0.4999
    density_kg_m3 : float, 20 to 3e4 kg/m3
    yield_MPa : float, yield or else strength, NaN where the solid has none
    deep : bool, planar cells much deeper along axis 3 than their walls are thick: plane strain instead of plane stress

    Raises
    ------
    InputError
        A value is not a finite number or outside its range; the message asks about the likely wrong unit.

    >>> Material("my resin", 2000.0, 0.35, 1150.0).shear_modulus_MPa  # 2000 / (2 * 1.35)
    740.7407407407408
    """

    name: str
    modulus_MPa: float
    poisson: float
    density_kg_m3: float
    yield_MPa: float = math.nan
    deep: bool = False

    def __post_init__(self) -> None:
        _check(self)

    @property
    def shear_modulus_MPa(self) -> float:
        """G = E / (2 (1 + nu)) in MPa."""
        return self.modulus_MPa / (2.0 * (1.0 + self.poisson))

    @property
    def wall_modulus_MPa(self) -> float:
        """Modulus of a planar cell's walls: E in plane stress, E / (1 - nu^2) where they are deep (plane strain)."""
        return self.modulus_MPa / (1.0 - self.poisson**2) if self.deep else self.modulus_MPa

    @property
    def wall_poisson(self) -> float:
        """Poisson's ratio of a planar cell's walls: nu in plane stress, nu / (1 - nu) where they are deep."""
        return self.poisson / (1.0 - self.poisson) if self.deep else self.poisson

    def replaced(self, **values: Any) -> Material:
        """Return a copy with some values replaced; InputError for an unknown or impossible one."""
        return _replaced(self, values)


UNIT = Material("unit parent", 1.0, 0.3, 1000.0)


@dataclasses.dataclass(frozen=True)
class Process:
    """What a way of making can hold, in mm.

    Parameters
    ----------
    name : str
    min_wall_mm : float, thinnest wall or strut that comes out, 0 for no limit
    recommended_wall_mm : float, thinnest wall to design with, 0 for no limit
    wall_tolerance_mm : float, usual deviation of a wall, plus or minus
    max_cell_mm : float, largest period of the cell, infinite for no limit
    note, status, source : str, where the figures are from; status is `read`, `from memory` (if any is) or `given`

    Raises
    ------
    InputError
        A value is not a number or outside its range; the message asks about the likely wrong unit.
    """

    name: str
    min_wall_mm: float = 0.0
    recommended_wall_mm: float = 0.0
    wall_tolerance_mm: float = 0.0
    max_cell_mm: float = math.inf
    note: str = ""
    status: str = "given"
    source: str = ""

    def __post_init__(self) -> None:
        _check(self)

    def replaced(self, **values: Any) -> Process:
        """Return a copy with some values replaced; InputError for an unknown or impossible one."""
        return _replaced(self, values)


def _read(filename: str) -> list[dict[str, str]]:
    """Return the rows of a table that ships beside this module."""
    from importlib import resources  # about 20 ms, which a command that reads no table should not wait for

    text = resources.files("homog").joinpath(filename).read_text(encoding="utf-8")
    return list(csv.DictReader(text.splitlines(), strict=True))


def _float(text: str, empty: float = math.nan) -> float:
    return float(text) if text else empty


@cache
def _material_rows() -> tuple[MaterialRow, ...]:
    return tuple(
        MaterialRow(
            {
                "name": row["name"],
                "class": row["class"],
                "quantity": row["quantity"],
                "value": _float(row["value"]),
                "low": _float(row["low"]),
                "high": _float(row["high"]),
                "status": row["status"],
                "source": row["source"],
                "note": row["note"],
            }
        )
        for row in _read("materials.csv")
    )


@cache
def _materials() -> dict[str, Material]:
    values: dict[str, dict[str, Any]] = {}
    for row in _material_rows():
        values.setdefault(row["name"], {})[row["quantity"]] = row["value"]
    return {name: Material(name, **quantities) for name, quantities in values.items()}


@cache
def _processes() -> dict[str, Process]:
    return {
        row["name"]: Process(
            row["name"],
            float(row["min_wall_mm"]),
            float(row["recommended_wall_mm"]),
            float(row["wall_tolerance_mm"]),
            _float(row["max_cell_mm"], empty=math.inf),
            row["note"],
            row["status"],
            row["source"],
        )
        for row in _read("processes.csv")
    }


def _find(what: str, name: str, known: dict[str, Value], remedy: str) -> Value:
    """Return the entry whose name is `name` but for case and outer blanks; else InputError with the nearest names."""
    wanted = name.strip().casefold() if isinstance(name, str) else name
    for key, value in known.items():
        if key.casefold() == wanted:
            return value
    raise unknown(what, str(name), known, remedy)


def materials() -> dict[str, Material]:
    """Return the parents that ship with the package, by name; the dictionary is the caller's own."""
    return dict(_materials())


def material(name: str) -> Material:
    """Return the parent of that name, whatever its case; InputError with the nearest names otherwise.

    >>> material("pla").modulus_MPa
    3000.0
    """
    return _find("material", name, _materials(), "or give its modulus, Poisson's ratio and density")


def material_rows() -> list[MaterialRow]:
    """Return one row a value of every parent, with its range (NaN if none), status, source and note, for tables."""
    return [row.copy() for row in _material_rows()]


def material_values(name: str) -> list[MaterialRow]:
    """Return the rows of `material_rows` for one parent; InputError for an unknown name."""
    known = material(name).name
    return [row for row in material_rows() if row["name"] == known]


def processes() -> dict[str, Process]:
    """Return the processes that ship with the package, by name; the dictionary is the caller's own."""
    return dict(_processes())


def process(name: str) -> Process:
    """Return the process of that name, whatever its case; InputError with the nearest names otherwise."""
    return _find("process", name, _processes(), "or give its min_wall_mm, wall_tolerance_mm and max_cell_mm")
