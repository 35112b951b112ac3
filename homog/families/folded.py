"""Folded sheets: panels of bars that bend about their short diagonal, joined by elastic creases.

Panel edges and short diagonals are bars with the areas of Filipov, Liu, Tachi, Schenk & Paulino 2017 (Int. J. Solids
Struct. 124, 26; from memory), creases have the stiffness D / crease_length per length (length scale of Lechenault,
Thiria & Adda-Bedia 2014), panels bend with (0.55 - 0.42 sum(alpha)/pi) D (d/t)^(1/3), alpha the acute corners (same
paper, from memory, constants not confirmed). In absolute stiffness such a model can be far from a full shell; what is
robust is the kinematics.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from homog.cell import Block, UnitCell
from homog.families.base import Family, Parameter, Rule, Values, batch, topology
from homog.materials import Material

Array = NDArray[np.float64]


def panel_bars(W: Array, H: Array, thickness: Array, poisson: float) -> tuple[Array, Array, Array]:
    """Return bar areas (mm2) along W, along H and along each diagonal that give a W x H panel the plate's stiffness.

    A_x = t (H^2 - nu W^2) / (2 H (1 - nu^2)), A_y likewise, A_d = t nu (H^2 + W^2)^1.5 / (2 H W (1 - nu^2)); exact in
    stretch, in shear only at nu = 1/3 (Filipov et al. 2017, from memory, confirmed). Negative where the panel is too
    long: such a panel cannot be built from bars.
    """
    plate = thickness / (2.0 * (1.0 - poisson**2))
    along = plate * (H**2 - poisson * W**2) / H
    across = plate * (W**2 - poisson * H**2) / W
    return along, across, plate * poisson * (H**2 + W**2) ** 1.5 / (H * W)


def _miura(p: Values, material: Material) -> UnitCell:
    # vertex (i, j) at x = i S, y = j L + (i odd) V, z = (j odd) H; points 0 (0,0), 1 (1,0), 2 (0,1), 3 (1,1)
    a, b, t = p["side_a"], p["side_b"], p["sheet_thickness"]
    g, th = np.radians(p["sector_angle"]), np.radians(p["fold_angle"])
    root = np.sqrt(1.0 + np.cos(th) ** 2 * np.tan(g) ** 2)
    H, S = a * np.sin(th) * np.sin(g), b * np.cos(th) * np.tan(g) / root
    L, V = a * np.sqrt(1.0 - np.sin(th) ** 2 * np.sin(g) ** 2), b / root
    zero = 0.0 * (S + L)
    points = batch([zero, zero, zero], [S + zero, V, zero], [zero, L, H], [S, L + V, H])
    lattice = batch([2.0 * S, 0.0, 0.0], [0.0, 2.0 * L, 0.0])

    def vertex(i: int, j: int) -> tuple[int, tuple[int, int]]:
        return i % 2 + 2 * (j % 2), (i // 2, j // 2)

    panels = [(i, j) for j in (0, 1) for i in (0, 1)]

    def diagonal(i: int, j: int) -> tuple[tuple[int, int], tuple[int, int]]:
        # side b climbs by +V from even i and drops from odd i: the obtuse corners are joined
        return ((i + 1, j), (i, j + 1)) if i % 2 == 0 else ((i, j), (i + 1, j + 1))

    def opposite(i: int, j: int, edge: set[tuple[int, int]]) -> tuple[int, int]:
        """Vertex of panel (i, j)'s triangle that holds the edge, off the edge."""
        corners = {(i, j), (i + 1, j), (i, j + 1), (i + 1, j + 1)}
        ends = set(diagonal(i, j))
        if edge == ends:
            raise ValueError("the diagonal lies in two triangles")
        return next(iter(ends - edge)) if edge - ends else next(iter(corners - ends - edge))

    bars, folds = [], []
    for i, j in panels:
        bars.append(((i, j), (i, j + 1)))  # side a
    for i, j in panels:
        bars.append(((i, j), (i + 1, j)))  # side b
    for i, j in panels:
        bars.append(diagonal(i, j))
    for i, j in panels:  # crease along side a between panels (i-1, j) and (i, j)
        edge = ((i, j), (i, j + 1))
        folds.append((opposite(i - 1, j, set(edge)), *edge, opposite(i, j, set(edge))))
    for i, j in panels:  # crease along side b between panels (i, j-1) and (i, j)
        edge = ((i, j), (i + 1, j))
        folds.append((opposite(i, j - 1, set(edge)), *edge, opposite(i, j, set(edge))))
    for i, j in panels:
        one, other = sorted({(i, j), (i + 1, j), (i, j + 1), (i + 1, j + 1)} - set(diagonal(i, j)))
        folds.append((one, *diagonal(i, j), other))

    E, nu = material.modulus_MPa, material.poisson
    across = b * np.sin(g)
    area_a, area_b, area_d = panel_bars(a, across, t, nu)
    four = np.ones(4)
    # a side belongs to two panels; the one diagonal that is there carries for both
    rigidity = np.concatenate(
        [np.asarray(E * f * A + zero)[..., None] * four for f, A in ((2.0, area_a), (2.0, area_b), (2.0, area_d))], -1
    )
    D = E * t**3 / (12.0 * (1.0 - nu**2))
    d = np.sqrt(a**2 + b**2 - 2.0 * a * b * np.cos(g))
    crease = D / p["crease_length"]
    panel = (0.55 - 0.42 * 2.0 * g / np.pi) * D * np.cbrt(d / t) / d
    stiffness = np.concatenate([np.asarray(k + zero)[..., None] * four for k in (crease, crease, panel)], -1)
    names = [[vertex(*end) for end in element] for element in bars]
    folded = [[vertex(*end) for end in element] for element in folds]
    blocks = (
        Block("bar", *topology(names), {"rigidity": rigidity}),
        Block("fold", *topology(folded), {"stiffness": stiffness}),
    )
    solid, slenderness = 4.0 * a * b * np.sin(g) * t, t / np.minimum(a, b) + zero
    return UnitCell(
        points, lattice, blocks, parent=material, solid=solid, slenderness=slenderness, height=H + t + zero
    )  # fmt: skip


