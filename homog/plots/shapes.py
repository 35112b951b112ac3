"""The shape of a cell, as arrays ready to be drawn: the true section in the plane, facets in space.

A planar cell becomes polygons whose union is its section (walls with round ends, rings, discs, turning units); a folded
sheet becomes its panels, a lattice of struts round tubes with ball joints, both as flat facets with a normal, and
`seen` turns facets into depth-sorted polygons with a brightness. Nothing here knows a colour or a page.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from homog.cell import Block, UnitCell

Array = NDArray[np.float64]
Image = tuple[int, tuple[int, ...]]
"""A point of the cell and the periodic image of it that is meant."""

PARALLEL = 1e-9
"""A lattice vector lies along an axis if the rest of it is below this share of its length."""
COPLANAR_DEG = 0.5
"""Two triangles that make less than this angle are one panel; the edge between them is no crease."""
ROUND = 9
"""Segments of a half circle."""
TUBE, ALONG = 16, 6
"""Facets round and along a strut."""
EDGE_SAMPLES = 61
LIGHT = np.array([-0.45, 0.55, 0.70])
"""Where the light comes from: left, up, towards the viewer."""
AMBIENT = 0.30


# ------------------------------------------------------------------------------------------------ the repeat


def repeat_vectors(cell: UnitCell) -> Array:
    """Return p lattice vectors (p, d) along axes 1, 2 (, 3) that span a repeat, or the lattice's own if there are none.

    They are the shortest along each axis: of a centred lattice given by its primitive vectors, the conventional cell.
    """
    counts = np.array(list(itertools.product(range(-3, 4), repeat=cell.p)), float)
    vectors = counts @ cell.lattice
    lengths = np.linalg.norm(vectors, axis=-1)
    found = []
    for axis in range(cell.p):
        along = np.where(np.abs(vectors[:, axis] - lengths) <= PARALLEL * lengths, lengths, np.inf)
        along[lengths == 0.0] = np.inf
        if not np.isfinite(along).any():
            return np.array(cell.lattice)
        found.append(vectors[np.argmin(along)])
    return np.array(found)


def repeat_corners(cell: UnitCell) -> Array:
    """Return the corners (4, 2) of a planar repeat, counter-clockwise, placed so that its edges cross little material.

    About the middle of the cell's points, or moved off it by quarters of the repeat if the section's edge is then less
    in the way. Of a sheet, always about the middle.
    """
    a, b = repeat_vectors(cell)[:, :2]
    start = cell.points[:, :2].mean(axis=0) - (a + b) / 2.0
    corners = np.array([start, start + a, start + a + b, start + b])
    if cell.kind != "planar":
        return corners
    polygons = section(cell, corners.min(axis=0), (corners + a + b).max(axis=0))
    along = np.linspace(0.0, 1.0, EDGE_SAMPLES, endpoint=False)[:, None]
    edge = np.concatenate([start + along * a, start + along * b])  # the other two edges are images of these
    moves = [i / 4.0 * a + j / 4.0 * b for i, j in itertools.product(range(4), repeat=2)]
    tried = np.concatenate([edge + move for move in moves])
    inside = np.any([contains(polygon, tried) for polygon in polygons], axis=0).reshape(len(moves), -1).sum(axis=1)
    return np.asarray(corners + moves[int(np.argmin(inside))])


def contains(polygon: Array, points: Array) -> NDArray[np.bool_]:
    """Return which points (q, 2) lie in a polygon (k, 2): an odd number of its edges cross the ray to the right."""
    inside = np.asarray(((points >= polygon.min(axis=0)) & (points <= polygon.max(axis=0))).all(axis=1))
    x, y = points[inside, :1], points[inside, 1:]
    (x0, y0), (x1, y1) = polygon.T, np.roll(polygon, -1, axis=0).T
    with np.errstate(divide="ignore", invalid="ignore"):
        crossed = ((y0 > y) != (y1 > y)) & (x < x0 + (y - y0) * (x1 - x0) / (y1 - y0))
    inside[inside] = crossed.sum(axis=1) % 2 == 1
    return inside


def shifts_into(cell: UnitCell, low: Array, high: Array, reach: float) -> Array:
    """Return the shifts (c, p), whole numbers, that can bring anything within `reach` of the origin into a box."""
    corners = np.array(list(itertools.product(*zip(low - reach, high + reach, strict=True))))
    frame = cell.lattice[:, : cell.p]
    coordinates = corners[:, : cell.p] @ np.linalg.inv(frame)
    first, last = np.floor(coordinates.min(axis=0)), np.ceil(coordinates.max(axis=0))
    spans = [np.arange(a, b + 1) for a, b in zip(first, last, strict=True)]
    return np.array(list(itertools.product(*spans)))


# ------------------------------------------------------------------------------------------------- the plane


def section(cell: UnitCell, low: Array, high: Array) -> list[Array]:
    """Return polygons (k, 2), counter-clockwise, whose union is a planar cell's true section within a box.

    Walls are the points within t/2 of their centre line, curved ones too; a node with rigid arms is the disc that
    reaches its walls' outer faces; bars that brace each other are one unit, joined at its pins by ligaments.
    """
    shapes: list[Array] = []
    for block in cell.blocks:
        if block.kind == "wall":
            shapes += _walls(cell, block)
        elif block.kind == "bar":
            bodies, loose = _bodies(cell, block)
            shapes += [_hull(_at(cell, body)) for body in bodies]
            shapes += _ligaments(cell, bodies)
            width = block.props["rigidity"] / cell.parent.modulus_MPa
            for ends, t in zip(_ends(cell, block)[loose], np.broadcast_to(width, len(block))[loose], strict=True):
                shapes.append(_ribbon(ends, t / 2.0))
    reach = max(float(np.abs(shape).max()) for shape in shapes)
    placed = []
    for move in shifts_into(cell, low, high, reach) @ cell.lattice:
        for shape in shapes:
            moved = shape + move
            if (moved.max(axis=0) >= low).all() and (moved.min(axis=0) <= high).all():
                placed.append(moved)
    return placed


def _ends(cell: UnitCell, block: Block) -> Array:
    """Positions (m, k, d) of the elements' nodes."""
    return np.asarray(cell.points[block.nodes] + block.shifts @ cell.lattice)


