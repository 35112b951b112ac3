"""The one list of output quantities.

A `Column` is a name with its unit, a meaning, the kinds of cell that have it, and a function of `Results`: the batch's
tensors and what several columns share (compliance, extremes, bounds, reasons), each computed once and only if asked
for. Registration in COLUMNS brings tables, `--json`, limits in a brief and the documentation along.
"""

from __future__ import annotations

import dataclasses
import functools
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from types import MappingProxyType
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from homog import bands, bounds, directional
from homog.cell import Kind, Status
from homog.effective import Effective, Flag, homogenize, soft_mode
from homog.errors import unknown
from homog.families import FAMILIES
from homog.gradient import wall_rates
from homog.materials import Material
from homog.reasons import (
    CELLS_CAUTION,
    COUPLING_CAUTION,
    LIGAMENT_CAUTION,
    PANEL_POISSON,
    REACH_CAUTION_DEG,
    SINGULAR_CAUTION,
    SLENDER_CAUTION,
    SLENDER_REJECT,
    reason_level,
)
from homog.stress import BEAMS, sections, unit_stresses
from homog.tensors import compliance_to_voigt, inverse, stiffness_to_voigt

if TYPE_CHECKING:
    import pandas as pd

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Limits = Mapping[str, tuple[float, float]]

PLANAR: tuple[Kind, ...] = ("planar",)
SHEET: tuple[Kind, ...] = ("sheet",)
SPATIAL: tuple[Kind, ...] = ("spatial",)
WALLED: tuple[Kind, ...] = ("planar", "spatial")
ALL: tuple[Kind, ...] = ("planar", "sheet", "spatial")

HEXAGON_POINTS = 32

FIRST_YIELD = "first yield of a beam's extreme fibre"
CORNERS = "inner corners of the solid see more"
VOIGT_PAIRS = (("11", 0, 0), ("12", 0, 1), ("16", 0, 2), ("22", 1, 1), ("26", 1, 2), ("66", 2, 2))


@functools.cache
def _hexagon_curve(poisson: float, model: str) -> Array:
    """Return Chebyshev coefficients over tau = t/l from 0 to 1 of E/(E_s tau^3) of the regular hexagonal honeycomb."""
    x = np.cos(np.pi * (np.arange(HEXAGON_POINTS) + 0.5) / HEXAGON_POINTS)
    tau = (x + 1.0) / 2.0
    parent = Material("hexagon", 1.0, 0.3, 1000.0)
    cell = FAMILIES["hexagonal-honeycomb"].build({"inclined": 10.0, "vertical": 10.0, "thickness": 10.0 * tau}, parent)
    walls = cell.blocks[0]
    given = {**walls.props, "poisson": np.array([poisson])}  # deep walls may have more than a solid's 0.5
    cell = dataclasses.replace(cell, blocks=(dataclasses.replace(walls, props=given),))
    S = np.linalg.inv(homogenize(cell, model="joint" if model == "solid" else model).stiffness)
    return np.asarray(np.polynomial.chebyshev.chebfit(x, 1.0 / (S[:, 0, 0] * tau**3), HEXAGON_POINTS - 1))


