"""Honeycombs whose walls bend, stretch and turn on elastic hinges at their ends, against Masters & Evans.

I. G. Masters & K. E. Evans 1996, "Models for the elastic deformation of honeycombs", Composite Structures 35, 403-422
[memory; exact for the same theory]; the shear modulus with hinges follows from the same beam energy [derived]. p is
the direction across the walls h, h the one along them (axes 1 and 2 here; that paper numbers them the other way).

K_f = E t^3/l^3 (flexure), K_s = E t/l (stretch); a spring k_r at either end of a wall gives 1/K_h = l^2/(2 k_r);
F = 1/K_f + 1/K_h.
"""

import dataclasses

import numpy as np
import pytest
from by_hand import Constants, constants, drawn, orders
from hypothesis import given
from hypothesis import strategies as st

from homog.families import build
from homog.materials import UNIT

# Same theory: round-off times how much stiffer a wall is in stretch than on its hinges, (12/tau^2)(1 + 6 EI/(k_r l)),
# which reaches 7e6 here: 2e-9, with room for the steps of the elimination.
SAME_THEORY = 1e-7

ratios = st.floats(0.3, 3.0)
thicknesses = st.floats(0.01, 0.2)
angles = st.one_of(st.floats(5.0, 75.0), st.floats(-75.0, -5.0))
springs = st.floats(0.1, 50.0)  # k_r in units of EI/l


def hinged(h_l, angle, tau, spring, *, spring_end=None, poisson=0.3):
    """Return a batch of one honeycomb, l = 1, every wall on hinges of `spring` EI/l (its second end `spring_end`)."""
    family = "hexagonal-honeycomb" if angle > 0 else "reentrant-honeycomb"
    cell = build(
        family, material=UNIT.replaced(poisson=poisson), inclined=1.0, vertical=h_l, angle=angle, thickness=[tau]
    )
    (walls,) = cell.blocks
    EI = tau**3 / 12.0
    ends = {
        "start_compliance": np.array([1.0 / (spring * EI)]),
        "end_compliance": np.array([1.0 / ((spring_end or spring) * EI)]),
    }
    on_hinges = dataclasses.replace(walls, props={**walls.props, **ends})
    # thick walls at sharp angles close the void beside a joint; the closed form does not mind, the family does
    return dataclasses.replace(cell, blocks=(on_hinges,), status=np.array([0]))


def masters_evans(h_l, angle, tau, spring):
    """E_p, E_h, nu_p, nu_h [memory] and G [derived], l = 1, E = 1, k_r = spring EI/l.

    Under shear every wall bends antisymmetrically, where two end hinges add c/2 to L/(12 EI): its share in 1/G grows
    by 1 + 6 EI c/L.
    """
    s, c = np.sin(np.radians(angle)), np.cos(np.radians(angle))
    K_s = tau
    F = 1.0 / tau**3 + 12.0 / (2.0 * spring * tau**3)  # k_r = spring tau^3/12
    across, along = s**2 * F + c**2 / K_s, c**2 * F + (2.0 * h_l + s**2) / K_s
    hinge = 6.0 / spring
    flexure = c * h_l**2 * ((1.0 + hinge) + 2.0 * h_l * (1.0 + hinge / h_l)) / ((h_l + s) * tau**3)
    stretch = (1.0 + h_l * s) ** 2 / (c * (h_l + s) * tau)
    return Constants(
        c / ((h_l + s) * across),
        (h_l + s) / (c * along),
        s * c**2 * (F - 1.0 / K_s) / ((h_l + s) * across),
        s * (h_l + s) * (F - 1.0 / K_s) / along,
        1.0 / (flexure + stretch),
    )


def longer(h_l, angle, tau):
    """Return h/l, lengthened where the tips of the bow-tie would touch."""
    return h_l + max(0.0, -2.0 * np.sin(np.radians(angle)) + 2.0 * tau if angle < 0 else 0.0)


@drawn
@given(ratios, angles, thicknesses, springs)
def test_flexure_stretch_and_end_hinges(h_l, angle, tau, spring):
    h_l = longer(h_l, angle, tau)
    found = constants(hinged(h_l, angle, tau, spring))
    for value, expected in zip(found, masters_evans(h_l, angle, tau, spring), strict=True):
        assert value == pytest.approx(expected, rel=SAME_THEORY, abs=0.0)


