"""The `solid` model: a planar cell as the two-dimensional continuum that its true section is.

The section is the set of points within t/2 of a wall's centre line, a rigid node's disc with it: outer corners round,
inner ones sharp unless filled to a radius. One period is cut out of it, away from the corners, and meshed with matching
seams. The nodes move by E x + a periodic part, which relaxes to the least energy:

    C = (A' K A - F' K^-1 F) / area,   F = K A,   A the affine motion of the nodes by each macroscopic strain

A second, coarser mesh tells how far the result can be trusted. Bars, hinges and end springs have no section of their
own, and a cell has one parent.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from homog.cell import Block, Status, UnitCell
from homog.errors import GeometryError, InputError, MissingExtra
from homog.mesh import CORNER_DEG, Mesh, Seam, assemble, element_stiffness, mesh_polygon
from homog.tensors import basis, stiffness_to_voigt

Array = NDArray[np.float64]

COARSE = 1.5
"""Element sizes of the second mesh over those of the first. Over the planar families at t/l 0.1 to 0.3 the moduli's
change between the two was 1.4 to 5 times the error left in the finer one."""
CONVERGED = 0.005
"""Largest relative change of a modulus between the two meshes that passes for converged."""
CORNER_STEP_DEG = 7.5
"""Longest side of the polygon that stands for an outer corner's arc; its area is the arc's. The round end of a thick
wall between thin ones counts: with 22.5 degrees a hexagon with doubled walls came out up to 1.3 % off."""
ARC_STEP_DEG = 5.0
"""The same for a curved wall, all across its thickness. With 5 degrees a ring is right within 0.1 %."""
FILLET_PIECES = 12
"""Straight pieces for a quarter turn of a fillet; the solid that they add is 1 % of the fillet's."""
CUT_AT = (0.47, 0.41)
"""Where in the widest gap between corners the cut lines lie: off its middle, or a symmetric cell might have the corner
of the period on the very face of a wall."""
TIDY = 1e-6
"""Corners that stick out by less than this share of the thinnest wall are debris of the union's round-off."""
NO_VOID = 1e-9
"""A section whose voids are a smaller share of the cell has closed up."""


@dataclass(frozen=True, eq=False)
class Section:
    """One period of a plane section: the polygon inside the parallelogram of `lattice` (2, 2) at `origin` (2,), mm."""

    polygon: Any
    origin: Array
    lattice: Array

    @property
    def area(self) -> float:
        """Area of the period, mm2."""
        return abs(float(np.linalg.det(self.lattice)))

    @property
    def seams(self) -> tuple[Seam, Seam]:
        """The two pairs of opposite sides of the parallelogram."""
        a, b = self.lattice
        return Seam(self.origin, self.origin + b, a), Seam(self.origin, self.origin + a, b)


@dataclass(frozen=True, eq=False)
class SolidResult:
    """What the solid model finds for one cell.

    Parameters
    ----------
    stiffness : ndarray of shape (3, 3)
        Mandel, of the finer mesh, MPa.
    relative_density : float
        Area of the section over that of the cell.
    error : mapping of str to float
        Change from the coarser mesh: relative for `E1`, `E2`, `G12`, absolute for `nu12`, `nu21`.
    converged : bool
        No modulus changes by more than CONVERGED.
    section : Section
        The period that was meshed.
    mesh : Mesh
        The finer mesh: points, triangles, owner.
    motion : ndarray of shape (n, 2, 3)
        Displacement of each point for each unit Mandel strain of the cell, mm.
    """

    stiffness: Array
    relative_density: float
    error: Mapping[str, float]
    converged: bool
    section: Section
    mesh: Mesh
    motion: Array


