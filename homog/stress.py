"""Local stress: what the walls and struts of a cell carry under a macroscopic stress, and what yields first.

The solve that gives the effective tensor gives the motion too. Under the macroscopic stress s the strain is S s, the
nodes move by u = -K^+ F S s beyond it, and an element carries

    q = W (B u + (B A) S s),      force and moment on its end   B' q

All the rest is statics: along a member the force is the same, and the moment is that at the end plus lever times
force. So a wall or strut is known by one force and one moment, and every cross section is a linear map of s:

    s -> N, M, in space also a twist T,       fibre stress  |N|/A + |M|/W,  with a twist  (fibre^2 + 3 (T/2W)^2)^1/2

Where walls meet at points, and on struts, the most loaded sections are the ends; a curved wall is looked at in
ARC_SECTIONS places. Between condensed joints they are where the plain wall ends: where its face meets the joint's inner
corner or disc (`section.wall_cuts`). Shear is left out: it comes with an end moment of at least V L/2 of the plain
length L, and governs by von Mises at mid-depth only where L is under 0.87 t. So are the stress across the plane of deep
walls (on the safe side by 12 % at nu = 0.3) and the crowding of fibres in a curved one (unsafe by t/3R at its inside).

A beam knows no notch: inner corners see more. `corner_stress` takes that from the solid model.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from homog.assembly import Strained, energy_parts, freedoms, sparse, strained_blocks
from homog.cell import Block, Status, UnitCell
from homog.effective import CHUNK_ROWS, DENSE_LIMIT, RANK_TOLERANCE, SPARSE_SHIFT, Effective, homogenize
from homog.errors import InputError
from homog.joints import applies, with_joints
from homog.mesh import Mesh, strain_rows
from homog.section import arms_of, wall_cuts
from homog.solid import COARSE, FILLET_PIECES, cell_section, homogenize_section, wall_material
from homog.tensors import voigt_factors

Array = NDArray[np.float64]
Index = NDArray[np.int64]

BEAMS = frozenset({"wall", "strut"})
"""The kinds of element that have a cross section."""
ARC_SECTIONS = 17
"""Cross sections along a curved wall: over a quarter turn the largest stress is met within 0.5 %, from below."""

SMOOTH = 2
"""Pieces of a fillet's polygon over the solid model's: with them the largest stress is within 0.5 % of its limit."""


class Members(NamedTuple):
    """What the walls or struts of one block carry for each unit of macroscopic stress (Mandel).

    force : ndarray of shape (b, m, d, v), exerted on the end's side: with the direction from start to end it is tension
    moment : ndarray of shape (b, m, r, v), about `at`, on the end's side; r = 1 in the plane, 3 in space
    at : ndarray of shape (b, m, d), mm: the end, between condensed joints the middle

    In the plane forces are per unit depth.
    """

    force: Array
    moment: Array
    at: Array


@dataclass(frozen=True, eq=False)
class Sections:
    """The sections to be looked at of all members of a cell: linear maps of the macroscopic stress (Mandel, v).

    normal : ndarray of shape (b, s, v); bending (b, s, r, v); twist (b, s, v), zero in the plane
    area, modulus : ndarray of shape (b, s), A and W; of a round strut twist has 2 W
    where : ndarray of shape (b, s, d), mm
    block, member : ndarray of int of shape (s,), which block and which of its elements
    """

    normal: Array
    bending: Array
    twist: Array
    area: Array
    modulus: Array
    where: Array
    block: Index
    member: Index

    def stress(self, loads: ArrayLike) -> Array:
        """Return the equivalent fibre stress (b, s, q) of every section under macroscopic stresses (q, v), Mandel."""
        load = np.asarray(loads, float).T
        bending = np.sqrt(((self.bending @ load) ** 2).sum(axis=2)) / self.modulus[..., None]
        fibre: Array = np.abs(self.normal @ load) / self.area[..., None] + bending
        if self.twist.any():
            fibre = np.sqrt(fibre**2 + 3.0 * (self.twist @ load / (2.0 * self.modulus[..., None])) ** 2)
        return fibre

    def peak(self, loads: ArrayLike) -> Array:
        """Return the largest fibre stress (b, q) of any section under macroscopic stresses (q, v), Mandel.

        It is a norm of the load, so a parent's yield over it is how many times the load may be applied, exactly.
        """
        loads = np.asarray(loads, float)
        step = max(1, 2**22 // self.normal[..., 0].size)
        parts = [self.stress(loads[i : i + step]).max(axis=1, initial=0.0) for i in range(0, len(loads), step)]
        return np.concatenate(parts, axis=1)


def unit_stresses(d: int) -> Array:
    """Return the Mandel vectors (v, v) of unit stresses in Voigt's order: 11, 22, (33, 23, 13,) 12."""
    return np.asarray(np.diag(voigt_factors(3 if d == 2 else 6)))


