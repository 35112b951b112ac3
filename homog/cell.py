"""The unit cell: points, lattice vectors and element blocks, and nothing that knows what an element does.

A node of an element is a point of the cell plus an integer shift that says which periodic image of it is meant, so
nobody ever searches for the opposite node within a tolerance, and an element may join a node to its own image.
Leading axes `...` are the batch: a sweep is the same class with one more axis and the topology shared. Operations
return new cells; arrays are read-only.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import IntEnum
from types import MappingProxyType
from typing import Any, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from homog.errors import InputError
from homog.materials import UNIT, Material

Array = NDArray[np.float64]
Index = NDArray[np.int64]
Kind = Literal["planar", "sheet", "spatial"]

KINDS: Mapping[tuple[int, int], Kind] = {(2, 2): "planar", (3, 2): "sheet", (3, 3): "spatial"}
STRAINS: Mapping[Kind, tuple[str, ...]] = {
    "planar": ("e11", "e22", "g12"),
    "sheet": ("e11", "e22", "g12", "k11", "k22", "k12"),
    "spatial": ("e11", "e22", "e33", "g23", "g13", "g12"),
}

# How a property of an element grows when the whole cell, its thicknesses too, grows by a factor (same parent).
LENGTH_POWER: Mapping[str, int] = {
    "thickness": 1, "diameter": 1, "arc": 0, "modulus": 0, "poisson": 0,
    "start_along": 1, "start_across": 1, "end_along": 1, "end_across": 1,
    "wall.start_compliance": -2, "wall.end_compliance": -2, "strut.start_compliance": -3, "strut.end_compliance": -3,
    "hinge.stiffness": 2, "fold.stiffness": 2,
}  # fmt: skip


MATRICES = frozenset({"weight"})
"""Properties that are a matrix for each element, (..., m, s, s); a joint's strains are lengths and rotations by turns,
two and one in the plane, three and three in space."""


def tail(name: str) -> int:
    """Number of axes of a property that are not the batch's."""
    return 3 if name in MATRICES else 1


class Status(IntEnum):
    """What became of one member of a batch."""

    OK = 0
    IMPOSSIBLE = 1  # the parameters describe no cell: a family's rule, or a value that is not finite
    MECHANISM = 2  # a uniform strain costs no energy: the compliance does not exist


def _readonly(values: ArrayLike, dtype: Any = np.float64) -> NDArray[Any]:
    array = np.asarray(values, dtype).view()
    array.flags.writeable = False
    return array


def _cross2(a: Array, b: Array) -> Array:
    """Area spanned by the in-plane parts of two vectors (..., d)."""
    return np.asarray(a[..., 0] * b[..., 1] - a[..., 1] * b[..., 0])


@dataclass(frozen=True, eq=False)
class Block:
    """Elements of one kind.

    Parameters
    ----------
    kind : str
        Name in the element registry.
    nodes : ndarray of int, shape (m, k)
        Points that each element joins.
    shifts : ndarray of int, shape (m, k, p)
        Which periodic image of each point.
    props : mapping of name to ndarray broadcastable to (..., m), or (..., m, s, s) for MATRICES
        What the kind's weights need (mm, N, MPa, rad).
    """

    kind: str
    nodes: Index
    shifts: Index
    props: Mapping[str, Array] = field(default_factory=dict)

    def __post_init__(self) -> None:
        nodes, shifts = _readonly(self.nodes, np.int64), _readonly(self.shifts, np.int64)
        if nodes.ndim != 2 or shifts.ndim != 3 or shifts.shape[:2] != nodes.shape:
            raise InputError(
                f"Block '{self.kind}': nodes {nodes.shape} and shifts {shifts.shape} must be (m, k) and (m, k, p)"
            )
        object.__setattr__(self, "nodes", nodes)
        object.__setattr__(self, "shifts", shifts)
        props = {name: _readonly(np.atleast_1d(value)) for name, value in self.props.items()}
        object.__setattr__(self, "props", MappingProxyType(props))

    def __len__(self) -> int:
        return len(self.nodes)