def test_printed_row():
    # h/l 2, th -30, tau .1, k_r = 1 EI/l: to half a unit of the last printed digit
    E_p, E_h, nu_p, nu_h, G = constants(hinged(2.0, -30.0, 0.1, 1.0))
    assert pytest.approx(3.28507e-4, abs=0.5e-9) == E_p
    assert pytest.approx(3.27265e-4, abs=0.5e-9) == E_h
    assert nu_p == pytest.approx(-0.994310, abs=0.5e-6)
    assert nu_h == pytest.approx(-0.990553, abs=0.5e-6)
    assert pytest.approx(1.88266e-5, abs=0.5e-10) == G


@drawn
@given(ratios, angles, thicknesses)
def test_the_hinges_vanish_when_they_are_stiff(h_l, angle, tau):
    # 1/K_h falls as 1/k_r: the error against rigid joints is of first order in 1/k_r.
    h_l = longer(h_l, angle, tau)
    rigid = constants(dataclasses.replace(_without_hinges(hinged(h_l, angle, tau, 1.0)), status=np.array([0])))
    errors = [constants(hinged(h_l, angle, tau, spring)).G12[0] / rigid.G12[0] - 1.0 for spring in (1e3, 2e3, 4e3, 8e3)]
    assert orders(errors)[-1] == pytest.approx(1.0, abs=0.01)
    assert abs(errors[-1]) < 6.0 / 8000.0 / min(h_l, 1.0)  # 6 EI/(k_r L), L the shorter wall


def _without_hinges(cell):
    (walls,) = cell.blocks
    props = {name: value for name, value in walls.props.items() if not name.endswith("_compliance")}
    return dataclasses.replace(cell, blocks=(dataclasses.replace(walls, props=props),))


@pytest.mark.parametrize(("h_l", "angle"), [(1.0, 30.0), (2.0, -30.0), (2.0, 30.0), (1.5, -20.0)])
def test_walls_that_can_only_stretch_reverse_every_sign(h_l, angle):
    # Infinitely stiff in bending, F = 0: the cell's nu has the opposite sign. Here the bending stiffness is out of
    # proportion (deep sections in bending, thin in stretch: EI = 1e6 EA l^2), which no solid section has.
    cell = build("hexagonal-honeycomb" if angle > 0 else "reentrant-honeycomb", inclined=1.0, vertical=h_l, angle=angle,
                 thickness=[0.1])  # fmt: skip
    (walls,) = cell.blocks
    props = {**walls.props, "thickness": np.array([[3.5e3]]), "modulus": np.array([1.0 / 3.5e3])}
    stiff = dataclasses.replace(cell, blocks=(dataclasses.replace(walls, props=props),))
    s = np.sin(np.radians(angle))
    found = constants(stiff)
    # EA = 1, and what bends is 12 EI/(EA l^2) = 1.2e7 times stiffer
    assert found.nu12 == pytest.approx(-s / (h_l + s), rel=1e-6)
    assert found.nu21 == pytest.approx(-s * (h_l + s) / (2.0 * h_l + s**2), rel=1e-6)
    bent = constants(cell)
    assert np.sign(found.nu12) == -np.sign(bent.nu12) and np.sign(found.nu21) == -np.sign(bent.nu21)


@drawn
@given(ratios, angles, thicknesses, springs)
def test_a_hinge_at_one_end_only(h_l, angle, tau, spring):
    # [derived] Under a pull along the axes no joint turns, so a wall with one hinge, x = EI/(k_r l), yields across by
    # (1/K_f)(1 + 4x)/(1 + x): 1/K_f without it, 4/K_f (a cantilever) when it is free. The far end is all but clamped.
    h_l, x = longer(h_l, angle, tau), 1.0 / spring
    found = constants(hinged(h_l, angle, tau, spring, spring_end=1e12))
    s, c = np.sin(np.radians(angle)), np.cos(np.radians(angle))
    F = (1.0 + 4.0 * x) / (1.0 + x) / tau**3
    assert pytest.approx(c / ((h_l + s) * (s**2 * F + c**2 / tau)), rel=SAME_THEORY, abs=0.0) == found.E1
    assert pytest.approx((h_l + s) / (c * (c**2 * F + (2.0 * h_l + s**2) / tau)), rel=SAME_THEORY, abs=0.0) == found.E2
