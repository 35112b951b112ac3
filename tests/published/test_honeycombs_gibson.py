"""Honeycombs whose walls bend, stretch and shear, against Gibson & Ashby.

L. J. Gibson, M. F. Ashby, G. S. Schajer & C. I. Robertson 1982, "The mechanics of two-dimensional cellular
materials", Proc. R. Soc. A 382, 25-42; L. J. Gibson & M. F. Ashby, Cellular Solids, 2nd ed. 1997, chapter 4.

Bending alone is from the source [read]; the full forms of the 2nd edition are from memory, confirmed numerically, and
with B = 2 (1 + nu_s)/kappa exact for the same theory [memory]; the full G12, the regular hexagon at all angles and
the doubled vertical walls follow from the beam energy [derived]. Vertical walls h along axis 2, inclined walls l at
the angle th from axis 1, tau = t/l, wall modulus 1.
"""

import dataclasses

import numpy as np
import pytest
from by_hand import SHEAR_COEFFICIENT, Constants, compliance, constants, drawn, orders, shear_share
from hypothesis import given
from hypothesis import strategies as st

from homog.families import build
from homog.materials import UNIT

# The honeycomb is statically determinate up to its joint rotations and its tensor is well conditioned down to
# tau = 0.01 (1 / tau^2 = 1e4), so a closed form of the same theory is met to round-off times that.
SAME_THEORY = 1e-9

ratios = st.floats(0.3, 3.0)
thicknesses = st.floats(0.01, 0.2)
angles = st.one_of(st.floats(5.0, 75.0), st.floats(-75.0, -5.0))
models = st.sampled_from(["euler", "timoshenko"])


def honeycomb(h_l, angle, tau, *, poisson=0.3, length=1.0, **more):
    """Return the cell with inclined walls of `length`; tau and angle may be arrays of one sign of the angle."""
    family = "hexagonal-honeycomb" if np.min(angle) > 0 else "reentrant-honeycomb"
    shape = dict(inclined=length, vertical=h_l * length, angle=angle, thickness=np.multiply(tau, length), **more)
    return build(family, material=UNIT.replaced(poisson=poisson), **shape)


def bending(h_l, angle, tau, vertical_ratio=1.0):
    """Flexure only [read]; vertical walls thicker by `vertical_ratio` enter G12 alone, as their cube [derived].

    The moment that shears the cell is h/2 times the force in a vertical wall: that wall contributes 2 (h/l) (t/t_v)^3
    beside 1 for the inclined ones. Doubled foil (t_v = 2 t) has 1 + (h/l)/4, known from expanded cores.
    """
    s, c = np.sin(np.radians(angle)), np.cos(np.radians(angle))
    one = np.ones_like(tau)
    return Constants(
        tau**3 * c / ((h_l + s) * s**2),
        tau**3 * (h_l + s) / c**3,
        one * c**2 / ((h_l + s) * s),
        one * (h_l + s) * s / c**2,
        tau**3 * (h_l + s) / (h_l**2 * (1.0 + 2.0 * h_l / vertical_ratio**3) * c),
    )


def full(h_l, angle, tau, B):
    """Flexure, stretch and shear [memory; G12 derived]."""
    s, c = np.sin(np.radians(angle)), np.cos(np.radians(angle))
    E1, E2, nu12, nu21, _ = bending(h_l, angle, tau)
    soft1 = 1.0 + (B + c**2 / s**2) * tau**2
    soft2 = 1.0 + (B + s**2 / c**2 + 2.0 * h_l / c**2) * tau**2
    common = 1.0 + (B - 1.0) * tau**2
    flexure = c * h_l**2 * (1.0 + 2.0 * h_l) / ((h_l + s) * tau**3)
    stretch = (1.0 + h_l * s) ** 2 / (c * (h_l + s) * tau)
    shear = c * h_l * (2.0 + h_l) * B / ((h_l + s) * tau)
    return Constants(
        E1 / soft1, E2 / soft2, nu12 * common / soft1, nu21 * common / soft2, 1.0 / (flexure + stretch + shear)
    )


def room(h_l, angle, tau):
    """Whether the cell exists with walls of finite thickness: no void narrower than the family builds."""
    s = np.sin(np.radians(angle))
    return h_l + 2.0 * s > 2.0 * tau if angle < 0 else True


@drawn
@given(ratios, angles, thicknesses, st.floats(0.0, 0.45), models)
def test_flexure_stretch_and_shear(h_l, angle, tau, poisson, model):
    if not room(h_l, angle, tau):
        h_l = -2.0 * np.sin(np.radians(angle)) + 2.0 * tau + h_l  # drawn too short: lengthen it
    # thick walls at sharp angles close the void beside a joint; the closed form does not mind, the family does
    cell = dataclasses.replace(honeycomb(h_l, angle, [tau], poisson=poisson), status=np.array([0]))
    expected = full(h_l, angle, tau, shear_share(model, poisson))
    for found, value in zip(constants(cell, model), expected, strict=True):
        assert found == pytest.approx(value, rel=SAME_THEORY, abs=0.0)
    S = compliance(cell, model)[0]
    assert np.abs(S[:2, 2]).max() < 1e-10 * S.max(), "stretch and shear do not couple"


