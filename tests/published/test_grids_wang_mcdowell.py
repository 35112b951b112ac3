"""Square, triangular, kagome and braced square grids against the plane grids of Wang & McDowell.

A.-J. Wang & D. L. McDowell 2004, "In-plane stiffness and yield strength of periodic metal honeycombs", J. Eng. Mater.
Technol. 126, 137-156: leading order in tau = t/l [memory]; the forms with every order in tau follow from the beam
energy of the same cells [derived]. Formulas are quoted for euler walls; shear adds B = 2 (1 + nu_s)/kappa to the
flexibility 1/tau^2 of antisymmetric bending [derived]. Wall modulus 1.
"""

import dataclasses

import numpy as np
import pytest
from by_hand import block, cell, compliance, constants, drawn, orders, plane_moduli, shear_share
from hypothesis import given
from hypothesis import strategies as st

from homog.cell import Status
from homog.effective import homogenize
from homog.errors import MechanismError
from homog.families import build
from homog.materials import UNIT

# Closed forms of the same theory: round-off (2e-16) times the ratio of stretch to bending stiffness, at most 1.2e5.
SAME_THEORY = 1e-9
ROOT3 = np.sqrt(3.0)

thicknesses = st.floats(0.01, 0.25)
lengths = st.floats(0.1, 100.0)
poissons = st.floats(0.0, 0.45)
models = st.sampled_from(["euler", "timoshenko"])


def grid(name, tau, *, length=1.0, poisson=0.3, modulus=1.0):
    parent = UNIT.replaced(poisson=poisson, modulus_MPa=modulus)
    return build(name, material=parent, length=length, thickness=np.multiply(tau, length))


def flexure(tau, model, poisson):
    """12 EI/(EA l^2) of a wall, tau^2, lowered by its shear."""
    return tau**2 / (1.0 + shear_share(model, poisson) * tau**2)


@drawn
@given(thicknesses, lengths, poissons, models)
def test_square_grid(tau, length, poisson, model):
    # E = tau, nu = 0, G = tau^3/2; at 45 deg E = 2 tau^3/(1 + tau^2), nu = (1 - tau^2)/(1 + tau^2), G = tau/2
    square, b = grid("square-grid", tau, length=length, poisson=poisson), flexure(tau, model, poisson)
    along = constants(square, model)
    assert pytest.approx((tau, tau, tau * b / 2.0), rel=SAME_THEORY) == (along.E1, along.E2, along.G12)
    assert (along.nu12, along.nu21) == pytest.approx((0.0, 0.0), abs=1e-12)
    diagonal = constants(square, model, load_deg=45.0)
    E, nu = 2.0 * tau * b / (1.0 + b), (1.0 - b) / (1.0 + b)
    assert diagonal == pytest.approx((E, E, nu, nu, tau / 2.0), rel=SAME_THEORY)


@drawn
@given(thicknesses, lengths, poissons, models, st.floats(0.0, 180.0))
def test_triangular_grid_in_every_direction(tau, length, poisson, model, load_deg):
    # K = (sqrt3/2) tau, G = (sqrt3/4) tau (1 + tau^2)
    K, G = ROOT3 / 2.0 * tau, ROOT3 / 4.0 * tau * (1.0 + flexure(tau, model, poisson))
    E, nu = plane_moduli(K, G)
    triangular = grid("triangular-grid", tau, length=length, poisson=poisson)
    assert constants(triangular, model, load_deg=load_deg) == pytest.approx((E, E, nu, nu, G), rel=SAME_THEORY)


@drawn
@given(thicknesses, lengths, poissons, models, st.floats(0.0, 180.0))
def test_kagome_grid_in_every_direction(tau, length, poisson, model, load_deg):
    # K = (sqrt3/4) tau, G = (sqrt3/8) tau (1 + tau^2/2); of the flexibility 2/tau^2 one half is antisymmetric bending,
    # to which shear adds B, and one half symmetric bending, which feels no shear
    bending = 1.0 / (2.0 / tau**2 + shear_share(model, poisson))
    K, G = ROOT3 / 4.0 * tau, ROOT3 / 8.0 * tau * (1.0 + bending)
    E, nu = plane_moduli(K, G)
    kagome = grid("kagome-grid", tau, length=length, poisson=poisson)
    assert constants(kagome, model, load_deg=load_deg) == pytest.approx((E, E, nu, nu, G), rel=SAME_THEORY)


