"""Meshes of a plane section: a polygon in, six-node triangles out, and their stiffness.

The boundary is divided here, so that both sides of a periodic seam carry the same points by construction and nobody
looks for partners within a tolerance; gmsh fills the inside. The element size is the local thickness (a ray cast
inwards finds the opposite face) over ACROSS, falls to CORNER of that at inner corners, where the stress is singular,
and grows from there by GROWTH times the distance. Sides are straight, so that three integration points are exact:

    K = sum over triangles of  area/3 . sum over points of  B' C B

Polygons and arrays only: nothing here knows a cell.
"""

from __future__ import annotations

import signal
from collections.abc import Iterator, Sequence
from contextlib import contextmanager, suppress
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from homog.errors import GeometryError, MissingExtra

Array = NDArray[np.float64]
Index = NDArray[np.int64]

ACROSS = 4.0
"""Elements across the local thickness."""
CORNER = 0.01
"""Size at an inner corner that turns by CORNER_FULL_DEG or more over the size beside it."""
CORNER_DEG, CORNER_FULL_DEG = 8.0, 60.0
"""Corners that turn inwards by less than the first are taken for parts of an arc and not refined; from there to the
second the refinement grows steadily, so that a result does not jump with an angle."""
GROWTH = 0.4
"""Growth of the size with distance. With these four E is within 0.1 % and nu within 0.0002 of the limit at t/l 0.2."""
SEAM_TOLERANCE = 1e-7
"""Largest mismatch of the two sides of a seam over its length; the cut leaves round-off, 1e-14 or so."""

SHORTEST = 1e-9
"""Shortest side that is no debris of an overlay's round-off, over the extent of the polygon."""


class Mesh(NamedTuple):
    """Six-node triangles: corners counter-clockwise, then the middles of the sides 0-1, 1-2, 2-0.

    points : ndarray of shape (n, 2), mm
    triangles : ndarray of int, shape (m, 6)
    owner : ndarray of int, shape (n,); the point of which a point on a seam is the image, else the point itself
    """

    points: Array
    triangles: Index
    owner: Index


class Seam(NamedTuple):
    """A straight periodic boundary: what lies between `start` and `end` (2,) recurs at + `shift` (2,), mm."""

    start: Array
    end: Array
    shift: Array


class _Sides(NamedTuple):
    """The sides of a polygon's rings, material on the left; `following` is the next side of the same ring."""

    start: Array
    end: Array
    following: Index

    @property
    def along(self) -> Array:
        return self.end - self.start

    @property
    def length(self) -> Array:
        return np.hypot(self.along[:, 0], self.along[:, 1])