@drawn
@given(ratios, thicknesses, st.floats(0.0, 0.45))
def test_deep_walls_are_in_plane_strain(h_l, tau, poisson):
    # deep cells: E/(1 - nu_s^2) and nu_s/(1 - nu_s) in place of the parent's constants, its shear modulus unchanged
    parent = UNIT.replaced(poisson=poisson, deep=True)
    cell = build("hexagonal-honeycomb", material=parent, inclined=1.0, vertical=h_l, angle=40.0, thickness=[tau])
    modulus, shear = 1.0 / (1.0 - poisson**2), 1.0 / (2.0 * (1.0 + poisson))
    expected = full(h_l, 40.0, tau, modulus / shear / SHEAR_COEFFICIENT)
    found = constants(dataclasses.replace(cell, status=np.array([0])), "timoshenko")
    for name, value in zip(Constants._fields, expected, strict=True):
        unit = 1.0 if name.startswith("nu") else modulus
        assert getattr(found, name) == pytest.approx(unit * value, rel=SAME_THEORY), name


@pytest.mark.parametrize(("h_l", "angle"), [(1.0, 30.0), (2.0, -30.0), (2.0, 30.0), (1.5, 55.0), (3.0, -60.0)])
def test_bending_alone_is_the_limit_of_slender_walls(h_l, angle):
    # The corrections are of the order tau^2 [the full forms]: the error falls by four with every halving.
    tau = 0.08 / 2.0 ** np.arange(5)
    found, limit = constants(honeycomb(h_l, angle, tau)), bending(h_l, angle, tau)
    for name, value, slender in zip(Constants._fields, found, limit, strict=True):
        error = np.abs(value / slender - 1.0)
        if name == "G12" and abs(1.0 + h_l * np.sin(np.radians(angle))) < 1e-9:
            assert error.max() < SAME_THEORY  # no wall stretches, see below
            continue
        assert orders(error)[-1] == pytest.approx(2.0, abs=0.02), name
        assert error[-1] < 1e-3, name  # (0.005)^2 times the largest coefficient, (1 + 2 h/l)/c^2 = 28
        # and with the quadratic term taken out (Richardson) nothing of it is left
        extrapolated = (4.0 * value[-1] / slender[-1] - value[-2] / slender[-2]) / 3.0
        assert abs(extrapolated - 1.0) < error[-1] * error[-2] * 5.0, name


@pytest.mark.parametrize(
    ("h_l", "angle", "tau", "model", "printed"),
    [
        (1, 30, 0.05, "timoshenko", ("2.84325e-4", "2.84325e-4", ".990151", ".990151", "7.1433e-5")),
        (2, -30, 0.1, "timoshenko", ("2.17622e-3", "2.12287e-3", "-.962307", "-.938718", "8.55351e-5")),
        (2, -30, 0.1, "euler", ("2.24214e-3", "2.18555e-3", "-.961165", "-.936909", "8.66025e-5")),
    ],
)
def test_printed_rows(h_l, angle, tau, model, printed):
    # [memory; exact] nu_s = 0.3, kappa = 5/6. To half a unit of the last printed digit.
    for found, text in zip(constants(honeycomb(h_l, angle, tau), model), printed, strict=True):
        mantissa, _, power = text.partition("e")
        last = 10.0 ** (-len(mantissa.partition(".")[2]) + int(power or 0))
        assert found == pytest.approx(float(text), rel=0.0, abs=0.5001 * last), text


@drawn
@given(thicknesses, st.floats(0.0, 180.0))
def test_the_regular_hexagon_is_the_same_in_every_direction(tau, load_deg):
    # [derived] E = (4/sqrt3) tau^3/(1 + 3 tau^2), nu = (1 - tau^2)/(1 + 3 tau^2), G = tau^3/(sqrt3 (1 + tau^2))
    E = 4.0 / np.sqrt(3.0) * tau**3 / (1.0 + 3.0 * tau**2)
    nu = (1.0 - tau**2) / (1.0 + 3.0 * tau**2)
    G = tau**3 / (np.sqrt(3.0) * (1.0 + tau**2))
    found = constants(honeycomb(1.0, 30.0, tau), load_deg=load_deg)
    assert found == pytest.approx((E, E, nu, nu, G), rel=SAME_THEORY)


