"""Condensed joints: stars of beams, small solids, their tables, and whole cells against the solid model.

The joint model has no closed form to compare with. What it must be is known all the same: the flexibility of a star of
beams is that of a frame; a correction does not depend on where the star was cut (Saint-Venant) nor, but for a linear
term, on Poisson's ratio (Michell 1899, Proc. London Math. Soc. 31, 100; from memory); a table is what it was made from;
and a cell with joints is the solid of its true section. Seeds were drawn: 840216, 55173, 907346.
"""

import dataclasses

import numpy as np
import pytest
from samples import halved, rebased, reordered, repeated

from homog import joints
from homog.cell import Block, UnitCell
from homog.columns import evaluate
from homog.effective import Flag, homogenize
from homog.elements import element
from homog.errors import InputError, MissingExtra
from homog.families import FAMILIES, build
from homog.families.base import topology, wall_props
from homog.joints import SHAPES, applies, corrections, interpolated, matched, with_joints
from homog.materials import UNIT
from homog.reference import reference_stiffness
from homog.stars import carried, held_forces, star_flexibility, wall_flexibility
from homog.tensors import rotate, rotation

pytest.importorskip("shapely")
pytest.importorskip("gmsh")
from homog import joint_solid  # noqa: E402
from homog.joint_solid import cached_correction, correction  # noqa: E402

PARENT = dataclasses.replace(UNIT, poisson=0.3)
BY_SHAPE = {shape.name: shape for shape in SHAPES}

CELLS = {  # of every shape that a family has, none of them special
    "hexagon": ("hexagonal-honeycomb", {"angle": 27.0, "thickness": 1.1}),
    "bow-tie": ("reentrant-honeycomb", {"angle": -33.0, "thickness": 1.2, "vertical_thickness": 1.9}),
    "square": ("square-grid", {"thickness": 1.3}),
    "triangles": ("triangular-grid", {"thickness": 0.9}),
    "kagome": ("kagome-grid", {"thickness": 1.9}),
    "arrowhead": ("arrowhead", {"outer_angle": 33.0, "inner_angle": 68.0, "thickness": 0.7}),
}
every_cell = pytest.mark.parametrize("name", CELLS)


def made(name, **more):
    family, given = CELLS[name]
    return build(family, **given, **more, material=PARENT)


def stiffness(cell, model="joint"):
    return homogenize(cell, model=model).stiffness


def off(C, expected):
    size = np.sqrt(np.diagonal(expected))
    return float(np.abs((C - expected) / np.outer(size, size)).max())


# stars of beams ----------------------------------------------------------------------------------------------------


def star():
    rng = np.random.default_rng(840216)
    return np.array([0.2, 1.4, 3.3, 4.6]), rng.uniform(2.0, 5.0, 4), rng.uniform(0.3, 0.6, 4)


def test_a_star_of_beams_is_the_frame_of_its_walls():
    """The same star from wall elements between the point and the tips, point condensed out, tip 0 clamped."""
    angles, lengths, t = star()
    E, nu, n = 7.0, 0.3, len(angles)
    K = np.zeros((3 * (n + 1), 3 * (n + 1)))  # the point first
    for i in range(n):
        tip = lengths[i] * np.array([np.cos(angles[i]), np.sin(angles[i])])
        x = np.stack([np.zeros(2), tip])[:, :, None]
        props = {"thickness": t[i : i + 1], "modulus": np.array([E]), "poisson": np.array([nu])}
        rows = element("wall").rows(x, props)[..., 0].reshape(3, 6)
        R = np.eye(6)
        c, s = np.cos(angles[i]), np.sin(angles[i])
        R[3:5, 3:5] = [[c, -s], [s, c]]  # along and across at the tip
        at = np.r_[0:3, 3 * i + 3 : 3 * i + 6]
        K[np.ix_(at, at)] += R.T @ rows.T @ element("wall").weights(x, props, "timoshenko")[..., 0] @ rows @ R
    free = np.r_[0:3, 6 : 3 * n + 3]  # tip 0 is clamped
    expected = np.linalg.inv(K[np.ix_(free, free)])[3:, 3:]
    found = star_flexibility(angles, lengths, t, np.array(E), np.array(nu))
    np.testing.assert_allclose(found, expected, rtol=1e-9, atol=1e-12 * expected.max())