def homogenize_solid(cell: UnitCell, *, fillet: float = 0.0, size: float = 1.0) -> SolidResult:
    """Return the effective stiffness of one planar wall cell from a continuum model of its true section.

    Parameters
    ----------
    cell : UnitCell
        A single planar cell of walls: straight, curved, or on the arms of rigid nodes, which become solid discs.
    fillet : float
        Radius of the inner corners, mm; 0 for sharp ones.
    size : float
        Factor on the element sizes of both meshes; below 1 is finer.

    Raises
    ------
    MissingExtra
        Without the extra `solid`.
    InputError
        For a batch, a cell that is not planar, elements without a section, walls of more than one material.
    GeometryError
        Where the section falls apart, closes up, or cannot be meshed.

    Examples
    --------
    >>> import homog
    >>> result = homogenize_solid(homog.build("square-grid", length=10.0, thickness=1.0))
    >>> round(result.relative_density, 6)  # 1 - 0.9^2
    0.19
    """
    E, nu = wall_material(cell)
    if not (fillet >= 0.0 and np.isfinite(fillet) and 0.0 < size < np.inf):
        raise InputError(f"Solid model with fillet {fillet:g} mm, size {size:g}: give fillet >= 0 and size > 0")
    section = cell_section(cell, fillet=fillet)
    coarse, _, _ = homogenize_section(section, E, nu, size=COARSE * size)
    C, mesh, motion = homogenize_section(section, E, nu, size=size)
    fine, rough = _constants(C), _constants(coarse)
    error = {k: abs(rough[k] - v) / (1.0 if k.startswith("nu") else v) for k, v in fine.items()}
    converged = all(error[k] < CONVERGED for k in ("E1", "E2", "G12"))
    density = float(section.polygon.area) / section.area
    return SolidResult(C, density, MappingProxyType(error), converged, section, mesh, motion)


def homogenize_section(section: Section, E: float, nu: float, *, size: float = 1.0) -> tuple[Array, Mesh, Array]:
    """Return the Mandel stiffness (3, 3), the mesh and the motion (n, 2, 3) of any periodic section in plane stress.

    For plane strain give E / (1 - nu^2) and nu / (1 - nu). Raises GeometryError where the section falls apart.
    """
    from scipy.sparse.linalg import splu

    mesh = mesh_polygon(section.polygon, size=size, seams=section.seams)
    _hangs_together(mesh, section.lattice)
    owners, home = np.unique(mesh.owner, return_inverse=True)
    nodes, count = home[mesh.triangles], len(owners)
    affine = np.einsum("vij,nj->niv", basis(2), mesh.points - mesh.points.mean(axis=0))
    moved = affine[mesh.triangles].reshape(-1, 12, 3)
    Ke = element_stiffness(mesh.points, mesh.triangles, E, nu)
    force = Ke @ moved
    D = np.einsum("mfv,mfw->vw", moved, force)
    F = np.zeros((count, 2, 3))
    np.add.at(F, nodes, force.reshape(-1, 6, 2, 3))
    right = F.reshape(-1, 3)[2:]  # the first node stays: translations cost nothing
    K = assemble(Ke, nodes, count)[2:, 2:]
    factor = splu(K, permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True})
    relaxed = factor.solve(right)
    C = (D - right.T @ relaxed) / section.area
    motion = affine - np.concatenate([np.zeros((2, 3)), relaxed]).reshape(-1, 2, 3)[home]
    return (C + C.T) / 2.0, mesh, motion


def _hangs_together(mesh: Mesh, lattice: Array) -> None:
    """Raise GeometryError unless the section with its images is one body that reaches on in both directions.

    Pieces are linked across the seams by whole periods. Of the links' incidence I and periods S, rank(I) says how many
    bodies there are, and rank(I, S) - rank(I) in how many directions closed paths lead from one period to others.
    """
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    ends = np.stack([mesh.triangles, np.roll(mesh.triangles, -1, axis=1)]).reshape(2, -1)
    n = len(mesh.points)
    graph = coo_array((np.ones(ends.shape[1]), (ends[0], ends[1])), shape=(n, n))
    count, piece = connected_components(graph, directed=False)
    image = np.flatnonzero(mesh.owner != np.arange(n))
    home = mesh.owner[image]
    period = np.round((mesh.points[image] - mesh.points[home]) @ np.linalg.inv(lattice))
    incidence = np.eye(count)[piece[image]] - np.eye(count)[piece[home]]
    links = np.unique(np.concatenate([incidence, period], axis=1), axis=0)
    rank = int(np.linalg.matrix_rank(links[:, :count])) if len(links) else 0
    reach = (int(np.linalg.matrix_rank(links)) if len(links) else 0) - rank
    if count - rank > 1:
        raise GeometryError(
            f"The section falls apart into {count - rank} bodies a cell; join its walls or thicken them"
        )
    if reach < 2:
        where = "in one direction only" if reach else "in no direction"
        raise GeometryError(f"The section falls apart: it goes on from cell to cell {where}; join its walls")


