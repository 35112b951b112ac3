"""Round struts as a solid: a mesh of their union, its stiffness, and what a star of them gives over beams.

Ten-node tetrahedra with curved sides, sized by the distance from the creases where struts meet, since the stress is
singular there. The corner of a mirror-symmetric body stands for the whole: every load is a sum of parts that each
mirror keeps (+1) or reverses (-1), and each part is solved on the corner with its own conditions on the mirrors.

Needs the extra `solid`; the joint model itself only reads the tables that were made with it. See `spatial_joints`.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Sequence
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from homog.errors import GeometryError, MissingExtra
from homog.spatial_stars import balanced, carrying, isometries, moved, strut_scales, strut_shares

Array = NDArray[np.float64]
Index = NDArray[np.int64]

ACROSS = 6.0
"""Elements across a strut, away from its joints."""
CREASE = 0.15
"""Size at a crease over that in the plain strut."""
GROWTH = 0.3
"""Growth of the size with the distance from a crease."""
PLAIN = 1.0
"""Plain strut between the creases and the cut, in diameters."""

EDGES = np.array([(0, 1), (1, 2), (0, 2), (0, 3), (2, 3), (1, 3)])
"""Corners of a tetrahedron between which its nodes 4 to 9 lie."""
FACES = np.array([(0, 1, 2, 4, 5, 6), (0, 1, 3, 4, 9, 7), (1, 2, 3, 5, 8, 9), (0, 2, 3, 6, 8, 7)])
"""Nodes of a tetrahedron's faces: three corners, then the nodes between 0-1, 1-2, 0-2 of them."""


class Solid(NamedTuple):
    """A mesh: points (n, 3), ten-node tetrahedra (m, 10)."""

    points: Array
    tets: Index


# mesh ------------------------------------------------------------------------------------------------------------


def mesh_struts(
    starts: Array, ends: Array, diameter: float, boxes: Sequence[tuple[Array, Array]], *, balls: Array, size: float
) -> Solid:
    """Return the mesh of the union of round struts and of balls of their diameter, as far as it lies in all boxes.

    Parameters
    ----------
    starts, ends : ndarray of shape (m, 3)
    diameter : float
    boxes : sequence of (corners, axes), ndarrays of shape (2, 3) and (3, 3)
        Lowest and highest corner of each box in its own axes, which are the rows of the rotation `axes`.
    balls : ndarray of shape (q, 3), middles of the balls
    size : float
        Element size over the standard one.

    Raises
    ------
    MissingExtra, GeometryError
    """
    try:
        import gmsh
    except (ImportError, OSError) as fault:  # OSError: a library of the system that it needs is not there
        raise MissingExtra("A solid of struts", "solid") from fault
    if not gmsh.isInitialized():
        gmsh.initialize(interruptible=False)
    plain = diameter / ACROSS * size
    gmsh.model.add("struts")
    try:
        for name, value in (("General.Terminal", 0), ("General.NumThreads", 1), ("Mesh.MeshSizeExtendFromBoundary", 0),
                            ("Mesh.MeshSizeFromPoints", 0), ("Mesh.MeshSizeFromCurvature", 0)):  # fmt: skip
            gmsh.option.setNumber(name, value)
        occ = gmsh.model.occ
        bodies = [(3, occ.addCylinder(*a, *(b - a), diameter / 2.0)) for a, b in zip(starts, ends, strict=True)]
        bodies += [(3, occ.addSphere(*a, diameter / 2.0)) for a in balls]
        union = occ.fuse(bodies[:1], bodies[1:])[0] if len(bodies) > 1 else bodies
        for corners, axes in boxes:
            box = [(3, occ.addBox(*corners[0], *(corners[1] - corners[0])))]
            occ.affineTransform(box, np.pad(axes.T, ((0, 0), (0, 1))).ravel().tolist())
            union = occ.intersect(union, box)[0]
        occ.synchronize()
        round_ = {tag for _, tag in gmsh.model.getEntities(2) if gmsh.model.getType(2, tag) != "Plane"}
        creases = [tag for _, tag in gmsh.model.getEntities(1)
                   if sum(face in round_ for face in gmsh.model.getAdjacencies(1, tag)[0]) == 2]  # fmt: skip
        field = gmsh.model.mesh.field
        near, grown, most = field.add("Distance"), field.add("MathEval"), field.add("MathEval")
        field.setNumbers(near, "CurvesList", creases)
        field.setNumber(near, "Sampling", 200)
        field.setString(grown, "F", f"{CREASE * plain} + {GROWTH} * F{near}")
        field.setString(most, "F", f"{plain}")
        least = field.add("Min")
        field.setNumbers(least, "FieldsList", [grown, most] if creases else [most])
        field.setAsBackgroundMesh(least)
        gmsh.model.mesh.generate(3)
        gmsh.model.mesh.setOrder(2)
        names, xyz, _ = gmsh.model.mesh.getNodes()
        tags = gmsh.model.mesh.getElementsByType(11)[1]
    except Exception as fault:  # the mesher knows no finer kind
        raise GeometryError(f"The struts could not be meshed ({fault}); change the diameter a little") from fault
    finally:
        gmsh.model.remove()
    place = np.full(int(names.max()) + 1, -1)
    place[names.astype(np.int64)] = np.arange(len(names))
    tets = place[tags.astype(np.int64)].reshape(-1, 10)
    used, which = np.unique(tets, return_inverse=True)
    return Solid(np.asarray(xyz).reshape(-1, 3)[used], which.reshape(-1, 10))


