"""First yield of beams against plastic collapse and pin-jointed yield.

L. J. Gibson, M. F. Ashby, G. S. Schajer & C. I. Robertson 1982, "The mechanics of two-dimensional cellular
materials", Proc. R. Soc. A 382, 25-42; L. J. Gibson & M. F. Ashby, Cellular Solids, 2nd ed. 1997, chapter 4: plastic
collapse of honeycombs whose walls bend, with the fully plastic moment sigma_ys t^2/4 per depth [memory]:

    (sigma_pl)_1 = sigma_ys tau^2 / (2 (h/l + sin th) sin th)      (sigma_pl)_2 = sigma_ys tau^2 / (2 cos^2 th)
    (tau_pl)_12 = sigma_ys tau^2 / (4 (h/l) cos th)                tau = t/l

First yield is at sigma_ys t^2/6, two thirds of it, as long as axial force is left out: the slender limit. With axial
force the honeycomb, being statically determinate by its symmetry, has a closed form [derived], given below.
V. S. Deshpande, N. A. Fleck & M. F. Ashby 2001, J. Mech. Phys. Solids 49, 1747-1769: the pin-jointed octet under a
pull along z yields at 2 sqrt2 pi (a/l)^2 sigma_ys, in shear at half of it [memory; confirmed
below by pin-jointed statics]. The rest [derived].
Vertical walls h along axis 2, inclined walls l at the angle th from axis 1; struts of radius a, length l.
"""

import numpy as np
import pytest
from by_hand import drawn, orders
from hypothesis import given
from hypothesis import strategies as st

from homog.effective import homogenize
from homog.families import build
from homog.materials import UNIT
from homog.stress import sections, unit_stresses

# Same theory: round-off times the condition of the condensation, 1/tau^2 = 1e4.
SAME_THEORY = 1e-9

ratios = st.floats(0.3, 3.0)
thicknesses = st.floats(0.01, 0.2)
angles = st.one_of(st.floats(5.0, 75.0), st.floats(-75.0, -5.0))
models = st.sampled_from(["euler", "timoshenko"])


def honeycomb(h_l, angle, tau, poisson=0.3):
    family = "hexagonal-honeycomb" if angle > 0 else "reentrant-honeycomb"
    shape = dict(inclined=1.0, vertical=h_l, angle=angle, thickness=tau)
    return build(family, material=UNIT.replaced(poisson=poisson), **shape)


def exists(h_l, angle, tau):
    s, c = np.sin(np.radians(angle)), np.cos(np.radians(angle))
    room = h_l + 2.0 * s if angle < 0 else min(h_l, 2.0 * c)
    return room > 3.0 * tau and 2.0 * c > 3.0 * tau


def yields(cell, model):
    """Return the first yield (11, 22, 12) or (11, 22, 33, 23, 13, 12) over the parent's, (..., v)."""
    return 1.0 / sections(homogenize(cell, model=model)).peak(unit_stresses(cell.d))


def collapse(h_l, angle, tau):
    """Return the plastic collapse stresses over sigma_ys as the source has them."""
    s, c = np.sin(np.radians(angle)), np.cos(np.radians(angle))
    return tau**2 * np.stack([1.0 / (2.0 * (h_l + s) * np.abs(s)), 1.0 / (2.0 * c**2), 1.0 / (4.0 * h_l * c)])


def first_yield(h_l, angle, tau, plain=(1.0, 1.0)):
    """Return first yield with axial force, over sigma_ys.

    A pull P = h + l s along 1 per inclined wall: M = P s l/2, N = P c. A pull l c along 2: M = l c c l/2, N = l c s,
    twice l c in the vertical wall. Shear: F = 2 l c across the middle of a vertical wall, M = F h/2 there and F h/4 in
    the inclined walls, N = l + h s in those. Moments vanish at the middles; `plain` is how much of each half of the
    inclined and of the vertical wall is plain, 1 for walls that run to a point.
    """
    s, c = np.sin(np.radians(angle)), np.cos(np.radians(angle))
    bend, hold = 6.0 / tau**2, 1.0 / tau
    inclined, vertical = plain
    pull1 = (h_l + s) * (bend * abs(s) / 2.0 * inclined + hold * c)
    pull2 = max(c * (bend * c / 2.0 * inclined + hold * abs(s)), 2.0 * c * hold)
    shear = max(bend * h_l * c * vertical, bend * h_l * c / 2.0 * inclined + hold * abs(1.0 + h_l * s))
    return 1.0 / np.array([pull1, pull2, shear])


@drawn
@given(ratios, angles, thicknesses, st.floats(0.0, 0.45), models)
def test_a_honeycomb_with_axial_force(h_l, angle, tau, poisson, model):
    if exists(h_l, angle, tau):
        found = yields(honeycomb(h_l, angle, tau, poisson), model)[0]
        np.testing.assert_allclose(found, first_yield(h_l, angle, tau), rtol=SAME_THEORY)


@pytest.mark.parametrize(("h_l", "angle"), [(1.0, 30.0), (2.0, -30.0), (1.5, -20.0), (0.8, 55.0)])
def test_a_slender_honeycomb_yields_at_two_thirds_of_its_collapse(h_l, angle):
    tau = [0.04, 0.02, 0.01, 0.005]
    share = np.array([yields(honeycomb(h_l, angle, t), "euler")[0] / collapse(h_l, angle, t) for t in tau])
    short = 2.0 / 3.0 - share
    assert (short[:, :2] > 0.0).all() and short[-1].max() < 0.02
    np.testing.assert_allclose(orders(short[:, :2].max(axis=1)), 1.0, atol=0.1)  # axial over bending stress goes as t/l
    np.testing.assert_allclose(share[:, 2], 2.0 / 3.0, rtol=1e-8)  # a vertical wall in shear carries no axial force