def _constants(C: Array) -> dict[str, float]:
    S = np.linalg.inv(stiffness_to_voigt(C))
    return {
        "E1": float(1.0 / S[0, 0]), "E2": float(1.0 / S[1, 1]), "G12": float(1.0 / S[2, 2]),
        "nu12": float(-S[1, 0] / S[0, 0]), "nu21": float(-S[0, 1] / S[1, 1]),
    }  # fmt: skip


# from the cell to its section --------------------------------------------------------------------------------------


def wall_material(cell: UnitCell) -> tuple[float, float]:
    """Return modulus and Poisson's ratio of the walls, or raise InputError where the cell is none for this model."""
    if cell.kind != "planar":
        raise InputError(f"The solid model takes planar cells; '{cell.family}' is {cell.kind}: use another model")
    if cell.shape:
        raise InputError(f"The solid model takes one cell, not a batch of shape {cell.shape}: pick one with cell.at(i)")
    if int(cell.status) != Status.OK or not (np.isfinite(cell.points).all() and np.isfinite(cell.lattice).all()):
        raise GeometryError(f"Cell '{cell.family}' cannot exist; check its parameters")
    cell.check()
    others = sorted({block.kind for block in cell.blocks} - {"wall"})
    if others or not cell.blocks:
        raise InputError(
            f"The solid model takes walls; '{cell.family}' has elements without a section "
            f"({', '.join(others) or 'no elements'}): use model 'timoshenko'"
        )
    for end in ("start_compliance", "end_compliance"):
        if any(np.any(block.props.get(end, np.zeros(1)) != 0.0) for block in cell.blocks):
            raise InputError(f"The solid model has no section for the end springs ('{end}') of '{cell.family}': "
                             "draw the hinge as a thin wall, or use model 'timoshenko'")  # fmt: skip
    values = []
    for name in ("modulus", "poisson"):
        given = np.concatenate([block.props[name].ravel() for block in cell.blocks])
        if np.ptp(given) > 1e-9 * abs(given[0]):
            raise InputError(f"The solid model takes walls of one material; '{cell.family}' has {name} from "
                             f"{given.min():g} to {given.max():g}: use model 'timoshenko'")  # fmt: skip
        values.append(float(given[0]))
    return values[0], values[1]


