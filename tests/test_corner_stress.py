"""Stress in the solid: exact where the plate is plain, Kirsch's at a hole, the beams' in a plain wall, and at fillets.

G. Kirsch 1898, Z. Ver. dtsch. Ing. 42, 797: round one hole in a wide plate a pull raises stress 3 times, shear 4 times
(from memory; a textbook result).
"""

import numpy as np
import pytest

import homog
from homog.errors import InputError
from homog.materials import UNIT

shapely = pytest.importorskip("shapely", reason="the extra 'solid' is not installed (shapely)")
gmsh = pytest.importorskip("gmsh", reason="the extra 'solid' is not installed (gmsh)")

from homog.solid import Section, cell_section, homogenize_section  # noqa: E402
from homog.stress import corner_stress, member_forces, nodal_stress, sections, unit_stresses, von_mises  # noqa: E402

SQUARE = np.eye(2)


def stress(section, nu=0.3, **more):
    """Return mesh points (n, 2) and Voigt stresses (n, 3, 3) of unit stresses 11, 22, 12."""
    C, mesh, motion = homogenize_section(section, 2.0, nu, **more)
    return mesh.points, nodal_stress(mesh, motion, 2.0, nu) @ np.linalg.inv(C) @ unit_stresses(2)


def honeycomb(thickness, **more):
    return homog.build("hexagonal-honeycomb", inclined=10.0, vertical=13.0, angle=20.0, thickness=thickness, **more)


def test_a_plate_without_holes_has_the_stress_that_it_is_given():
    section = Section(
        shapely.Polygon([(0, 0), (1, 0), (1.3, 1), (0.3, 1)]), np.zeros(2), np.array([[1, 0], [0.3, 1.0]])
    )
    _, found = stress(section)
    np.testing.assert_allclose(found, np.broadcast_to(np.eye(3), found.shape), atol=1e-10)


def test_kirsch_at_a_small_hole():
    around = 2.0 * np.pi * np.arange(96) / 96
    radius = 0.03
    hole = 0.5 + radius * np.stack([np.cos(around), np.sin(around)], -1)
    section = Section(shapely.Polygon([(0, 0), (1, 0), (1, 1), (0, 1)], [hole]), np.zeros(2), SQUARE)
    x, found = stress(section)
    most = von_mises(found).max(axis=0)
    # neighbours matter by the hole's share, pi 0.03^2 = 0.3 %; the polygon's corners turn by 4 deg
    np.testing.assert_allclose(most, [3.0, 3.0, 4.0], rtol=0.01)
    top = np.argmin(np.hypot(*(x - [0.5, 0.5 + radius]).T))
    side = np.argmin(np.hypot(*(x - [0.5 + radius, 0.5]).T))
    assert found[top, 0, 0] == pytest.approx(3.0, rel=0.01) and found[side, 1, 0] == pytest.approx(-1.0, abs=0.02)


def test_von_mises_of_stresses_known_by_hand():
    cases = np.array([[2.0, 0.0, 0.0], [1.0, 1.0, 0.0], [0.0, 0.0, 1.0], [3.0, 1.0, 0.5]])
    found = von_mises(cases[..., None])[:, 0]
    np.testing.assert_allclose(found, [2.0, 1.0, np.sqrt(3.0), np.sqrt(9.0 + 1.0 - 3.0 + 0.75)])
    # plane strain: the third principal stress is nu_s (s11 + s22)
    nu = 0.3
    np.testing.assert_allclose(von_mises(cases[..., None], across=nu)[0, 0], 2.0 * np.sqrt(1.0 - nu + nu**2))