# stiffness -------------------------------------------------------------------------------------------------------


def _tetrahedron_rule() -> tuple[Array, Array]:
    """Return barycentric points (14, 4) and weights (14,) that are exact to degree 5 (Walkington 2000)."""
    a, b, c = 0.31088591926330060980, 0.092735250310891226402, 0.045503704125649649492
    points = []
    for value in (a, b):
        points += [np.where(np.arange(4) == i, 1.0 - 3.0 * value, value) for i in range(4)]
    for i, j in itertools.combinations(range(4), 2):
        points.append(np.where((np.arange(4) == i) | (np.arange(4) == j), c, 0.5 - c))
    weights = [0.11268792571801585080] * 4 + [0.073493043116361949544] * 4 + [0.042546020777081466438] * 6
    return np.array(points), np.array(weights)


def _slopes(L: Array) -> Array:
    """Return the derivatives (q, 10, 3) of the shape functions by L_1, L_2, L_3 (L_0 = 1 - their sum)."""
    by = np.zeros((len(L), 10, 4))
    for i in range(4):
        by[:, i, i] = 4.0 * L[:, i] - 1.0
    for k, (i, j) in enumerate(EDGES):
        by[:, 4 + k, i], by[:, 4 + k, j] = 4.0 * L[:, j], 4.0 * L[:, i]
    return np.asarray(by[:, :, 1:] - by[:, :, :1])