def check_sections(cell: UnitCell) -> UnitCell:
    """Return the cell if all its elements have a cross section; InputError otherwise."""
    others = sorted({block.kind for block in cell.blocks} - BEAMS)
    if others or not cell.blocks:
        raise InputError(
            f"Cell '{cell.family}' has elements without a cross section ({', '.join(others) or 'no elements'}): "
            "local stress is for walls and struts"
        )
    return cell


# what members carry ----------------------------------------------------------------------------------------------


def member_forces(effective: Effective) -> tuple[Members, ...]:
    """Return what every wall and strut carries for each unit macroscopic stress, one entry a block of the cell.

    Parameters
    ----------
    effective : Effective
        A batch of any shape; here it is flat (b,). Members without a compliance are NaN. The `solid` model has no
        members: theirs are those of the same cell's `joint` model, and of `joint` in space those of `timoshenko`.

    Raises
    ------
    InputError
        For elements without a cross section.
    """
    cell = check_sections(effective.cell)
    other = {"solid": "joint"} | ({"joint": "timoshenko"} if cell.kind == "spatial" else {})
    if effective.model in other:
        effective = homogenize(cell if cell.shape else cell.at(None), model=other[effective.model])
    model, flat = effective.model, _flat(effective)
    b, v = flat.shape[0], effective.stiffness.shape[-1]
    stiffness, mechanisms = effective.stiffness.reshape(b, v, v), effective.mechanisms.reshape(b)
    condensed = model == "joint" and applies(cell)
    r = 1 if cell.d == 2 else 3
    found = [
        Members(*(np.full((b, len(block), *tail), np.nan) for tail in ((cell.d, v), (r, v), (cell.d,))))
        for block in cell.blocks
    ]
    good = np.flatnonzero(effective.status.reshape(b) == Status.OK)
    size = 3 * sum(len(block) for block in cell.blocks) - 2 if condensed else freedoms(flat).count
    step = max(8, CHUNK_ROWS // (size + v)) if size <= DENSE_LIMIT else 1
    for part in (good[i : i + step] for i in range(0, len(good), step)):
        piece = flat.at(part)
        given = with_joints(piece)[0] if condensed else piece
        compliance: Array = np.asarray(np.linalg.inv(stiffness[part]), float)
        motion = _motion(given, model, compliance, mechanisms[part])
        loads = [
            _end_loads(block, motion, compliance, 0 if condensed else 1) for block in strained_blocks(given, model)
        ]
        if condensed:
            loads = _wall_middles(piece, given, loads)
        for block, (force, moment), members in zip(cell.blocks, loads, found, strict=True):
            x = _ends(piece, block)
            members.force[part], members.moment[part] = force[:, :, 0], moment[:, :, 0]
            members.at[part] = x.mean(axis=2) if condensed else x[:, :, 1]
    return tuple(found)


def _flat(effective: Effective) -> UnitCell:
    """Return the cells as a flat batch (b,)."""
    shape = effective.cell.shape
    return effective.cell.at(tuple(np.indices(shape).reshape(len(shape), -1)) if shape else None)


def _motion(cell: UnitCell, model: str, compliance: Array, mechanisms: NDArray[np.int64]) -> Array:
    """Return the motion (n, f, v, b) of points for each unit macroscopic stress beyond the affine one."""
    free, (members,) = freedoms(cell), cell.shape
    count, v = free.count, compliance.shape[-1]
    u = np.zeros((members, count + 1, v))  # held freedoms carry -1: the spare last row
    if count > DENSE_LIMIT:
        for i in range(members):
            u[i, :-1] = _solved_sparse(cell.at(i), model, compliance[i])
    elif count:
        K, F, _ = energy_parts(cell, model)
        right = F @ compliance
        sure = mechanisms == 0
        u[sure, :-1] = -np.linalg.solve(K[sure], right[sure])
        for i in np.flatnonzero(~sure).tolist():
            diagonal = np.diagonal(K[i])
            if not (diagonal > 0.0).all():  # no energy: joints that overlap
                u[i, :-1] = np.nan
                continue
            scale = 1.0 / np.sqrt(diagonal)
            inverse = np.linalg.pinv(K[i] * scale[:, None] * scale, rcond=RANK_TOLERANCE, hermitian=True)
            u[i, :-1] = -scale[:, None] * (inverse @ (scale[:, None] * right[i]))
    return np.ascontiguousarray(np.moveaxis(u, 0, -1)[free.numbers])


def _solved_sparse(cell: UnitCell, model: str, compliance: Array) -> Array:
    import scipy.sparse as sp
    from scipy.sparse.linalg import splu

    K, F, _ = sparse(cell, model)
    scale = 1.0 / np.sqrt(K.diagonal())
    unit = sp.diags(scale) @ K @ sp.diags(scale) + SPARSE_SHIFT * sp.identity(len(scale))
    factor = splu(unit.tocsc(), permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True})
    return np.asarray(-scale[:, None] * factor.solve(scale[:, None] * (F @ compliance)))


