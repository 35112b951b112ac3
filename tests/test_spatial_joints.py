"""Condensed joints in space: the solid star, its table, and octet cells against a solid of the periodic cell.

Solid values of the cell: data/octet_solid.csv, made by scripts/check_octet.py (its origin is in the file).
"""

import dataclasses
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import homog
from homog import spatial_joints
from homog.cell import Block, Status, UnitCell
from homog.effective import Flag
from homog.materials import Material
from homog.spatial_joints import PATTERNS, correction
from homog.spatial_stars import balanced, isometries, moved, shear_compliance, strut_scales, strut_shares
from homog.tensors import mandel_rotation, rotation

DATA = Path(__file__).resolve().parent.parent / "data" / "octet_solid.csv"
ROUND_OFF = 1e-11

pattern_of_each = pytest.mark.parametrize("pattern", PATTERNS, ids=lambda pattern: pattern.name)


def parent(poisson=0.3):
    return Material("unit", 1.0, poisson, 1000.0)


def octet(diameter, length=1.0, poisson=0.3):
    return homog.build("octet", length=length, diameter=diameter, material=parent(poisson))


def constants(C):
    """Return E, nu and G of Mandel stiffnesses (..., 6, 6) with cubic symmetry."""
    C11, C12, C44 = C[..., 0, 0], C[..., 0, 1], C[..., 5, 5] / 2.0
    nu = C12 / (C11 + C12)
    return (C11 - C12) * (1.0 + nu), nu, C44


def off(C, expected):
    return np.abs(C - expected).max() / np.abs(expected).max()


# the solid star ------------------------------------------------------------------------------------------------------


def disc(count=24):
    """Return points (q, 2) and areas (q,) that integrate polynomials over a disc of unit diameter exactly."""
    x, w = np.polynomial.legendre.leggauss(count)
    radius, angle = (x + 1.0) / 4.0, 2.0 * np.pi * np.arange(2 * count) / (2 * count)
    points = radius[:, None, None] * np.stack([np.cos(angle), np.sin(angle)], -1)
    areas = np.broadcast_to((w / 4.0 * radius)[:, None] * np.pi / count, points.shape[:2])
    return points.reshape(-1, 2), areas.ravel()


@pytest.mark.parametrize("poisson", [0.0, 0.3, 0.49])
def test_tractions_of_a_cut_have_their_resultants_and_the_energy_of_the_shear_factor(poisson):
    from homog.strut_solid import cut_tractions

    e = np.array([2.0, -1.0, 2.0]) / 3.0
    across = np.linalg.svd(e[None])[2][1:]
    plane, areas = disc()
    y = plane @ across
    t = cut_tractions(y, e, poisson)
    force = np.einsum("q,qik->ik", areas, t)
    moment = np.einsum("q,qik->ik", areas, np.cross(y[:, :, None], t, axis=1))
    np.testing.assert_allclose(np.concatenate([force, moment]), np.eye(6), atol=1e-12)
    shear = t[:, :, :3] @ across[0]
    shear -= (shear @ e)[:, None] * e
    energy = areas @ (shear**2).sum(-1)  # V^2 / (kappa A) of unit force
    assert energy * np.pi / 4.0 == pytest.approx(float(shear_compliance(poisson)), rel=1e-12)


