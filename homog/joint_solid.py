"""One joint as a small solid: a star of walls, cut where they are plain again, and how much it gives.

Needs the extra `solid`; the joint model itself only reads the tables that were made with it. See `joints`.
"""

from __future__ import annotations

import hashlib
import os
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from homog.errors import MissingExtra
from homog.mesh import areas, assemble, element_stiffness, mesh_polygon, plane_stress, strain_rows
from homog.stars import carried, held_forces, star_flexibility

Array = NDArray[np.float64]

PLAIN = 1.2
"""Plain wall between an inner corner and the cut, in thicknesses: from 0.6 on the result changes by less than 1e-3."""
FINE = 0.5
"""Element size over the solid model's."""
SAME = 1e-9
"""Gaps (rad) and thickness ratios within this are equal."""
SOLVED_AT = 0.3
"""Poisson's ratio at which a star is solved; what it is at others follows from the stresses there."""


def cut_lengths(angles: Array, thickness: Array) -> Array:
    """Return how far from the point each wall of a star is cut, ndarray (n,), mm.

    PLAIN t beyond what the inner corners on both sides swallow of the wall (their smooth maximum).
    """
    n = len(angles)
    gaps = np.diff(angles, append=angles[0] + 2.0 * np.pi)
    swallowed = np.zeros((2, n))
    for side, other, beta in ((0, np.roll(np.arange(n), -1), gaps), (1, np.roll(np.arange(n), 1), np.roll(gaps, 1))):
        with np.errstate(divide="ignore", invalid="ignore"):
            corner = (thickness[other] + thickness * np.cos(beta)) / (2.0 * np.sin(beta))
        swallowed[side] = np.where((beta < np.pi - 1e-9) & (corner > 0.0), corner, 0.0)
    return np.asarray(PLAIN * thickness + (swallowed**6).sum(axis=0) ** (1.0 / 6.0))


def solid_flexibility(
    angles: Array, thickness: Array, *, fillet: float = 0.0, size: float = FINE
) -> tuple[Array, Array]:
    """Return A and B (2, 3n - 3, 3n - 3) of a solid star's flexibility A + nu B, and its cut lengths (n,); modulus 1.

    Tip 0 is held. Each cut carries the stress of a plain wall, uniform and linear along it and parabolic across, so
    that the star's energy beyond the joint is that of a Timoshenko wall with kappa = 5/6, wherever the cut is. Work
    makes the motion. In the plane the stresses s do not depend on nu (Michell 1899), so one solution gives both:
    B = integral of s : dS/dnu : s over the star, S the compliance of the material.
    """
    try:
        import shapely
    except ImportError as fault:
        raise MissingExtra("A joint that no table has", "solid") from fault
    from scipy.sparse.linalg import splu

    n, cuts = len(angles), cut_lengths(angles, thickness)
    e = np.stack([np.cos(angles), np.sin(angles)], -1)
    left = np.stack([-e[:, 1], e[:, 0]], -1)
    half = thickness / 2.0
    ends = [np.stack([c * a - h * b, c * a + h * b]) for c, a, b, h in zip(cuts, e, left, half, strict=True)]
    arms = [shapely.Polygon([*end, h * b, -h * b]) for end, b, h in zip(ends, left, half, strict=True)]
    star = shapely.union_all([*arms, shapely.Point(0.0, 0.0).buffer(half.max() * (1.0 - 1e-6), quad_segs=24)])
    if fillet > 0.0:
        beyond = [shapely.Polygon([*x, *(x[::-1] + 4.0 * fillet * a)]) for x, a in zip(ends, e, strict=True)]
        whole = shapely.union_all([star, *beyond])
        whole = whole.buffer(fillet, join_style="mitre", mitre_limit=1e6).buffer(-fillet, quad_segs=8)
        star = shapely.difference(whole, shapely.union_all(beyond))
    mesh = mesh_polygon(shapely.simplify(star, 1e-6 * thickness.min()), size=size, cuts=ends)
    x, count = mesh.points, len(mesh.points)
    loads = np.zeros((n, 3, count, 2))
    sides = np.concatenate([mesh.triangles[:, [0, 1, 3]], mesh.triangles[:, [1, 2, 4]], mesh.triangles[:, [2, 0, 5]]])
    point, weight = np.polynomial.legendre.leggauss(3)
    shapes = np.stack([point * (point - 1.0) / 2.0, point * (point + 1.0) / 2.0, 1.0 - point**2], -1)
    for i, (a, b, c, t) in enumerate(zip(e, left, cuts, thickness, strict=True)):
        on = (np.abs(x @ a - c) < 1e-9 * t) & (np.abs(x @ b) < (0.5 + 1e-9) * t)
        cut = sides[on[sides].all(axis=1)]
        y = x[cut] @ b / t
        at = y @ shapes.T
        share = np.abs(y[:, 1] - y[:, 0])[:, None] * weight / 2.0
        # force along, force across, moment: tractions of unit resultant
        for k, (traction, way) in enumerate(((np.ones_like(at), a), (1.5 - 6.0 * at**2, b), (-12.0 * at / t, a))):
            force = np.einsum("sq,sq,qj->sj", share, traction, shapes)
            np.add.at(loads[i, k], cut, force[..., None] * way)
    P = loads.reshape(3 * n, -1)
    P = P[3:] + np.einsum("ia,if->af", held_forces(angles, cuts), P[:3])
    K = assemble(element_stiffness(x, mesh.triangles, 1.0, SOLVED_AT), mesh.triangles, count)
    far = int(np.argmax(np.hypot(*(x - x[0]).T)))
    turned = int(np.argmin(np.abs(x[far] - x[0])))  # hold point 0, and the far one against turning about it
    free = np.setdiff1d(np.arange(2 * count), [0, 1, 2 * far + turned])
    factor = splu(K[free][:, free], permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True})
    u = np.zeros((2 * count, len(P)))
    u[free] = factor.solve(np.ascontiguousarray(P[:, free].T))
    moved = u.reshape(count, 2, -1)[mesh.triangles].reshape(len(mesh.triangles), 12, -1)
    strain = strain_rows(x, mesh.triangles).reshape(len(moved), 9, 12) @ moved
    stress = plane_stress(1.0, SOLVED_AT) @ strain.reshape(-1, 3, len(P))
    share = np.repeat(areas(x, mesh.triangles) / 3.0, 3)[:, None]
    s11, s22, s12 = np.moveaxis(stress, 1, 0)
    cross = (share * s11).T @ s22
    B = 2.0 * (share * s12).T @ s12 - cross - cross.T
    F = P @ u
    return np.stack([(F + F.T) / 2.0 - SOLVED_AT * B, B]), cuts