@pytest.mark.parametrize(
    ("name", "first_order", "E_share"),
    [("square-grid", 2.0, 1.0 / 2.0), ("triangular-grid", 2.0 * ROOT3, 1.0 / 3.0), ("kagome-grid", ROOT3, 1.0 / 3.0)],
)
def test_leading_order_in_the_density(name, first_order, E_share):
    # rho = first_order tau less the joints' overlap, of order tau^2; E = E_share rho (rho/3 is the plane's bound at
    # low density), the error of first order through rho alone.
    tau = 0.04 / 2.0 ** np.arange(5)
    sample = grid(name, tau)
    overlap = 1.0 - sample.relative_density / (first_order * tau)
    assert orders(overlap)[-1] == pytest.approx(1.0, abs=0.02)
    error = constants(sample).E1 / (E_share * sample.relative_density) - 1.0
    assert orders(error)[-1] == pytest.approx(1.0, abs=0.05)
    assert 0.0 < error[-1] < 2.0 * tau[-1], "stiffer than the count of walls says, by the joints' share"
    if E_share < 0.4:
        nu = constants(sample).nu12
        assert orders(nu - 1.0 / 3.0)[-1] == pytest.approx(2.0, abs=0.02)
        assert nu[-1] == pytest.approx(1.0 / 3.0, abs=tau[-1] ** 2)


# Pin-jointed: bars of stiffness EA = tau on the library's own points and topology, or a cell built by hand.


def pinned(name, tau, **parameters):
    """Return a batch of one: the family's cell with every wall replaced by a bar that turns freely at its ends."""
    walled = build(name, thickness=[tau], **parameters)
    (walls,) = walled.blocks
    bars = dataclasses.replace(walls, kind="bar", props={"rigidity": np.array([tau])})
    return dataclasses.replace(walled, blocks=(bars,))


@pytest.mark.parametrize(
    ("name", "parameters", "soft"),
    [
        # square: one uniform shear; hexagon: three bars resist one of three strains; both without motions inside
        ("square-grid", {"length": 1.0}, 1),
        ("hexagonal-honeycomb", {"inclined": 1.0, "vertical": 1.0}, 2),
    ],
)
def test_pinned_square_and_hexagon_deform_freely(name, parameters, soft):
    sample = pinned(name, 0.05, **parameters)
    effective = homogenize(sample)
    assert effective.status[0] == Status.MECHANISM
    assert effective.mechanisms[0] == soft
    assert np.linalg.matrix_rank(effective.stiffness[0], tol=1e-12) == 3 - soft
    with pytest.raises(MechanismError, match="no resistance to the uniform strain"):
        homogenize(sample.at(0))
    assert homogenize(build(name, thickness=[0.05], **parameters)).mechanisms[0] == 0, "rigid joints: none"


def test_pinned_kagome_has_a_mechanism_and_is_still_isotropic_at_a_third_of_its_density():
    tau = 0.05
    effective = homogenize(pinned("kagome-grid", tau, length=1.0))
    assert effective.status[0] == Status.OK, "the triangles turn at no uniform strain"
    assert effective.mechanisms[0] == 1
    found = constants(pinned("kagome-grid", tau, length=1.0))
    E = ROOT3 * tau / 3.0  # rho/3, rho = sqrt3 tau
    assert pytest.approx(E, rel=1e-12) == found.E1 and pytest.approx(E, rel=1e-12) == found.E2
    assert found.nu12 == pytest.approx(1.0 / 3.0, rel=1e-12) and found.nu21 == pytest.approx(1.0 / 3.0, rel=1e-12)
    assert pytest.approx(E / (2.0 * (1.0 + 1.0 / 3.0)), rel=1e-12) == found.G12


def test_pinned_triangular_grid_has_no_mechanism():
    effective = homogenize(pinned("triangular-grid", 0.05, length=1.0))
    assert effective.mechanisms[0] == 0
    E = 2.0 * ROOT3 * 0.05 / 3.0
    found = constants(pinned("triangular-grid", 0.05, length=1.0))
    assert (found.E1[0], found.nu12[0]) == pytest.approx((E, 1.0 / 3.0), rel=1e-12)


def test_pinned_braced_square():
    # side l, diagonals joined at the centre: C11 = tau (1 + 1/sqrt2), C12 = C66 = tau/sqrt2 [derived]
    tau, corner, centre = 0.05, 0, 1
    sides = [[(corner, (0, 0)), (corner, image)] for image in ((1, 0), (0, 1))]
    diagonals = [[(centre, (0, 0)), (corner, image)] for image in ((0, 0), (1, 0), (0, 1), (1, 1))]
    braced = cell([[0.0, 0.0], [0.5, 0.5]], np.eye(2), block("bar", sides + diagonals, rigidity=tau))
    C = np.linalg.inv(compliance(braced))
    C11, C12 = tau * (1.0 + np.sqrt(0.5)), tau * np.sqrt(0.5)
    assert pytest.approx(np.array([[C11, C12, 0.0], [C12, C11, 0.0], [0.0, 0.0, C12]]), rel=1e-12, abs=1e-15) == C
    assert homogenize(braced).mechanisms == 0