def test_the_axes_are_not_swapped():
    # h/l = 2, th = 30 deg is not symmetric: E1/E2 = c^4/((h/l + s)^2 s^2) = 0.36, far from its inverse.
    found = constants(honeycomb(2.0, 30.0, 0.001))
    assert pytest.approx(0.36, rel=1e-4) == found.E1 / found.E2  # tau^2 (1 + 2 h/l)/c^2 is 7e-6
    assert found.nu12 == pytest.approx(0.6, rel=1e-4)
    assert found.nu21 == pytest.approx(1 / 0.6, rel=1e-4)


def test_the_stretch_of_the_walls_leaves_the_shear_modulus_alone_where_the_force_is_along_no_wall():
    # 1 + (h/l) s = 0 at h/l = 2, th = -30 deg: G12 is its bending value at every thickness; at +30 deg it is not.
    tau = np.array([0.01, 0.05, 0.1, 0.2])
    assert pytest.approx(bending(2.0, -30.0, tau).G12, rel=SAME_THEORY) == constants(honeycomb(2.0, -30.0, tau)).G12
    away = constants(honeycomb(2.0, 30.0, tau)).G12 / bending(2.0, 30.0, tau).G12
    share = (1.0 + 1.0) ** 2 / (0.75 * 2.0**2 * (1.0 + 2.0 * 2.0))  # (1 + (h/l)s)^2/(c^2 (h/l)^2 (1 + 2h/l))
    assert away == pytest.approx(1.0 / (1.0 + share * tau**2), rel=SAME_THEORY)


@pytest.mark.parametrize(("h_l", "angle"), [(1.0, 30.0), (2.0, -30.0), (2.0, 30.0)])
@pytest.mark.parametrize("ratio", [2.0, 1.5, 0.5])
def test_doubled_vertical_walls_change_the_shear_modulus_and_nothing_else(h_l, angle, ratio):
    # [derived] In bending, vertical walls carry no moment under a pull along the axes.
    tau = 0.02 / 2.0 ** np.arange(4)
    plain = constants(honeycomb(h_l, angle, tau))
    doubled = constants(honeycomb(h_l, angle, tau, vertical_thickness=ratio * tau))
    expected = bending(h_l, angle, tau, ratio)
    for name in ("E1", "E2", "nu12", "nu21"):
        gap = np.abs(getattr(doubled, name) / getattr(plain, name) - 1.0)
        # only the stretch of the vertical walls differs: (h/l)(2 - 2/ratio)/c^2 tau^2 in E2 and nu21
        if name in ("E1", "nu12"):
            assert gap.max() < SAME_THEORY, name
        else:
            assert orders(gap)[-1] == pytest.approx(2.0, abs=0.02), name
    error = doubled.G12 / expected.G12 - 1.0
    assert abs(error[-1]) < 2.5 * tau[-1] ** 2  # (1 + (h/l)s)^2/(c^2 (h/l)^2 (1 + 2(h/l)/ratio^3)) is at most 2.4
    assert np.abs(expected.G12 / plain.G12 - 1.0).min() > 0.3, "the change is no small one"
    if abs(1.0 + h_l * np.sin(np.radians(angle))) > 1e-9:
        assert orders(error)[-1] == pytest.approx(2.0, abs=0.05)


def test_auxetic_only_near_the_axes():
    # h/l = 2, th = -30 deg, tau = 0.1: nu passes zero about 11 deg from axis 1 and is about +0.74 at 45 deg.
    # [derived] from 1/E(a) and nu(a)/E(a) of an orthotropic plane tensor with the full forms above.
    tensor = full(2.0, -30.0, 0.1, 0.0)
    cell = honeycomb(2.0, -30.0, 0.1)
    for load_deg, nu in ((11.0, None), (12.0, None), (45.0, 0.74), (90.0, None)):
        c2, s2 = np.cos(np.radians(load_deg)) ** 2, np.sin(np.radians(load_deg)) ** 2
        along = c2**2 / tensor.E1 + s2**2 / tensor.E2 + c2 * s2 * (1.0 / tensor.G12 - 2.0 * tensor.nu12 / tensor.E1)
        across = tensor.nu12 / tensor.E1 * (c2**2 + s2**2)
        across -= c2 * s2 * (1.0 / tensor.E1 + 1.0 / tensor.E2 - 1.0 / tensor.G12)
        found = constants(cell, load_deg=load_deg).nu12
        assert found == pytest.approx(across / along, rel=1e-9)
        if nu is not None:
            assert found == pytest.approx(nu, abs=0.005), "as printed, two digits"
    assert constants(cell, load_deg=11.0).nu12 < 0.0 < constants(cell, load_deg=12.0).nu12


