"""What must hold for every cell: one set of invariants over every registered family and every element kind.

A new family or element kind is tested here by being registered. Where a random number decides, its generator starts
from a seed that was drawn once and is written down; Hypothesis draws its own.
"""

import dataclasses
import functools
import zlib

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from samples import (
    ELEMENTS,
    STIFFENERS,
    candidates,
    case_name,
    cases,
    halved,
    numeric,
    possible,
    random_cell,
    rebased,
    reimaged,
    reordered,
    repeated,
    with_props,
)

from homog import effective
from homog.cell import MATRICES, Status, tail
from homog.effective import homogenize
from homog.families import build, family
from homog.materials import UNIT
from homog.reference import reference_stiffness
from homog.tensors import mandel_rotation, rotation

SEED = 730_518_264
MEMBERS = 6
MODEL = "timoshenko"

# Relative error of a component, against sqrt(C_ii C_jj). Round-off of the condensation is about 1e-16 (l/t)^2, a few
# 1e-10 at the most slender walls drawn here (t/l = 0.003); the unlike paths compared below lose a digit or two more.
CLOSE = 1e-7


def kinds(d):
    return [kind for kind, e in ELEMENTS.items() if d in e.dimensions]


RANDOM = {
    "random-planar": (2, 2, kinds(2)),
    "random-sheet": (3, 2, kinds(3)),
    "random-spatial": (3, 3, kinds(3)),
    "random-walls": (2, 2, ["wall"]),
    "random-strut-sheet": (3, 2, ["strut"]),
}
CASES = {case_name(case): case for case in cases()}
SUBJECTS = [*CASES, *RANDOM]


def kinds_of(name):
    """Return the element kinds of a subject."""
    if name in RANDOM:
        return set(RANDOM[name][2])
    return {block.kind for block in build(CASES[name][0], **CASES[name][1]).blocks}


@functools.cache
def subject(name):
    """Return a batch of random cells and the stiffness that the fast path gives them."""
    rng = np.random.default_rng([SEED, zlib.crc32(name.encode())])  # its own, whatever else is registered
    if name in CASES:
        cell = build(CASES[name][0], **possible(CASES[name], MEMBERS, rng))
    else:
        cell = random_cell(*RANDOM[name], rng, members=(MEMBERS,))
    found = homogenize(cell, model=MODEL)
    assert (found.status == Status.OK).all() and (found.mechanisms == 0).all()
    return cell, found.stiffness, rng


def error(C, expected):
    """Return the largest error of a component, relative to the geometric mean of its row's and column's diagonal."""
    size = np.sqrt(np.diagonal(expected, axis1=-2, axis2=-1))
    return float(np.abs((C - expected) / (size[..., :, None] * size[..., None, :])).max())


def stiffness(cell):
    return homogenize(cell, model=MODEL).stiffness


over_everything = pytest.mark.parametrize("name", SUBJECTS)


@over_everything
def test_symmetric_and_positive(name):
    _, C, _ = subject(name)
    np.testing.assert_array_equal(C, np.swapaxes(C, -1, -2))
    values = np.linalg.eigvalsh(C)
    assert (values > 0.0).all()


@over_everything
def test_unchanged_by_supercell(name):
    cell, C, _ = subject(name)
    for counts in ((2, 1, 1), (1, 3, 1), (1, 2, 2)):
        big = cell.supercell(counts[: cell.p])
        assert error(stiffness(big), C) < CLOSE
        np.testing.assert_allclose(big.relative_density, cell.relative_density, rtol=1e-14)


@over_everything
def test_unchanged_by_the_choice_of_lattice_vectors(name):
    cell, C, _ = subject(name)
    shear = np.eye(3, dtype=int)
    shear[0, 1], shear[2, 0] = 1, -2
    swap = np.eye(3, dtype=int)[[1, 0, 2]]
    for change in (shear, swap, shear @ swap @ shear):
        assert error(stiffness(rebased(cell, change[: cell.p, : cell.p])), C) < CLOSE


