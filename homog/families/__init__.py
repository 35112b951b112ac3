"""The unit-cell library: one pure function and its parameters per family, collected in FAMILIES."""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType

from numpy.typing import ArrayLike

from homog.cell import UnitCell
from homog.errors import unknown
from homog.families import chiral, folded, planar, rotating, spatial
from homog.families.base import Family, Parameter, Rule
from homog.materials import UNIT, Material
from homog.materials import material as named_material

FAMILIES: Mapping[str, Family] = MappingProxyType(
    {f.id: f for module in (planar, chiral, rotating, folded, spatial) for f in module.FAMILIES}
)

__all__ = ["FAMILIES", "Family", "Parameter", "Rule", "build", "family"]


def family(name: str) -> Family:
    """Return the family of that identifier, or raise InputError with the nearest names."""
    if name not in FAMILIES:
        raise unknown("family", name, FAMILIES, "'homog families' lists them")
    return FAMILIES[name]


def build(name: str, /, *, material: Material | str = UNIT, **parameters: ArrayLike) -> UnitCell:
    """Return a unit cell, or a batch of them, of a family.

    Parameters
    ----------
    name : str
        Family identifier, such as `reentrant-honeycomb`.
    material : Material or str
        Parent material or its name; the unit parent (1 MPa, 0.3, 1000 kg/m3) if not given.
    **parameters : float or array_like
        The family's parameters in mm and degrees; arrays broadcast to the batch.

    Raises
    ------
    InputError
        For an unknown family, material or parameter, or a value out of range.
    GeometryError
        For a single cell that cannot exist; in a batch such members get a status instead.

    Examples
    --------
    >>> build("square-grid", length=10.0, thickness=[0.5, 1.0]).shape
    (2,)
    """
    parent = named_material(material) if isinstance(material, str) else material
    return family(name).build(parameters, parent)