def correction(gaps: Array, thickness: Array, *, fillet: float = 0.0, size: float = FINE) -> Array:
    """Return A and B (2, 3n - 3, 3n - 3) of Delta = A + nu B: the solid star's flexibility less that of beams; E = 1.

    `gaps` (n,) rad are the angles from each wall to the next, counter-clockwise; freedoms are along, across (to the
    left) and rotation of walls 1 to n - 1 in their own frames, wall 0 held; forces act at the point.
    """
    angles = np.concatenate([[0.0], np.cumsum(gaps[:-1])])
    solid, cuts = solid_flexibility(angles, thickness, fillet=fillet, size=size)
    zero, one = (star_flexibility(angles, cuts, thickness, np.array(1.0), np.array(nu)) for nu in (0.0, 1.0))
    return _symmetric(
        np.stack([carried(solid[0] - zero, -cuts), carried(solid[1] - (one - zero), -cuts)]), gaps, thickness
    )


def _symmetric(delta: Array, gaps: Array, thickness: Array) -> Array:
    """Return the mean of a correction over the joint's own symmetries: a mesh has none of them.

    Seen from another wall or in a mirror the same joint takes the same forces in another order; forces on all walls
    (`held_forces` about the point) turn into each other by a permutation, and by a sign across and in rotation.
    """
    n = len(gaps)
    angles = np.concatenate([[0.0], np.cumsum(gaps[:-1])])
    every = np.concatenate([held_forces(angles, np.zeros(n)), np.eye(3 * n - 3)]).reshape(n, 3, -1)
    seen = []
    for mirror in (1, -1):
        for start in range(n):
            order = (start + np.arange(n) * mirror) % n
            g = gaps[order] if mirror > 0 else gaps[(order - 1) % n]
            if np.allclose(g, gaps, rtol=0.0, atol=SAME) and np.allclose(thickness[order], thickness, rtol=SAME):
                R = (every[order] * np.array([1.0, mirror, mirror])[:, None])[1:].reshape(3 * n - 3, -1)
                seen.append(R.T @ delta @ R)
    return np.asarray(np.mean(seen, axis=0))


def cached_correction(gaps: Array, thickness: Array) -> Array:
    """Return `correction` of unit thickness[0], kept on disk from one run to the next."""
    key = np.round(np.concatenate([gaps, thickness]), 9)
    folder = Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache") / "homog-cells"
    path = folder / f"joint-{hashlib.sha256(key.tobytes()).hexdigest()[:24]}.npy"
    try:
        return np.asarray(np.load(path))
    except (OSError, ValueError):
        found = correction(gaps, thickness)
    try:
        folder.mkdir(parents=True, exist_ok=True)
        temporary = path.with_suffix(f".{os.getpid()}.npy")
        np.save(temporary, found)
        os.replace(temporary, path)
    except OSError:
        pass  # a cache that cannot be written costs time, not a result
    return found
