"""Stiffness, Poisson's ratio, shear modulus and coupling in every direction, and their exact extremes.

`pointwise` answers for given directions, `extremes` for the worst and best of all; `frames` is the search in space.
Arrays in, arrays out: nothing here knows a cell.
"""

from homog.directional.extremes import Extremes, Harmonics, harmonics, plane_extremes, space_extremes
from homog.directional.pointwise import coupling, poisson, shear, young

__all__ = [
    "Extremes",
    "Harmonics",
    "coupling",
    "harmonics",
    "plane_extremes",
    "poisson",
    "shear",
    "space_extremes",
    "young",
]