def test_forces_on_a_star_balance():
    angles, lengths, _ = star()
    Q = held_forces(angles, lengths)
    forces = np.random.default_rng(55173).standard_normal(3 * len(angles) - 3)
    every = np.concatenate([Q @ forces, forces]).reshape(-1, 3)
    along = np.stack([np.cos(angles), np.sin(angles)], -1)
    across = np.stack([-along[:, 1], along[:, 0]], -1)
    total = every[:, 0] @ along + every[:, 1] @ across
    np.testing.assert_allclose([*total, (every[:, 2] + every[:, 1] * lengths).sum()], 0.0, atol=1e-12)


def test_longer_walls_are_the_walls_and_what_is_carried():
    """A star is its shorter self carried outwards, and the added pieces of wall."""
    angles, lengths, t = star()
    E, nu, longer = np.array(1.0), np.array(0.2), lengths + np.array([0.5, 1.0, 1.5, 2.0])
    short, whole = (star_flexibility(angles, l, t, E, nu) for l in (lengths, longer))
    Q = held_forces(angles, longer)
    pieces = [wall_flexibility(b - a, h, E, nu) for a, b, h in zip(lengths, longer, t, strict=True)]
    added = Q.T @ pieces[0] @ Q
    for i, piece in enumerate(pieces[1:]):
        added[3 * i : 3 * i + 3, 3 * i : 3 * i + 3] += piece
    np.testing.assert_allclose(carried(short, longer - lengths) + added, whole, rtol=1e-12, atol=1e-12 * whole.max())


# the small solid -----------------------------------------------------------------------------------------------------

GAPS, THICK = np.array([1.1, 2.4, 2.0 * np.pi - 3.5]), np.array([1.0, 0.7, 1.2])


def test_where_the_star_is_cut_does_not_matter(monkeypatch):
    near = correction(GAPS, THICK)
    monkeypatch.setattr(joint_solid, "PLAIN", 2.0)
    far = correction(GAPS, THICK)
    assert np.abs(far - near).max() < 1e-3 * np.abs(near).max()


def test_in_the_plane_stress_does_not_depend_on_poisson(monkeypatch):
    found = correction(GAPS, THICK)
    for nu in (0.0, 0.45):
        monkeypatch.setattr(joint_solid, "SOLVED_AT", nu)
        other = correction(GAPS, THICK)
        at = found[0] + nu * found[1]
        assert np.abs(other[0] + nu * other[1] - at).max() < 5e-4 * np.abs(at).max()


def test_lengths_count_in_thicknesses():
    """Three times as large: lengths per force stay, rotations per force shrink 3 times, per moment 9 times."""
    small, large = correction(GAPS, THICK), correction(GAPS, 3.0 * THICK)
    size = np.tile([1.0, 1.0, 3.0], 2)
    np.testing.assert_allclose(large * size[:, None] * size, small, rtol=0.0, atol=1e-3 * np.abs(small).max())


def test_a_wall_that_runs_on_has_no_joint():
    """Half a wall and half a wall are a wall: what the small solid says, and what the model takes without asking."""
    straight = np.array([np.pi, np.pi])
    beams = star_flexibility(
        np.array([0.0, np.pi]), np.full(2, joint_solid.PLAIN), np.ones(2), np.ones(()), np.ones(())
    )
    assert np.abs(correction(straight, np.ones(2))).max() < 1e-4 * beams.max()
    order, delta, outside = corrections(straight[:, None], np.ones((2, 1)), np.array([0.3]))
    assert not delta.any() and not outside.any()