def _end_loads(part: Strained, motion: Array, compliance: Array, first: int) -> tuple[Array, Array]:
    """Return force (b, m, k, d, v) and moment (b, m, k, r, v) that act on each element's nodes from `first` on."""
    rows, W, G = part.rows, part.weights, part.affine
    d = {3: 2, 6: 3}[rows.shape[2]]
    u = motion[part.block.nodes]  # (m, k, f, v, b)
    strain = np.einsum("skfmb,mkfvb->svmb", rows, u) + np.einsum("swmb,bwv->svmb", G, compliance)
    q = np.einsum("stmb,tvmb->svmb", W, strain)
    loads = np.einsum("skfmb,svmb->bmkfv", rows[:, first:], q)
    return loads[:, :, :, :d], loads[:, :, :, d:]


def _ends(cell: UnitCell, block: Block) -> Array:
    """Return the places of each element's nodes, ndarray of shape (b, m, k, d)."""
    moved = np.einsum("mkp,bpd->bmkd", block.shifts.astype(float), cell.lattice)
    return np.asarray(cell.points[:, block.nodes] + moved)


def _walls(cell: UnitCell) -> tuple[Index, Index]:
    """Return nodes (m, 2) and shifts (m, 2, p) of the walls of all blocks, in the order of `joints.with_joints`."""
    nodes, shifts = zip(*((block.nodes, block.shifts) for block in cell.blocks), strict=True)
    return np.concatenate(nodes), np.concatenate(shifts)


def _wall_middles(cell: UnitCell, joined: UnitCell, loads: list[tuple[Array, Array]]) -> list[tuple[Array, Array]]:
    """Return force (b, m, 1, d, v) and moment (b, m, 1, r, v) at the middles of each block's walls, from their starts.

    `joined` holds the joints of one number of walls in a block, in the order of their points, and `loads` what acts on
    their tips. A wall from a free end has no joint there, and carries nothing.
    """
    nodes, shifts = _walls(cell)
    arms = np.array([len(found) for found in arms_of(cell.n, nodes)])
    whole = [np.zeros((*cell.shape, len(nodes), 1, *load.shape[-2:])) for load in loads[0]]
    for block, tips in zip(joined.blocks, loads, strict=True):
        here = np.flatnonzero(arms == block.nodes.shape[1])
        starts = (nodes[block.nodes, 0] == here[:, None]) & (shifts[block.nodes, 0] == -block.shifts).all(axis=-1)
        joint, tip = np.nonzero(starts)
        for into, load in zip(whole, tips, strict=True):
            into[:, block.nodes[joint, tip], 0] = load[:, joint, tip]
    cuts = np.cumsum([len(block) for block in cell.blocks])[:-1]
    return list(zip(*(np.split(load, cuts, axis=1) for load in whole), strict=True))


# sections --------------------------------------------------------------------------------------------------------