def test_a_straight_strut_as_a_solid_is_the_beam():
    pytest.importorskip("gmsh", reason="the extra 'solid' is not installed (gmsh)")
    pytest.importorskip("cvxopt", reason="the extra 'solid' is not installed (cvxopt)")
    from homog.strut_solid import _cut_loads, factor, lame, mesh_struts, stiffness_parts

    length, nu, e = 2.0, 0.3, np.array([0.0, 0.6, 0.8])
    far = [(np.array([[-9.0] * 3, [9.0] * 3]), np.eye(3))]
    solid = mesh_struts(-length / 2.0 * e[None], length / 2.0 * e[None], 1.0, far, balls=np.zeros((0, 3)), size=1.7)
    first, second, volume = stiffness_parts(solid)
    assert volume == pytest.approx(np.pi / 4.0 * length, rel=1e-3)
    lam, G = lame(nu)
    K = lam * first + G * second
    x = solid.points
    turns = np.cross(np.eye(3)[:, None], x).reshape(3, -1)
    rigid = np.concatenate([np.tile(np.eye(3), len(x)), turns])
    assert np.abs(K @ rigid.T).max() < 1e-11 * np.abs(K).max()
    # unit loads on one end, balanced by the other; three points are held against rigid motion
    P = _cut_loads(solid, e, length / 2.0, nu)
    other = _cut_loads(solid, -e, length / 2.0, nu)
    P = P - other @ np.linalg.solve(rigid @ other, rigid @ P)
    np.testing.assert_allclose(rigid @ P, 0.0, atol=1e-9)
    held = np.concatenate([3 * int(np.argmax(x @ e)) + np.arange(3), 3 * int(np.argmin(x @ e)) + np.arange(2),
                           [3 * int(np.argmax(x[:, 0])) + 2]])  # fmt: skip
    free = np.setdiff1d(np.arange(3 * len(x)), held)
    found = P[free].T @ factor(K[free][:, free])(P[free])
    scales = strut_scales(np.array(length), np.array(1.0), np.array(1.0), np.array(nu))
    beam = np.einsum("k,kij->ij", scales, strut_shares(e))
    # elements of a quarter of the diameter
    assert off(found, beam) < 3e-3


def test_a_coarse_solid_star_has_the_correction_of_the_table():
    pytest.importorskip("gmsh", reason="the extra 'solid' is not installed (gmsh)")
    pytest.importorskip("cvxopt", reason="the extra 'solid' is not installed (cvxopt)")
    from homog.strut_solid import corrections

    pattern = next(p for p in PATTERNS if p.name == "octet")
    coarse = corrections(pattern.directions, [0.3], size=6.0)[0]
    assert off(coarse, correction(pattern, 0.3)) < 0.05


# the table -----------------------------------------------------------------------------------------------------------


@pattern_of_each
@pytest.mark.parametrize("poisson", [0.0, 0.31, 0.49])
def test_corrections_are_symmetric_and_of_balanced_loads(pattern, poisson):
    delta = correction(pattern, poisson)
    size = np.abs(delta).max()
    np.testing.assert_allclose(delta, delta.T, atol=1e-6 * size)
    project = balanced(len(pattern.directions))
    np.testing.assert_allclose(project.T @ delta @ project, delta, atol=1e-6 * size)
    for R, order in isometries(pattern.directions, pattern.directions, mirrors=True):
        g = moved(R, order)
        np.testing.assert_allclose(g @ delta @ g.T, delta, atol=1e-6 * size)


def test_the_octet_joint_has_the_symmetry_of_the_cube():
    directions = PATTERNS[0].directions
    assert len(list(isometries(directions, directions))) == 24
    assert len(list(isometries(directions, directions, mirrors=True))) == 48
    R = rotation(41.0, axis=[1, 2, -3])
    turned = directions[::-1] @ R.T
    ways = list(isometries(directions, turned))
    assert len(ways) == 24
    for found, order in ways:
        np.testing.assert_allclose(directions @ found.T, turned[order], atol=1e-12)
    turned[5] = rotation(1e-6, axis=[0, 0, 1]) @ turned[5]
    assert not list(isometries(directions, turned))


# the cell against a solid ------------------------------------------------------------------------------------------


def finest():
    """Return the rows of the finest mesh of each case."""
    rows = pd.read_csv(DATA, comment="#")
    return rows.loc[rows.groupby(["d_over_l", "poisson"])["size"].idxmin()]


