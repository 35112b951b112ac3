"""Squares, rectangles and triangles that turn on hinges at their corners, against Grima and co-workers.

J. N. Grima & K. E. Evans 2000, "Auxetic behavior from rotating squares", J. Mater. Sci. Lett. 19, 1563-1565; J. N.
Grima, R. Gatt, A. Alderson & K. E. Evans 2005, J. Phys. Soc. Jpn 74, 2866-2867 (rectangles, type I); J. N. Grima & K.
E. Evans 2006, "Auxetic behavior from rotating triangles", J. Mater. Sci. 41, 3193-3196: all [memory], for rigid units
and hinges of stiffness K per unit depth. That a rigid unit's compliance is rank one and what compliant hinges do is
[derived]. th is the acute angle of the void, counted from closed.

The library's units are elastic, so the rigid results are limits: their hinges K = E t^3/(12 ligament_length) get
softer as t^3 against units that stay, and every error falls by eight when t is halved.
"""

import dataclasses

import numpy as np
import pytest
from by_hand import cell, compliance, constants, drawn, from_compliance, orders, walls
from hypothesis import given
from hypothesis import strategies as st

from homog.families import build

SIDE, LIGAMENT = 10.0, 1.0
THINNER = 0.8 / 2.0 ** np.arange(4)


def hinge(t):
    """Flexure strip of unit depth."""
    return t**3 / (12.0 * LIGAMENT)


def units(name, opening, t):
    return build(name, side=SIDE, opening=opening, ligament_thickness=t, ligament_length=LIGAMENT)


def squares_modulus(opening, K, side=SIDE):
    """E = 8 K/(l^2 (1 - sin th))."""
    return 8.0 * K / (side**2 * (1.0 - np.sin(np.radians(opening))))


def triangles_modulus(opening, K, side=SIDE):
    """E = 4 sqrt3 K/(l^2 (1 + cos(60 deg + th)))."""
    return 4.0 * np.sqrt(3.0) * K / (side**2 * (1.0 + np.cos(np.radians(60.0 + opening))))


@pytest.mark.parametrize(
    ("name", "modulus", "opening"),
    [
        *(("rotating-squares", squares_modulus, opening) for opening in (5.0, 30.0, 60.0)),
        *(("rotating-triangles", triangles_modulus, opening) for opening in (10.0, 60.0, 100.0)),
    ],
)
def test_elastic_units_tend_to_rigid_ones(name, modulus, opening):
    found = constants(units(name, opening, THINNER))
    limit = modulus(opening, hinge(THINNER))
    error_E, error_nu = found.E1 / limit - 1.0, found.nu12 + 1.0
    for error in (error_E, error_nu):
        assert orders(error)[-1] == pytest.approx(3.0, abs=0.02)
        assert abs(error[-1]) < 2e-3
    assert (error_E < 0.0).all() and (error_nu > 0.0).all(), "what gives way softens, and raises nu"
    # With the third-order term taken out (Richardson) what is left is its square.
    for values, error, exact in ((found.E1 / limit, error_E, 1.0), (found.nu12, error_nu, -1.0)):
        assert (8.0 * values[-1] - values[-2]) / 7.0 == pytest.approx(exact, abs=20.0 * error[-1] ** 2)
    assert pytest.approx(found.E1, rel=1e-9) == found.E2


@pytest.mark.parametrize("load_deg", [15.0, 30.0, 45.0, 73.0])
def test_triangles_are_isotropic(load_deg):
    sample = units("rotating-triangles", 40.0, 0.4)
    assert constants(sample, load_deg=load_deg) == pytest.approx(constants(sample), rel=1e-9)


@pytest.mark.parametrize("opening", [10.0, 30.0, 70.0])
def test_cell_of_the_squares(opening):
    # cell 2 l (cos th/2 + sin th/2) along axes 1 and 2; the primitive vectors stand at 45 deg to them
    sample = units("rotating-squares", opening, 0.1)
    half = np.radians(opening / 2.0)
    assert sample.size == pytest.approx([2.0 * SIDE * (np.cos(half) + np.sin(half))] * 2, rel=1e-12)
    assert np.abs(sample.lattice[:, 0]) == pytest.approx(np.abs(sample.lattice[:, 1]), rel=1e-12)
    assert sample.volume == pytest.approx(2.0 * SIDE**2 * (1.0 + np.sin(2.0 * half)), rel=1e-12)


# ------------------------------------------------------------------------------------------ rectangles, type I