def cell_section(
    cell: UnitCell, *, fillet: float = 0.0, pieces: int = FILLET_PIECES, cut: ArrayLike | None = None
) -> Section:
    """Return one period of the true section of a planar wall cell, its fillets in `pieces` for a quarter turn.

    `cut` are the fractional coordinates (2,) of the period's corner, by the shortest lattice vectors; by default the
    cut lines lie within the widest gaps between the corners of the section.

    Raises
    ------
    MissingExtra, GeometryError
        Without the extra `solid`; where no void is left.
    """
    try:
        import shapely
    except ImportError as fault:
        raise MissingExtra("The solid model", "solid") from fault
    lattice = _shortest(cell.lattice)
    to_fraction = np.linalg.inv(lattice)
    margin = 2.1 * fillet * np.linalg.norm(to_fraction, axis=0)
    shapes = []
    for shape in _shapes(cell):  # every image that reaches the square from 0 to 2, which holds a period from any corner
        place = shape @ to_fraction
        low = np.ceil(-margin - place.max(axis=0)).astype(int)
        high = np.floor(2.0 + margin - place.min(axis=0)).astype(int)
        images = np.stack(np.meshgrid(*(np.arange(a, b + 1) for a, b in zip(low, high, strict=True))), -1)
        shapes.append(shapely.polygons(shape + (images.reshape(-1, 2) @ lattice)[:, None]))
    whole = shapely.union_all(np.concatenate(shapes))
    tidy = TIDY * min(float(block.props["thickness"].min()) for block in cell.blocks)
    if fillet > 0.0:
        whole = shapely.union_all([whole, *_fillets(whole, fillet, pieces, tidy)])
    whole = shapely.simplify(whole, tidy)
    corners = shapely.get_coordinates(whole) @ to_fraction
    corners = corners[(np.abs(corners - 1.0) <= 0.5 + TIDY).all(axis=1)]  # of one period, those on its rim twice
    gaps = [_widest_gap(x) for x in corners.T]
    start = np.asarray(
        [a + share * width for (a, width), share in zip(gaps, CUT_AT, strict=True)] if cut is None else cut
    )
    origin = start % 1.0 @ lattice
    frame = shapely.polygons(origin + np.array([[0.0, 0.0], [1.0, 0.0], [1.0, 1.0], [0.0, 1.0]]) @ lattice)
    inside = shapely.get_parts(shapely.intersection(whole, frame))
    polygon = shapely.multipolygons(inside[shapely.get_dimensions(inside) == 2])
    if frame.area - polygon.area <= NO_VOID * frame.area:
        raise GeometryError(f"The section of '{cell.family}' closes up into a slab without voids; use thinner walls")
    return Section(polygon, origin, lattice)


def _fillets(whole: Any, radius: float, pieces: int, overlap: float) -> Any:
    """Return polygons that fill the inner corners of a section to a radius, with a hair's overlap.

    Grown with sharp corners and shrunk with round ones, only inner corners change; those of a polygon that stands for
    an arc by r^2 (tan(turn/2) - turn/2), which is left out.
    """
    import shapely

    with np.errstate(all="ignore"):  # the overlay library divides by zero on the way, to no harm
        grown = whole.buffer(radius, join_style="mitre", mitre_limit=1e6)
        filled = grown.buffer(-radius, quad_segs=pieces)
    added = shapely.get_parts(filled.difference(whole))
    half = np.radians(CORNER_DEG) / 2.0
    added = added[shapely.area(added) > radius**2 * (np.tan(half) - half)]
    return shapely.buffer(added, overlap, join_style="mitre")


def _shortest(lattice: Array) -> Array:
    """Return the shortest two vectors (2, 2) of the lattice, counter-clockwise (Lagrange's reduction)."""
    a, b = sorted(lattice, key=np.linalg.norm)
    while (turns := np.round(a @ b / (a @ a))) != 0.0:
        a, b = sorted((a, b - turns * a), key=np.linalg.norm)
    return np.stack([a, b if a[0] * b[1] > a[1] * b[0] else -b])


def _widest_gap(x: Array) -> tuple[float, float]:
    """Return where the widest gap between numbers on a circle of length 1 begins, and its width.

    >>> _widest_gap(np.array([0.125, 1.25, 0.5]))
    (0.5, 0.625)
    """
    if not len(x):
        return 0.0, 1.0
    x = np.sort(x % 1.0)
    gaps = np.diff(x, append=x[0] + 1.0)
    return float(x[gaps.argmax()]), float(gaps.max())


def _left(v: Array) -> Array:
    return np.stack([-v[..., 1], v[..., 0]], -1)


def _turned(v: Array, angle: Array) -> Array:
    return np.cos(angle)[..., None] * v + np.sin(angle)[..., None] * _left(v)