def test_the_axes_are_not_those_of_another_direction():
    one, two, _ = yields(honeycomb(1.5, 20.0, 0.005), "euler")[0] / collapse(1.5, 20.0, 0.005)[[1, 0, 2]]
    assert one > 0.9 and two < 0.5  # two thirds where the axes are right


@pytest.mark.parametrize("tau", [0.03, 0.1, 0.2])
@pytest.mark.parametrize(("h_l", "angle"), [(1.0, 30.0), (1.3, 20.0), (2.0, -30.0), (1.0, 45.0)])
def test_between_joints_the_plain_wall_is_what_yields(h_l, angle, tau):
    # Faces that meet at beta do so t/2 cot(beta/2) from the point; forces are those of statics, whatever the joint is
    # like, for walls are their own images under half a turn about their middles, which the tables' joints keep.
    beta = np.radians(90.0 + angle), np.radians(180.0 - 2.0 * angle)
    beside, between = (max(tau / np.tan(b / 2.0), 0.0) for b in beta)
    plain = 1.0 - max(beside, between), 1.0 - beside / h_l
    found = yields(honeycomb(h_l, angle, tau), "joint")[0]
    np.testing.assert_allclose(found, first_yield(h_l, angle, tau, plain), rtol=1e-5)
    assert (found > yields(honeycomb(h_l, angle, tau), "timoshenko")[0]).all()


@drawn
@given(thicknesses, models)
def test_grids(tau, model):
    # square: N = l along the walls; in shear M = l^2/2 and no axial force
    found = yields(build("square-grid", length=10.0, thickness=10.0 * tau), model)[0]
    np.testing.assert_allclose(found, [tau, tau, tau**2 / 3.0], rtol=SAME_THEORY)


def test_a_square_grid_between_joints():
    # the inner corner lies t/2 from the point: 1 - tau of each half is plain
    found = yields(build("square-grid", length=10.0, thickness=1.0), "joint")[0]
    np.testing.assert_allclose(found, [0.1, 0.1, 0.1**2 / (3.0 * 0.9)], rtol=1e-5)


# ------------------------------------------------------------------------------------------- the octet


def pinned_octet(a_l, load):
    """Return the largest axial stress of a pin-jointed octet of unit struts under a Voigt stress, by its own statics.

    Six orientations of struts <110>, one force each by symmetry of the lattice (all struts of an orientation are
    images of one another); four nodes' worth of 24 struts in (sqrt2 l)^3. Of all forces in equilibrium with the load
    the elastic ones are the least in square: the six forces and six stresses match, so there is one solution.
    """
    n = np.array([[1, 1, 0], [1, -1, 0], [1, 0, 1], [1, 0, -1], [0, 1, 1], [0, 1, -1]]) / np.sqrt(2.0)
    each = 4.0 / np.sqrt(2.0) ** 3  # struts of an orientation per volume, l = 1
    pairs = [(0, 0), (1, 1), (2, 2), (1, 2), (0, 2), (0, 1)]
    A = np.array([[each * v[i] * v[j] for v in n] for i, j in pairs])
    return np.abs(np.linalg.solve(A, load)).max() / (np.pi * a_l**2)


def test_the_pin_jointed_octet_yields_as_published():
    published = 2.0 * np.sqrt(2.0) * np.pi * 0.05**2
    for axis in range(3):
        assert 1.0 / pinned_octet(0.05, np.eye(6)[axis]) == pytest.approx(published, rel=1e-12)
        assert 1.0 / pinned_octet(0.05, np.eye(6)[3 + axis]) == pytest.approx(published / 2.0, rel=1e-12)


def octet(a_l, model):
    return yields(build("octet", length=10.0, diameter=20.0 * np.array(a_l)), model)


def test_the_rigid_jointed_octet_tends_to_it():
    a_l = np.array([0.04, 0.02, 0.01, 0.005, 0.0025])
    pinned = np.array([1.0 / np.array([pinned_octet(a, load) for load in np.eye(6)]) for a in a_l])
    over = octet(a_l, "euler") / pinned - 1.0
    # a pull bends its struts, 12 a/l beside 1 at nu = 1/3; in shear the most loaded struts stay straight, and the
    # others' bending carries a part, 3 (a/l)^2 beside 1
    np.testing.assert_allclose(orders(over[:, :3].min(axis=1))[-1], 1.0, atol=0.05)
    np.testing.assert_allclose(over[:, 3:], 3.0 * a_l[:, None] ** 2 + np.zeros(3), rtol=1e-6)
    np.testing.assert_allclose(over[-1, :3], -12.0 * a_l[-1], rtol=0.05)


@drawn
@given(st.floats(0.01, 0.2), models)
def test_the_rigid_jointed_octet_in_closed_form(a_l, model):
    # Nodes move with the strain (e1, e1, e3): a strut at 45 deg to z stretches by (e1 + e3)/2 and is cut across by
    # (e3 - e1)/2, which bends it by 6 EI/l^2 each end; struts in the plane 1-2 stretch by e1 alone.
    found = homogenize(build("octet", length=1.0, diameter=2.0 * a_l), model=model)
    S = np.linalg.inv(found.stiffness)
    e1, e3 = S[0, 2], S[2, 2]
    shear = 0.0 if model == "euler" else 12.0 * (a_l**2 / 4.0) * 2.6 * (7.0 + 6.0 * 0.3) / (6.0 * 1.3)
    fibre = (e1 + e3) / 2.0 + 6.0 * a_l * (e3 - e1) / 2.0 / (1.0 + shear)
    expected = 1.0 / max(fibre, abs(e1))
    assert 1.0 / sections(found).peak(unit_stresses(3))[0, 2] == pytest.approx(expected, rel=SAME_THEORY)