def sections(effective: Effective) -> Sections:
    """Return the cross sections of all walls and struts that may be the most loaded ones, as maps of the stress.

    Raises
    ------
    InputError
        For elements without a cross section.

    Examples
    --------
    >>> import homog
    >>> found = sections(homog.homogenize(homog.build("square-grid", length=10.0, thickness=0.5), model="euler"))
    >>> found.peak(unit_stresses(2)).round(6)  # l/t along the walls, 3 (l/t)^2 in shear
    array([[  20.,   20., 1200.]])
    """
    loads = member_forces(effective)
    cell = effective.cell
    flat = _flat(effective)
    swallowed: list[Array | None] = [None] * len(cell.blocks)
    if effective.model in ("joint", "solid") and cell.kind == "planar" and applies(cell):
        sizes = [len(block) for block in cell.blocks]
        t = [
            np.broadcast_to(b.props["thickness"], (len(flat.points), m))
            for b, m in zip(flat.blocks, sizes, strict=True)
        ]
        cuts = wall_cuts(flat.points, flat.lattice, *_walls(flat), np.concatenate(t, axis=1))
        swallowed = [*np.split(cuts, np.cumsum(sizes)[:-1], axis=1)]
    parts = []
    for k, (block, members, lost) in enumerate(zip(flat.blocks, loads, swallowed, strict=True)):
        where, along = _places(flat, block, lost)
        parts.append(_block_sections(block, members, where, along, k))
    joined: Any = parts[0]  # one block needs no copy
    if len(parts) > 1:
        joined = (np.concatenate(values, axis=min(1, values[0].ndim - 1)) for values in zip(*parts, strict=True))
    return Sections(*joined)


def _places(cell: UnitCell, block: Block, swallowed: Array | None) -> tuple[Array, Array]:
    """Return where the sections of each element are (b, m, q, d), and the direction of its line there.

    Between condensed joints `swallowed` (b, m, 2) is what the joints at both ends take of each wall.
    """
    x = _ends(cell, block)
    shape = x.shape[:2]
    e = x[:, :, 1] - x[:, :, 0]
    length = np.linalg.norm(e, axis=-1)
    e = e / length[..., None]
    if swallowed is not None:
        half = np.maximum(length[..., None] / 2.0 - swallowed, 0.0) * np.array([-1.0, 1.0])
        return x.mean(axis=2)[:, :, None] + half[..., None] * e[:, :, None], e[:, :, None]
    if block.kind == "strut":
        return x, e[:, :, None]

    def prop(name: str) -> Array:
        return np.broadcast_to(block.props.get(name, np.zeros(1)), shape)

    n = np.stack([-e[..., 1], e[..., 0]], -1)
    for k, end in enumerate(("start", "end")):  # rigid arms, in the frame of the line between the nodes
        x[:, :, k] += prop(f"{end}_along")[..., None] * e + prop(f"{end}_across")[..., None] * n
    if "arc" not in block.props:
        chord = x[:, :, 1] - x[:, :, 0]
        return x, (chord / np.linalg.norm(chord, axis=-1)[..., None])[:, :, None]
    arc = np.where(np.abs(prop("arc")) < 1e-9, 1e-9, prop("arc"))
    chord = (x[:, :, 1] - x[:, :, 0])[:, :, None]
    length = np.linalg.norm(chord, axis=-1)
    e = chord / length[..., None]
    n = np.stack([-e[..., 1], e[..., 0]], -1)
    a = np.linspace(-0.5, 0.5, ARC_SECTIONS) * arc[..., None]
    half = arc[..., None] / 2.0
    radius = length / (2.0 * np.sin(half))
    height = 2.0 * radius * np.sin((half + a) / 2.0) * np.sin((half - a) / 2.0)  # R (cos a - cos(arc/2))
    where = x.mean(axis=2)[:, :, None] + (radius * np.sin(a))[..., None] * e + height[..., None] * n
    return where, np.cos(a)[..., None] * e - np.sin(a)[..., None] * n


def _block_sections(block: Block, members: Members, where: Array, along: Array, number: int) -> tuple[Array, ...]:
    """Return the fields of `Sections` for one block."""
    b, m, q, d = where.shape
    v = members.force.shape[-1]
    force, lever = members.force[:, :, None], (members.at[:, :, None] - where)[..., None]
    normal = np.einsum("bmqd,bmdv->bmqv", np.broadcast_to(along, where.shape), members.force)
    if d == 2:
        moment = lever[..., :1, :] * force[..., 1:, :] - lever[..., 1:, :] * force[..., :1, :]
        bending, twist = members.moment[:, :, None] + moment, np.broadcast_to(0.0, normal.shape)
    else:
        moment = members.moment[:, :, None] + np.cross(np.broadcast_to(lever, (b, m, q, d, v)), force, axis=-2)
        twist = np.einsum("bmqd,bmqdv->bmqv", np.broadcast_to(along, where.shape), moment)
        bending = moment - along[..., None] * twist[..., None, :]
    if block.kind == "wall":
        t = np.broadcast_to(block.props["thickness"], (b, m))
        area, modulus = t, t**2 / 6.0
    else:
        diameter = np.broadcast_to(block.props["diameter"], (b, m))
        area, modulus = np.pi * diameter**2 / 4.0, np.pi * diameter**3 / 32.0
    s = m * q
    return (
        normal.reshape(b, s, v), bending.reshape(b, s, -1, v), twist.reshape(b, s, v),
        np.repeat(area, q, axis=1), np.repeat(modulus, q, axis=1), where.reshape(b, s, d),
        np.full(s, number), np.repeat(np.arange(m), q),
    )  # fmt: skip