@pytest.mark.parametrize(
    "row", [pytest.param(row, id=f"{row.d_over_l}-{row.poisson}") for row in finest().itertuples()]
)
def test_an_octet_of_condensed_joints_is_the_solid(row):
    cell = octet(row.d_over_l, poisson=row.poisson)
    E, nu, G = constants(homog.homogenize(cell).stiffness)
    assert pytest.approx(row.E_solid, rel=0.01) == E
    assert pytest.approx(row.G_solid, rel=0.01) == G
    assert pytest.approx(row.nu_solid, abs=0.01) == nu
    # the known error of struts that run to a point: half the diameter over the length of a strut, and more
    E_beams = constants(homog.homogenize(cell, model="timoshenko").stiffness)[0]
    assert E_beams < (1.0 - row.d_over_l) * row.E_solid * 1.03
    assert float(cell.relative_density) == pytest.approx(row.density_solid, rel=1e-4)


def test_solids_of_the_cell_have_converged():
    rows = pd.read_csv(DATA, comment="#")
    assert (rows.groupby(["d_over_l", "poisson"]).size() >= 2).all()
    for _, meshes in rows.groupby(["d_over_l", "poisson"]):
        for values in meshes.sort_values("size")[["E_solid", "G_solid"]].to_numpy().T:
            steps = values[1:] / values[:-1] - 1.0
            assert (steps > 0.0).all()  # a coarser mesh holds the solid more
            assert steps[0] < 0.005


def test_slender_octets_forget_their_joints():
    thin = np.array([0.04, 0.02, 0.01])
    E = [constants(homog.homogenize(octet(thin), model=model).stiffness)[0] for model in ("joint", "timoshenko")]
    gain = E[0] / E[1] - 1.0
    # a joint shortens its struts by a share of the diameter, and what is left is of the next power
    ratios = gain[:-1] / gain[1:]
    assert ratios[1] == pytest.approx(2.0, abs=0.06)
    assert ratios[0] - 2.0 == pytest.approx(2.0 * (ratios[1] - 2.0), rel=0.2)
    assert 0.5 < gain[-1] / thin[-1] < 1.5


# one lattice, written down differently -------------------------------------------------------------------------------


def test_a_cell_of_one_point_is_its_supercell():
    # the short way (the point and three of its images) against joints between the middles of all struts
    cell = octet([0.05, 0.2, 0.37], length=[1.0, 1.0, 2.0], poisson=0.4)
    found = homog.homogenize(cell)
    assert found.model == "joint"
    for counts in ((2, 1, 1), (1, 1, 3)):
        big = homog.homogenize(cell.supercell(counts))
        assert big.model == "joint"
        assert off(big.stiffness, found.stiffness) < ROUND_OFF
    assert (found.mechanisms == 0).all()


def test_joints_turn_and_grow_with_their_cell():
    cell = octet([0.1, 0.3])
    C = homog.homogenize(cell).stiffness
    R = rotation(77.0, axis=[1.0, -2.0, 0.5])
    Q = mandel_rotation(R)
    for one in (cell, cell.supercell((1, 2, 1))):
        assert off(homog.homogenize(one.rotated(R)).stiffness, Q @ C @ Q.T) < ROUND_OFF
        assert off(homog.homogenize(one.scaled(3.7)).stiffness, C) < ROUND_OFF


def test_a_joined_cell_scales_as_one():
    for cell in (octet([0.1, 0.3]), octet([0.1, 0.3]).supercell((1, 2, 1))):
        joined, _, _ = spatial_joints.with_joints(cell)
        grown, _, _ = spatial_joints.with_joints(cell.scaled(2.9))
        for a, b in zip(joined.scaled(2.9).blocks, grown.blocks, strict=True):
            assert off(a.props["weight"], b.props["weight"]) < ROUND_OFF


def test_struts_in_two_blocks_with_stiff_ends_have_joints():
    cell = octet([0.1, 0.2])
    (block,) = cell.blocks
    halves = [
        Block("strut", block.nodes[part], block.shifts[part], {**block.props, "end_compliance": np.zeros(1)})
        for part in (slice(0, 2), slice(2, 6))
    ]
    found = homog.homogenize(dataclasses.replace(cell, blocks=tuple(halves)))
    assert found.model == "joint"
    assert off(found.stiffness, homog.homogenize(cell).stiffness) < ROUND_OFF
    soft = dataclasses.replace(halves[0], props={**block.props, "end_compliance": np.ones(1)})
    assert homog.homogenize(dataclasses.replace(cell, blocks=(soft, halves[1]))).model == "timoshenko"


