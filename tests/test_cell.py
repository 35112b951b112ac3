"""Blocks and unit cells: what they refuse, what they keep, and what their operations return."""

import dataclasses

import numpy as np
import pytest
from samples import case_name, cases, possible, repeated, with_props

from homog import effective
from homog.cell import KINDS, Block, Status, UnitCell
from homog.effective import homogenize
from homog.errors import GeometryError, InputError
from homog.families import build
from homog.materials import UNIT, Material
from homog.tensors import rotation

SEED = 254_071_936
BAR = Block("bar", [[0, 0], [0, 0]], [[[0, 0], [1, 0]], [[0, 0], [0, 1]]], {"rigidity": [1.0, 2.0]})


def square(**changes):
    return UnitCell(**{"points": [[0.0, 0.0]], "lattice": 10.0 * np.eye(2), "blocks": (BAR,), **changes})


# construction ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("nodes", "shifts"), [
    ([0, 1], [[[0, 0], [0, 0]]]),  # no element axis
    ([[0, 1]], [[0, 0]]),  # no direction axis
    ([[0, 1]], [[[0, 0]]]),  # a shift too few
    ([[0, 1], [1, 0]], [[[0, 0], [1, 0]]]),  # an element too few
])  # fmt: skip
def test_nodes_and_shifts_must_fit(nodes, shifts):
    with pytest.raises(
        InputError, match=r"Block 'bar': nodes \(.*\) and shifts \(.*\) must be \(m, k\) and \(m, k, p\)"
    ):
        Block("bar", nodes, shifts)


@pytest.mark.parametrize(("points", "lattice"), [
    (np.zeros(2), np.eye(2)),
    (np.zeros((1, 2)), np.eye(3)),
    (np.zeros((1, 3)), np.eye(2)),
    (np.zeros((1, 2)), np.eye(1, 2)),
    (np.zeros((1, 3)), np.eye(1, 3)),
    (np.zeros((1, 4)), np.eye(4)),
])  # fmt: skip
def test_points_and_lattice_must_fit(points, lattice):
    with pytest.raises(InputError, match=r"Unit cell with points .* and lattice .*: allowed are \(\.\.\., n, 2\)"):
        UnitCell(points, lattice, ())


@pytest.mark.parametrize(("d", "p"), KINDS)
def test_kinds(d, p):
    cell = UnitCell(np.zeros((1, d)), np.eye(p, d), ())
    assert (cell.kind, cell.d, cell.p, cell.n, cell.shape) == (KINDS[d, p], d, p, 1, ())
    assert cell.volume == 1.0


@pytest.mark.parametrize(("blocks", "words"), [
    ((Block("bar", [[0, 0]], np.zeros((1, 2, 3)), {}),), "'bar': shifts have 3 periodic directions, the cell has 2"),
    ((Block("bar", [[0, 1]], np.zeros((1, 2, 2)), {}),), "Block 'bar': node 1 is outside 0 to 0"),
    ((), "Point 0 belongs to no element; remove it or join it"),
])  # fmt: skip
def test_check_tells_what_is_unsound(blocks, words):
    cell = square(blocks=blocks)
    for call in (cell.check, lambda: homogenize(cell)):
        with pytest.raises(InputError, match=words):
            call()


def test_check_names_the_unused_point():
    with pytest.raises(InputError, match="Point 2 belongs to no element"):
        UnitCell(np.eye(4, 2), np.eye(2), (Block("bar", [[0, 1], [1, 3]], np.zeros((2, 2, 2)), {}),)).check()


def test_check_returns_a_sound_cell():
    cell = square()
    assert cell.check() is cell


def test_kind_and_properties_are_checked_before_anything_is_computed():
    with pytest.raises(InputError, match="Unknown element kind 'rod'"):
        homogenize(square(blocks=(Block("rod", BAR.nodes, BAR.shifts, {}),)))
    with pytest.raises(InputError, match="'bar' needs the property 'rigidity'"):
        homogenize(square(blocks=(Block("bar", BAR.nodes, BAR.shifts, {}),)))
    with pytest.raises(InputError, match="Unknown model 'timo'"):
        homogenize(square(), model="timo")


def test_a_single_impossible_cell_is_an_error():
    with pytest.raises(GeometryError, match="not finite or walls of no length"):
        homogenize(square(points=[[np.nan, 0.0]]))
    with pytest.raises(GeometryError, match="not finite or walls of no length"):
        homogenize(square(lattice=np.ones((2, 2))))


# arrays stay as they are -----------------------------------------------------------------------------------------