def _ribbon(line: Array, half: float) -> Array:
    """The polygon of points within `half` of a smooth line (k, 2)."""
    along = np.gradient(line, axis=0)
    along /= np.linalg.norm(along, axis=1)[:, None]
    left = half * np.stack([-along[:, 1], along[:, 0]], -1)
    turn = np.linspace(-np.pi / 2.0, np.pi / 2.0, ROUND + 1)[1:-1, None]
    ahead = line[-1] + half * np.cos(turn) * along[-1] + np.sin(turn) * left[-1]
    behind = line[0] - half * np.cos(turn) * along[0] - np.sin(turn) * left[0]
    return np.concatenate([line - left, ahead, (line + left)[::-1], behind])


def _disc(centre: Array, radius: float) -> Array:
    turn = np.linspace(0.0, 2.0 * np.pi, 4 * ROUND, endpoint=False)
    return np.asarray(centre + radius * np.stack([np.cos(turn), np.sin(turn)], -1))


def _hull(points: Array) -> Array:
    from scipy.spatial import ConvexHull  # only units that turn need it

    return np.asarray(points[ConvexHull(points).vertices])


def _walls(cell: UnitCell, block: Block) -> list[Array]:
    props = {name: np.broadcast_to(value, len(block)) for name, value in block.props.items()}
    none = np.zeros(len(block))
    ends = _ends(cell, block)
    e = ends[:, 1] - ends[:, 0]
    e /= np.linalg.norm(e, axis=1)[:, None]
    n = np.stack([-e[:, 1], e[:, 0]], -1)
    start, end = (
        props.get(f"{name}_along", none)[:, None] * e + props.get(f"{name}_across", none)[:, None] * n
        for name in ("start", "end")
    )
    shapes, discs = [], dict[int, float]()
    for i, (arc, t) in enumerate(zip(props.get("arc", none), props["thickness"], strict=True)):
        for node, arm in zip(block.nodes[i], (start[i], end[i]), strict=True):
            radius = float(np.hypot(*arm))
            if radius > 0.0:
                discs[int(node)] = max(discs.get(int(node), 0.0), radius + t / 2.0)
        chord = np.stack([ends[i, 0] + start[i], ends[i, 1] + end[i]])
        shapes.append(_ribbon(_bow(chord, float(arc)), t / 2.0))
    return shapes + [_disc(cell.points[node], radius) for node, radius in discs.items()]


