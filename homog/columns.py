"""The one list of output quantities.

A `Column` is a name with its unit, a meaning, the kinds of cell that have it, and a function of `Results`: the batch's
tensors and what several columns share (compliance, extremes, bounds, reasons), each computed once and only if asked
for. Registration in COLUMNS brings tables, `--json`, limits in a brief and the documentation along.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from homog.cell import Kind
from homog.effective import Effective
from homog.errors import unknown
from homog.families import FAMILIES
from homog.results import Limits, Results, Words, listed

if TYPE_CHECKING:
    import pandas as pd

Array = NDArray[np.float64]

PLANAR: tuple[Kind, ...] = ("planar",)
SHEET: tuple[Kind, ...] = ("sheet",)
SPATIAL: tuple[Kind, ...] = ("spatial",)
WALLED: tuple[Kind, ...] = ("planar", "spatial")
ALL: tuple[Kind, ...] = ("planar", "sheet", "spatial")

FIRST_YIELD = "first yield of a beam's extreme fibre"
CORNERS = "inner corners of the solid see more"
VOIGT_PAIRS = (("11", 0, 0), ("12", 0, 1), ("16", 0, 2), ("22", 1, 1), ("26", 1, 2), ("66", 2, 2))


@dataclass(frozen=True)
class Column:
    """One output quantity: name with unit, meaning, the kinds of cell that have it, and its function of Results.

    `text` marks words, `smooth` what has a derivative by the parameters: not words, counts and directions, which jump.
    """

    name: str
    meaning: str
    kinds: tuple[Kind, ...]
    of: Callable[[Results], NDArray[Any] | Words]
    text: bool = False
    whole: bool = False
    smooth: bool = True


def _extreme(name: str) -> Callable[[Results], Array]:
    return lambda r: np.asarray(getattr(r.extremes, name))


def _tolerance(i: int, factor: float = 1.0) -> Callable[[Results], Array]:
    return lambda r: np.asarray(factor * r.tolerances[i])


def _plate(i: int, j: int) -> Callable[[Results], Array]:
    return lambda r: np.asarray(r.plate[:, i, j])


def _bending(i: int, j: int) -> Callable[[Results], Array]:
    return lambda r: np.asarray(-r.compliance[:, 3 + j, 3 + i] / r.compliance[:, 3 + i, 3 + i])


def _yield(i: int) -> Callable[[Results], Array]:
    return lambda r: np.asarray(r.yields[:, i])


def _sheet_coupling(r: Results) -> Array:
    size = np.sqrt(np.diagonal(r.stiffness, axis1=-2, axis2=-1))
    return np.asarray((np.abs(r.stiffness[:, :3, 3:]) / (size[:, :3, None] * size[:, None, 3:])).max(axis=(-1, -2)))


def _verdict(r: Results) -> Words:
    return Words(np.where(r.worst("reject"), 2, r.worst("caution").astype(np.int64)), ("ok", "caution", "reject"))


_ALL_COLUMNS = (
    Column("relative_density", "solid share of the cell, joints counted once", ALL, lambda r: r.density),
    Column("density_kg_m3", "density of the cell", ALL, lambda r: r.density * r.parent.density_kg_m3),
    Column("E1_MPa", "Young's modulus along axis 1 (a sheet's over its slab)", ALL, lambda r: r.young(0)),
    Column("E2_MPa", "Young's modulus along axis 2", ALL, lambda r: r.young(1)),
    Column("E3_MPa", "Young's modulus along axis 3", SPATIAL, lambda r: r.young(2)),
    Column("G12_MPa", "shear modulus in the plane 1-2", ALL, lambda r: 1.0 / r.voigt[:, -1, -1]),
    Column("G13_MPa", "shear modulus in the plane 1-3", SPATIAL, lambda r: 1.0 / r.voigt[:, 4, 4]),
    Column("G23_MPa", "shear modulus in the plane 2-3", SPATIAL, lambda r: 1.0 / r.voigt[:, 3, 3]),
    Column("nu12", "-e2/e1 under a pull along 1", ALL, lambda r: r.ratio(0, 1)),
    Column("nu21", "-e1/e2 under a pull along 2", ALL, lambda r: r.ratio(1, 0)),
    Column("nu13", "-e3/e1 under a pull along 1", SPATIAL, lambda r: r.ratio(0, 2)),
    Column("nu31", "-e1/e3 under a pull along 3", SPATIAL, lambda r: r.ratio(2, 0)),
    Column("nu23", "-e3/e2 under a pull along 2", SPATIAL, lambda r: r.ratio(1, 2)),
    Column("nu32", "-e2/e3 under a pull along 3", SPATIAL, lambda r: r.ratio(2, 1)),
    Column("eta1_12", "gamma12/e1 under a pull along 1: stretch that shears", ALL,
           lambda r: r.voigt[:, -1, 0] / r.voigt[:, 0, 0]),
    *(Column(f"A{n}_N_per_mm", "membrane stiffness of the sheet", SHEET, _plate(i, j)) for n, i, j in VOIGT_PAIRS),
    *(Column(f"D{n}_N_mm", "bending stiffness", SHEET, _plate(3 + i, 3 + j)) for n, i, j in VOIGT_PAIRS),
    Column("membrane_bending_coupling", "largest |B_ij| / sqrt(A_ii D_jj), z from mid-height", SHEET, _sheet_coupling),
    Column("bending_nu12", "-k2/k1 under a moment along 1: negative a dome, positive a saddle", SHEET, _bending(0, 1)),
    Column("bending_nu21", "-k1/k2 under a moment along 2", SHEET, _bending(1, 0)),
    Column("E1_low_MPa", "low end of the band in which a solid's E1 was found", ALL,
           lambda r: r.band.E1_low, smooth=False),
    Column("E1_high_MPa", "high end of that band", ALL, lambda r: r.band.E1_high, smooth=False),
    Column("nu12_low", "low end of the band in which a solid's nu12 was found", ALL,
           lambda r: r.band.nu12_low, smooth=False),
    Column("nu12_high", "high end of that band", ALL, lambda r: r.band.nu12_high, smooth=False),
    Column("nu_min", "smallest Poisson's ratio of all directions", ALL, _extreme("nu_min")),
    Column("nu_min_deg", "direction of nu_min from axis 1", ALL, _extreme("nu_min_deg"), smooth=False),
    Column("nu_max", "largest Poisson's ratio of all directions", ALL, _extreme("nu_max")),
    Column("nu_max_deg", "direction of nu_max from axis 1", ALL, _extreme("nu_max_deg"), smooth=False),
    Column("E_min_MPa", "smallest Young's modulus of all directions", ALL, _extreme("E_min")),
    Column("E_min_deg", "direction of E_min from axis 1", ALL, _extreme("E_min_deg"), smooth=False),
    Column("E_max_MPa", "largest Young's modulus of all directions", ALL, _extreme("E_max")),
    Column("E_max_deg", "direction of E_max from axis 1", ALL, _extreme("E_max_deg"), smooth=False),
    Column("G_min_MPa", "smallest shear modulus of all directions", ALL, _extreme("G_min")),
    Column("G_max_MPa", "largest shear modulus of all directions", ALL, _extreme("G_max")),
    Column("auxetic_share", "share of directions with a negative Poisson's ratio", ALL, _extreme("auxetic_share")),
    Column("auxetic_reach_deg", "how far the load may turn from axis 1 before nu reaches 0", ALL,
           _extreme("auxetic_reach_deg")),
    Column("anisotropy", "E_max over E_min", ALL, _extreme("anisotropy")),
    Column("E1_per_hexagon", "E1 over that of the regular hexagonal honeycomb of equal density and parent", ALL,
           lambda r: r.young(0) / r.hexagon),
    Column("E1_per_bound", "E1 over the Voigt bound, relative density times the parent's modulus", ALL,
           lambda r: r.young(0) / (r.density * r.bound_modulus)),
    Column("E1_per_hashin_shtrikman", "E1 over the Hashin-Shtrikman bound (isotropic cells only)", ALL,
           lambda r: r.bounds.young_ratio),
    Column("voigt_ratio", "largest stiffness over the Voigt bound, of any strain", ALL, lambda r: r.bounds.voigt_ratio),
    Column("hashin_shtrikman_ratio", "largest of K and G over the Hashin-Shtrikman bound (isotropic cells only)", ALL,
           lambda r: r.bounds.hashin_shtrikman_ratio),
    Column("yield_1_MPa", f"pull along 1 at {FIRST_YIELD} (|N|/A + |M|/W, twist by von Mises, no shear); {CORNERS}",
           WALLED, _yield(0), smooth=False),
    Column("yield_2_MPa", f"pull along 2 at {FIRST_YIELD}; {CORNERS}", WALLED, _yield(1), smooth=False),
    Column("yield_3_MPa", f"pull along 3 at {FIRST_YIELD}; {CORNERS}", SPATIAL, _yield(2), smooth=False),
    Column("yield_12_MPa", f"shear in the plane 1-2 at {FIRST_YIELD}; {CORNERS}", WALLED, _yield(-1), smooth=False),
    Column("yield_13_MPa", f"shear in the plane 1-3 at {FIRST_YIELD}; {CORNERS}", SPATIAL, _yield(4), smooth=False),
    Column("yield_23_MPa", f"shear in the plane 2-3 at {FIRST_YIELD}; {CORNERS}", SPATIAL, _yield(3), smooth=False),
    Column("yield_strain_1", "strain along 1 at yield_1_MPa", WALLED, lambda r: r.yields[:, 0] / r.young(0),
           smooth=False),
    Column("slenderness", "largest thickness over length in the cell", ALL, lambda r: r.flat(r.cell.slenderness)),
    Column("thinnest_mm", "thinnest wall, strut, ligament or sheet to be made", ALL, lambda r: r.flat(r.cell.thinnest)),
    Column("cell_1_mm", "repeat along axis 1", ALL, lambda r: r.size[:, 0]),
    Column("cell_2_mm", "repeat along axis 2", ALL, lambda r: r.size[:, 1]),
    Column("cell_3_mm", "repeat along axis 3", SPATIAL, lambda r: r.size[:, 2]),
    Column("largest_cell_mm", "largest repeat", ALL, lambda r: r.size[:, : r.cell.p].max(axis=-1)),
    Column("height_mm", "thickness of the slab that holds the sheet", SHEET, lambda r: r.flat(r.cell.height)),
    Column("cells_across", "fewest repeats across the part, if its size is given", ALL, lambda r: r.cells_across,
           smooth=False),
    Column("E1_tolerance_percent", "by how many percent E1 is off where all walls are off by the process's tolerance",
           ALL, _tolerance(0, 100.0), smooth=False),
    Column("nu12_tolerance", "by how much nu12 is off there, both to first order", ALL, _tolerance(1), smooth=False),
    Column("E1_scatter_percent", "the same where each wall of one cell is off by itself; less over many cells",
           ALL, _tolerance(2, 100.0), smooth=False),
    Column("nu12_scatter", "by how much nu12 is off there", ALL, _tolerance(3), smooth=False),
    Column("mechanisms", "motions that cost no energy", ALL, lambda r: r.effective.mechanisms.reshape(-1),
           whole=True, smooth=False),
    Column("model", "what the numbers come from: euler, timoshenko, joint or solid", ALL,
           lambda r: Words(np.zeros(r.count, np.int64), (r.effective.model,)), text=True, smooth=False),
    Column("soft_mode", "the uniform strain that costs no energy", ALL, lambda r: r.soft_modes, text=True,
           smooth=False),
    Column("verdict", "ok, caution or reject", ALL, _verdict, text=True, smooth=False),
    Column("reasons", "codes of what speaks against the cell or its model", ALL,
           lambda r: listed(r.reasons, r.count), text=True, smooth=False),
)  # fmt: skip

COLUMNS: Mapping[str, Column] = MappingProxyType({column.name: column for column in _ALL_COLUMNS})


def column(name: str) -> Column:
    """Return the column of that name, or raise InputError with the nearest names."""
    if name not in COLUMNS:
        raise unknown("column", name, COLUMNS, "'homog families ID' lists what a family has")
    return COLUMNS[name]


def columns_of(kind: Kind) -> list[str]:
    """Return the names of the columns that a kind of cell has, in order."""
    return [name for name, found in COLUMNS.items() if kind in found.kinds]


def parameter_columns(effective: Effective) -> dict[str, NDArray[Any]]:
    """Return a family's parameters under their column names (with units), flat; a custom cell has its own names."""
    family = FAMILIES.get(effective.cell.family)
    named = {p.name: p.column for p in family.parameters} if family else {}
    shape = effective.status.shape
    return {
        named.get(name, name): np.broadcast_to(value, shape).reshape(-1)
        for name, value in effective.cell.parameters.items()
    }