def face_stress(cell, section, x, found, m, share):
    """Return the solid's stress along wall m at `share` of its way, on both faces, and the beam's N/A +- M/W there."""
    members = member_forces(homog.homogenize(cell, model="joint"))[0]
    wall = cell.blocks[0]
    ends = cell.points[wall.nodes[m]] + wall.shifts[m] @ cell.lattice
    along = ends[1] - ends[0]
    e = along / np.linalg.norm(along)
    n = np.array([-e[1], e[0]])
    t = wall.props["thickness"][m]
    loads = unit_stresses(2)
    force, moment = members.force[0, m] @ loads, members.moment[0, m, 0] @ loads
    solid, beam = [], []
    for side in (1.0, -1.0):
        at = ends[0] + share * along + side * t / 2.0 * n
        shift = np.round((at - x.mean(axis=0)) @ np.linalg.inv(section.lattice))
        images = [at + (np.array([i, j]) - shift) @ section.lattice for i in (-1, 0, 1) for j in (-1, 0, 1)]
        distance = np.array([np.hypot(*(x - p).T) for p in images])
        image, near = np.unravel_index(distance.argmin(), distance.shape)
        place = images[image]
        s = (x[near] - place) @ e
        assert abs((x[near] - place) @ n) < 1e-6 * t and abs(s) < 0.5 * t
        lever = (members.at[0, m] - ends[0] - share * along) - s * e
        M = moment + lever[0] * force[1] - lever[1] * force[0]
        beam.append(e @ force / t - side * 6.0 * M / t**2)
        a, b, c = found[near]
        solid.append(e[0] ** 2 * a + e[1] ** 2 * b + 2.0 * e[0] * e[1] * c)
    return np.array(solid), np.array(beam)


@pytest.mark.parametrize(("m", "share"), [(0, 0.3), (1, 0.3), (2, 0.7)])
def test_the_plain_wall_has_the_stress_of_the_beam(m, share):
    cell = honeycomb(0.5)
    section = cell_section(cell, fillet=0.1)
    x, found = stress(section)
    solid, beam = face_stress(cell, section, x, found, m, share)
    # a beam of t/l 0.05, 0.3 l from its ends: Saint-Venant's terms have died out, the rest is mesh (4e-4 at most)
    np.testing.assert_allclose(solid, beam, rtol=2e-3, atol=1e-5 * np.abs(beam).max())


def test_that_comparison_sees_a_wrong_place():
    cell = honeycomb(0.5)
    section = cell_section(cell, fillet=0.1)
    x, found = stress(section)
    solid, _ = face_stress(cell, section, x, found, 1, 0.3)
    _, elsewhere = face_stress(cell, section, x, found, 1, 0.35)
    assert np.abs(solid - elsewhere).max() > 0.05 * np.abs(solid).max()


def test_a_fillet_has_a_largest_stress_and_a_larger_one_less():
    cell = honeycomb(1.0)
    sharp, round_ = (corner_stress(cell, fillet=r) for r in (0.5, 1.0))
    finer = corner_stress(cell, fillet=0.5, size=0.6)
    np.testing.assert_allclose(sharp.von_mises, finer.von_mises, rtol=0.005)
    assert (np.abs(sharp.von_mises / finer.von_mises - 1.0) <= sharp.change + 1e-3).all() and (
        sharp.change < 0.03
    ).all()
    assert (round_.von_mises < 0.95 * sharp.von_mises).all()
    beams = sections(homog.homogenize(cell, model="joint")).peak(unit_stresses(2))[0]
    assert (sharp.von_mises > 1.1 * beams).all()  # what the columns warn of
    assert not np.allclose(sharp.where, 0.0)


def test_a_sharp_corner_has_no_largest_stress():
    cell = honeycomb(1.0)
    with pytest.raises(InputError, match="no limit, the radius decides"):
        corner_stress(cell, fillet=0.0)
    with pytest.raises(InputError, match="size"):
        corner_stress(cell, fillet=0.5, size=0.0)
    section = cell_section(cell)
    coarse, fine = (von_mises(stress(section, size=size)[1]).max(axis=0) for size in (2.0, 1.0))
    assert (fine > 1.3 * coarse).all()


def test_deep_walls_yield_later_by_the_stress_across():
    parent = UNIT.replaced(poisson=0.3)
    thin, deep = (corner_stress(honeycomb(1.0, material=p), fillet=1.0) for p in (parent, parent.replaced(deep=True)))
    # in the plane stresses hardly depend on nu; at a free face sqrt(1 - nu + nu^2) of the plane-stress value is left
    np.testing.assert_allclose(deep.von_mises / thin.von_mises, np.sqrt(1.0 - 0.3 + 0.09), rtol=0.01)


def test_it_does_not_know_the_modulus_and_scales_with_nothing():
    one = corner_stress(honeycomb(1.0), fillet=0.5)
    cell = honeycomb(1.0, material=UNIT.replaced(modulus_MPa=2000.0)).scaled(3.0)
    found = corner_stress(cell, fillet=1.5)
    np.testing.assert_allclose(found.von_mises, one.von_mises, rtol=5e-3)  # two meshes
    assert np.abs(found.where).max() > 2.0 * np.abs(one.where).max()