def _panel_too_long(p: Values, material: Material) -> NDArray[np.bool_]:
    a, height = p["side_a"], p["side_b"] * np.sin(np.radians(p["sector_angle"]))
    nu = material.poisson
    return np.asarray((height**2 <= nu * a**2) | (a**2 <= nu * height**2))


FAMILIES = (
    Family(
        "miura-fold", "Miura fold", "sheet",
        (
            Parameter("side_a", "mm", 0.5, 1000.0, 10.0, "panel side a, along axis 2 and up"),
            Parameter("side_b", "mm", 0.5, 1000.0, 10.0, "panel side b, the zigzag crease in the plane"),
            Parameter("sector_angle", "deg", 20.0, 88.0, 60.0, "panel angle gamma between a and b"),
            Parameter("fold_angle", "deg", 2.0, 88.0, 45.0, "theta, panel to the plane of the sheet; 0 is flat"),
            Parameter("sheet_thickness", "mm", 0.01, 20.0, 0.2, "thickness of the sheet", made=True),
            Parameter("crease_length", "mm", 0.1, 2000.0, 10.0, "crease length scale L*, often 25 to 100 thicknesses"),
        ),
        "orthotropic", "Schenk & Guest 2013, PNAS 110, 3276; Wei, Guo, Dudte, Liang & Mahadevan 2013, PRL 110, 215501",
        _miura,
        rules=(
            Rule("sheet-thick", "panels are not thin; sheet_thickness must be under a twentieth of the shorter side",
                 lambda p, m: p["sheet_thickness"] > np.minimum(p["side_a"], p["side_b"]) / 20.0),
            Rule("panel-long", "the panel is too long for a truss of bars (a bar's area would be negative); "
                 "bring side_a and side_b sin(sector_angle) nearer to each other", _panel_too_long),
        ),
        notes="In the plane auxetic, in bending the opposite sign (a saddle); z from mid-height.",
    ),
)  # fmt: skip
