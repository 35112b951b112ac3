"""What a family is: named parameters with ranges, a pure function from their values to a cell, rules, a source.

A family's function receives every parameter as an array of one common batch shape and returns a `UnitCell` with that
shape; it never validates and never raises. Ranges are checked here, once, and a `Rule` marks the members that describe
no cell. Registration in `homog.families` brings the command line, the tables and the invariant tests along.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from homog.cell import Block, Kind, Status, UnitCell
from homog.errors import GeometryError, InputError, unknown
from homog.materials import Material
from homog.section import element_vectors, wall_section

Array = NDArray[np.float64]
Index = NDArray[np.int64]
Values = Mapping[str, Any]

SYMMETRIES = ("general", "orthotropic", "square", "isotropic", "cubic")


@dataclass(frozen=True)
class Parameter:
    """One parameter: name, unit (`mm`, `deg` or none), allowed range, default, meaning.

    `default` may be the name of another parameter. `made` marks the thicknesses that a process has to make.
    `choices` makes it a word instead of a number.
    """

    name: str
    unit: str
    low: float
    high: float
    default: float | str
    meaning: str
    made: bool = False
    choices: tuple[str, ...] = ()

    @property
    def column(self) -> str:
        """Name in tables, with its unit."""
        return f"{self.name}_{self.unit}" if self.unit else self.name

    @property
    def allowed(self) -> str:
        """The allowed values in words."""
        if self.choices:
            return " or ".join(self.choices)
        return f"{self.low:g} to {self.high:g}" + (f" {self.unit}" if self.unit else "")


@dataclass(frozen=True)
class Rule:
    """Marks impossible members: a short code, what it means, and a test that is true where no such cell exists."""

    code: str
    words: str
    impossible: Callable[[Values, Material], NDArray[np.bool_]]


@dataclass(frozen=True)
class Family:
    """A parametric unit cell.

    `symmetry` is what the effective tensor of every member has: one of SYMMETRIES, about axes 1, 2, 3.
    `make(values, material)` returns the cell and, for walls, whether joints run into each other.
    """

    id: str
    title: str
    kind: Kind
    parameters: tuple[Parameter, ...]
    symmetry: str
    source: str
    make: Callable[[Values, Material], UnitCell]
    rules: tuple[Rule, ...] = ()
    notes: str = ""

    def __reduce__(self) -> tuple[Callable[[str], Family], tuple[str]]:
        """Travel to another process by name: a family is the same code there."""
        from homog.families import family

        return family, (self.id,)

    def parameter(self, name: str) -> Parameter:
        """Return the parameter of that name, or raise InputError with the nearest names."""
        for parameter in self.parameters:
            if parameter.name == name:
                return parameter
        raise unknown("parameter", name, (p.name for p in self.parameters), f"for '{self.id}'")

    def values(self, given: Mapping[str, ArrayLike]) -> dict[str, NDArray[Any]]:
        """Return every parameter as an array of the common batch shape, defaults filled in and ranges checked.

        Raises
        ------
        InputError
            For an unknown name, a value that is not a number, not finite or out of range, shapes that do not fit.
        """
        for name in given:
            self.parameter(name)
        values: dict[str, NDArray[Any]] = {}
        for parameter in self.parameters:
            raw = given.get(parameter.name, parameter.default)
            if isinstance(raw, str) and not parameter.choices and raw in values:
                values[parameter.name] = values[raw]
            else:
                values[parameter.name] = self._checked(parameter, raw)
        try:
            shape = np.broadcast_shapes(*(value.shape for value in values.values()))
        except ValueError:
            shapes = ", ".join(f"{name} {value.shape}" for name, value in values.items() if value.shape)
            raise InputError(f"Parameters of '{self.id}' do not broadcast together: {shapes}") from None
        return {name: np.broadcast_to(value, shape) for name, value in values.items()}

    def _checked(self, parameter: Parameter, raw: ArrayLike) -> NDArray[Any]:
        if parameter.choices:
            if not isinstance(raw, str) or raw not in parameter.choices:
                raise InputError(
                    f"Parameter '{parameter.name}' = {raw!r} for '{self.id}': allowed are {parameter.allowed}, "
                    "one word for the whole batch"
                )
            return np.asarray(raw)
        try:
            value = np.asarray(raw, float)
        except (TypeError, ValueError):
            raise InputError(
                f"Parameter '{parameter.name}' = {raw!r} is not a number for '{self.id}'; allowed {parameter.allowed}"
            ) from None
        wrong = ~(np.isfinite(value) & (value >= parameter.low) & (value <= parameter.high))
        if wrong.any():
            first = float(value[wrong].flat[0]) if value.ndim else float(value)
            unit = f" {parameter.unit}" if parameter.unit else ""
            hint = ""
            if parameter.unit == "deg" and abs(first) <= math.pi / 2.0 and parameter.low > 0:
                hint = "; is it in radians? angles are in degrees"
            elif parameter.unit == "mm" and 0 < first < parameter.low:
                hint = "; is it in metres? lengths are in mm"
            problem = "is not finite" if not np.isfinite(first) else "is outside its range"
            raise InputError(
                f"Parameter '{parameter.name}' = {first:g}{unit} {problem} for '{self.id}': "
                f"allowed {parameter.allowed}{hint}"
            )
        return value

    def impossible(self, values: Values, material: Material) -> dict[str, NDArray[np.bool_]]:
        """Return, rule by rule, where the values describe no cell."""
        with np.errstate(all="ignore"):
            return {rule.code: np.asarray(rule.impossible(values, material)) for rule in self.rules}

    def build(self, given: Mapping[str, ArrayLike], material: Material) -> UnitCell:
        """Return the cell, or a batch of cells, for the given parameters.

        Raises
        ------
        InputError
            For parameters that are unknown or out of range.
        GeometryError
            For a single cell that cannot exist; in a batch such members get the status IMPOSSIBLE.
        """
        values = self.values(given)
        shape = np.broadcast_shapes(*(value.shape for value in values.values()))
        with np.errstate(all="ignore"):
            cell = self.make(values, material)
        bad = np.asarray(cell.status) != Status.OK
        broken_rules = self.impossible(values, material)
        for rule in self.rules:
            broken = broken_rules[rule.code]
            if not shape and broken:
                raise GeometryError(f"Impossible '{self.id}': {rule.words}")
            bad = bad | broken
        if not shape and bad:
            raise GeometryError(f"Impossible '{self.id}': {MERGED_WORDS}")
        made = [values[p.name] for p in self.parameters if p.made]
        return dataclasses.replace(
            cell,
            parent=material,
            family=self.id,
            parameters=values,
            thinnest=np.broadcast_to(np.minimum.reduce(made) if made else np.nan, shape),
            status=np.where(bad, Status.IMPOSSIBLE, Status.OK).astype(np.int8),
        )


MERGED_WORDS = "the joints run into each other and close the void beside a wall; use thinner or longer walls"


def batch(*rows: Any) -> Array:
    """Return an array of shape (..., len(rows), ...) from nested rows of numbers and batch arrays.

    `batch([x0, y0], [x1, y1])` with x, y of shape (...) or plain numbers gives (..., 2, 2).
    """
    if not rows or not isinstance(rows[0], (list, tuple)):
        entries = np.broadcast_arrays(*(np.asarray(entry, float) for entry in rows))
        return np.stack(entries, axis=-1)
    inner = [batch(*row) for row in rows]
    shape = np.broadcast_shapes(*(row.shape for row in inner))
    return np.stack([np.broadcast_to(row, shape) for row in inner], axis=-2)


def topology(elements: Sequence[Sequence[tuple[int, tuple[int, ...]]]]) -> tuple[Index, Index]:
    """Return nodes (m, k) and shifts (m, k, p) from elements written as [(node, shift), ...]."""
    nodes = np.array([[node for node, _ in ends] for ends in elements])
    shifts = np.array([[shift for _, shift in ends] for ends in elements])
    return nodes, shifts


def wall_props(thickness: Array, material: Material, **more: Array) -> dict[str, Array]:
    """Return the properties of walls of the given thickness (..., m)."""
    modulus, poisson = np.array([material.wall_modulus_MPa]), np.array([material.wall_poisson])
    return {"thickness": thickness, "modulus": modulus, "poisson": poisson, **more}


def wall_cell(
    points: Array,
    lattice: Array,
    elements: Sequence[Sequence[tuple[int, tuple[int, ...]]]],
    thickness: Array,
    material: Material,
) -> UnitCell:
    """Return a planar cell of straight walls, thickness (..., m), with its true area and slenderness."""
    nodes, shifts = topology(elements)
    area, merged = wall_section(points, lattice, nodes, shifts, thickness)
    x, y = np.moveaxis(element_vectors(points, lattice, nodes, shifts), -1, 0)
    return UnitCell(
        points=points,
        lattice=lattice,
        blocks=(Block("wall", nodes, shifts, wall_props(thickness, material)),),
        parent=material,
        solid=area,
        slenderness=(thickness / np.hypot(x, y)).max(axis=-1),
        status=np.where(merged, Status.IMPOSSIBLE, Status.OK).astype(np.int8),
    )