@dataclass(frozen=True, eq=False)
class UnitCell:
    """A periodic cell, or a batch of cells with one topology.

    Parameters
    ----------
    points : ndarray of shape (..., n, d)
        Nodes, mm.
    lattice : ndarray of shape (..., p, d)
        Lattice vectors, mm; p = d, or p = 2 in space for a sheet.
    blocks : tuple of Block
        Elements.
    parent : Material
        What the walls are made of.
    solid : ndarray of shape (...)
        Solid area (mm2 per cell, planar) or volume (mm3, sheets and space), joints counted once; NaN if not known.
    slenderness : ndarray of shape (...)
        Largest thickness over length in the cell; NaN if not known.
    height : ndarray of shape (...)
        Thickness of the slab that holds a sheet, mm; 1 for the others.
    thinnest : ndarray of shape (...)
        Thinnest wall, ligament, strut or sheet to be made, mm; NaN if not known.
    family, parameters : str, mapping of name to ndarray of shape (...)
        Where the cell came from, for tables.
    status : ndarray of int of shape (...)
        `Status` of each member before anything is computed.
    """

    points: Array
    lattice: Array
    blocks: tuple[Block, ...]
    parent: Material = UNIT
    solid: Array = field(default_factory=lambda: np.array(np.nan))
    slenderness: Array = field(default_factory=lambda: np.array(np.nan))
    height: Array = field(default_factory=lambda: np.array(1.0))
    thinnest: Array = field(default_factory=lambda: np.array(np.nan))
    family: str = "custom"
    parameters: Mapping[str, NDArray[Any]] = field(default_factory=dict)
    status: NDArray[np.int8] = field(default_factory=lambda: np.array(0, np.int8))

    def __post_init__(self) -> None:
        for name in ("points", "lattice", "solid", "slenderness", "height", "thinnest"):
            object.__setattr__(self, name, _readonly(getattr(self, name)))
        object.__setattr__(self, "status", _readonly(self.status, np.int8))
        object.__setattr__(self, "blocks", tuple(self.blocks))
        values = {name: np.asarray(value) for name, value in self.parameters.items()}
        object.__setattr__(self, "parameters", MappingProxyType(values))
        if (self.d, self.p) not in KINDS or self.points.ndim < 2 or self.lattice.shape[-1] != self.d:
            raise InputError(
                f"Unit cell with points {self.points.shape} and lattice {self.lattice.shape}: allowed are "
                "(..., n, 2) with (..., 2, 2), (..., n, 3) with (..., 3, 3), for sheets (..., n, 3) with (..., 2, 3)"
            )

    @property
    def d(self) -> int:
        """Dimension of space."""
        return int(self.points.shape[-1])

    @property
    def p(self) -> int:
        """Number of periodic directions."""
        return int(self.lattice.shape[-2])

    @property
    def n(self) -> int:
        """Number of points."""
        return int(self.points.shape[-2])

    @property
    def kind(self) -> Kind:
        """`planar`, `sheet` or `spatial`."""
        return KINDS[self.d, self.p]

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of the batch, () for a single cell."""
        parts = [self.points.shape[:-2], self.lattice.shape[:-2], self.status.shape, self.solid.shape]
        for block in self.blocks:
            parts += [value.shape[: value.ndim - tail(name)] for name, value in block.props.items()]
        return np.broadcast_shapes(*parts)

    @property
    def volume(self) -> Array:
        """Area (planar, sheet; mm2) or volume (mm3) of the cell, ndarray of shape (...)."""
        if self.p == 2:
            return np.asarray(np.abs(_cross2(self.lattice[..., 0, :], self.lattice[..., 1, :])))
        return np.asarray(np.abs(np.linalg.det(self.lattice)))

    @property
    def relative_density(self) -> Array:
        """Solid share of the cell (of the slab of thickness `height` for a sheet), ndarray of shape (...)."""
        return np.asarray(self.solid / (self.volume * self.height))

    @property
    def size(self) -> Array:
        """Extent of one repeat along each axis, sum of |lattice vectors|, ndarray of shape (..., d), mm.

        For a centred lattice given by its primitive vectors this is the conventional rectangular cell.
        """
        return np.asarray(np.abs(self.lattice).sum(axis=-2))

    def check(self) -> UnitCell:
        """Return the cell if its topology is sound; raise InputError that says which element or point is not."""
        used = np.zeros(self.n, bool)
        for block in self.blocks:
            if block.shifts.shape[-1] != self.p:
                raise InputError(f"Block '{block.kind}': shifts have {block.shifts.shape[-1]} periodic directions, "
                                 f"the cell has {self.p}")  # fmt: skip
            if block.nodes.size and (block.nodes.min() < 0 or block.nodes.max() >= self.n):
                raise InputError(f"Block '{block.kind}': node {block.nodes.max()} is outside 0 to {self.n - 1}")
            used[block.nodes] = True
        if not used.all():
            raise InputError(f"Point {int(np.argmin(used))} belongs to no element; remove it or join it")
        return self

    def at(self, index: Any) -> UnitCell:
        """Return the members `index` (as numpy indexes the batch axes) of a batch."""
        shape = self.shape

        def pick(values: NDArray[Any], tail: int) -> NDArray[Any]:
            return np.asarray(np.broadcast_to(values, shape + values.shape[values.ndim - tail :])[index])

        blocks = []
        for b in self.blocks:
            props = {name: pick(value, tail(name)) for name, value in b.props.items()}
            blocks.append(dataclasses.replace(b, props=props))
        return dataclasses.replace(
            self,
            points=pick(self.points, 2),
            lattice=pick(self.lattice, 2),
            blocks=tuple(blocks),
            solid=pick(self.solid, 0),
            slenderness=pick(self.slenderness, 0),
            height=pick(self.height, 0),
            thinnest=pick(self.thinnest, 0),
            parameters={name: pick(value, 0) for name, value in self.parameters.items()},
            status=pick(self.status, 0),
        )

    def supercell(self, counts: tuple[int, ...]) -> UnitCell:
        """Return the same lattice described by a cell of counts[0] x counts[1] (x counts[2]) repeats."""
        if len(counts) != self.p or min(counts) < 1:
            raise InputError(f"Supercell {counts}: give {self.p} whole numbers of at least 1")
        corners = np.stack(np.meshgrid(*(np.arange(c) for c in counts), indexing="ij"), -1).reshape(-1, self.p)
        offsets = np.einsum("cp,...pd->...cd", corners.astype(float), self.lattice)
        points = offsets[..., :, None, :] + self.points[..., None, :, :]
        points = points.reshape(points.shape[:-3] + (-1, self.d))
        blocks = []
        for b in self.blocks:
            image = corners[:, None, None, :] + b.shifts  # (c, m, k, p)
            shifts, home = image // counts, image % counts
            nodes = np.ravel_multi_index(tuple(np.moveaxis(home, -1, 0)), counts) * self.n + b.nodes
            props = {}
            for name, value in b.props.items():
                axis = value.ndim - tail(name)
                whole = np.broadcast_to(value, value.shape[:axis] + (len(b),) + value.shape[axis + 1 :])
                props[name] = np.concatenate([whole] * len(corners), axis=axis)
            k = b.nodes.shape[1]
            blocks.append(Block(b.kind, nodes.reshape(-1, k), shifts.reshape(-1, k, self.p), props))
        lattice = self.lattice * np.asarray(counts, float)[:, None]
        return dataclasses.replace(
            self, points=points, lattice=lattice, blocks=tuple(blocks), solid=self.solid * len(corners)
        )

    def rotated(self, R: ArrayLike) -> UnitCell:
        """Return the cell turned by the rotation R (d, d); a sheet only turns about axis 3."""
        turn = np.asarray(R, float)
        if turn.shape != (self.d, self.d) or not np.allclose(turn @ turn.T, np.eye(self.d), atol=1e-12):
            raise InputError(f"Rotation of shape {turn.shape}: give an orthogonal {self.d} x {self.d} matrix")
        if np.linalg.det(turn) < 0.0:
            raise InputError("A mirror is no rotation: arms and arcs of walls would stay on their side; give det R = 1")
        if self.kind == "sheet" and not np.isclose(abs(turn[2, 2]), 1.0):
            raise InputError("A sheet lies in the plane of axes 1 and 2: turn it about axis 3 only")
        return dataclasses.replace(self, points=self.points @ turn.T, lattice=self.lattice @ turn.T)

    def scaled(self, factor: float) -> UnitCell:
        """Return the cell with every length, thicknesses too, times `factor`; the parent stays the same."""
        blocks = []
        for b in self.blocks:
            props = {}
            for name, value in b.props.items():
                if b.kind == "bar" and name == "rigidity":
                    power = self.d - 1
                else:
                    power = LENGTH_POWER.get(f"{b.kind}.{name}", LENGTH_POWER.get(name, 0))
                props[name] = value * factor**power
                if name in MATRICES:  # moments and rotations: a length more each
                    each = [1.0, 1.0, factor] if self.d == 2 else [1.0, 1.0, 1.0, factor, factor, factor]
                    size = np.tile(each, value.shape[-1] // len(each))
                    props[name] = value * size[:, None] * size * factor ** (self.d - 2)
            blocks.append(dataclasses.replace(b, props=props))
        sheet = self.kind == "sheet"
        return dataclasses.replace(
            self,
            points=self.points * factor,
            lattice=self.lattice * factor,
            blocks=tuple(blocks),
            solid=self.solid * factor**self.d,
            height=self.height * factor if sheet else self.height,
            thinnest=self.thinnest * factor,
        )