def _bow(chord: Array, arc: float) -> Array:
    """The circular arc over a chord (2, 2) that turns through `arc`, its middle to the left if that is positive."""
    if abs(arc) < 1e-9:
        return chord
    length = float(np.hypot(*(chord[1] - chord[0])))
    e = (chord[1] - chord[0]) / length
    n = np.array([-e[1], e[0]])
    radius = length / (2.0 * np.sin(arc / 2.0))
    a = np.linspace(-arc / 2.0, arc / 2.0, 2 * ROUND + 1)[:, None]
    return np.asarray(chord.mean(axis=0) + radius * np.sin(a) * e + radius * (np.cos(a) - np.cos(arc / 2.0)) * n)


def _moved(image: Image, by: Iterable[int]) -> Image:
    return image[0], tuple(a + b for a, b in zip(image[1], by, strict=True))


def _home(images: Iterable[Image]) -> frozenset[Image]:
    """The same set of images, translated so that its first point is at home."""
    ordered = sorted(images)
    back = tuple(-s for s in ordered[0][1])
    return frozenset(_moved(image, back) for image in ordered)


def _at(cell: UnitCell, images: Iterable[Image]) -> Array:
    return np.array([cell.points[node] + np.asarray(shift, float) @ cell.lattice for node, shift in sorted(images)])


def _bodies(cell: UnitCell, block: Block) -> tuple[list[frozenset[Image]], NDArray[np.bool_]]:
    """Return the rigid units that bars make (triangles that share a bar are one), and which bars belong to none."""
    near: dict[int, set[Image]] = {}
    for (i, j), (s, r) in zip(block.nodes, block.shifts, strict=True):
        step = tuple(int(x) for x in r - s)
        near.setdefault(int(i), set()).add((int(j), step))
        near.setdefault(int(j), set()).add((int(i), tuple(-x for x in step)))

    def neighbours(image: Image) -> set[Image]:
        return {_moved(other, image[1]) for other in near[image[0]]}

    bodies: set[frozenset[Image]] = set()
    braced: set[frozenset[Image]] = set()
    for node in near:
        home = (node, (0,) * cell.p)
        for other in neighbours(home):
            body, edges = set[Image](), [(home, other)]
            seen: set[frozenset[Image]] = set()
            while edges and len(body) <= cell.n + 1:
                a, b = edges.pop()
                if frozenset((a, b)) in seen:
                    continue
                seen.add(frozenset((a, b)))
                for c in neighbours(a) & neighbours(b):
                    body |= {a, b, c}
                    edges += [(a, c), (b, c)]
            if body and len({image[0] for image in body}) == len(body):  # else it runs through the whole lattice
                bodies.add(_home(body))
                braced.add(_home((home, other)))
    loose = []
    for nodes, shifts in zip(block.nodes, block.shifts, strict=True):
        ends = [(int(n), tuple(int(x) for x in s)) for n, s in zip(nodes, shifts, strict=True)]
        loose.append(_home(ends) not in braced)
    return sorted(bodies, key=sorted), np.array(loose, bool)


def _ligaments(cell: UnitCell, bodies: list[frozenset[Image]]) -> list[Array]:
    """Flexure strips across the pins that two units share, on the line of their centres; none if no size is known."""
    if not {"ligament_length", "ligament_thickness"} <= cell.parameters.keys():
        return []
    length, thickness = (float(cell.parameters[f"ligament_{name}"]) for name in ("length", "thickness"))
    strips = []
    for node in range(cell.n):
        pin = (node, (0,) * cell.p)
        centres = []
        for body in bodies:
            for image in body:
                if image[0] == node:
                    centres.append(_at(cell, [_moved(i, [-s for s in image[1]]) for i in body]).mean(axis=0))
        for one, other in itertools.combinations(centres, 2):
            e = (other - one) / np.hypot(*(other - one)) * length / 2.0
            n = np.array([-e[1], e[0]]) * thickness / length
            middle = _at(cell, [pin])[0]
            strips.append(np.array([middle - e - n, middle + e - n, middle + e + n, middle - e + n]))
    return strips