def _shapes(cell: UnitCell) -> Iterator[Array]:
    """Yield corners (c, 2) of polygons whose union with their images is the section: walls, and a disc at each node.

    A node's disc reaches the farthest outer corner of the walls that end there: t/2 where they meet at a point,
    the radius plus t/2 for tangents to a rigid node.
    """
    ends = []
    for block in cell.blocks:
        start, end, arc, half, arms = _centre_lines(cell, block)
        for values in zip(start, end, arc, half, strict=True):
            yield _wall(*values)
        across = _left(end - start) / np.linalg.norm(end - start, axis=1)[:, None]
        for k, turn in ((0, arc / 2.0), (1, -arc / 2.0)):
            corners = arms[:, k, None] + np.array([[1.0], [-1.0]]) * (half[:, None] * _turned(across, turn))[:, None]
            ends.append((block.nodes[:, k], half, corners))
    node, half, corners = (np.concatenate(values) for values in zip(*ends, strict=True))
    for i in np.unique(node):
        yield cell.points[i] + _disc(corners[node == i].reshape(-1, 2), float(half[node == i].min()))


def _centre_lines(cell: UnitCell, block: Block) -> tuple[Array, Array, Array, Array, Array]:
    """Return start and end (m, 2), the arc between them, half the thickness, and the arms (m, 2, 2) from the nodes."""
    zero = np.zeros(len(block))
    props = {name: zero + value for name, value in block.props.items()}
    x = cell.points[block.nodes] + block.shifts @ cell.lattice
    along = (x[:, 1] - x[:, 0]) / np.linalg.norm(x[:, 1] - x[:, 0], axis=1)[:, None]
    arms = np.stack(
        [
            props.get(f"{end}_along", zero)[:, None] * along + props.get(f"{end}_across", zero)[:, None] * _left(along)
            for end in ("start", "end")
        ],
        axis=1,
    )
    ends = x + arms
    return ends[:, 0], ends[:, 1], props.get("arc", zero), props["thickness"] / 2.0, arms


def _wall(start: Array, end: Array, arc: float, half: float) -> Array:
    """Return the corners of a wall without its round ends: a rectangle, or a ring's sector in straight pieces."""
    chord = end - start
    across = _left(chord) / np.linalg.norm(chord)
    count = int(np.ceil(abs(np.degrees(arc)) / ARC_STEP_DEG - 1e-9))
    if count < 1:
        return np.stack([start + half * across, start - half * across, end - half * across, end + half * across])
    step = arc / count
    radius = float(np.linalg.norm(chord)) / (2.0 * np.sin(arc / 2.0))  # negative where the middle lies to the right
    if abs(radius) <= half:
        raise GeometryError(f"A curved wall of thickness {2.0 * half:g} mm has a radius of {abs(radius):g} mm: "
                            "no hole is left in it; use a thinner wall")  # fmt: skip
    outward = _turned(across, arc / 2.0 - step * np.arange(count + 1.0))
    middle, wide = np.full(count + 1, radius), np.full(count + 1, half)
    middle[1:-1] *= np.sqrt(step / np.sin(step))
    wide[1:-1] /= np.cos(step / 2.0)
    centre = (start + end) / 2.0 - across * radius * np.cos(arc / 2.0)
    faces = [centre + outward * (middle + side * wide)[:, None] for side in (1.0, -1.0)]
    return np.concatenate([faces[0], faces[1][::-1]])


def _disc(corners: Array, half: float) -> Array:
    """Return a polygon for the disc round 0 through the farthest corners (c, 2), which are among its own.

    Between them the arc is divided evenly, the points moved outwards for equal area.
    """
    radii = np.linalg.norm(corners, axis=1)
    radius = float(radii.max())
    outer = corners[radii > radius * (1.0 - 1e-9)]
    angles = np.sort(np.arctan2(outer[:, 1], outer[:, 0]))
    gaps = np.diff(angles, append=angles[0] + 2.0 * np.pi)
    angles, gaps = angles[gaps > 1e-9], gaps[gaps > 1e-9]
    longest = min(np.radians(CORNER_STEP_DEG), half / radius)
    points = []
    for angle, gap in zip(angles, gaps, strict=True):
        count = int(np.ceil(gap / longest - 1e-9))
        step = gap / count
        r = np.full(count, radius)
        r[1:] *= np.sqrt(step / np.sin(step))
        at = angle + step * np.arange(count)
        points.append(np.stack([r * np.cos(at), r * np.sin(at)], -1))
    return np.concatenate(points)