def mesh_polygon(
    polygon: Any, *, size: float = 1.0, corner: float = CORNER, seams: Sequence[Seam] = (), cuts: Sequence[Array] = ()
) -> Mesh:
    """Return six-node triangles that fill a polygon, with or without holes, or several polygons.

    Parameters
    ----------
    polygon : shapely Polygon or MultiPolygon, mm
    size : float, factor on every element size and on its growth, 1 for the usual mesh, 2 for a coarse one
    corner : float, size at a sharp inner corner over the size beside it
    seams : sequence of Seam, straight boundaries that recur; their points are matched, see `Mesh.owner`
    cuts : sequence of ndarray of shape (2, 2), end points of straight boundaries behind which the solid goes on

    Raises
    ------
    MissingExtra
        Without the extra `solid`.
    GeometryError
        Where a side has next to no length, the two sides of a seam differ, or the mesher fails.

    Examples
    --------
    >>> from shapely.geometry import box
    >>> mesh = mesh_polygon(box(0.0, 0.0, 3.0, 1.0))
    >>> round(float(areas(mesh.points, mesh.triangles).sum()), 12)
    3.0
    """
    pieces, sides = _rings(polygon)
    if sides.length.min() < SHORTEST * np.ptp(sides.start, axis=0).max():
        raise GeometryError(f"The section has a side of {sides.length.min():.3g} mm, which is debris; remove it")
    lines = [np.stack([s.start, s.end]) + shift for s in seams for shift in (0.0 * s.shift, s.shift)] + list(cuts)
    on = [_on_line(sides, line) for line in lines]
    free = ~np.logical_or.reduce(on) if on else np.ones(len(sides.start), bool)
    growth = GROWTH * size
    sources, sizes = _recurring(*_sizes(sides, free, size, corner), growth, seams)
    divided = _divide(sides, sources, sizes, growth)
    partners = [
        (seam, home, image)
        for k, seam in enumerate(seams)
        for home, image in _partners(sides, seam, on[2 * k], on[2 * k + 1])
    ]
    for seam, home, image in partners:
        divided[image] = np.concatenate([sides.start[image, None], divided[home][:0:-1] + seam.shift])
    first = np.concatenate([[0], np.cumsum([len(points) for points in divided])])
    loops = [[np.arange(first[begin], first[end]) for begin, end in piece] for piece in pieces]
    corners, triangles = _fill(np.concatenate(divided), loops, sources, sizes, growth)
    n = len(corners)
    keys, which = np.unique(_keys(triangles, np.roll(triangles, -1, axis=1), n), return_inverse=True)
    points = np.concatenate([corners, (corners[keys // n] + corners[keys % n]) / 2.0])
    same = [np.empty((2, 0), np.int64)]
    for _, home, image in partners:
        a, b = (np.append(np.arange(first[i], first[i + 1]), first[sides.following[i]]) for i in (home, image))
        ends = np.stack([a, b[::-1]])
        same += [ends, np.searchsorted(keys, _keys(ends[:, 1:], ends[:, :-1], n)) + n]
    owner = _owners(np.concatenate(same, axis=1), len(points))
    return Mesh(points, np.concatenate([triangles, which.reshape(-1, 3) + n], axis=1), owner)


# the boundary ----------------------------------------------------------------------------------------------------


def _rings(polygon: Any) -> tuple[list[list[tuple[int, int]]], _Sides]:
    """Return for each piece its rings, the outer one first, as (first, last + 1) side, and the sides."""
    from shapely.geometry.polygon import orient

    pieces: list[list[tuple[int, int]]] = []
    starts, following, count = [], [], 0
    for piece in (orient(piece) for piece in getattr(polygon, "geoms", [polygon])):
        pieces.append([])
        for ring in (piece.exterior, *piece.interiors):
            starts.append(np.asarray(ring.coords)[:-1, :2])
            following.append(count + np.roll(np.arange(len(starts[-1])), -1))
            pieces[-1].append((count, count + len(starts[-1])))
            count += len(starts[-1])
    start, after = np.concatenate(starts), np.concatenate(following)
    return pieces, _Sides(start, start[after], after)


def _cross(a: Array, b: Array) -> Array:
    return np.asarray(a[..., 0] * b[..., 1] - a[..., 1] * b[..., 0])


def _distance(p: Array, q: Array) -> Array:
    """Return the distances (p, q) of points (p, 2) from points (q, 2)."""
    return np.hypot(p[:, None, 0] - q[:, 0], p[:, None, 1] - q[:, 1])


def _on_line(sides: _Sides, line: Array) -> NDArray[np.bool_]:
    """Say which sides lie on the straight line between two points (2, 2)."""
    d = line[1] - line[0]
    inside = np.ones(len(sides.start), bool)
    for point in (sides.start, sides.end):
        r = point - line[0]
        inside &= np.abs(_cross(d, r)) <= SEAM_TOLERANCE * (d @ d)
        inside &= np.abs(r @ d / (d @ d) - 0.5) <= 0.5 + SEAM_TOLERANCE
    return inside


def _partners(sides: _Sides, seam: Seam, home: NDArray[np.bool_], image: NDArray[np.bool_]) -> list[tuple[int, int]]:
    """Pair the sides on a seam with their images by their order along it; GeometryError where they do not fit."""
    d = seam.end - seam.start
    homes, images = (
        np.flatnonzero(on)[np.argsort((sides.start[on] + sides.end[on]) @ d, kind="stable")] for on in (home, image)
    )
    allowed = SEAM_TOLERANCE * np.hypot(*d)
    if len(homes) != len(images) or (
        np.abs(sides.start[homes] + seam.shift - sides.end[images]).max(initial=0.0) > allowed
        or np.abs(sides.end[homes] + seam.shift - sides.start[images]).max(initial=0.0) > allowed
    ):
        raise GeometryError("The section does not recur at its period; cut it from a periodic one")
    return list(zip(homes.tolist(), images.tolist(), strict=True))


def _thickness(sides: _Sides, free: NDArray[np.bool_]) -> tuple[Index, Array, Array]:
    """Return samples on the free sides: which side, the point, the thickness of the section behind it."""
    d, length = sides.along, sides.length
    typical = abs(_cross(sides.start, sides.end).sum()) / length.sum()  # area over half the outline: a wall's thickness
    count = np.where(free, np.ceil(length / typical), 0).astype(np.int64)
    which = np.repeat(np.arange(len(d)), count)
    step = np.arange(len(which)) - np.repeat(np.cumsum(count) - count, count)
    points = sides.start[which] + ((step + 0.5) / count[which])[:, None] * d[which]
    inward = np.stack([-d[which, 1], d[which, 0]], -1) / length[which, None]
    thickness = np.empty(len(points))
    for part in np.array_split(np.arange(len(points)), len(points) * len(d) // 2**18 + 1):
        to, ray = sides.start - points[part, None], inward[part, None]
        with np.errstate(divide="ignore", invalid="ignore"):  # point + a ray = start + b d; parallel sides never meet
            a, b = _cross(to, d) / _cross(ray, d), _cross(to, ray) / _cross(ray, d)
            hit = (np.abs(b - 0.5) <= 0.5) & (a > 0.0) & (np.arange(len(d)) != which[part, None])
        # a cut is no face: behind it the solid goes on, taken as thick as the cut is long
        thickness[part] = np.where(hit, np.where(free, a, length), np.inf).min(axis=1)
    return which, points, np.where(np.isfinite(thickness), thickness, typical)


def _sizes(sides: _Sides, free: NDArray[np.bool_], size: float, corner: float) -> tuple[Array, Array]:
    """Return points (q, 2) and the element sizes (q,) there; elsewhere the size is the least of size + growth."""
    which, points, thickness = _thickness(sides, free)
    sizes = np.minimum(thickness * size / ACROSS, sides.length[which])
    points = np.concatenate([points, (sides.start[~free] + sides.end[~free]) / 2.0])
    sizes = np.concatenate([sizes, sides.length[~free]])
    after = sides.along[sides.following]
    turn = -np.degrees(np.arctan2(_cross(sides.along, after), (sides.along * after).sum(axis=-1)))
    inner = (turn > CORNER_DEG) & free & free[sides.following]
    tips = sides.end[inner]
    beside = (sizes + GROWTH * size * _distance(tips, points)).min(axis=1)
    tip_sizes = beside * corner ** np.minimum((turn[inner] - CORNER_DEG) / (CORNER_FULL_DEG - CORNER_DEG), 1.0)
    return np.concatenate([points, tips]), np.concatenate([sizes, tip_sizes])


def _recurring(points: Array, sizes: Array, growth: float, seams: Sequence[Seam]) -> tuple[Array, Array]:
    """Return the sizes with their images beyond the seams, as far as they matter on this side."""
    for seam in seams:
        along = (seam.end - seam.start) / np.hypot(*(seam.end - seam.start))
        near = [np.abs(_cross(along, points - seam.start - far)) < (sizes.max() - sizes) / growth
                for far in (0.0, seam.shift)]  # fmt: skip
        points = np.concatenate([points, points[near[0]] + seam.shift, points[near[1]] - seam.shift])
        sizes = np.concatenate([sizes, sizes[near[0]], sizes[near[1]]])
    return points, sizes


def _divide(sides: _Sides, sources: Array, sizes: Array, growth: float) -> list[Array]:
    """Return for each side its points from start up to, not with, end, as far apart as the size is there."""
    half = 2.0 ** np.arange(-12.0, -0.4, 0.5)  # the size varies most towards the ends
    grid = np.concatenate([[0.0], half[:-1], 1.0 - half[::-1], [1.0]])
    divided = []
    for start, along, length in zip(sides.start, sides.along, sides.length, strict=True):
        h = (sizes + growth * _distance(start + grid[:, None] * along, sources)).min(axis=1)
        passed = np.cumsum(np.diff(grid) * length * (1.0 / h[1:] + 1.0 / h[:-1]) / 2.0)
        count = max(1, round(float(passed[-1])))
        at = np.interp(np.arange(count) / count * passed[-1], np.concatenate([[0.0], passed]), grid)
        divided.append(start + at[:, None] * along)
    return divided


def _keys(a: Index, b: Index, n: int) -> Index:
    """Return one number for each side between the points a and b of n, whatever their order."""
    return np.minimum(a, b) * n + np.maximum(a, b)


def _owners(pairs: Index, n: int) -> Index:
    """Return for each of n points the first of those that the pairs (2, q) make one: a corner has three images."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    graph = coo_array((np.ones(pairs.shape[1]), (pairs[0], pairs[1])), shape=(n, n))
    label = connected_components(graph, directed=False)[1]
    return np.asarray(np.unique(label, return_index=True)[1][label], np.int64)


# the inside ------------------------------------------------------------------------------------------------------

OPTIONS = {
    "General.Terminal": 0, "General.NumThreads": 1, "Mesh.Algorithm": 6, "Mesh.MeshSizeExtendFromBoundary": 0,
    "Mesh.MeshSizeFromPoints": 0, "Mesh.MeshSizeFromCurvature": 0, "Mesh.MeshSizeMin": 0, "Mesh.MeshSizeMax": 1e22,
    "Mesh.MeshSizeFactor": 1, "Mesh.ElementOrder": 1, "Mesh.RecombineAll": 0,
}  # fmt: skip
"""What the mesher is told while it makes one mesh: quiet, one thread, frontal triangles, sizes from us alone."""


@contextmanager
def _mesher() -> Iterator[Any]:
    """Give gmsh, started once in a process, with an empty model and our options; put back what was there."""
    try:
        import gmsh
    except (ImportError, OSError) as fault:  # OSError: a library of the system that it needs is not there
        raise MissingExtra("The solid model", "solid") from fault
    if not gmsh.isInitialized():
        gmsh.initialize(interruptible=False)
        with suppress(AttributeError, ValueError):  # it lets a broken pipe end the process, which is not its to say
            signal.signal(signal.SIGPIPE, signal.getsignal(signal.SIGPIPE))
    before = {name: gmsh.option.getNumber(name) for name in OPTIONS}
    current = gmsh.model.getCurrent()
    for name, value in OPTIONS.items():
        gmsh.option.setNumber(name, value)
    gmsh.model.add("section")
    try:
        yield gmsh
    finally:
        gmsh.model.mesh.removeSizeCallback()
        gmsh.model.remove()
        if current:
            gmsh.model.setCurrent(current)
        for name, value in before.items():
            gmsh.option.setNumber(name, value)


def _fill(points: Array, pieces: list[list[Index]], sources: Array, sizes: Array, growth: float) -> tuple[Array, Index]:
    """Return the boundary points (b, 2) with those inside behind them, and three-node triangles counter-clockwise.

    Each piece is the loop of the boundary points round it and those round its holes.
    """
    middle, scale = points.mean(axis=0), np.abs(points - points.mean(axis=0)).max()
    x, y = ((points - middle) / scale).T
    from_x, from_y = ((sources - middle) / scale).T
    least = sizes / scale

    def size(dim: int, tag: int, x: float, y: float, z: float, lc: float) -> float:
        return float((least + growth * np.hypot(from_x - x, from_y - y)).min()) if dim == 2 else lc

    with _mesher() as gmsh:
        geo = gmsh.model.geo
        tags = [geo.addPoint(*xy, 0.0) for xy in zip(x.tolist(), y.tolist(), strict=True)]
        lines = []
        for loops in pieces:
            curves = []
            for loop in loops:
                ends = [tags[i] for i in loop]
                round_ = [geo.addLine(a, b) for a, b in zip(ends, ends[1:] + ends[:1], strict=True)]
                curves.append(geo.addCurveLoop(round_))
                lines += round_
            geo.addPlaneSurface(curves)
        geo.synchronize()
        for line in lines:
            gmsh.model.mesh.setTransfiniteCurve(line, 2)
        gmsh.model.mesh.setSizeCallback(size)
        try:
            gmsh.model.mesh.generate(2)
        except Exception as fault:  # the mesher knows no finer kind
            raise GeometryError(f"The section could not be meshed ({fault}); change a thickness a little") from fault
        names, xyz, _ = gmsh.model.mesh.getNodes()
        corners = gmsh.model.mesh.getElementsByType(2)[1]
    inside = np.asarray(xyz).reshape(-1, 3)[:, :2]
    if not np.array_equal(inside[: len(points)], np.stack([x, y], -1)):
        raise GeometryError("The section could not be meshed (its boundary was changed); change a thickness a little")
    place = np.empty(int(names.max()) + 1, np.int64)
    place[names.astype(np.int64)] = np.arange(len(names))
    triangles = place[corners.astype(np.int64)].reshape(-1, 3)
    points = np.concatenate([points, inside[len(points) :] * scale + middle])
    return points, np.where(areas(points, triangles)[:, None] < 0.0, triangles[:, ::-1], triangles)


# the stiffness ---------------------------------------------------------------------------------------------------


def areas(points: Array, triangles: Index) -> Array:
    """Return the area of each triangle, positive if counter-clockwise, ndarray of shape (m,)."""
    a, b, c = (points[triangles[:, i]] for i in range(3))
    return _cross(b - a, c - a) / 2.0


def strain_rows(points: Array, triangles: Index) -> Array:
    """Return the Voigt strains per unit nodal displacement at three points of each triangle, (m, q, 3, 6, 2).

    Shape functions L_i (2 L_i - 1) and 4 L_i L_j of the barycentric coordinates; the points have L = 2/3, 1/6, 1/6.
    """
    L = np.full((3, 3), 1.0 / 6.0) + np.eye(3) / 2.0
    by_L = np.zeros((3, 6, 3))
    for i in range(3):
        j = (i + 1) % 3
        by_L[:, i, i] = 4.0 * L[:, i] - 1.0
        by_L[:, 3 + i, i], by_L[:, 3 + i, j] = 4.0 * L[:, j], 4.0 * L[:, i]
    x = points[triangles[:, :3]]
    opposite = np.roll(x, 1, axis=1) - np.roll(x, -1, axis=1)
    L_by_x = np.stack([-opposite[..., 1], opposite[..., 0]], -1) / (2.0 * areas(points, triangles))[:, None, None]
    slope = np.einsum("qai,mid->mqad", by_L, L_by_x)
    rows = np.zeros((len(x), 3, 3, 6, 2))
    rows[:, :, 0, :, 0] = rows[:, :, 2, :, 1] = slope[..., 0]
    rows[:, :, 1, :, 1] = rows[:, :, 2, :, 0] = slope[..., 1]
    return rows


def plane_stress(E: float, nu: float) -> Array:
    """Return the Voigt stiffness (3, 3) of an isotropic solid in plane stress."""
    return E / (1.0 - nu**2) * np.array([[1.0, nu, 0.0], [nu, 1.0, 0.0], [0.0, 0.0, (1.0 - nu) / 2.0]])


def element_stiffness(points: Array, triangles: Index, E: float, nu: float) -> Array:
    """Return the stiffness of each triangle, (m, 12, 12), freedoms x0 y0 x1 ..., per unit depth in plane stress."""
    rows = strain_rows(points, triangles)
    weights = areas(points, triangles)[:, None, None] / 3.0 * plane_stress(E, nu)
    B = rows.reshape(-1, 3, 3, 12)
    stress = weights[:, None] @ B
    return np.asarray(B.reshape(-1, 9, 12).swapaxes(1, 2) @ stress.reshape(-1, 9, 12))


def assemble(Ke: Array, nodes: Index, count: int) -> Any:
    """Return the sparse matrix (2 count, 2 count) that element matrices (m, 12, 12) over nodes (m, 6) add up to."""
    from scipy.sparse import coo_array

    freedoms = (2 * nodes[..., None] + np.arange(2)).reshape(len(nodes), 12)
    rows = np.broadcast_to(freedoms[:, :, None], Ke.shape).ravel()
    columns = np.broadcast_to(freedoms[:, None, :], Ke.shape).ravel()
    return coo_array((Ke.ravel(), (rows, columns)), shape=(2 * count, 2 * count)).tocsc()


def stiffness(points: Array, triangles: Index, E: float, nu: float) -> Any:
    """Return the sparse stiffness (2n, 2n), freedoms x0 y0 x1 ..., per unit depth in plane stress.

    For plane strain give E / (1 - nu^2) and nu / (1 - nu).
    """
    return assemble(element_stiffness(points, triangles, E, nu), triangles, len(points))
