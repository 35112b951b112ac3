"""What the columns of a batch share: its tensors seen in every way, each computed once and only if asked for.

`Results` holds compliance, extremes, bounds, bands, what walls carry, and where each reason applies. `Words` is text of
many members in few different words.
"""

from __future__ import annotations

import dataclasses
import functools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from homog import bands, bounds, directional
from homog.cell import Status
from homog.effective import Effective, Flag, homogenize, soft_mode
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
    pass

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Limits = Mapping[str, tuple[float, float]]

HEXAGON_POINTS = 32


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
        if not self.tolerance > 0.0 or self.cell.family not in FAMILIES:
            return np.full((4, self.count), np.nan)
        if self.effective.model == "solid":  # a mesh has no derivative; the joints that it agrees with have
            cell = self.cell if self.shape else self.cell.at(None)
            return Results(homogenize(cell, model="joint"), tolerance=self.tolerance).tolerances
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
        found["no-cell"] = live & (self.cells_across < 1.0)
        found["few-cells"] = live & (self.cells_across < CELLS_CAUTION) & ~found["no-cell"]
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
