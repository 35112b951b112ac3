"""Effective elastic properties of lattices and folded sheets, from a requirement to ranked unit cells.

    cell = homog.build("reentrant-honeycomb", angle=[-40, -30, -20], material="PA12 laser-sintered")
    effective = homog.homogenize(cell)
    effective.table()

Names load when they are used, so that `import homog` costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

from homog.version import __version__

_HOME = {
    "build": "families",
    "family": "families",
    "FAMILIES": "families",
    "Material": "materials",
    "Process": "materials",
    "material": "materials",
    "process": "materials",
    "Block": "cell",
    "UnitCell": "cell",
    "Effective": "effective",
    "homogenize": "effective",
    "young": "directional",
    "poisson": "directional",
    "shear": "directional",
    "coupling": "directional",
    "COLUMNS": "columns",
    "Brief": "brief",
    "read_brief": "brief",
    "screen": "screening",
    "run_screen": "screening",
    "sensitivities": "sensitivity",
    "tune": "tuning",
    "HomogError": "errors",
    "InputError": "errors",
    "GeometryError": "errors",
    "MechanismError": "errors",
}

__all__ = ["__version__", *_HOME]


def __getattr__(name: str) -> Any:
    if name in _HOME:
        return getattr(import_module(f"homog.{_HOME[name]}"), name)
    raise AttributeError(f"module 'homog' has no attribute '{name}'")


def __dir__() -> list[str]:
    return sorted(__all__)


if TYPE_CHECKING:
    from homog.brief import Brief as Brief
    from homog.brief import read_brief as read_brief
    from homog.cell import Block as Block
    from homog.cell import UnitCell as UnitCell
    from homog.columns import COLUMNS as COLUMNS
    from homog.directional import coupling as coupling
    from homog.directional import poisson as poisson
    from homog.directional import shear as shear
    from homog.directional import young as young
    from homog.effective import Effective as Effective
    from homog.effective import homogenize as homogenize
    from homog.errors import (
        GeometryError as GeometryError,
    )
    from homog.errors import (
        HomogError as HomogError,
    )
    from homog.errors import (
        InputError as InputError,
    )
    from homog.errors import (
        MechanismError as MechanismError,
    )
    from homog.families import FAMILIES as FAMILIES
    from homog.families import build as build
    from homog.families import family as family
    from homog.materials import Material as Material
    from homog.materials import Process as Process
    from homog.materials import material as material
    from homog.materials import process as process
    from homog.screening import run_screen as run_screen
    from homog.screening import screen as screen
    from homog.sensitivity import sensitivities as sensitivities
    from homog.tuning import tune as tune