def stiffness_parts(solid: Solid) -> tuple[Any, Any, float]:
    """Return the sparse stiffness (3n, 3n) of unit Lame's lambda and of unit shear modulus, and the volume.

    Freedoms x0 y0 z0 x1 ...; K = lambda K_1 + G K_2.

    Raises
    ------
    GeometryError
        Where a curved element is turned inside out.
    """
    from scipy.sparse import coo_array

    L, weights = _tetrahedron_rule()
    slopes = _slopes(L)
    n, volume = len(solid.points), 0.0
    first, second = (coo_array((3 * n, 3 * n)).tocsc() for _ in range(2))
    for part in np.array_split(solid.tets, max(1, len(solid.tets) // 20000)):
        J = np.einsum("qad,mai->mqdi", slopes, solid.points[part])
        det = np.linalg.det(J)
        if not (det > 0.0).all():
            raise GeometryError("An element of the solid is turned inside out; change size or diameter a little")
        share = det * weights / 6.0
        volume += float(share.sum())
        g = np.einsum("mqid,qad->mqai", np.linalg.inv(J), slopes).reshape(len(part), len(L), 30)
        H = (g * share[..., None]).swapaxes(1, 2) @ g
        H = H.reshape(-1, 10, 3, 10, 3)
        turned = H.transpose(0, 1, 4, 3, 2)
        trace = np.einsum("maibi->mab", H)[:, :, None, :, None] * np.eye(3)[:, None, :]
        freedoms = (3 * part[..., None] + np.arange(3)).reshape(len(part), 30)
        rows = np.repeat(freedoms, 30, axis=1).ravel()
        columns = np.tile(freedoms, 30).ravel()
        one, two = (coo_array((K.ravel(), (rows, columns)), shape=(3 * n, 3 * n)).tocsc() for K in (H, turned + trace))
        first, second = first + one, second + two
    return first, second, volume


def lame(poisson: float) -> tuple[float, float]:
    """Return lambda and G of unit Young's modulus."""
    return poisson / ((1.0 + poisson) * (1.0 - 2.0 * poisson)), 0.5 / (1.0 + poisson)


def factor(K: Any) -> Callable[[Array], Array]:
    """Return the solver of a symmetric positive definite sparse matrix: right sides (n, q) to solutions (n, q).

    Raises
    ------
    MissingExtra
    """
    try:
        from cvxopt import cholmod, matrix, spmatrix
    except ImportError as fault:
        raise MissingExtra("A solid of struts", "solid") from fault
    from scipy.sparse import tril

    lower = tril(K).tocoo()
    A = spmatrix(matrix(lower.data), matrix(lower.row.astype(np.int64)), matrix(lower.col.astype(np.int64)), K.shape)
    found = cholmod.symbolic(A)
    cholmod.numeric(A, found)

    def solve(right: Array) -> Array:
        x = matrix(np.asfortranarray(right, float))
        cholmod.solve(found, x)
        return np.array(x).reshape(right.shape)

    return solve


# a star ----------------------------------------------------------------------------------------------------------


def cut_length(directions: Array) -> float:
    """Return how far from the point the arms (n, 3) of a star are cut, in diameters: PLAIN beyond the last crease."""
    cosine = np.clip((directions @ directions.T)[~np.eye(len(directions), dtype=bool)].max(), -1.0, 1.0)
    return float(PLAIN + 0.5 * np.sqrt((1.0 + cosine) / max(1.0 - cosine, 1e-12)))


def cut_tractions(y: Array, e: Array, poisson: float) -> Array:
    """Return the tractions (..., 3, 6) at places y (..., 3) of a cut of unit diameter of unit forces and moments.

    `y` counts from the middle, `e` is the way out. Uniform for a force along, linear for moments, and for a force
    across that of a bent round bar (Love 1927, art. 232): a plain strut has no other stress, wherever it is cut.
    """
    area, second, r2, nu = np.pi / 4.0, np.pi / 64.0, 0.25, poisson
    out = np.zeros((*y.shape, 6))
    for axis in range(3):
        unit = np.eye(3)[axis]
        out[..., axis] = e[axis] * e / area
        a = unit - e[axis] * e  # the force across, not of unit size
        size = np.linalg.norm(a)
        if size > 1e-12:
            a = a / size
            b = np.cross(e, a)
            p, q = (y @ a)[..., None], (y @ b)[..., None]
            way = (3.0 + 2.0 * nu) / (8.0 * (1.0 + nu)) * (r2 - p**2 - (1.0 - 2.0 * nu) / (3.0 + 2.0 * nu) * q**2) * a
            way = way - (1.0 + 2.0 * nu) / (4.0 * (1.0 + nu)) * p * q * b
            out[..., axis] += size / second * way
            out[..., 3 + axis] = (np.cross(y, e) @ a)[..., None] * size / second * e
        out[..., 3 + axis] += e[axis] * np.cross(e, y) / (2.0 * second)
    return out


def _faces(solid: Solid, on: Array) -> Index:
    """Return the sides (f, 6) of tetrahedra of which all nodes are marked."""
    sides = solid.tets[:, FACES].reshape(-1, 6)
    return np.asarray(sides[on[sides].all(axis=1)])


def _triangle_rule() -> tuple[Array, Array]:
    """Return barycentric points (7, 3) and weights (7,) that are exact to degree 5 (Radon 1948)."""
    root = np.sqrt(15.0)
    points, weights = [np.full(3, 1.0 / 3.0)], [9.0 / 40.0]
    for sign in (-1.0, 1.0):
        near = (6.0 + sign * root) / 21.0
        points += [np.where(np.arange(3) == i, 1.0 - 2.0 * near, near) for i in range(3)]
        weights += [(155.0 + sign * root) / 1200.0] * 3
    return np.array(points), np.array(weights)


def _cut_loads(solid: Solid, e: Array, cut: float, poisson: float) -> Array:
    """Return the nodal loads (3n, 6) of unit forces and moments on the arm along e, as far as the mesh has its cut."""
    x = solid.points
    out = x @ e
    on = (np.abs(out - cut) < 1e-7) & (np.linalg.norm(x - out[:, None] * e, axis=1) < 0.5 + 1e-6)
    sides = _faces(solid, on)
    L, weights = _triangle_rule()
    pairs = ((0, 1), (1, 2), (0, 2))
    shapes = np.concatenate([L * (2.0 * L - 1.0), np.stack([4.0 * L[:, i] * L[:, j] for i, j in pairs], -1)], axis=1)
    by = np.zeros((len(L), 6, 3))
    for i in range(3):
        by[:, i, i] = 4.0 * L[:, i] - 1.0
    for k, (i, j) in enumerate(pairs):
        by[:, 3 + k, i], by[:, 3 + k, j] = 4.0 * L[:, j], 4.0 * L[:, i]
    slopes = by[:, :, 1:] - by[:, :, :1]
    nodes = x[sides]
    spans = np.einsum("qad,fai->fqdi", slopes, nodes)
    share = np.linalg.norm(np.cross(spans[:, :, 0], spans[:, :, 1]), axis=-1) * weights / 2.0
    at = np.einsum("qa,fai->fqi", shapes, nodes)
    traction = cut_tractions(at - cut * e, e, poisson)
    force = np.einsum("fq,qa,fqik->faik", share, shapes, traction)
    loads = np.zeros((len(x), 3, 6))
    np.add.at(loads, sides, force)
    return loads.reshape(-1, 6)


def _pins(solid: Solid, free: Array, signs: Array, mirrors: Index) -> Index:
    """Return the freedoms that hold a corner against the rigid motions that its mirrors' signs (k,) leave it."""
    from scipy.linalg import qr

    x = solid.points
    rigid = []
    for axis in range(3):
        unit = np.eye(3)[axis]
        moving = np.where(mirrors == axis, -1.0, 1.0)  # what each mirror makes of a translation along axis
        if (moving == signs).all():
            rigid.append(np.broadcast_to(unit, x.shape).ravel())
        if (-moving == signs).all():
            rigid.append(np.cross(unit, x).ravel())
    if not rigid:
        return np.empty(0, np.int64)
    far = np.unique([np.argmax(x @ way) for way in itertools.product((-1.0, 0.3, 1.0), repeat=3)])
    candidates = (3 * far[:, None] + np.arange(3)).ravel()
    candidates = candidates[free[candidates]]
    order = qr(np.array(rigid)[:, candidates], mode="r", pivoting=True)[1]
    return np.asarray(candidates[order[: len(rigid)]])


def corrections(directions: Array, poisson: Sequence[float], *, size: float = 1.0, plain: float = 0.0) -> Array:
    """Return Delta (q, 6n, 6n) for each Poisson's ratio: what a solid star is more flexible than beams to a point.

    For unit diameter and modulus, loads at the point, of which it takes the part that adds up to nothing (`balanced`);
    with the symmetry of the directions (n, 3), whose first two must not lie on one line.

    Parameters
    ----------
    size : float
        Element size over the standard one.
    plain : float
        Length of strut to be added before the cut, in diameters.
    """
    n, cut = len(directions), cut_length(directions) + plain
    group = list(isometries(directions, directions, mirrors=True))
    whole = [moved(R, order) for R, order in group]
    planes = [np.eye(3) - 2.0 * np.outer(unit, unit) for unit in np.eye(3)]
    mirrors = np.array([k for k in range(3) if any(np.abs(R - planes[k]).max() < 1e-9 for R, _ in group)], np.int64)
    within = np.flatnonzero((directions[:, mirrors] > -1e-9).all(axis=1))
    arms = directions[within]
    far = cut + 1.0
    box = np.array([np.where(np.isin(np.arange(3), mirrors), 0.0, -far), np.full(3, far)])
    through = np.abs(directions[:, None] + directions).max(axis=-1).min(axis=1)[within] < 1e-9
    solid = mesh_struts(
        np.where(through, -0.8, 0.0)[:, None] * arms, cut * arms, 1.0, [(box, np.eye(3))],
        balls=np.zeros((int(not through.all()), 3)), size=size,
    )  # fmt: skip
    first, second, _ = stiffness_parts(solid)
    where = (6 * within[:, None] + np.arange(6)).ravel()
    to_cut = carrying(directions, np.full(n, -cut))
    project = to_cut @ balanced(n)
    results = []
    for nu in poisson:
        lam, G = lame(nu)
        K = lam * first + G * second
        P = np.concatenate([_cut_loads(solid, e, cut, nu) for e in arms], axis=1)
        F = np.zeros((6 * n, 6 * n))
        for signs, times in _sectors(group, mirrors):
            free = np.ones(3 * len(solid.points), bool)
            for axis, sign in zip(mirrors, signs, strict=True):
                on = np.flatnonzero(np.abs(solid.points[:, axis]) < 1e-9)
                for k in range(3):
                    free[3 * on + k] &= (k != axis) if sign > 0.0 else (k == axis)
            free[_pins(solid, free, signs, mirrors)] = False
            motion = factor(K[free][:, free])(P[free])
            sign_part = np.zeros((6 * n, 6 * n))
            for flips in itertools.product((0, 1), repeat=len(mirrors)):
                R = np.diag([-1.0 if axis in mirrors[np.array(flips, bool)] else 1.0 for axis in range(3)])
                g = next(i for i, (other, _) in enumerate(group) if np.abs(other - R).max() < 1e-9)
                sign_part += np.prod(signs ** np.array(flips)) * whole[g]
            part = sign_part[where] / 2.0 ** len(mirrors)
            F += times * 2.0 ** len(mirrors) * part.T @ (P[free].T @ motion) @ part
        scales = strut_scales(np.array(cut), np.array(1.0), np.array(1.0), np.array(nu))
        for i, e in enumerate(directions):
            own = slice(6 * i, 6 * i + 6)
            F[own, own] -= np.einsum("k,kij->ij", scales, strut_shares(e))
        F = project.T @ F @ project
        results.append(np.mean([g @ F @ g.T for g in whole], axis=0))
    return np.array([(F + F.T) / 2.0 for F in results])


def _sectors(group: list[tuple[Array, Index]], mirrors: Index) -> list[tuple[Array, int]]:
    """Return the signs (k,) under the mirrors, one of those that the group exchanges, and how many it stands for."""
    turns = []
    for R, _ in group:
        way = np.abs(R[np.ix_(mirrors, mirrors)])
        if len(mirrors) and np.abs(way.max(axis=0) - 1.0).max() < 1e-9:
            turns.append(way.argmax(axis=0))
    found: dict[tuple[float, ...], int] = {}
    for signs in itertools.product((1.0, -1.0), repeat=len(mirrors)):
        key = max([tuple(np.array(signs)[turn].tolist()) for turn in turns], default=signs)
        found[key] = found.get(key, 0) + 1
    return [(np.array(signs), times) for signs, times in found.items()]