def arrays(cell):
    yield from (
        getattr(cell, name) for name in ("points", "lattice", "solid", "slenderness", "height", "thinnest", "status")
    )
    for block in cell.blocks:
        yield from (block.nodes, block.shifts, *block.props.values())


def test_arrays_are_read_only():
    for array in arrays(build("reentrant-honeycomb", angle=[-40.0, -20.0])):
        with pytest.raises(ValueError, match="read-only"):
            array[...] = 0
    with pytest.raises(TypeError):
        BAR.props["rigidity"] = 1.0
    with pytest.raises(dataclasses.FrozenInstanceError):
        square().points = 1.0


def test_the_callers_arrays_stay_writable_and_his_dictionary_his_own():
    points, props = np.zeros((1, 2)), {"rigidity": np.ones(2)}
    block = Block("bar", BAR.nodes, BAR.shifts, props)
    square(points=points, blocks=(block,))
    points[0, 0] = 3.0
    props["more"] = np.ones(2)
    assert "more" not in block.props


def test_integers_and_floats():
    cell = square(points=[[0, 0]], lattice=[[10, 0], [0, 10]])
    assert cell.points.dtype == cell.lattice.dtype == cell.solid.dtype == np.float64
    assert BAR.nodes.dtype == BAR.shifts.dtype == np.int64
    assert len(BAR) == 2


# batches ---------------------------------------------------------------------------------------------------------


def test_shape_comes_from_whatever_carries_a_batch():
    assert square().shape == ()
    assert square(points=np.zeros((5, 1, 2))).shape == (5,)
    assert square(lattice=np.broadcast_to(np.eye(2), (5, 2, 2))).shape == (5,)
    assert square(status=np.zeros(5)).shape == (5,)
    assert with_props(square(), 0, rigidity=np.ones((5, 2))).shape == (5,)
    assert with_props(square(points=np.zeros((3, 1, 1, 2))), 0, rigidity=np.ones((5, 2))).shape == (3, 5)


@pytest.mark.parametrize("case", cases(), ids=case_name)
def test_a_batch_over_properties_alone(case):
    # topology and geometry shared, stiffness swept: the same as a loop
    cell = build(case[0], **case[1])
    factor = np.array([0.5, 1.0, 2.0])
    for b, block in enumerate(cell.blocks):
        for name in ("modulus", "rigidity", "stiffness"):
            if name in block.props:
                swept = with_props(cell, b, **{name: block.props[name] * factor[:, None]})
                whole = with_props(repeated(cell, 3), b, **{name: block.props[name] * factor[:, None]})
                assert swept.shape == (3,) and swept.points.ndim == 2
                np.testing.assert_array_equal(homogenize(swept).stiffness, homogenize(whole).stiffness)


def test_at_picks_members():
    cell = build("reentrant-honeycomb", angle=[-40.0, -30.0, -20.0], thickness=[[0.5], [1.0]])
    assert cell.shape == (2, 3)
    one = cell.at((1, 2))
    alone = build("reentrant-honeycomb", angle=-20.0, thickness=1.0)
    assert one.shape == () and one.family == "reentrant-honeycomb"
    for name in ("points", "lattice", "solid", "slenderness", "thinnest"):
        np.testing.assert_allclose(getattr(one, name), getattr(alone, name), rtol=1e-14)
    assert {k: float(v) for k, v in one.parameters.items()} == {k: float(v) for k, v in alone.parameters.items()}
    assert cell.at(1).shape == (3,)
    assert cell.at((slice(None), [0, 0])).shape == (2, 2)
    assert cell.at(np.array([[True, False, True], [False, False, False]])).shape == (2,)
    assert alone.at(None).shape == (1,)


def test_a_batch_longer_than_a_chunk(monkeypatch):
    monkeypatch.setattr(effective, "CHUNK_ROWS", 50 * 10)
    thickness = np.linspace(0.3, 2.0, 333)
    cell = build("reentrant-honeycomb", thickness=thickness)
    found = homogenize(cell)
    for i in (0, 49, 50, 51, 332):
        alone = homogenize(cell.at(i)).stiffness  # coupling is round-off of the joint tables here
        np.testing.assert_allclose(found.stiffness[i], alone, rtol=1e-12, atol=1e-14 * alone.max())
    lone = homogenize(dataclasses.replace(cell.at(7), status=np.zeros(120, np.int8)))  # nothing but the status differs
    np.testing.assert_allclose(lone.stiffness, np.broadcast_to(found.stiffness[7], (120, 3, 3)), rtol=1e-12, atol=1e-14)