def test_a_fillet_stiffens():
    sharp, filled = correction(GAPS, THICK), correction(GAPS, THICK, fillet=0.3)
    values = np.linalg.eigvalsh((filled - sharp)[0] + 0.3 * (filled - sharp)[1])
    assert values.max() < 1e-4 and values.min() < -0.05


# tables --------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", BY_SHAPE)
def test_a_table_is_what_it_was_made_from(name):
    """At one place inside: interpolated, and a solid made for it. The largest error is 0.2 % of the largest entry."""
    shape = BY_SHAPE[name]
    low, high = (np.array([edges[i] for edges in shape.edges]) for i in (0, -1))
    u = low + (high - low) * np.random.default_rng(907346).uniform(0.1, 0.9, len(low))
    solid = correction(np.array(shape.gaps(u), float), np.array(shape.thickness(u), float))
    for nu in (0.0, 0.4):
        table = interpolated(shape, u[:, None], np.array([nu]))[..., 0]
        exact = solid[0] + nu * solid[1]
        assert np.abs(table - exact).max() < 2e-3 * np.abs(exact).max()


@pytest.mark.parametrize("name", BY_SHAPE)
def test_a_shape_is_found_from_any_wall_and_its_mirror(name):
    """The same joint, described from another wall or seen in a mirror: the energy of the same forces stays."""
    shape = BY_SHAPE[name]
    u = np.array([[(a + 2.0 * b) / 3.0] for a, *_, b in shape.edges]).reshape(-1, 1)
    gaps, t = (np.array(x, float).reshape(-1, 1) for x in (shape.gaps(u), shape.thickness(u)))
    n, rng = shape.walls, np.random.default_rng(55173)
    angles = np.concatenate([[0.0], np.cumsum(gaps[:-1, 0])])
    forces = rng.standard_normal((n, 3))
    forces[0] = held_forces(angles, np.zeros(n)) @ forces[1:].ravel()  # in balance about the point

    def energy(order, mirror):
        g = gaps[order] if mirror > 0 else gaps[(order - 1) % n]
        found, delta, outside = corrections(g, t[order], np.array([0.3]))
        assert not outside.any()
        f = (forces[order] * np.array([1.0, mirror, mirror]))[found][1:].ravel()
        return float(f @ delta[..., 0] @ f)

    values = [energy((k + np.arange(n) * m) % n, m) for k in range(n) for m in (1, -1)]
    np.testing.assert_allclose(values, values[0], rtol=1e-3)  # symmetric where it was solved, interpolated between
    assert values[0] != 0.0


def test_thicker_walls_scale_the_correction():
    gaps = np.array([[1.1], [2.0 * np.pi - 2.2], [1.1]])
    _, one, _ = corrections(gaps, np.ones((3, 1)), np.array([0.3]))
    _, two, _ = corrections(gaps, 2.0 * np.ones((3, 1)), np.array([0.3]))
    size = np.tile([1.0, 1.0, 2.0], 2)
    np.testing.assert_allclose(two[..., 0] * size[:, None] * size, one[..., 0], rtol=1e-12)


def test_what_has_no_pattern_matches_nothing():
    assert matched(np.array([[1.0], [2.0], [2.0 * np.pi - 3.0]]), np.ones((3, 1))) is None
    assert matched(np.array([[1.1], [2.0 * np.pi - 2.2], [1.1]]), np.array([[1.0], [1.0], [1.1]])) is None


# on demand -----------------------------------------------------------------------------------------------------------


def irregular(turns=(0.4, 2.3, 4.0), lengths=(9.0, 11.0, 10.0), t=1.0):
    """Two points, three walls between them at angles that no table has."""
    tips = np.array([[l * np.cos(a), l * np.sin(a)] for a, l in zip(turns, lengths, strict=True)])
    links = [[(0, (0, 0)), (1, (0, 0))], [(0, (0, 0)), (1, (1, 0))], [(0, (0, 0)), (1, (0, 1))]]
    lattice = np.stack([tips[1] - tips[0], tips[2] - tips[0]])
    nodes, shifts = topology(links)
    walls = Block("wall", nodes, shifts, wall_props(np.array([t]), PARENT))
    return UnitCell(np.stack([np.zeros(2), tips[0]]), lattice, (walls,), parent=PARENT)