# Solids: two-dimensional plane-stress finite elements, six-node triangles, rounded outer corners, two independent
# codes that agree to 3 %; h/l = 2, th = -30 deg, nu_s = 0.3 [derived].
# tau: true density, E1/t^3, E2/t^3, G12/t^3, nu12, nu21
SOLIDS = {
    0.05: (0.0756, 2.594, 2.554, 0.0939, -0.994, -0.977),
    0.1: (0.1483, 2.878, 2.693, 0.1020, -0.970, -0.908),
    0.2: (0.2852, 3.346, 2.618, 0.1222, -0.852, -0.667),
}


@pytest.mark.parametrize("tau", SOLIDS)
def test_density_counts_every_joint_once(tau):
    # To the printed digits, less what a mesh loses that draws the round corner (60 deg, radius t/2, two a cell) with
    # three chords: 8e-5 at tau = 0.2, where the exact section is 0.28528 and the table has .2852.
    cell = honeycomb(2.0, -30.0, tau)
    area = 2.0 * np.cos(np.radians(30.0)) * (2.0 - 0.5)
    chords = 2.0 * (tau / 2.0) ** 2 / 2.0 * (np.pi / 3.0 - 3.0 * np.sin(np.pi / 9.0)) / area
    assert -0.5e-4 <= cell.relative_density - SOLIDS[tau][0] <= 0.5e-4 + chords
    walls_alone = tau * (2.0 + 2.0) / (2.0 * np.cos(np.radians(30.0)) * 1.5)
    assert walls_alone / cell.relative_density > 1.0 + 0.35 * tau, (
        "the sum of the walls counts each joint several times"
    )


@pytest.mark.parametrize(
    ("tau", "too_soft"),
    [(0.05, (12.3, 11.5, 8.1)), (0.1, (24.4, 21.2, 16.1)), (0.2, (44.6, 34.7, 32.5))],
)
def test_how_far_plain_walls_fall_short_of_the_solid(tau, too_soft):
    # No agreement is claimed: this records the known error of walls between points, in percent of E1, E2, G12
    # (timoshenko), as sharp as the table's digits allow. The solids themselves are only known to 3 %.
    found = constants(honeycomb(2.0, -30.0, tau), "timoshenko")
    for value, solid, percent in zip((found.E1, found.E2, found.G12), SOLIDS[tau][1:4], too_soft, strict=True):
        assert 100.0 * (1.0 - value / tau**3 / solid) == pytest.approx(percent, abs=0.1)


def test_the_shortfall_shrinks_in_proportion_to_the_thickness():
    taus = sorted(SOLIDS, reverse=True)
    for name, column in (("E1", 1), ("E2", 2), ("G12", 3)):
        found = [getattr(constants(honeycomb(2.0, -30.0, tau), "timoshenko"), name) / tau**3 for tau in taus]
        short = [1.0 - value / SOLIDS[tau][column] for tau, value in zip(taus, found, strict=True)]
        assert short[0] > short[1] > short[2] > 0.0
        # a joint is a share t/l of its walls: first order, blunted by the next; 3 % of the solid is up to 0.4 in order
        assert orders(short)[-1] == pytest.approx(1.0, abs=0.4), name


@pytest.mark.parametrize("tau", SOLIDS)
def test_a_rigid_zone_of_half_a_thickness_makes_up_for_the_joint(tau):
    # "brings E1 and E2 of this cell within about 8 %" of the solids above
    cell = honeycomb(2.0, -30.0, tau)
    (walls,) = cell.blocks
    arms = {"start_along": np.array([tau / 2.0]), "end_along": np.array([-tau / 2.0])}
    joined = dataclasses.replace(cell, blocks=(dataclasses.replace(walls, props={**walls.props, **arms}),))
    found = constants(joined, "timoshenko")
    for value, solid in ((found.E1, SOLIDS[tau][1]), (found.E2, SOLIDS[tau][2])):
        assert value / tau**3 == pytest.approx(solid, rel=0.085), "about 8 %, as stated to one digit"


def test_aluminium_honeycomb_in_the_plane():
    """Measured: aluminium hexagons, l 6.30 mm, t 0.09 mm, E = 435 kPa in the plane, E_s = 70 GPa assumed in the source.

    Teaching library on honeycombs and foams, University of Cambridge [read]. t is known to +-0.005 mm, which is
    +-18 % in E ~ t^3: the beams' 471 kPa are 8 % above the measurement, inside that band.
    """
    low, nominal, high = (
        1e3 * float(constants(build("hexagonal-honeycomb", material=UNIT.replaced(modulus_MPa=70e3),
                                    inclined=6.30, vertical=6.30, angle=30.0, thickness=t)).E1)
        for t in (0.085, 0.09, 0.095)
    )  # fmt: skip
    assert nominal == pytest.approx(471.0, abs=0.5)
    assert low / nominal - 1.0 == pytest.approx(-0.16, abs=0.005)
    assert high / nominal - 1.0 == pytest.approx(0.18, abs=0.005)
    assert low < 435.0 < high