@over_everything
def test_unchanged_by_origin(name):
    cell, C, rng = subject(name)
    away = 7.0 * rng.standard_normal(cell.d) * np.abs(cell.lattice).max()  # for a sheet along axis 3 too
    assert error(stiffness(dataclasses.replace(cell, points=cell.points + away)), C) < CLOSE


@over_everything
def test_unchanged_by_the_image_that_stands_for_a_point(name):
    cell, C, rng = subject(name)
    assert error(stiffness(reimaged(cell, rng.integers(-2, 3, (cell.n, cell.p)))), C) < CLOSE


@over_everything
def test_unchanged_by_the_order_of_nodes_and_elements(name):
    cell, C, rng = subject(name)
    for _ in range(2):  # another node is first, and held
        assert error(stiffness(reordered(cell, rng)), C) < CLOSE


@over_everything
def test_turns_as_a_tensor(name):
    cell, C, rng = subject(name)
    angle = rng.uniform(-180.0, 180.0)
    if cell.kind == "planar":
        R = turn = rotation(angle)
    elif cell.kind == "sheet":
        R, turn = rotation(angle, axis=[0, 0, 1]), rotation(angle)
    else:
        R = turn = rotation(angle, axis=rng.standard_normal(3))
    Q = mandel_rotation(turn, sheet=cell.kind == "sheet")
    assert error(stiffness(cell.rotated(R)), Q @ C @ Q.T) < CLOSE


@over_everything
def test_grows_with_size(name):
    # stress over strain has no length in it; a sheet's A counts one length, B two and D three
    cell, C, rng = subject(name)
    s = rng.uniform(2.0, 5.0)
    power = np.ones((6, 6))
    power[:3, 3:] = power[3:, :3] = 2.0
    power[3:, 3:] = 3.0
    expected = C * s**power if cell.kind == "sheet" else C
    big = cell.scaled(s)
    assert error(stiffness(big), expected) < CLOSE
    np.testing.assert_allclose(big.relative_density, cell.relative_density, rtol=1e-12)


SPATIAL_QUARTERS = [rotation(90.0, axis=axis) for axis in np.eye(3)]
PLANE_MIRRORS = [np.diag([-1.0, 1.0])]
SPATIAL_MIRRORS = [np.diag(1.0 - 2.0 * axis) for axis in np.eye(3)]
TURNS = {  # (symmetry, dimension of the tensors) -> orthogonal matrices that leave the stiffness as it is
    ("general", 2): [],
    ("general", 3): [],
    ("orthotropic", 2): PLANE_MIRRORS,
    ("orthotropic", 3): SPATIAL_MIRRORS,
    ("square", 2): [*PLANE_MIRRORS, rotation(90.0)],
    ("isotropic", 2): [*PLANE_MIRRORS, rotation(25.0), rotation(71.3)],
    ("cubic", 3): [*SPATIAL_MIRRORS, *SPATIAL_QUARTERS],
}


def asymmetry(C, kind, symmetry):
    sheet = kind == "sheet"
    changes = [mandel_rotation(R, sheet=sheet) for R in TURNS[symmetry, 3 if kind == "spatial" else 2]]
    return max((error(Q @ C @ Q.T, C) for Q in changes), default=0.0)


@pytest.mark.parametrize("name", CASES)
def test_has_its_declared_symmetry(name):
    cell, C, _ = subject(name)
    assert asymmetry(C, cell.kind, family(CASES[name][0]).symmetry) < CLOSE


@pytest.mark.parametrize(("name", "symmetry"), [
    ("random-planar", "orthotropic"), ("random-sheet", "orthotropic"), ("random-spatial", "orthotropic"),
    ("reentrant-honeycomb", "square"), ("reentrant-honeycomb", "isotropic"), ("square-grid", "isotropic"),
    ("random-spatial", "cubic"),
])  # fmt: skip
def test_a_wrong_symmetry_is_seen(name, symmetry):
    cell, C, _ = subject(name)
    assert asymmetry(C, cell.kind, symmetry) > 1e-3


