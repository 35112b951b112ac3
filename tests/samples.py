"""Cells for tests: random members of every family, and random cells of every element kind.

Registration is enough: a family in FAMILIES or a kind in ELEMENTS appears here, and so in every invariant test, by
itself. Random numbers come from the generator that the test hands in, with its seed written in the test.
"""

import dataclasses

import numpy as np

from homog.cell import MATRICES, Block, Status, UnitCell, tail
from homog.elements import ELEMENTS
from homog.families import FAMILIES, family
from homog.materials import UNIT


def cases():
    """Return (family identifier, its words) of every family and every choice of its words."""
    found = []
    for name, one in FAMILIES.items():
        words = [{}]
        for p in one.parameters:
            if p.choices:
                words = [{**w, p.name: choice} for w in words for choice in p.choices]
        found += [(name, w) for w in words]
    return found


def case_name(case):
    return "-".join([case[0], *case[1].values()])


def candidates(case, unit):
    """Return parameter values from numbers between 0 and 1, (numeric parameters, count).

    Angles span their range; lengths lie within a factor 2.5 of their default, and what has to be made (thicknesses)
    from a fifteenth to 2.5 times of it: cells that somebody would build, rather than walls of a micrometre on a metre.
    """
    name, words = case
    values = dict(words)
    defaults = {}
    for p, u in zip(numeric(name), unit, strict=True):
        defaults[p.name] = default = defaults[p.default] if isinstance(p.default, str) else p.default
        if p.unit == "deg":
            values[p.name] = p.low + (p.high - p.low) * u
        else:
            low, high = default / (15.0 if p.made else 2.5), default * 2.5
            values[p.name] = np.clip(low * (high / low) ** u, p.low, p.high)
    return values


def numeric(name):
    return [p for p in family(name).parameters if not p.choices]


def possible(case, count, rng, material=UNIT):
    """Return `count` random parameter sets of a case, each a cell that exists."""
    tries = candidates(case, rng.random((len(numeric(case[0])), 60 * count)))
    ok = np.flatnonzero(family(case[0]).build(tries, material).status == Status.OK)[:count]
    assert len(ok) == count, f"{case_name(case)}: only {len(ok)} of {60 * count} random parameter sets are possible"
    return {name: value if isinstance(value, str) else value[ok] for name, value in tries.items()}


PROPS = {  # ranges of the elements' properties for random cells; any other lies between 0.1 and 1
    "thickness": (0.05, 0.2), "diameter": (0.05, 0.2), "poisson": (0.0, 0.45), "arc": (-2.5, 2.5),
    "start_along": (-0.1, 0.1), "start_across": (-0.1, 0.1), "end_along": (-0.1, 0.1), "end_across": (-0.1, 0.1),
    "start_compliance": (0.0, 1e4), "end_compliance": (0.0, 1e4),
}  # fmt: skip
STIFFENERS = ("modulus", "rigidity", "stiffness", "weight")


def nodes_of(kind):
    """Return how many nodes a kind joins here: one more than the least, where it may have more."""
    return ELEMENTS[kind].nodes + ELEMENTS[kind].more


def strains_of(kind, d):
    """Return the names of the strains of an element of `nodes_of(kind)` nodes in d dimensions."""
    e = ELEMENTS[kind]
    strains = e.strains_in_space if d == 3 and e.strains_in_space else e.strains
    return strains * (nodes_of(kind) - 1) if e.more else strains


def random_props(kind, shape, rng, *, d, optional=True):
    """Return every property of an element kind at random, arrays of `shape`, (*shape, s, s) for matrices."""
    e = ELEMENTS[kind]
    props = {}
    for name in e.required + e.optional * optional:
        if name in MATRICES:
            s = len(strains_of(kind, d))
            root = rng.uniform(-0.5, 0.5, (*np.atleast_1d(shape), s, s)) + np.eye(s)
            props[name] = root @ np.swapaxes(root, -1, -2) + 0.1 * np.eye(s)
        else:
            props[name] = rng.uniform(*PROPS.get(name, (0.1, 1.0)), shape)
    return props


def random_cell(d, p, kinds, rng, *, points=3, members=(), optional=True):
    """Return a batch of cells in which elements of the given kinds join random images of random points.

    Any element may join a point to its own image, and points without a rotation may meet points that have one: the
    last point is kept for kinds that do not turn, where the cell holds both.
    """
    n = points
    x = rng.uniform(0.0, 1.0, (*members, n, d))
    lattice = np.eye(p, d) + 0.3 * rng.uniform(-1.0, 1.0, (*members, p, d))
    if p < d:
        lattice[..., p:] = 0.0
    blocks = []
    turning = [ELEMENTS[kind].turns for kind in kinds]
    for kind, turns in zip(kinds, turning, strict=True):
        reach = n - 1 if turns and not all(turning) else n
        m = 6 * n
        k = nodes_of(kind)
        nodes, shifts = np.zeros((m, k), int), np.zeros((m, k, p), int)
        for i in range(m):
            while True:
                nodes[i] = rng.integers(0, reach, k)
                nodes[i, 0] = i % reach
                shifts[i] = rng.integers(-1, 2, (k, p))
                places = len(np.unique(np.column_stack([nodes[i], shifts[i]]), axis=0))
                if places == k and np.bincount(nodes[i]).max() < 3:  # three images of a point may lie in line
                    break
        blocks.append(Block(kind, nodes, shifts, random_props(kind, (*members, m), rng, d=d, optional=optional)))
    return UnitCell(x, lattice, tuple(blocks))