# inner corners, from the solid -----------------------------------------------------------------------------------


class CornerStress(NamedTuple):
    """The largest von Mises stress in a solid, anywhere, for each unit macroscopic stress (11, 22, 12).

    von_mises : ndarray of shape (3,), over the macroscopic stress
    where : ndarray of shape (3, 2), mm
    change : ndarray of shape (3,), relative change from a mesh COARSE times as coarse
    """

    von_mises: Array
    where: Array
    change: Array


def corner_stress(cell: UnitCell, *, fillet: float, size: float = 1.0) -> CornerStress:
    """Return the largest stress in the true section of one planar wall cell with filled inner corners.

    Parameters
    ----------
    cell : UnitCell
        A single planar cell of walls, as for `solid.homogenize_solid`.
    fillet : float
        Radius of the inner corners, mm. A sharp one has no largest stress: it grows without end as the mesh shrinks.
    size : float
        Factor on the element sizes; below 1 is finer.

    Raises
    ------
    InputError
        For sharp corners, and as `homogenize_solid` does.
    """
    E, nu = wall_material(cell)
    if not (0.0 < fillet < np.inf and 0.0 < size < np.inf):
        raise InputError(
            f"Corner stress with fillet {fillet:g} mm, size {size:g}: give both above 0; at a sharp corner stress has "
            "no limit, the radius decides"
        )
    found = []
    for factor in (COARSE * size, size):
        section = cell_section(cell, fillet=fillet, pieces=round(SMOOTH * FILLET_PIECES / factor))
        C, mesh, motion = homogenize_section(section, E, nu, size=factor)
        stress = nodal_stress(mesh, motion, E, nu) @ np.linalg.inv(C) @ unit_stresses(2)
        across = nu / (1.0 + nu) if cell.parent.deep else 0.0  # of plane strain: nu is nu_s / (1 - nu_s)
        found.append((von_mises(stress, across=across), mesh.points))
    (rough, _), (fine, points) = found
    most = fine.argmax(axis=0)
    peak = fine.max(axis=0)
    return CornerStress(peak, points[most], np.abs(rough.max(axis=0) / peak - 1.0))


def nodal_stress(mesh: Mesh, motion: Array, E: float, nu: float) -> Array:
    """Return the Voigt stress (n, 3, v) at every point of a mesh for motions (n, 2, v), in plane stress.

    In a six-node triangle strain is linear: three points give it at its corners, and what meets at a point is averaged.
    """
    rows = strain_rows(mesh.points, mesh.triangles)
    at = np.einsum("mqcni,mniv->mqcv", rows, motion[mesh.triangles])
    corner = 2.0 * at - at.sum(axis=1, keepdims=True) / 3.0
    strain = np.concatenate([corner, (corner + np.roll(corner, -1, axis=1)) / 2.0], axis=1)
    C = E / (1.0 - nu**2) * np.array([[1.0, nu, 0.0], [nu, 1.0, 0.0], [0.0, 0.0, (1.0 - nu) / 2.0]])
    home = mesh.owner[mesh.triangles]
    total = np.zeros((len(mesh.points), *strain.shape[2:]))
    np.add.at(total, home, C @ strain)
    count = np.bincount(home.ravel(), minlength=len(mesh.points))
    return np.asarray((total / np.maximum(count, 1)[:, None, None])[mesh.owner])


def von_mises(stress: Array, *, across: float = 0.0) -> Array:
    """Return the von Mises stress (n, v) of Voigt stresses (n, 3, v); `across` (s11 + s22) acts along axis 3."""
    a, b, c = stress[:, 0], stress[:, 1], stress[:, 2]
    z = across * (a + b)
    return np.sqrt(((a - b) ** 2 + (b - z) ** 2 + (z - a) ** 2) / 2.0 + 3.0 * c**2)