def rectangles(a, b, opening, K, EA):
    """Return rectangles a x b (a along axis 1 when closed): the squares' topology with another unit's corners."""
    pattern = build("rotating-squares", side=1.0, opening=30.0, ligament_thickness=0.01, ligament_length=0.1)
    c, s = np.cos(np.radians(opening / 2.0)), np.sin(np.radians(opening / 2.0))
    right, top = np.array([a * c + b * s, a * s - b * c]) / 2.0, np.array([a * c - b * s, a * s + b * c]) / 2.0
    X, Y = a * c + b * s, a * s + b * c
    bars, hinges = pattern.blocks
    assert (bars.kind, hinges.kind) == ("bar", "hinge")
    stiff = dataclasses.replace(bars, props={"rigidity": np.array([EA])})
    soft = dataclasses.replace(hinges, props={"stiffness": np.array([K / 2.0])})  # two to a pin
    return dataclasses.replace(
        pattern,
        points=np.array([right, top, -right, -top]),
        lattice=np.array([[X, Y], [-X, Y]]),
        blocks=(stiff, soft),
    )


def rectangles_formula(a, b, opening, K):
    """nu12 = (a^2c^2 - b^2s^2)/(a^2s^2 - b^2c^2), E1 = 8K(ac + bs)/((as + bc)(bc - as)^2), argument th/2."""
    c, s = np.cos(np.radians(opening / 2.0)), np.sin(np.radians(opening / 2.0))
    nu12 = (a**2 * c**2 - b**2 * s**2) / (a**2 * s**2 - b**2 * c**2)
    E1 = 8.0 * K * (a * c + b * s) / ((a * s + b * c) * (b * c - a * s) ** 2)
    return E1, E1 / nu12**2, nu12


@pytest.mark.parametrize(
    ("a", "b", "opening"), [(2.0, 1.0, 30.0), (1.0, 2.0, 30.0), (1.5, 1.0, 70.0), (3.0, 1.0, 80.0)]
)
def test_rectangles(a, b, opening):
    # Bars 10^4 to 10^7 times the hinges: first order in K/EA, and extrapolated to rigid ones.
    stiffnesses = 10.0 ** np.arange(4, 8)
    E1, E2, nu12 = rectangles_formula(a, b, opening, 1.0)
    found = [constants(rectangles(a, b, opening, 1.0, EA)) for EA in stiffnesses]
    for name, exact in (("E1", E1), ("E2", E2), ("nu12", nu12)):
        values = np.array([getattr(f, name) for f in found])
        error = values / exact - 1.0
        assert orders(error, 10.0)[-1] == pytest.approx(1.0, abs=0.02), name
        extrapolated = (10.0 * values[-1] - values[-2]) / 9.0
        assert extrapolated == pytest.approx(exact, rel=20.0 * error[-1] ** 2 + 1e-8), name
    assert found[-1].nu12 * found[-1].nu21 == pytest.approx(1.0, abs=1e-2), "one motion only"


def test_printed_row_of_the_rectangles():
    # a 2, b 1, th 30, K 1: nu12 -5.510847, E1 58.78237, E2 1.935576, to half a unit of the last printed digit; bars
    # 1e5 and 1e6 times stiffer than the hinges, extrapolated (what is left is the square of 5e-5)
    soft, stiff = (constants(rectangles(2.0, 1.0, 30.0, 1.0, EA)) for EA in (1e5, 1e6))
    E1, E2, nu12 = ((10.0 * getattr(stiff, n) - getattr(soft, n)) / 9.0 for n in ("E1", "E2", "nu12"))
    assert nu12 == pytest.approx(-5.510847, abs=0.51e-6)
    assert pytest.approx(58.78237, abs=0.51e-5) == E1
    assert pytest.approx(1.935576, abs=0.51e-6) == E2


def test_rectangles_lock_where_the_ratio_is_singular():
    # tan(th/2) = b/a: the width passes its greatest, nu12 changes sign through infinity.
    lock = 2.0 * np.degrees(np.arctan(0.5))
    below, above = (constants(rectangles(2.0, 1.0, lock + step, 1.0, 1e9)).nu12 for step in (-1.0, 1.0))
    assert below < -50.0 and above > 50.0


@pytest.mark.parametrize("opening", [30.0, 45.0, 80.0])
def test_rigid_units_have_a_rank_one_compliance(opening):
    # S = (area/nK) v v', v the strain per unit relative turn (here of both neighbours, th itself), n = 4 pins a cell;
    # then nu is -1 at 45 deg to the principal axes whatever the unit [derived].
    a, b, K = 2.0, 1.0, 1.0
    c, s = np.cos(np.radians(opening / 2.0)), np.sin(np.radians(opening / 2.0))
    v = np.array([(b * c - a * s) / (a * c + b * s), (a * c - b * s) / (a * s + b * c), 0.0]) / 2.0
    stiffnesses = 10.0 ** np.arange(4, 8)
    cells = [rectangles(a, b, opening, K, EA) for EA in stiffnesses]
    expected = cells[0].volume / (4.0 * K) * np.outer(v, v)
    errors = [np.abs(compliance(c) - expected).max() / expected.max() for c in cells]
    at_45 = [constants(c, load_deg=45.0).nu12 + 1.0 for c in cells]
    for trend in (errors, at_45):  # the rest is the bars': first order in K/EA
        assert orders(trend, 10.0)[1:] == pytest.approx(np.ones(2), abs=0.02)
        assert trend[-1] < 1e-4


