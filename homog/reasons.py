"""Why a cell is not simply `ok`: the codes, what they mean, and from where on they speak."""

from __future__ import annotations

from collections.abc import Mapping

from homog.errors import unknown
from homog.families import FAMILIES

SLENDER_CAUTION, SLENDER_REJECT = 0.05, 0.25
LIGAMENT_CAUTION = 0.5
COUPLING_CAUTION = 0.1
REACH_CAUTION_DEG = 5.0
SINGULAR_CAUTION = 1e-6
CELLS_CAUTION = 4.0
PANEL_POISSON = 0.1

REASONS: Mapping[str, tuple[str, str]] = {
    "not-finite": ("reject", "a value is not finite"),
    "walls-merge": ("reject", "the joints run into each other and close the void beside a wall"),
    "soft-mode": ("reject", "a uniform strain costs no energy: no Poisson's ratio exists, the mode is in soft_mode"),
    "not-positive": ("reject", "the stiffness is not positive definite: the model is wrong there"),
    "above-voigt": ("reject", "stiffer than the Voigt bound allows at this density (voigt_ratio over 1): the model or "
                    "the density is wrong there"),
    "above-hashin-shtrikman": ("reject", "stiffer than the Hashin-Shtrikman bound allows an isotropic cell "
                               "(hashin_shtrikman_ratio over 1): the model or the density is wrong there"),
    "nu-outside-limits": ("reject", "a Poisson's ratio outside what a stable material can have"),
    "walls-thick": ("reject", f"a wall or strut is thicker than {SLENDER_REJECT:g} of its length: no beam any more; at "
                    "0.3 a re-entrant cell's E1 comes out 24 to 81 % too low"),
    "beam-model": ("caution", f"a wall or strut is thicker than {SLENDER_CAUTION:g} of its length, with joints as "
                   "points: at 0.1 E1 comes out 2 to 14 % too low for a hexagonal cell, 13 to 46 % for a re-entrant "
                   "one, 38 to 68 % for an arrowhead"),
    "tangent-nodes": ("caution", "ligaments merge with their nodes along a tangent, which beams do not see: at a "
                      "thickness of 0.02 of the length E1 comes out 13 to 18 % and G12 34 to 44 % too low, at 0.1 "
                      "they are 24 to 36 % and 53 to 68 %, and nu off the axes may change its sign; use model 'solid'"),
    "joint-outside": ("caution", "a joint's angle or thickness ratio lies outside its table: taken as a point"),
    "joints-near": ("caution", "less than 0.5 of a thickness of plain wall is left between two joints: moduli were up "
                    "to 5 % off"),
    "joints-overlap": ("reject", "no plain wall is left between two joints: the joint model does not hold; use model "
                       "'solid'"),
    "hinge-model": ("caution", "the ligaments are pure hinges: without their stretch and shear and the give of the "
                    "units' corners stiffness is an upper estimate, G12 and G at 45 deg several times too high"),
    "ligament-stubby": ("caution", f"the ligament is over {LIGAMENT_CAUTION:g} of its length thick: no flexure strip"),
    "sheet-model": ("caution", "bar-and-hinge model of a folded sheet: signs and ratios are sound, stiffness "
                    "may be off by a factor of 2.6 against a full shell"),
    "panels-unbraced": ("reject", f"a parent's Poisson's ratio under {PANEL_POISSON:g}: the diagonal bars of a panel, "
                        "proportional to it, hold hardly any shear; give a larger one"),
    "internal-mechanism": ("caution", "joints can move at no energy, although no uniform strain is free"),
    "near-singular": ("caution", f"the softest strain is under {SINGULAR_CAUTION:g} of the stiffest: flaws decide"),
    "coupled": ("caution", "stretch along the axes comes with shear (eta1_12): a strip must be free to shear"),
    "reach-short": ("caution", f"auxetic only within {REACH_CAUTION_DEG:g} deg of axis 1: alignment decides"),
    "no-cell": ("reject", "not one whole cell across the part: it is no lattice any more"),
    "few-cells": ("caution", f"fewer than {CELLS_CAUTION:g} cells across the part: edges decide"),
    "band-unknown": ("caution", "no band for E1 and nu12: this family, shape, parent or slenderness was not measured "
                     "against solids"),
    "limit-within-band": ("caution", "a limit on E1 or nu12 is met by the value but not by its whole band: confirm by "
                          "model 'solid' or a test"),
}  # fmt: skip


def reason_level(code: str) -> str:
    """Return `reject` or `caution`; a family's own rules reject."""
    return REASONS[code][0] if code in REASONS else "reject"


def reason_text(code: str) -> str:
    """Return what a reason code means."""
    if code in REASONS:
        return REASONS[code][1]
    for family in FAMILIES.values():
        for rule in family.rules:
            if rule.code == code:
                return rule.words
    raise unknown("reason", code, REASONS)
