"""Motions that cost nothing are found by rank, counted, and named where they drive a uniform strain; soft ones are not
mistaken for them, in whatever units, orders and paths."""

import dataclasses

import numpy as np
import pytest
from samples import STIFFENERS, case_name, cases, numeric, pinned, random_cell, reordered, repeated, with_props

from homog import effective
from homog.cell import Block, Status, UnitCell
from homog.effective import homogenize, soft_mode
from homog.errors import InputError, MechanismError
from homog.families import build
from homog.reference import reference_stiffness, strain_matrix
from homog.tensors import isotropic, rotation

SEED = 88_042_617

# mechanisms of one cell on pins: motions of its nodes, and free uniform strains
PINNED = {
    "square-grid": 1,  # shear along the walls
    "kagome-grid": 1,  # turning triangles, at no uniform strain
    "hexagonal-honeycomb": 2,  # both shears: only area costs
    "reentrant-honeycomb": 2,
    "arrowhead": 1,
    "triangular-grid": 0,
    "octet": 0,
    "rotating-squares": 1,  # area, nu = -1
    "rotating-triangles": 1,
    "miura-fold": 3,  # the three soft macroscopic modes of any triangulated periodic sheet
}


def both_paths(cell, monkeypatch):
    """Yield what the dense and the sparse path find; the cell goes in as a batch of one, so that nothing is raised."""
    for limit in (10**6, 0):
        monkeypatch.setattr(effective, "DENSE_LIMIT", limit)
        yield homogenize(cell.at(None))


def self_stresses(cell):
    """Return the number of states of self-stress at a free lattice: what is missing from the rank of all strains."""
    B, affine = strain_matrix(cell, "euler")
    M = np.hstack([B, affine])
    return len(M) - np.linalg.matrix_rank(M)


@pytest.mark.parametrize("name", PINNED)
def test_pinned_cells_have_their_mechanisms(name, monkeypatch):
    cell = pinned(build(name))
    for turn in (0.0, 17.3):  # round numbers hide round-off
        turned = cell.rotated(rotation(turn) if cell.d == 2 else rotation(turn, axis=[0, 0, 1]))
        for found in both_paths(turned, monkeypatch):
            assert found.mechanisms[0] == PINNED[name]
        assert reference_stiffness(turned, "euler")[1] == PINNED[name]


@pytest.mark.parametrize("name", PINNED)
def test_count_obeys_maxwell_and_calladine(name):
    # mechanisms - self-stresses = d n + strains - d - b, the lattice free (Calladine 1978; Guest & Hutchinson 2003)
    cell = pinned(build(name))
    b, v = sum(len(block) for block in cell.blocks), 3 if cell.kind == "planar" else 6
    assert homogenize(cell.at(None)).mechanisms[0] - self_stresses(cell) == cell.d * cell.n + v - cell.d - b


def test_two_braced_squares_need_the_rank():
    # corners 4, bars 2 x (4 sides + 1 diagonal): the count says -1, the rank one mechanism and two self-stresses
    cell = build("rotating-squares", opening=25.0)
    bars = next(block for block in cell.blocks if block.kind == "bar")
    keep = [*range(8), 8, 10]  # sides, then one diagonal of each square
    cell = dataclasses.replace(cell, blocks=(Block("bar", bars.nodes[keep], bars.shifts[keep], {"rigidity": 1.0}),))
    assert cell.n == 4 and 2 * cell.n + 3 - 2 - len(keep) == -1
    found = homogenize(cell.at(None))
    assert found.mechanisms[0] == 1 and self_stresses(cell) == 2
    assert found.status[0] == Status.MECHANISM
    assert soft_mode(found.stiffness[0], "planar") == "e11 +1.00 e22 +1.00"


def test_the_pinned_square_shears():
    cell = pinned(build("square-grid"))
    with pytest.raises(MechanismError, match=r"'square-grid' has no resistance to the uniform strain g12 \+1\.00;"):
        homogenize(cell)
    found = homogenize(cell.at(None))
    assert found.status[0] == Status.MECHANISM and found.mechanisms[0] == 1
    np.testing.assert_allclose(found.stiffness[0], np.diag([0.1, 0.1, 0.0]), atol=1e-15)  # EA/l of unit EA, l = 10
    with pytest.raises(MechanismError, match=r"e11 [+-]1\.00 e22 [+-]1\.00;"):
        homogenize(cell.rotated(rotation(45.0)))


def test_pinned_kagome_is_stiff_all_the_same():
    # E = rho/3, nu = 1/3 (Wang & McDowell 2004, J. Eng. Mater. Technol. 126, 137, from memory; confirmed by frames)
    length, t = 10.0, 0.3
    cell = pinned(build("kagome-grid", length=length, thickness=t))
    cell = with_props(cell, 0, rigidity=np.array([t]))
    found = homogenize(cell)  # not raised: every uniform strain is resisted
    assert found.status == Status.OK and found.mechanisms == 1
    density = np.sqrt(3.0) * t / length
    np.testing.assert_allclose(found.stiffness, isotropic(density / 3.0, 1.0 / 3.0, d=2), rtol=0, atol=1e-12 * density)