# ------------------------------------------------------------------------------------------ compliant hinges


def compliant_squares(l, opening, K, kn, ks):
    """Return rigid squares joined at their corners by springs along (kn) and across (ks) the line of centres, and K.

    A wall of length d between rigid arms is such a set of springs at its middle: EA/d = kn, EI/d = K, 12 EI/d^3 = ks.
    """
    half = np.radians(opening / 2.0)
    near, far = l / 2.0 * (np.cos(half) - np.sin(half)), l / 2.0 * (np.cos(half) + np.sin(half))
    d, t = np.sqrt(12.0 * K / ks), np.sqrt(12.0 * K / kn)
    arms = {"start_along": far - d / 2.0, "end_along": d / 2.0 - far, "start_across": -near, "end_across": -near}
    # A at the origin, its four neighbours the images of B
    joints = [[(0, (0, 0)), (1, image)] for image in ((0, 0), (-1, 1), (0, 1), (-1, 0))]
    springs = walls(joints, t, **arms)
    springs = dataclasses.replace(springs, props={**springs.props, "modulus": np.array([kn * d / t])})
    return cell([[0.0, 0.0], [2.0 * far, 0.0]], 2.0 * far * np.array([[1.0, 1.0], [-1.0, 1.0]]), springs)


@drawn
@given(st.floats(0.5, 20.0), st.floats(2.0, 80.0), st.floats(0.1, 10.0), st.floats(10.0, 1e4), st.floats(10.0, 1e4))
def test_squares_with_compliant_hinges(l, opening, K, kn, ks):
    # C11 + C12 = 2 K kn/(kn l^2 sin^2 psi + 2 K), C11 - C12 = kn, C66 = ks/2, psi = 45 deg - th/2; round-off times the
    # ratio of the springs, at most 1e5 (K against kn l^2)
    C = np.linalg.inv(compliance(compliant_squares(l, opening, K, kn, ks)))
    psi = np.radians(45.0 - opening / 2.0)
    assert C[0, 0] + C[0, 1] == pytest.approx(2.0 * K * kn / (kn * l**2 * np.sin(psi) ** 2 + 2.0 * K), rel=1e-7)
    assert C[0, 0] - C[0, 1] == pytest.approx(kn, rel=1e-9)
    assert C[2, 2] == pytest.approx(ks / 2.0, rel=1e-9)
    assert np.array([C[1, 1] / C[0, 0], 1.0 + C[0, 2] / C[0, 0]]) == pytest.approx(1.0, rel=1e-9)


def test_printed_row_of_the_compliant_hinges():
    # l 1, th 30, K 1, kn 100, ks 40, half a unit of the last printed digit
    sample = compliant_squares(1.0, 30.0, 1.0, 100.0, 40.0)
    found, diagonal = constants(sample), constants(sample, load_deg=45.0)
    assert pytest.approx(13.793103, abs=0.5e-6) == found.E1
    assert found.nu12 == pytest.approx(-0.862069, abs=0.5e-6)
    assert pytest.approx(20.0, abs=1e-6) == found.G12
    assert (diagonal.E1, diagonal.nu12, diagonal.G12) == pytest.approx((12.5, -0.6875, 50.0), rel=1e-9)


def test_stiff_hinges_bring_back_the_rigid_squares():
    # kn, ks -> infinity: E = 8 K/(l^2 (1 - sin th)), nu = -1; first order in 1/k
    limit = squares_modulus(30.0, 1.0, side=1.0)
    found = [constants(compliant_squares(1.0, 30.0, 1.0, k, k)) for k in (1e4, 1e5, 1e6)]
    for errors in ([f.E1 / limit - 1.0 for f in found], [f.nu12 + 1.0 for f in found]):
        assert orders(errors, 10.0)[-1] == pytest.approx(1.0, abs=0.01)
        assert abs(errors[-1]) < 1e-4


def test_constants_are_those_of_the_compliance():
    S = np.array([[0.5, 0.1, 0.0], [0.1, 0.25, 0.0], [0.0, 0.0, 2.0]])
    assert from_compliance(S) == pytest.approx((2.0, 4.0, -0.2, -0.4, 0.5))