def test_a_joint_without_a_table_is_made_and_kept(tmp_path, monkeypatch):
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    first = homogenize(irregular())
    assert first.model == "joint" and len(list(tmp_path.rglob("joint-*.npy"))) == 1  # the other joint is its half turn

    def refused(*args, **options):
        raise AssertionError("solved again")

    monkeypatch.setattr(joint_solid, "correction", refused)
    np.testing.assert_array_equal(homogenize(irregular()).stiffness, first.stiffness)
    solid, beams = stiffness(irregular(), "solid"), stiffness(irregular(), "timoshenko")
    assert off(first.stiffness, solid) < 5e-3 < 2e-2 < off(beams, solid)


def test_a_cache_that_cannot_be_written_costs_time_alone(tmp_path, monkeypatch):
    (tmp_path / "file").write_text("")
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "file"))
    np.testing.assert_array_equal(cached_correction(GAPS, THICK), correction(GAPS, THICK))


def test_without_the_extra_the_error_names_it(tmp_path, monkeypatch):
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    monkeypatch.setitem(__import__("sys").modules, "shapely", None)
    with pytest.raises(MissingExtra, match="solid"):
        homogenize(irregular())
    assert homogenize(made("square")).model == "joint"  # tables do not need it


def test_too_many_joints_on_demand_are_refused(monkeypatch):
    monkeypatch.setattr(joints, "MOST_ON_DEMAND", 1)
    monkeypatch.setattr(joint_solid, "cached_correction", lambda *a: np.zeros((2, 6, 6)))
    cells = dataclasses.replace(irregular(), points=irregular().points * np.linspace(1.0, 1.1, 3)[:, None, None])
    with pytest.raises(InputError, match="different joints that no table has, at most 1"):
        homogenize(cells)


# cells ---------------------------------------------------------------------------------------------------------------


def test_families_of_straight_walls_have_joints_and_no_others():
    have = {name for name, family in FAMILIES.items() if applies(family.build({}, UNIT))}
    assert have >= {"hexagonal-honeycomb", "reentrant-honeycomb", "square-grid", "triangular-grid", "kagome-grid"}
    assert not have & {"anti-tetrachiral", "rotating-squares", "rotating-triangles", "miura-fold"}
    assert homogenize(build("anti-tetrachiral")).model == "timoshenko"  # and says so


@every_cell
def test_the_solid_of_the_true_section(name):
    """E1, E2, G12 within 1 %, nu within 0.01 of the solid, where beams are off by more than 2.5 %."""
    cell = made(name)
    solid, joint, beams = (np.linalg.inv(stiffness(cell, model)) for model in ("solid", "joint", "timoshenko"))
    for i in range(3):
        assert joint[i, i] == pytest.approx(solid[i, i], rel=0.01)
    for i in range(2):
        assert joint[0, 1] / joint[i, i] == pytest.approx(solid[0, 1] / solid[i, i], abs=0.01)
    assert np.abs(np.diagonal(beams) / np.diagonal(solid) - 1.0).max() > 0.025


@every_cell
def test_slender_cells_are_beams(name):
    """Joints are a share t/l of the walls, and so is what they change."""
    errors = []
    family, given = CELLS[name]
    for t in (0.04, 0.02):
        walls = {key: t for key in ("thickness", "vertical_thickness") if key in given}
        cell = build(family, **{**given, **walls}, material=PARENT)
        errors.append(off(stiffness(cell), stiffness(cell, "timoshenko")))
    assert errors[0] < 0.05 and errors[1] / errors[0] == pytest.approx(0.5, abs=0.05)


