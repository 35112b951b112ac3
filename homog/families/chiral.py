"""Chiral lattices: round nodes joined by straight ligaments that leave them along a tangent.

A rigid node is one point with a rotation, its ligaments held by rigid arms; its section is a solid disc. A ring node is
a thin ring of the ligament's thickness: curved walls between the tangent points, exact for a thin circular bar.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from homog.cell import Block, UnitCell
from homog.families.base import Family, Parameter, Rule, Values, batch, topology, wall_props
from homog.materials import Material

Array = NDArray[np.float64]


def tangent_overlap(radius: Array, thickness: Array) -> Array:
    """Return the area of a tangent ligament's end that lies inside the node's outer circle (half a segment), mm2."""
    outer, inner = radius + thickness / 2.0, radius - thickness / 2.0
    return np.asarray(0.5 * (outer**2 * np.arccos(inner / outer) - inner * np.sqrt(outer**2 - inner**2)))


def node_area(radius: Array, thickness: Array, node: str) -> Array:
    """Return the solid area of a node: a disc that reaches the ligament's outer face, or a ring of its thickness."""
    outer, inner = radius + thickness / 2.0, np.maximum(radius - thickness / 2.0, 0.0)
    return np.asarray(np.pi * (outer**2 - (inner**2 if node == "ring" else 0.0)))


def _anti_tetrachiral(p: Values, material: Material) -> UnitCell:
    # neighbours turn opposite ways; every ligament, run from an even to an odd node, leaves on its left
    #   even: right at N, up at W, left at S, down at E       odd: its mirror image
    x, y, r, t = p["ligament_x"], p["ligament_y"], p["node_radius"], p["thickness"]
    node = str(np.ravel(p["node"])[0])
    lattice = batch([x, y], [-x, y])
    zero = 0.0 * (x + r)
    to_odd = [(0, 0), (-1, 1), (0, 1), (-1, 0)]  # image of the odd node at +x, -x, +y, -y of the even one
    # odd node's home is (x, 0): +x is itself, -x is minus a1 plus a2, +y is plus a2, -y is minus a1
    if node == "rigid":
        points = batch([zero, zero], [x + zero, zero])
        nodes, shifts = topology([[(0, (0, 0)), (1, image)] for image in to_odd])
        arms = np.broadcast_to(np.asarray(r)[..., None], zero.shape + (4,))
        props = wall_props(np.asarray(t)[..., None] + np.zeros(4), material, start_across=arms, end_across=arms)
        blocks: tuple[Block, ...] = (Block("wall", nodes, shifts, props),)
    else:
        # tangent points E N W S of the even node: 0 to 3, of the odd node: 4 to 7
        round_ = [[r, zero], [zero, r], [-r, zero], [zero, -r]]
        points = batch(*round_, *[[x + a, b] for a, b in round_])
        E, N, W, S = range(4)
        # +x leaves at N and arrives at N of the odd node, -x at S, +y at W, -y at E
        ends = [(N, N), (S, S), (W, W), (E, E)]
        ligaments = [[(a, (0, 0)), (4 + b, image)] for (a, b), image in zip(ends, to_odd, strict=True)]
        arcs = [[(4 * k + i, (0, 0)), (4 * k + (i + 1) % 4, (0, 0))] for k in (0, 1) for i in range(4)]
        turn = np.array([0.0] * 4 + [-np.pi / 2.0] * 8)  # the ring, run counter-clockwise, bulges to the right
        nodes, shifts = topology(ligaments + arcs)
        blocks = (
            Block("wall", nodes, shifts, wall_props(np.asarray(t)[..., None] + np.zeros(12), material, arc=turn)),
        )
    solid = 2.0 * node_area(r, t, node) + 2.0 * t * (x + y) - 8.0 * tangent_overlap(r, t)
    return UnitCell(points, lattice, blocks, parent=material, solid=solid, slenderness=t / np.minimum(x, y) + zero)


def _nodes_collide(p: Values, material: Material) -> NDArray[np.bool_]:
    span = np.minimum(p["ligament_x"], p["ligament_y"])
    return np.asarray(2.0 * p["node_radius"] + 2.0 * p["thickness"] >= span)


FAMILIES = (
    Family(
        "anti-tetrachiral", "Anti-tetrachiral lattice", "planar",
        (
            Parameter("ligament_x", "mm", 0.05, 1000.0, 10.0, "ligament and centre distance along axis 1"),
            Parameter("ligament_y", "mm", 0.05, 1000.0, 10.0, "ligament and centre distance along axis 2"),
            Parameter("node_radius", "mm", 0.005, 400.0, 2.5, "radius of the node's centre line"),
            Parameter("thickness", "mm", 0.001, 200.0, 0.8, "thickness of ligaments and ring", made=True),
            Parameter("node", "", 0.0, 0.0, "rigid", "solid disc or ring of the same wall", choices=("rigid", "ring")),
        ),
        "orthotropic", "after Prall & Lakes 1997, Int. J. Mech. Sci. 39, 305; moduli derived", _anti_tetrachiral,
        rules=(
            Rule("nodes-collide", "neighbouring nodes touch; a ligament must exceed 2 node_radius + 2 thickness",
                 _nodes_collide),
            Rule("ring-filled", "the ring has no hole; thickness must be under node_radius",
                 lambda p, m: (p["node"] == "ring") & (p["thickness"] >= p["node_radius"])),
        ),
        notes="A rigid node's disc is taken as rigid: 4 node_radius should well exceed thickness.",
    ),
)  # fmt: skip