def test_struts_of_one_poisson_s_ratio_each_are_a_batch():
    cell = octet([0.1, 0.2, 0.2])
    (block,) = cell.blocks
    nu = np.array([0.1, 0.25, 0.45])
    mixed = dataclasses.replace(
        cell, blocks=(dataclasses.replace(block, props={**block.props, "poisson": nu[:, None]}),)
    )
    found = homog.homogenize(mixed).stiffness
    for i, d in enumerate((0.1, 0.2, 0.2)):
        assert off(found[i], homog.homogenize(octet(d, poisson=nu[i])).stiffness) < ROUND_OFF


# what has no joints, or should not be trusted ------------------------------------------------------------------------


def cubic_grid():
    shifts = np.zeros((3, 2, 3), int)
    shifts[:, 1] = np.eye(3, dtype=int)
    props = {"diameter": np.array([0.1]), "modulus": np.array([1.0]), "poisson": np.array([0.3])}
    return UnitCell(np.zeros((1, 3)), np.eye(3), (Block("strut", np.zeros((3, 2), int), shifts, props),))


def test_a_pattern_without_a_table_has_no_joints():
    assert homog.homogenize(cubic_grid()).model == "timoshenko"
    cell = octet(0.1)
    R = np.broadcast_to(np.eye(3), (2, 3, 3)).copy()
    R[1] = rotation(10.0, axis=[0.0, 0.0, 1.0])
    apart = dataclasses.replace(octet([0.1, 0.1]), lattice=octet([0.1, 0.1]).lattice @ np.swapaxes(R, 1, 2))
    assert homog.homogenize(apart).model == "timoshenko"
    stretched = dataclasses.replace(cell, lattice=cell.lattice * [1.0, 1.0, 1.01])
    assert homog.homogenize(stretched).model == "timoshenko"


def test_joints_that_no_table_covers_are_points_and_say_so():
    cell = octet([0.1, 0.1], poisson=0.3)
    (block,) = cell.blocks
    for name, value, allowed in (("poisson", -0.3, 0.3), ("poisson", 0.495, 0.3), ("diameter", 0.11, 0.1)):
        values = np.full((2, 6), allowed)
        values[0, 2] = value
        if name == "poisson":
            values[0] = value
        odd = dataclasses.replace(cell, blocks=(dataclasses.replace(block, props={**block.props, name: values}),))
        for one in (odd, odd.supercell((2, 1, 1))):
            found = homog.homogenize(one)
            assert found.flags.tolist() == [Flag.JOINT_OUTSIDE, 0]
            assert off(found.stiffness[1], homog.homogenize(octet(0.1)).stiffness) < ROUND_OFF
            points = homog.homogenize(one, model="timoshenko").stiffness[0]
            assert off(found.stiffness[0], points) < 1e-3  # but for the two shear factors


def test_joints_that_feel_each_other_say_so():
    found = homog.homogenize(octet([0.1, 0.4, 0.5]))
    assert found.flags.tolist() == [0, 0, Flag.JOINTS_NEAR]


def test_a_bad_member_leaves_its_neighbours_alone():
    cell = octet([0.1, 0.6, 0.3, 0.2])
    lattice = np.broadcast_to(cell.lattice, (4, 3, 3)).copy()
    lattice[2, 1, 1] = np.nan
    found = homog.homogenize(dataclasses.replace(cell, lattice=lattice))
    assert found.status.tolist() == [Status.OK, Status.IMPOSSIBLE, Status.IMPOSSIBLE, Status.OK]
    for i, d in ((0, 0.1), (3, 0.2)):
        assert off(found.stiffness[i], homog.homogenize(octet(d)).stiffness) < ROUND_OFF
    assert np.isnan(found.stiffness[1:3]).all()