@every_cell
def test_however_the_lattice_is_written_down(name):
    cell, C = made(name), stiffness(made(name))
    rng = np.random.default_rng(907346)
    R = rotation(0.7)
    assert off(stiffness(cell.supercell((2, 1))), C) < 1e-9
    assert off(stiffness(rebased(cell, np.array([[1, 1], [0, 1]]))), C) < 1e-9
    assert off(stiffness(reordered(cell, rng)), C) < 1e-9
    assert off(stiffness(cell.rotated(R)), rotate(C, R)) < 1e-9
    assert off(stiffness(cell.scaled(3.0)), C) < 1e-9
    assert off(stiffness(halved(cell)), C) < 1e-9  # a point in the middle of a wall is no joint


@every_cell
def test_the_slow_way(name):
    joined, _, _ = with_joints(made(name).at(None))
    expected, null = reference_stiffness(joined.at(0), "joint")
    assert null == 0 and off(stiffness(made(name)), expected) < 1e-8


@every_cell
def test_a_batch_is_its_members(name):
    nu = dataclasses.replace(PARENT, poisson=0.4)
    cell = build(CELLS[name][0], **{**CELLS[name][1], "thickness": np.array([0.3, 0.6, 0.9])}, material=nu)
    found = homogenize(cell)
    for i in range(3):
        assert off(found.stiffness[i], stiffness(cell.at(i))) < 1e-12


def test_a_bad_member_leaves_its_neighbours_alone():
    cell = repeated(made("bow-tie"), 4)
    points = np.array(cell.points)
    points[1, -1, 0] = np.nan
    found = homogenize(dataclasses.replace(cell, points=points))
    assert np.isnan(found.stiffness[1]).all()
    np.testing.assert_array_equal(found.stiffness[[0, 2, 3]], homogenize(cell).stiffness[[0, 2, 3]])


def test_deep_walls_are_those_of_plane_strain():
    deep = build("reentrant-honeycomb", material=dataclasses.replace(PARENT, deep=True))
    E, nu = 1.0 / (1.0 - 0.3**2), 0.3 / (1.0 - 0.3)
    flat = build("reentrant-honeycomb", material=dataclasses.replace(PARENT, modulus_MPa=E, poisson=nu))
    assert off(stiffness(deep), stiffness(flat)) < 1e-12


def test_outside_a_table_the_joint_is_a_point_and_says_so():
    cell = build("arrowhead", outer_angle=np.array([40.0, 12.0]), inner_angle=np.array([60.0, 15.0]), thickness=0.05,
                 material=PARENT)  # fmt: skip
    found = homogenize(cell)
    assert [bool(flag & Flag.JOINT_OUTSIDE) for flag in found.flags] == [False, True]
    words = evaluate(found)
    assert "joint-outside" in words["reasons"][1] and "joint-outside" not in words["reasons"][0]
    assert words["verdict"][1] == "caution"


def test_joints_that_nearly_touch_are_flagged():
    found = homogenize(build("square-grid", thickness=np.array([1.0, 6.6, 6.8]), length=10.0, material=PARENT))
    assert [bool(flag & Flag.JOINTS_NEAR) for flag in found.flags] == [False, False, True]  # 10 - t under t/2
    assert ["joints-near" in words for words in evaluate(found)["reasons"]] == [False, False, True]


def test_an_impossible_member_asks_for_no_joint():
    values = {"outer_angle": np.array([30.0, 50.0, 40.0]), "inner_angle": np.array([60.0, 40.0, 40.0])}
    found = homogenize(FAMILIES["arrowhead"].build({**values, "thickness": 0.5}, PARENT))
    assert found.model == "joint" and list(found.status) == [0, 1, 1]
    alone = build("arrowhead", outer_angle=30.0, inner_angle=60.0, thickness=0.5, material=PARENT)
    assert off(found.stiffness[0], stiffness(alone)) < 1e-12