@over_everything
def test_batch_is_a_loop(name):
    cell, C, _ = subject(name)
    for i in range(MEMBERS):
        assert error(stiffness(cell.at(i)), C[i]) < 1e-12  # the same arithmetic; sines may differ in the last digit
    block = cell.at(np.arange(MEMBERS).reshape(2, 3))
    assert block.shape == (2, 3) and error(stiffness(block), C.reshape(2, 3, *C.shape[1:])) < 1e-12


@over_everything
def test_sparse_path_is_the_dense_one(name, monkeypatch):
    cell, C, _ = subject(name)
    monkeypatch.setattr(effective, "DENSE_LIMIT", 0)
    found = homogenize(cell, model=MODEL)
    assert error(found.stiffness, C) < CLOSE
    assert (found.mechanisms == 0).all()


@pytest.mark.parametrize("name", CASES)
def test_thousands_of_nodes(name):
    cell, C, _ = subject(name)
    repeats = 8 if cell.p == 3 else int(np.ceil(np.sqrt(2000 / cell.n)))
    big = cell.at(0).supercell((repeats,) * cell.p)
    found = homogenize(big, model=MODEL)
    # a soft mode of wavelength N cells is N^2 softer, and its share of the round-off as much larger
    assert error(found.stiffness, C[0]) < 10.0 * CLOSE
    assert found.mechanisms == 0


@pytest.mark.parametrize("model", ["euler", "timoshenko"])
@over_everything
def test_fast_is_the_reference(name, model):
    cell, _, _ = subject(name)
    C = homogenize(cell, model=model).stiffness
    for i in range(MEMBERS):
        expected, null = reference_stiffness(cell.at(i), model)
        assert error(C[i], expected) < CLOSE
        assert null == 0


@over_everything
def test_stiffening_an_element_never_softens(name):
    cell, C, rng = subject(name)
    one, size, gained = cell.at(0), np.sqrt(np.diagonal(C[0])), 0.0
    for b, block in enumerate(one.blocks):
        stiffer = repeated(one, len(block))
        for prop in STIFFENERS:
            if prop in block.props:
                factor = 1.0 + np.diag(rng.uniform(0.2, 3.0, len(block)))  # member i: element i alone is stiffened
                if prop in MATRICES:
                    factor = factor[..., None, None]
                stiffer = with_props(stiffer, b, **{prop: block.props[prop] * factor})
        values = np.linalg.eigvalsh((stiffness(stiffer) - C[0]) / np.outer(size, size))
        assert values.min() > -CLOSE
        gained = max(gained, values.max())
    assert gained > 1e-2  # and some element counts


@over_everything
def test_linear_in_the_parent_modulus(name):
    cell, C, rng = subject(name)
    factor = rng.uniform(2.0, 5e4)
    if name in CASES:
        stiff = family(CASES[name][0]).build(cell_parameters(cell), dataclasses.replace(UNIT, modulus_MPa=factor))
    else:
        stiff = cell
        for b, block in enumerate(cell.blocks):
            power = {p: 1.0 if p in STIFFENERS else -1.0 if "compliance" in p else 0.0 for p in block.props}
            stiff = with_props(stiff, b, **{p: value * factor ** power[p] for p, value in block.props.items()})
    assert error(stiffness(stiff) / factor, C) < CLOSE


def cell_parameters(cell):
    return {k: v if v.dtype.kind == "f" else str(np.ravel(v)[0]) for k, v in cell.parameters.items()}