def test_an_empty_batch_stays_empty():
    cell = build("square-grid", thickness=[1.0, 2.0]).at(slice(0, 0))
    found = homogenize(cell)
    assert found.stiffness.shape == (0, 3, 3) and found.status.shape == (0,)


def test_a_block_without_elements_does_nothing():
    empty = Block("bar", np.zeros((0, 2)), np.zeros((0, 2, 2)), {"rigidity": np.zeros(0)})
    cell = build("square-grid")
    both = dataclasses.replace(cell, blocks=(*cell.blocks, empty))
    np.testing.assert_array_equal(homogenize(both).stiffness, homogenize(cell).stiffness)


# measures --------------------------------------------------------------------------------------------------------


def test_volume_density_and_size():
    lattice = np.array([[3.0, 1.0], [-3.0, 1.0]])
    cell = square(lattice=lattice, solid=1.5)
    assert cell.volume == pytest.approx(6.0, rel=1e-15)
    assert cell.relative_density == pytest.approx(0.25, rel=1e-15)
    np.testing.assert_allclose(cell.size, [6.0, 2.0])  # the centred rectangle
    assert np.isnan(square().relative_density)  # not known
    sheet = UnitCell(np.zeros((1, 3)), [[2.0, 0, 0], [1.0, 3.0, 0]], (), solid=1.2, height=4.0)
    assert sheet.volume == pytest.approx(6.0) and sheet.relative_density == pytest.approx(0.05)
    space = UnitCell(np.zeros((1, 3)), [[0, 1.0, 1.0], [1.0, 0, 1.0], [1.0, 1.0, 0]], (), solid=0.5)
    assert space.volume == pytest.approx(2.0) and space.relative_density == pytest.approx(0.25)


# operations ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("case", cases(), ids=case_name)
def test_supercell_repeats_everything(case):
    rng = np.random.default_rng(SEED)
    cell = build(case[0], **possible(case, 2, rng))
    counts = (2, 3, 2)[: cell.p]
    repeats = int(np.prod(counts))
    big = cell.supercell(counts).check()
    assert big.n == repeats * cell.n
    np.testing.assert_allclose(big.volume, repeats * cell.volume, rtol=1e-12)
    for block, many in zip(cell.blocks, big.blocks, strict=True):
        assert len(many) == repeats * len(block)

        def lengths(one, b):  # of every element's sides
            x = one.points[:, b.nodes] + np.einsum("mkp,cpd->cmkd", b.shifts, one.lattice)
            return np.sort(np.linalg.norm(np.diff(x, axis=2), axis=-1).reshape(2, -1), axis=1)

        np.testing.assert_allclose(lengths(big, many), np.repeat(lengths(cell, block), repeats, axis=1), rtol=1e-11)
        for name, value in block.props.items():
            whole = np.broadcast_to(value, (*value.shape[:-1], len(block))).sum(axis=-1)
            np.testing.assert_allclose(many.props[name].sum(axis=-1), repeats * whole, rtol=1e-12)


@pytest.mark.parametrize("counts", [(2,), (2, 2, 2), (0, 2), (-1, 1)])
def test_supercell_refuses(counts):
    with pytest.raises(InputError, match="give 2 whole numbers of at least 1"):
        square().supercell(counts)


def test_an_element_may_join_a_point_to_its_own_image():
    # one point, two bars: stretch along each axis E A/(l area/l) = EA/l per depth, no shear; and so in a supercell,
    # where most bars join different points
    expected = np.diag([0.1, 0.2, 0.0])
    for counts in ((1, 1), (1, 2), (3, 3)):
        found = homogenize(square().supercell(counts).at(None))
        np.testing.assert_allclose(found.stiffness[0], expected, atol=1e-15)
    ring = Block("wall", [[0, 0], [0, 0]], BAR.shifts, {"thickness": 1.0, "modulus": 1.0, "poisson": 0.3})
    # the grid of rigid joints: E t/l and G = t^3/(2 l^3) (Wang & McDowell 2004, from memory; derived)
    found = homogenize(square(blocks=(ring,)), model="euler")
    np.testing.assert_allclose(found.stiffness, np.diag([0.1, 0.1, 2.0 * 0.5e-3]), rtol=1e-12, atol=1e-17)