# ---------------------------------------------------------------------------------------------------- space


@dataclass(frozen=True, eq=False)
class Facets:
    """Flat polygons in space.

    `polygons` are f arrays (k, 3); `normals` (f, 3) their unit normals; `own` (f,) whether they belong to the one
    cell that is picked out; `open_` whether both sides can be seen.
    """

    polygons: list[Array]
    normals: Array
    own: NDArray[np.bool_]
    open_: bool


def sheet_facets(cell: UnitCell, counts: tuple[int, int]) -> Facets:
    """Return the panels of counts[0] x counts[1] repeats of a folded sheet, the repeat nearest the middle picked out.

    The triangles are those of its folds; two that lie in one plane are one panel, so an edge of a panel is a crease.
    """
    triangles: dict[frozenset[Image], frozenset[Image]] = {}
    flat: list[tuple[frozenset[Image], frozenset[Image]]] = []
    for block in (b for b in cell.blocks if b.kind == "fold"):
        for nodes, shifts in zip(block.nodes, block.shifts, strict=True):
            images = [(int(n), tuple(int(x) for x in s)) for n, s in zip(nodes, shifts, strict=True)]
            pair = frozenset(images[:3]), frozenset(images[1:])
            for triangle in pair:
                triangles[_home(triangle)] = triangle
            one, other = (_normal(_at(cell, triangle)) for triangle in pair)
            if abs(float(one @ other)) > np.cos(np.radians(COPLANAR_DEG)):
                flat.append(pair)
    panels = [_chain(pair) for pair in flat]
    joined = {_home(triangle) for pair in flat for triangle in pair}
    panels += [sorted(triangle) for home, triangle in triangles.items() if home not in joined]
    a, b = repeat_vectors(cell)
    frame = np.linalg.inv(np.stack([a, b])[:, :2])
    reach = float(np.abs(cell.points).max()) + np.hypot(*a[:2])
    per_repeat = shifts_into(cell, np.zeros(2), (a + b)[:2], reach) @ cell.lattice
    middle = tuple(c // 2 for c in counts)
    polygons, own = [], []
    for panel in panels:
        corners = np.array([_at(cell, [image])[0] for image in panel])
        for move in per_repeat:
            placed = corners + move
            where = (placed.mean(axis=0)[:2] - cell.points.mean(axis=0)[:2]) @ frame + 0.5
            if ((where < -PARALLEL) | (where >= 1.0 - PARALLEL)).any():
                continue
            for i, j in itertools.product(range(counts[0]), range(counts[1])):
                polygons.append(placed + i * a + j * b)
                own.append((i, j) == middle)
    return Facets(polygons, np.array([_normal(p) for p in polygons]), np.array(own), open_=True)


def _normal(polygon: Array) -> Array:
    n = np.cross(polygon[1] - polygon[0], polygon[2] - polygon[0])
    return np.asarray(n / np.linalg.norm(n))


def _chain(pair: tuple[frozenset[Image], frozenset[Image]]) -> list[Image]:
    """The quadrilateral that two triangles with a common edge make, in order."""
    (j, k) = sorted(pair[0] & pair[1])
    (i,), (l,) = pair[0] - pair[1], pair[1] - pair[0]
    return [i, j, l, k]


def strut_facets(cell: UnitCell) -> Facets:
    """Return the tubes and ball joints of one repeat of a spatial lattice: every strut whose middle lies in the box."""
    vectors = repeat_vectors(cell)
    origin, inverse = cell.points[0], np.linalg.inv(vectors)
    far = vectors.sum(axis=0)
    polygons: list[Array] = []
    normals: list[Array] = []
    balls: dict[Image, float] = {}
    for block in (b for b in cell.blocks if b.kind in ("strut", "bar")):
        if block.kind == "strut":
            diameters = np.broadcast_to(block.props["diameter"], len(block))
        else:  # a round bar of the same rigidity
            area = np.broadcast_to(block.props["rigidity"] / cell.parent.modulus_MPa, len(block))
            diameters = np.sqrt(4.0 * area / np.pi)
        for m, (ends, diameter) in enumerate(zip(_ends(cell, block), diameters, strict=True)):
            reach = float(np.abs(ends - origin).max())
            for shift in shifts_into(cell, np.minimum(0.0, far), np.maximum(0.0, far), reach):
                placed = ends + shift @ cell.lattice
                where = (placed.mean(axis=0) - origin) @ inverse
                if ((where < -PARALLEL) | (where > 1.0 + PARALLEL)).any():
                    continue
                _tube(placed, diameter / 2.0, polygons, normals)
                for node, own in zip(block.nodes[m], block.shifts[m], strict=True):
                    image = (int(node), tuple(int(x) for x in own + shift))
                    balls[image] = max(balls.get(image, 0.0), diameter / 2.0)
    for image, radius in balls.items():
        _ball(_at(cell, [image])[0], radius, polygons, normals)
    return Facets(polygons, np.array(normals), np.ones(len(polygons), bool), open_=False)


def _tube(ends: Array, radius: float, polygons: list[Array], normals: list[Array]) -> None:
    axis = (ends[1] - ends[0]) / np.linalg.norm(ends[1] - ends[0])
    e2 = np.cross([1.0, 0.0, 0.0] if abs(axis[2]) > 0.9 else [0.0, 0.0, 1.0], axis)
    e2 /= np.linalg.norm(e2)
    e3 = np.cross(axis, e2)
    turn = np.linspace(0.0, 2.0 * np.pi, TUBE + 1)
    rim = np.cos(turn)[:, None] * e2 + np.sin(turn)[:, None] * e3
    stations = np.linspace(ends[0], ends[1], ALONG + 1)
    for a, b in itertools.pairwise(stations):
        for k in range(TUBE):
            polygons.append(np.array([a + radius * rim[k], a + radius * rim[k + 1], b + radius * rim[k + 1],
                                      b + radius * rim[k]]))  # fmt: skip
            normal = rim[k] + rim[k + 1]
            normals.append(normal / np.linalg.norm(normal))


def _ball(centre: Array, radius: float, polygons: list[Array], normals: list[Array]) -> None:
    up, turn = np.linspace(-np.pi / 2.0, np.pi / 2.0, TUBE // 2 + 1), np.linspace(0.0, 2.0 * np.pi, TUBE + 1)
    grid = np.stack(
        [np.cos(up)[:, None] * np.cos(turn), np.cos(up)[:, None] * np.sin(turn), np.sin(up)[:, None] + 0.0 * turn], -1
    )
    for i, j in itertools.product(range(TUBE // 2), range(TUBE)):
        patch = grid[[i, i, i + 1, i + 1], [j, j + 1, j + 1, j]]
        polygons.append(centre + radius * patch)
        normal = patch.mean(axis=0)
        normals.append(normal / np.linalg.norm(normal))


def view(azimuth_deg: float, elevation_deg: float) -> Array:
    """Return the rotation (3, 3) whose rows point right, up and to a viewer at that azimuth from axis 1, elevation.

    From straight above (azimuth -90, elevation 90) axis 1 points right and axis 2 up.
    """
    a, b = np.radians([azimuth_deg, elevation_deg])
    towards = np.array([np.cos(b) * np.cos(a), np.cos(b) * np.sin(a), np.sin(b)])
    right = np.array([-np.sin(a), np.cos(a), 0.0])
    return np.array([right, np.cross(towards, right), towards])


def seen(facets: Facets, turn: ArrayLike) -> tuple[list[Array], Array, Array, NDArray[np.bool_]]:
    """Return what a viewer sees, farthest first: polygons (k, 2), brightness 0 to 1, nearness 0 to 1, and `own`."""
    R = np.asarray(turn, float)
    normals = facets.normals @ R.T
    if facets.open_:
        normals = normals * np.where(normals[:, 2:] < 0.0, -1.0, 1.0)
    visible = np.flatnonzero(normals[:, 2] > 0.0)
    placed = [facets.polygons[i] @ R.T for i in visible]
    depth = np.array([polygon[:, 2].mean() for polygon in placed])
    order = np.argsort(depth, kind="stable")
    light = AMBIENT + (1.0 - AMBIENT) * np.maximum(normals[visible] @ (LIGHT / np.linalg.norm(LIGHT)), 0.0)
    spread = np.ptp(depth) or 1.0
    near = (depth - depth.min()) / spread
    return [placed[i][:, :2] for i in order], light[order], near[order], facets.own[visible[order]]