def quantities(
    effective: Effective,
    names: Sequence[str] | None = None,
    *,
    part: Sequence[float] = (),
    limits: Limits | None = None,
    tolerance: float = 0.0,
) -> dict[str, NDArray[Any] | Words]:
    """Return family, parameters and output quantities by column name: flat arrays of numbers, text as `Words`.

    Parameters
    ----------
    effective : Effective
        A batch of any shape (m members).
    names : sequence of str
        Columns wanted, all of the cell's kind if not given; a column that the kind does not have is NaN.
    part : sequence of float
        Size of the part along the axes, mm, for `cells_across`.
    limits : mapping of str to (float, float)
        Least and largest value allowed of columns, for the reason `limit-within-band`.
    tolerance : float
        Tolerance of the process on a wall, plus or minus mm, for `E1_tolerance_percent` and its like.
    """
    results = Results(effective, part, limits, tolerance)
    wanted = columns_of(effective.kind) if names is None else list(names)
    out: dict[str, NDArray[Any] | Words] = {
        "family": Words(np.zeros(results.count, np.int64), (effective.cell.family,))
    }
    out.update(parameter_columns(effective))
    with np.errstate(all="ignore"):
        for name in wanted:
            found = column(name)
            has = effective.kind in found.kinds
            out[name] = found.of(results) if has else np.full(results.count, np.nan)
    return out


def evaluate(effective: Effective, names: Sequence[str] | None = None, **known: Any) -> dict[str, Any]:
    """Return `quantities`, of what is `known` too, with text spelled out: ndarrays of shape (m,) by column name."""
    found = quantities(effective, names, **known)
    return {name: values.spelled() if isinstance(values, Words) else values for name, values in found.items()}


def table(effective: Effective, names: Sequence[str] | None = None, **known: Any) -> pd.DataFrame:
    """Return `evaluate` as a DataFrame, one row a member."""
    import pandas as pd

    return pd.DataFrame(evaluate(effective, names, **known))