def test_pinned_hexagon_keeps_only_its_area():
    cell = pinned(build("hexagonal-honeycomb", inclined=10.0, vertical=10.0, angle=30.0)).rotated(rotation(11.0))
    values, vectors = np.linalg.eigh(homogenize(cell.at(None)).stiffness[0])
    np.testing.assert_allclose(values[:2], 0.0, atol=1e-12 * values[2])
    np.testing.assert_allclose(np.abs(vectors[:, 2]), [np.sqrt(0.5), np.sqrt(0.5), 0.0], atol=1e-9)


def test_a_mechanism_in_a_batch_is_told_from_its_neighbours():
    braced = pinned(build("square-grid"))
    diagonals = Block("bar", [[0, 0], [0, 0]], [[[0, 0], [1, 1]], [[1, 0], [0, 1]]], {"rigidity": np.ones(2)})
    braced = dataclasses.replace(braced, blocks=(*braced.blocks, diagonals))
    stiff = np.array([[1.0, 1.0], [0.0, 0.0], [1.0, 0.0]])
    found = homogenize(with_props(repeated(braced, 3), 1, rigidity=stiff))
    assert list(found.status) == [Status.OK, Status.MECHANISM, Status.OK]
    assert list(found.mechanisms) == [0, 1, 0]
    np.testing.assert_array_equal(found.stiffness[0], homogenize(braced).stiffness)
    assert soft_mode(found.stiffness[1], "planar") == "g12 +1.00"


def test_a_floating_point_is_counted():
    # a node on one bar swings about its end; a node that bars pass in line moves across
    square = pinned(build("triangular-grid"))
    points = np.vstack([square.points, [[3.0, 4.0]]])
    dangling = Block("bar", [[0, 1]], np.zeros((1, 2, 2)), {"rigidity": 1.0})
    found = homogenize(dataclasses.replace(square, points=points, blocks=(*square.blocks, dangling)))
    assert found.status == Status.OK and found.mechanisms == 1
    np.testing.assert_allclose(found.stiffness, homogenize(square).stiffness, rtol=1e-12, atol=1e-16)


def test_rigid_panels_leave_a_sheet_three_soft_modes():
    # exactly three soft macroscopic modes of a triangulated periodic sheet: two in the plane would be a coincidence
    found = homogenize(pinned(build("miura-fold")).at(None))
    values = np.linalg.eigvalsh(found.stiffness[0] / np.sqrt(np.outer(*[np.diagonal(stretched())] * 2)))
    assert (values[:3] < 1e-9).all() and values[3] > 1e-3
    assert found.status[0] == Status.MECHANISM


def stretched():
    """Return the stiffness of the same sheet with stiff creases, for the size of its entries."""
    return homogenize(build("miura-fold", sheet_thickness=0.5, crease_length=0.1)).stiffness


# counting where it is hard -------------------------------------------------------------------------------------------


@pytest.mark.parametrize("decades", [0, 2, 6])
@pytest.mark.parametrize("name", ["square-grid", "kagome-grid", "hexagonal-honeycomb", "reentrant-honeycomb"])
def test_many_mechanisms_at_unequal_stiffness(name, decades, monkeypatch):
    # supercells of pinned lattices hold dozens of mechanisms, and eliminating some freedoms leaves others nearly free:
    # round-off then hides null vectors from an elimination that takes the freedoms as they come
    rng = np.random.default_rng([SEED, decades])
    cell = pinned(build(name)).rotated(rotation(17.3)).supercell((6, 6))
    cell = with_props(cell, 0, rigidity=10.0 ** rng.uniform(-decades / 2, decades / 2, len(cell.blocks[0])))
    expected, null = reference_stiffness(cell, "euler")
    assert null > 10
    for found in both_paths(cell, monkeypatch):
        assert found.mechanisms[0] == null
        np.testing.assert_allclose(found.stiffness[0], expected, rtol=0, atol=1e-8 * np.abs(expected).max())


def test_random_networks_near_the_isostatic_point(monkeypatch):
    rng = np.random.default_rng([SEED, 1])
    seen = set()
    for bars in (6, 8, 9, 10, 12):
        whole = random_cell(2, 2, ["bar"], rng, points=4)
        block = whole.blocks[0]
        pick = rng.permutation(len(block))[:bars]
        cut = Block("bar", block.nodes[pick], block.shifts[pick], {"rigidity": block.props["rigidity"][pick]})
        cell = dataclasses.replace(whole, blocks=(cut,))
        if len(np.unique(cut.nodes)) < cell.n:
            continue
        null = reference_stiffness(cell, "euler")[1]
        assert null - self_stresses(cell) == 2 * 4 + 3 - 2 - bars
        for found in both_paths(cell, monkeypatch):
            assert found.mechanisms[0] == null
        seen.add(null)
    assert len(seen) > 2