# the same lattice, written down differently --------------------------------------------------------------------------


def with_props(cell, b, **props):
    """Return the cell with properties of its block number `b` replaced."""
    blocks = list(cell.blocks)
    blocks[b] = dataclasses.replace(blocks[b], props={**blocks[b].props, **props})
    return dataclasses.replace(cell, blocks=tuple(blocks))


def repeated(cell, count):
    """Return a batch of `count` equal cells."""
    return dataclasses.replace(cell, points=np.broadcast_to(cell.points, (count, *cell.points.shape)))


def pinned(cell):
    """Return the cell with its walls, struts and bars as pin-jointed bars of unit stiffness EA, and nothing else."""
    ones = {"rigidity": np.ones(1)}
    blocks = [Block("bar", b.nodes, b.shifts, ones) for b in cell.blocks if b.kind in ("wall", "strut", "bar")]
    return dataclasses.replace(cell, blocks=tuple(blocks))


def rebased(cell, change):
    """Return the cell with the lattice vectors change @ lattice, `change` an integer matrix of determinant +-1."""
    back = np.round(np.linalg.inv(change)).astype(int)
    assert (back @ change == np.eye(cell.p)).all()
    blocks = tuple(dataclasses.replace(b, shifts=b.shifts @ back) for b in cell.blocks)
    return dataclasses.replace(cell, lattice=change @ cell.lattice, blocks=blocks)


def reimaged(cell, moves):
    """Return the cell in which point i is represented by its image `moves[i]`, integers (n, p)."""
    blocks = tuple(dataclasses.replace(b, shifts=b.shifts - moves[b.nodes]) for b in cell.blocks)
    return dataclasses.replace(cell, points=cell.points + moves @ cell.lattice, blocks=blocks)


def reordered(cell, rng):
    """Return the cell with its points, blocks and elements in another order."""
    order = rng.permutation(cell.n)
    place = np.argsort(order)
    blocks = []
    for b in cell.blocks:
        pick = rng.permutation(len(b))
        props = {}
        for name, v in b.props.items():
            axis = v.ndim - tail(name)
            props[name] = np.take(np.broadcast_to(v, (*v.shape[:axis], len(b), *v.shape[axis + 1 :])), pick, axis)
        blocks.append(Block(b.kind, place[b.nodes[pick]], b.shifts[pick], props))
    return dataclasses.replace(cell, points=cell.points[..., order, :], blocks=tuple(blocks[::-1]))


def halved(cell):
    """Return the cell with a node in the middle of every wall and strut, curved and on arms though it may be."""
    points, blocks = [np.broadcast_to(cell.points, (*cell.shape, cell.n, cell.d))], []
    count = cell.n
    for b in cell.blocks:
        if b.kind not in ("wall", "strut"):
            blocks.append(b)
            continue
        m = len(b)
        x = cell.points[..., b.nodes, :] + np.einsum("mkp,...pd->...mkd", b.shifts, cell.lattice)
        zero = np.zeros((*cell.shape, m))
        p = {name: zero + value for name, value in b.props.items()}

        def arm(axis, along, across, p=p, zero=zero):
            return p.get(along, zero)[..., None] * axis + p.get(across, zero)[..., None] * _left(axis)

        start, end = x[..., 0, :], x[..., 1, :]
        middle = (start + end) / 2.0
        first, second = dict(p), dict(p)
        if b.kind == "wall":
            axis = _unit(end - start)
            o0, o1 = arm(axis, "start_along", "start_across"), arm(axis, "end_along", "end_across")
            chord = end + o1 - start - o0
            # the middle of an arc lies L/2 tan(arc/4) to the left of its chord
            middle = start + o0 + chord / 2.0 + _left(chord) / 2.0 * np.tan(p.get("arc", zero) / 4.0)[..., None]
            for half, axis, begin, finish in ((first, _unit(middle - start), o0, None),
                                              (second, _unit(end - middle), None, o1)):  # fmt: skip
                for name, o in (("start", begin), ("end", finish)):
                    half[f"{name}_along"] = zero if o is None else (o * axis).sum(-1)
                    half[f"{name}_across"] = zero if o is None else (o * _left(axis)).sum(-1)
            first["arc"] = second["arc"] = p.get("arc", zero) / 2.0
        first["end_compliance"] = second["start_compliance"] = zero
        first.setdefault("start_compliance", zero)
        second.setdefault("end_compliance", zero)
        new = count + np.arange(m)
        home = np.zeros((m, cell.p), int)
        count += m
        points.append(middle)
        blocks.append(Block(b.kind, np.stack([b.nodes[:, 0], new], 1), np.stack([b.shifts[:, 0], home], 1), first))
        blocks.append(Block(b.kind, np.stack([new, b.nodes[:, 1]], 1), np.stack([home, b.shifts[:, 1]], 1), second))
    return dataclasses.replace(cell, points=np.concatenate(points, axis=-2), blocks=tuple(blocks))


def _unit(v):
    return v / np.linalg.norm(v, axis=-1, keepdims=True)


def _left(v):
    return np.stack([-v[..., 1], v[..., 0]], -1)