def test_walls_and_bars_in_one_cell():
    # walls carry joint rotations, bars do not, and share the joints; the pin at the centre has no rotation at all.
    # By symmetry no joint moves under uniform strain, so that walls and braces simply add:
    # E t/l, t^3/(2 l^3) of the grid and C11 = C12 = C66 = EA/(l sqrt2) of the braces (derived; projections of a bar)
    walls = Block("wall", [[0, 0], [0, 0]], BAR.shifts, {"thickness": 1.0, "modulus": 1.0, "poisson": 0.3})
    corners = np.zeros((4, 2, 2), int)
    corners[:, 1] = [[0, 0], [1, 0], [0, 1], [1, 1]]
    rigidity = 0.7
    braces = Block("bar", [[1, 0]] * 4, corners, {"rigidity": rigidity})
    cell = UnitCell([[0.0, 0.0], [5.0, 5.0]], 10.0 * np.eye(2), (walls, braces))
    brace = rigidity / 10.0 / np.sqrt(2.0)
    expected = np.diag([0.1, 0.1, 1e-3]) + brace * np.array([[1, 1, 0], [1, 1, 0], [0, 0, 2.0]])
    found = homogenize(cell, model="euler")
    np.testing.assert_allclose(found.stiffness, expected, rtol=1e-12, atol=1e-16)
    assert found.mechanisms == 0


def test_a_bar_hung_between_walls():
    # a pin in the middle of a cell, on two bars in line with each other, swings; the walls do not notice
    walls = Block("wall", [[0, 0], [0, 0]], BAR.shifts, {"thickness": 1.0, "modulus": 1.0, "poisson": 0.3})
    hung = Block("bar", [[0, 1], [1, 0]], [[[0, 0], [0, 0]], [[0, 0], [1, 1]]], {"rigidity": 0.7})
    cell = UnitCell([[0.0, 0.0], [5.0, 5.0]], 10.0 * np.eye(2), (walls, hung))
    assert homogenize(cell).mechanisms == 1
    assert homogenize(cell).status == Status.OK


@pytest.mark.parametrize(("R", "words"), [
    (np.eye(3), "give an orthogonal 2 x 2 matrix"),
    (np.array([[1.0, 0.1], [0.0, 1.0]]), "give an orthogonal 2 x 2 matrix"),
    (2.0 * np.eye(2), "give an orthogonal 2 x 2 matrix"),
    (np.diag([1.0, -1.0]), "mirror"),  # a mirror: arms and arcs would stay on their side
])  # fmt: skip
def test_rotated_refuses(R, words):
    with pytest.raises(InputError, match=words):
        square().rotated(R)


def test_a_sheet_stays_in_its_plane():
    sheet = build("miura-fold")
    with pytest.raises(InputError, match="turn it about axis 3 only"):
        sheet.rotated(rotation(10.0, axis=[1, 0, 0]))
    turned = sheet.rotated(rotation(10.0, axis=[0, 0, 1]))
    np.testing.assert_allclose(turned.points[:, 2], sheet.points[:, 2], atol=1e-15)


def test_scaled_carries_every_length():
    cell = build("anti-tetrachiral", node="ring")
    big = cell.scaled(3.0)
    np.testing.assert_allclose(big.points, 3.0 * cell.points)
    assert big.solid == pytest.approx(9.0 * cell.solid) and big.thinnest == pytest.approx(3.0 * cell.thinnest)
    props = cell.blocks[0].props
    np.testing.assert_allclose(big.blocks[0].props["thickness"], 3.0 * props["thickness"])
    for same in ("arc", "modulus", "poisson"):
        np.testing.assert_array_equal(big.blocks[0].props[same], props[same])
    sheet = build("miura-fold")
    assert sheet.scaled(2.0).height == pytest.approx(2.0 * sheet.height)
    assert sheet.scaled(2.0).solid == pytest.approx(8.0 * sheet.solid)
    np.testing.assert_allclose(cell.scaled(2.0).scaled(0.5).points, cell.points, rtol=1e-15)


def test_operations_leave_the_cell_alone():
    cell = build("anti-tetrachiral", ligament_x=[10.0, 12.0])
    before = [array.copy() for array in arrays(cell)]
    cell.supercell((2, 2)), cell.rotated(rotation(30.0)), cell.scaled(2.0), cell.at(0), homogenize(cell)
    for was, now in zip(before, arrays(cell), strict=True):
        np.testing.assert_array_equal(was, now)


def test_the_parent_goes_along():
    material = Material("test", modulus_MPa=1700.0, poisson=0.4, density_kg_m3=950.0)
    cell = build("octet", material=material)
    for other in (cell.supercell((2, 1, 1)), cell.scaled(2.0), cell.at(None)):
        assert other.parent == material
    assert build("octet").parent == UNIT