@pytest.mark.parametrize("name", [name for name, null in PINNED.items() if null])
def test_counts_do_not_depend_on_order_units_or_size(name):
    rng = np.random.default_rng([SEED, 2])
    cell = pinned(build(name))
    for _ in range(4):
        assert homogenize(reordered(cell, rng).at(None)).mechanisms[0] == PINNED[name]
    for size in (1e-3, 1e4):
        for modulus in (1e-6, 1e6):
            other = cell.scaled(size)
            for b in range(len(other.blocks)):
                other = with_props(other, b, rigidity=other.blocks[b].props["rigidity"] * modulus)
            assert homogenize(other.at(None)).mechanisms[0] == PINNED[name]


# soft is not free ----------------------------------------------------------------------------------------------------


def slender(case, share):
    """Return the default cell of a case with everything that has to be made `share` times as thick."""
    made = {p.name: p.default for p in numeric(case[0]) if p.made}
    made = {name: share * (made[value] if isinstance(value, str) else value) for name, value in made.items()}
    return build(case[0], **case[1], **made)


@pytest.mark.parametrize("case", cases(), ids=case_name)
def test_slender_is_no_mechanism(case, monkeypatch):
    cell = slender(case, 0.05 if case[0] == "miura-fold" else 0.01)
    assert 5e-4 < cell.slenderness < 5e-3
    for size, modulus in ((1.0, 1.0), (1e-2, 1e5), (1e3, 1e-2)):
        other = cell.scaled(size)
        for b, block in enumerate(other.blocks):
            stiff = {name: value * modulus for name, value in block.props.items() if name in STIFFENERS}
            other = with_props(other, b, **stiff)
        for found in both_paths(other, monkeypatch):
            assert found.status[0] == Status.OK and found.mechanisms[0] == 0
    assert reference_stiffness(cell, "timoshenko")[1] == 0


def test_a_slender_supercell_is_no_mechanism(monkeypatch):
    # the longest soft wave of 24 x 24 cells, t/l = 0.001: the hardest honeycomb for a tolerance
    cell = build("reentrant-honeycomb", thickness=0.01)
    big = cell.supercell((24, 24))
    found = homogenize(big)
    assert found.mechanisms == 0
    expected = homogenize(cell).stiffness
    np.testing.assert_allclose(found.stiffness, expected, rtol=0, atol=1e-6 * expected.max())


@pytest.mark.parametrize("name", ["rotating-squares", "rotating-triangles"])
def test_thin_ligaments_are_soft_not_free(name):
    # hinge stiffness K = E t^3/(12 l): the compliance of a cell with rigid units is rank one and goes as 1/K, so that
    # E/t^3 does not move while t falls a hundredfold, and nu stays -1
    t = np.array([0.1, 0.03, 0.01, 0.003])
    found = homogenize(build(name, side=10.0, opening=40.0, ligament_thickness=t, ligament_length=1.0))
    assert (found.status == Status.OK).all() and (found.mechanisms == 0).all()
    S = np.linalg.inv(found.stiffness)
    E, nu = 1.0 / S[:, 0, 0], -S[:, 0, 1] / S[:, 0, 0]
    np.testing.assert_allclose(E / t**3, E[-1] / t[-1] ** 3, rtol=1e-4)
    np.testing.assert_array_less(np.abs(nu + 1.0), t**3 / 10.0)  # what the units give beside hinges of t^3/12


def test_the_tolerance_lies_between_round_off_and_the_softest_cell(monkeypatch):
    # with the tolerance a thousand times smaller or larger every count above stays what it is
    for share in (1e-3, 1e3):
        monkeypatch.setattr(effective, "RANK_TOLERANCE", 1e-11 * share)
        for name, null in PINNED.items():
            assert homogenize(pinned(build(name)).at(None)).mechanisms[0] == null
        for case in cases():
            assert homogenize(slender(case, 0.1)).mechanisms == 0


# names ------------------------------------------------------------------------------------------------------------


def test_soft_modes_are_named_by_engineering_strain():
    mode = np.array([1.0, -2.0, np.sqrt(2.0) * 0.5])  # e11 1, e22 -2, e12 0.5: gamma 1
    C = np.eye(3) - np.outer(mode, mode) / (mode @ mode)
    assert soft_mode(C, "planar") == "e11 -0.50 e22 +1.00 g12 -0.50"
    assert soft_mode(np.diag([1.0, 1.0, 1.0, 1.0, 0.0, 1.0]), "spatial") == "g13 +1.00"
    assert soft_mode(np.diag([1.0, 1.0, 1.0, 1e-4, 1e-4, 1e-16]), "sheet") == "k12 +1.00"


def test_no_name_without_a_stiffness():
    with pytest.raises(InputError, match="not finite"):
        soft_mode(np.full((3, 3), np.nan), "planar")


def test_nothing_at_all_resists():
    # bars along one axis only, in a cell of one point: stretch along 2 and shear are free
    cell = UnitCell([[0.0, 0.0]], np.eye(2), (Block("bar", [[0, 0]], [[[0, 0], [1, 0]]], {"rigidity": 1.0}),))
    found = homogenize(cell.at(None))
    assert found.mechanisms[0] == 2 and found.status[0] == Status.MECHANISM