@pytest.mark.parametrize("model", ["euler", "timoshenko"])
@pytest.mark.parametrize("name", [name for name in SUBJECTS if {"wall", "strut"} & kinds_of(name)])
def test_a_node_in_the_middle_of_a_wall_changes_nothing(name, model):
    cell, _, _ = subject(name)
    cut = halved(cell)
    assert cut.n > cell.n
    assert error(homogenize(cut, model=model).stiffness, homogenize(cell, model=model).stiffness) < CLOSE


def spoiled(cell, bad):
    """Yield (what, cell) in which member `bad` alone has a value that is not finite, or lattice vectors in line."""
    for what in ("points", "lattice"):
        for value in (np.nan, np.inf):
            array = np.broadcast_to(getattr(cell, what), (MEMBERS, *getattr(cell, what).shape[-2:])).copy()
            array[bad, -1, 0] = value
            yield f"{what} {value}", dataclasses.replace(cell, **{what: array})
    for b, block in enumerate(cell.blocks):
        for prop in block.props:
            value = block.props[prop]
            array = np.broadcast_to(value, (MEMBERS, len(block), *value.shape[value.ndim + 1 - tail(prop) :])).copy()
            array[bad, 0] = np.nan
            yield f"{block.kind} {prop}", with_props(cell, b, **{prop: array})
    flat = np.broadcast_to(cell.lattice, (MEMBERS, *cell.lattice.shape[-2:])).copy()
    flat[bad, 1] = flat[bad, 0]
    yield "lattice vectors parallel", dataclasses.replace(cell, lattice=flat)
    status = np.zeros(MEMBERS, np.int8)
    status[bad] = Status.IMPOSSIBLE
    yield "status", dataclasses.replace(cell, status=status)


@over_everything
def test_a_bad_candidate_leaves_its_neighbours_alone(name):
    cell, C, _ = subject(name)
    found = homogenize(cell, model=MODEL)
    bad = 2
    others = np.arange(MEMBERS) != bad
    for what, worse in spoiled(cell, bad):
        after = homogenize(worse, model=MODEL)
        assert after.status[bad] == Status.IMPOSSIBLE, what
        assert np.isnan(after.stiffness[bad]).all() and np.isnan(after.relative_density[bad]), what
        assert after.mechanisms[bad] == 0, what
        for field in ("stiffness", "relative_density", "mechanisms", "status"):  # to the last bit
            np.testing.assert_array_equal(getattr(after, field)[others], getattr(found, field)[others], err_msg=what)


@pytest.mark.parametrize("name", CASES)
def test_an_impossible_candidate_leaves_its_neighbours_alone(name):
    name, words = CASES[name]
    rng = np.random.default_rng([SEED, 2])
    every = {**words, **candidates((name, words), rng.random((len(numeric(name)), 400)))}
    mixed = family(name).build(every, UNIT)
    good = np.flatnonzero(mixed.status == Status.OK)
    found = homogenize(mixed, model=MODEL)
    assert (found.status[good] == Status.OK).all() and (found.status == mixed.status).all()
    alone = family(name).build({k: v if isinstance(v, str) else v[good] for k, v in every.items()}, UNIT)
    assert error(homogenize(alone, model=MODEL).stiffness, found.stiffness[good]) < 1e-12


@pytest.mark.parametrize("name", CASES)
def test_any_member_of_a_family(name):
    case = CASES[name]

    @settings(max_examples=25, deadline=None)
    @given(unit=st.tuples(*[st.floats(0.0, 1.0)] * len(numeric(case[0]))))
    def check(unit):
        cell = family(case[0]).build(candidates(case, np.array(unit)[:, None]), UNIT)
        assume(cell.status[0] == Status.OK)
        found = homogenize(cell, model=MODEL)
        expected, null = reference_stiffness(cell.at(0), MODEL)
        assert found.status[0] == Status.OK and found.mechanisms[0] == null == 0
        assert error(found.stiffness[0], expected) < 1e-6  # corners of the ranges: t/l down to 0.001
        assert 0.0 < found.relative_density[0] < 1.0

    check()