class Results:
    """What the columns of a batch share, each computed once.

    Parameters
    ----------
    effective : Effective
        A batch of any shape; everything here is flat, one entry a member in C order.
    part : sequence of float
        Size of the part along axes 1, 2, (3) in mm, if it is known.
    limits : mapping of str to (float, float)
        Least and largest value allowed of columns, if they are known, for `limit-within-band`.
    tolerance : float
        By how much the process may miss a wall, plus or minus, mm; 0 if it is not known.
    """

    def __init__(
        self, effective: Effective, part: Sequence[float] = (), limits: Limits | None = None, tolerance: float = 0.0
    ) -> None:
        self.effective, self.part = effective, tuple(part)
        self.limits, self.tolerance = limits or {}, tolerance
        self.cell, self.kind, self.parent = effective.cell, effective.kind, effective.cell.parent
        self.shape = effective.status.shape
        self.count = int(effective.status.size)
        self.status = effective.status.reshape(-1)
        self.stiffness = effective.stiffness.reshape((self.count,) + effective.stiffness.shape[-2:])
        self.density = effective.relative_density.reshape(-1)

    def flat(self, values: NDArray[Any]) -> NDArray[Any]:
        """Return values of the batch's shape (or that broadcast to it) as a flat array."""
        return np.broadcast_to(values, self.shape).reshape(-1)

    @cached_property
    def size(self) -> Array:
        """Repeat along each axis, (count, d)."""
        size = self.cell.size
        return np.broadcast_to(size, self.shape + size.shape[-1:]).reshape(self.count, -1)

    @cached_property
    def compliance(self) -> Array:
        """Mandel compliance, NaN where there is none: impossible members and soft modes."""
        sound = self.status == Status.OK
        safe = np.where(sound[:, None, None], self.stiffness, np.eye(self.stiffness.shape[-1]))
        return np.where(sound[:, None, None], inverse(safe), np.nan)

    @cached_property
    def membrane(self) -> Array:
        """Compliance as of a material, 1/MPa: plane (count, 3, 3), a sheet's over its slab, or spatial (6, 6)."""
        if self.kind != "sheet":
            return self.compliance
        return np.asarray(self.compliance[:, :3, :3] * self.flat(self.cell.height)[:, None, None])

    @cached_property
    def voigt(self) -> Array:
        """`membrane` in Voigt's form, engineering shear."""
        return compliance_to_voigt(self.membrane)

    @cached_property
    def plate(self) -> Array:
        """A sheet's [A B; B D], Voigt."""
        return stiffness_to_voigt(self.stiffness, sheet=True)

    @cached_property
    def extremes(self) -> directional.Extremes:
        """Extremes over every direction."""
        if self.kind == "spatial":
            return directional.space_extremes(self.membrane)
        return directional.plane_extremes(self.membrane)

    @cached_property
    def bounds(self) -> bounds.Report:
        """Values over bounds."""
        poisson = self.parent.wall_poisson if self.kind == "planar" else self.parent.poisson
        return bounds.report(self.stiffness, self.density, self.bound_modulus, poisson, sheet=self.kind == "sheet")

    @property
    def bound_modulus(self) -> float:
        """The parent's modulus that bounds are of: in plane strain that of deep walls."""
        return self.parent.wall_modulus_MPa if self.kind == "planar" else self.parent.modulus_MPa

    @cached_property
    def yields(self) -> Array:
        """Stress at first yield of a beam's fibre, MPa, (count, v) in Voigt's order; NaN without yield or sections."""
        beams = bool(self.cell.blocks) and all(block.kind in BEAMS for block in self.cell.blocks)
        if self.kind == "sheet" or not beams or np.isnan(self.parent.yield_MPa):
            return np.full((self.count, self.stiffness.shape[-1]), np.nan)
        return np.asarray(self.parent.yield_MPa / sections(self.effective).peak(unit_stresses(self.cell.d)))

    def young(self, i: int) -> Array:
        return np.asarray(1.0 / self.voigt[:, i, i])

    def ratio(self, i: int, j: int) -> Array:
        return np.asarray(-self.voigt[:, j, i] / self.voigt[:, i, i])

    @cached_property
    def band(self) -> bands.Band:
        """Where E1 and nu12 of a solid lie: by the measured residual of the model, or by a solid's own estimate."""
        E1, nu12, flags = self.young(0), self.ratio(0, 1), self.flat(self.effective.flags)
        if self.effective.model == "solid":
            return bands.spread(E1, nu12, *(self.flat(self.effective.spread[name]) for name in ("E1", "nu12")))
        family, parameters = self.cell.family, self.cell.parameters
        found = bands.band(
            bands.group(family, parameters), self.effective.model, self.flat(self.cell.slenderness), E1, self.young(1),
            nu12, outside=(flags & Flag.JOINT_OUTSIDE) > 0, near=(flags & Flag.JOINTS_NEAR) > 0,
        )  # fmt: skip
        known = self.flat(bands.measured(family, parameters, self.parent.poisson)) & self._along_axes()
        known &= (flags & Flag.JOINTS_OVERLAP) == 0
        return bands.Band(*(np.where(known, end, np.nan) for end in found))

    def _along_axes(self) -> bool:
        """Say whether the cells lie along their family's axes, as it makes them (one rotation turns a whole batch)."""
        sound = np.flatnonzero(self.status == Status.OK)[:1]
        if self.cell.family not in FAMILIES or not len(sound):
            return False
        values = self.cell.parameters.items()
        given = {name: str(v.flat[0]) if v.dtype.kind == "U" else self.flat(v)[sound] for name, v in values}
        made = FAMILIES[self.cell.family].build(given, self.parent).lattice[0, 0]
        lattice = self.cell.lattice
        here = np.broadcast_to(lattice[..., 0, :], self.shape + lattice.shape[-1:]).reshape(self.count, -1)[sound[0]]
        return bool(np.allclose(here / np.linalg.norm(here), made / np.linalg.norm(made), rtol=0.0, atol=1e-9))

    @cached_property
    def hexagon(self) -> Array:
        """Young's modulus of the regular hexagonal honeycomb of equal density, parent and model, MPa.

        rho = 2 tau/sqrt3 - tau^2/3, joints counted once; NaN above a density of 0.82, where walls end (tau > 1).
        """
        tau = np.sqrt(3.0) * (1.0 - np.sqrt(np.clip(1.0 - self.density, 0.0, None)))
        curve = _hexagon_curve(self.parent.wall_poisson, self.effective.model)
        share = np.polynomial.chebyshev.chebval(2.0 * tau - 1.0, curve)
        return np.where(tau <= 1.0, self.parent.wall_modulus_MPa * tau**3 * share, np.nan)

    @cached_property
    def cells_across(self) -> Array:
        """Fewest whole repeats across the part, NaN if its size is not known."""
        if not self.part:
            return np.full(self.count, np.nan)
        axes = min(len(self.part), self.cell.p)
        return np.asarray((np.asarray(self.part[:axes]) / self.size[:, :axes]).min(axis=-1))

    @cached_property
    def tolerances(self) -> Array:
        """To first order, share of E1 and change of nu12 that the tolerance brings: bias, then scatter, (4, count).

        Bias: every wall is off alike. Scatter: each wall of the cell by itself, added in quadrature; every cell repeats
        it, so that a part of many cells, whose walls all differ, scatters less. NaN without tolerance or derivative.
        """
        if not self.tolerance > 0.0 or self.effective.model == "solid" or self.cell.family not in FAMILIES:
            return np.full((4, self.count), np.nan)
        together, apart, plain = wall_rates(self.effective)

        def changes(rate: Array, S: Array) -> tuple[Array, Array]:
            stretch = rate[..., 0, 0] / S[:, 0, 0]
            return np.abs(stretch), np.abs((rate[..., 1, 0] - S[:, 1, 0] * stretch) / S[:, 0, 0])

        scatter = (np.sqrt((change**2).sum(axis=0)) for change in changes(apart, plain))
        return np.asarray(self.tolerance * np.array([*changes(together, self.compliance), *scatter]))

    @cached_property
    def soft_modes(self) -> Words:
        """The soft mode of each member that has one."""
        codes, words = np.zeros(self.count, np.int64), {"": 0}
        for i in np.flatnonzero(self.status == Status.MECHANISM):
            codes[i] = words.setdefault(soft_mode(self.stiffness[i], self.kind), len(words))
        return Words(codes, tuple(words))

    @cached_property
    def reasons(self) -> dict[str, Mask]:
        """Where each reason applies; a family's own rules come under their codes."""
        found: dict[str, Mask] = {}
        impossible = self.status == Status.IMPOSSIBLE
        explained = np.zeros(self.count, bool)
        if impossible.any() and self.cell.family in FAMILIES:
            for code, mask in FAMILIES[self.cell.family].impossible(self.cell.parameters, self.parent).items():
                found[code] = self.flat(mask) & impossible
                explained |= found[code]
        marked = self.flat(np.asarray(self.cell.status) == Status.IMPOSSIBLE)
        found["walls-merge"] = impossible & marked & ~explained
        found["not-finite"] = impossible & ~marked
        kinds = {block.kind for block in self.cell.blocks}
        beams, slenderness = bool(kinds & {"wall", "strut"}), self.flat(self.cell.slenderness)
        live = self.status == Status.OK
        found["soft-mode"] = self.status == Status.MECHANISM
        found["not-positive"] = live & self.bounds.not_positive
        found["above-voigt"] = live & self.bounds.above_voigt
        found["above-hashin-shtrikman"] = live & self.bounds.above_hashin_shtrikman
        found["nu-outside-limits"] = live & self.bounds.nu_outside
        plain = beams and self.effective.model in ("euler", "timoshenko")
        flags = self.flat(self.effective.flags)
        tangent = any(set(block.props) & {"start_across", "end_across", "arc"} for block in self.cell.blocks)
        found["walls-thick"] = live & plain & (slenderness > SLENDER_REJECT)
        thick = (slenderness > SLENDER_CAUTION) & (slenderness <= SLENDER_REJECT)
        found["beam-model"] = live & plain & thick & (not tangent)
        found["tangent-nodes"] = live & plain & tangent
        found["joint-outside"] = live & ((flags & Flag.JOINT_OUTSIDE) > 0)
        found["joints-near"] = live & ((flags & Flag.JOINTS_NEAR) > 0)
        found["joints-overlap"] = live & ((flags & Flag.JOINTS_OVERLAP) > 0)
        found["ligament-stubby"] = live & ("hinge" in kinds) & (slenderness > LIGAMENT_CAUTION)
        found["hinge-model"] = live & ("hinge" in kinds)
        found["panels-unbraced"] = live & ("fold" in kinds) & (self.parent.poisson < PANEL_POISSON)
        found["sheet-model"] = live & ("fold" in kinds)
        found["internal-mechanism"] = live & (self.effective.mechanisms.reshape(-1) > 0)
        found["near-singular"] = live & (self.bounds.stability < SINGULAR_CAUTION)
        S = self.membrane
        shear = np.abs(S[:, :2, -1]) / np.sqrt(np.abs(S[:, [0, 1], [0, 1]] * S[:, -1, -1, None]))
        found["coupled"] = live & (shear.max(axis=-1) > COUPLING_CAUTION)
        found["reach-short"] = live & (self.ratio(0, 1) < 0.0) & (self.extremes.auxetic_reach_deg < REACH_CAUTION_DEG)
        found["few-cells"] = live & (self.cells_across < CELLS_CAUTION)
        found["band-unknown"] = live & ~found["joints-overlap"] & ~np.isfinite(self.band.E1_low)
        values = {"E1_MPa": self.young(0), "nu12": self.ratio(0, 1), **self.band.columns}
        found["limit-within-band"] = live & bands.within_band(values, self.limits, self.count)
        return found

    def worst(self, level: str) -> Mask:
        """Where any reason of a level applies; a family's own rules reject."""
        masks = [mask for code, mask in self.reasons.items() if reason_level(code) == level]
        return np.logical_or.reduce(masks) if masks else np.zeros(self.count, bool)


@dataclass(frozen=True, eq=False)
class Words:
    """Text of m members, of few different words: `words[codes]`."""

    codes: NDArray[np.int64]
    words: tuple[str, ...]

    def spelled(self) -> NDArray[Any]:
        """Return the text of each member (object array)."""
        return np.array(self.words, dtype=object)[self.codes]


def listed(masks: Mapping[str, Mask], count: int) -> Words:
    """Return for each of `count` members the names whose mask is true there, joined by blanks."""
    bits = np.zeros(count, np.int64)
    for bit, mask in enumerate(masks.values()):
        bits |= mask.astype(np.int64) << bit
    patterns, where = np.unique(bits, return_inverse=True)
    words = (" ".join(name for bit, name in enumerate(masks) if pattern >> bit & 1) for pattern in patterns)
    return Words(where, tuple(words))


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
    Column("cells_across", "fewest repeats across the part, if its size is given", ALL, lambda r: r.cells_across),
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
