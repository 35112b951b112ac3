"""The arrowhead (double-V) lattice against Larsen, Sigmund & Bouwstra.

U. D. Larsen, O. Sigmund & S. Bouwstra 1997, "Design and fabrication of compliant micromechanisms and structures with
negative Poisson's ratio", J. Microelectromech. Syst. 6, 99-106 for the kinematics [memory]; the moduli follow from
the beam energy [derived]. T1, T2 are the tangents of the angles of the long and the short struts to axis 2, w half
the period along axis 1, H the period along axis 2, l1 and l2 the struts' lengths. Wall modulus 1.
"""

import dataclasses

import numpy as np
import pytest
from by_hand import constants, drawn, orders, shear_share
from hypothesis import given
from hypothesis import strategies as st

from homog.families import build
from homog.materials import UNIT

# Same theory: round-off (2e-16) times 12 (l/t)^2 (at most 5e5) times the slenderness of the triangle between the two
# struts, whose stretch resists what bending does not.
SAME_THEORY = 1e-7

outer_angles = st.floats(10.0, 60.0)
gaps = st.floats(8.0, 25.0)  # inner less outer angle, deg
widths = st.floats(0.5, 20.0)


def arrowhead(w, outer, inner, t, *, poisson=0.3):
    """Return a batch; thick walls close the notch between the struts, which the formulas do not mind."""
    shape = dict(half_width=w, outer_angle=outer, inner_angle=inner, thickness=np.atleast_1d(t))
    made = build("arrowhead", material=UNIT.replaced(poisson=poisson), **shape)
    return dataclasses.replace(made, status=np.zeros(made.shape, int))


def geometry(w, outer, inner):
    """Return T1, T2, l1, l2, H."""
    T1, T2 = np.tan(np.radians(outer)), np.tan(np.radians(inner))
    return T1, T2, w / np.sin(np.radians(outer)), w / np.sin(np.radians(inner)), w / T1 - w / T2


@pytest.mark.parametrize(("outer", "inner"), [(30.0, 60.0), (20.0, 45.0), (40.0, 80.0), (55.0, 65.0)])
def test_inextensible_walls_are_the_limit_of_slender_ones(outer, inner):
    # nu12 = -T1 T2, nu21 its inverse; E1 = t^3 (T1^2/l1 + T2^2/l2)/(w H), E2 = E1/(T1 T2)^2. Second order in t.
    w, t = 1.0, 0.02 / 2.0 ** np.arange(5)
    T1, T2, l1, l2, H = geometry(w, outer, inner)
    E1 = t**3 * (T1**2 / l1 + T2**2 / l2) / (w * H)
    limit = {"E1": E1, "E2": E1 / (T1 * T2) ** 2, "nu12": -T1 * T2, "nu21": -1.0 / (T1 * T2)}
    found = constants(arrowhead(w, outer, inner, t))
    for name, slender in limit.items():
        error = getattr(found, name) / slender - 1.0
        assert orders(error)[-1] == pytest.approx(2.0, abs=0.02), name
        extrapolated = getattr(found, name) / slender
        extrapolated = (4.0 * extrapolated[-1] - extrapolated[-2]) / 3.0
        assert abs(extrapolated - 1.0) < 5.0 * error[-1] ** 2 + 1e-9, name


@drawn
@given(
    widths, outer_angles, gaps, st.floats(0.005, 0.05), st.floats(0.0, 0.45), st.sampled_from(["euler", "timoshenko"])
)
def test_stretch_and_shear_included(w, outer, gap, slenderness, poisson, model):
    # [derived] By the mirrors x = 0 and x = w no joint turns under a pull along the axes. With e1, e2 and the upper
    # apex' rise v against the side joint, a strut at the angle a to axis 2 stretches by w e1 sin a + v cos a and its
    # ends slip by v sin a - w e1 cos a; the short one has v - H e2. k = t/l along, t^3/(l^3 (1 + B t^2/l^2)) across.
    inner = outer + gap
    T1, T2, l1, l2, H = geometry(w, outer, inner)
    t = slenderness * l2
    M = np.zeros((3, 3))  # e1, e2, v
    for angle, length, rise in ((outer, l1, [0.0, 0.0, 1.0]), (inner, l2, [0.0, -H, 1.0])):
        s, c = np.sin(np.radians(angle)), np.cos(np.radians(angle))
        tau, run = t / length, np.array([w, 0.0, 0.0])
        stretch, slip = run * s + np.array(rise) * c, np.array(rise) * s - run * c
        M += 2.0 * tau * np.outer(stretch, stretch)
        M += 2.0 * tau**3 / (1.0 + shear_share(model, poisson) * tau**2) * np.outer(slip, slip)
    C = (M[:2, :2] - np.outer(M[:2, 2], M[2, :2]) / M[2, 2]) / (2.0 * w * H)
    S = np.linalg.inv(C)
    found = constants(arrowhead(w, outer, inner, t, poisson=poisson), model)
    assert pytest.approx(1.0 / S[0, 0], rel=SAME_THEORY, abs=0.0) == found.E1
    assert pytest.approx(1.0 / S[1, 1], rel=SAME_THEORY, abs=0.0) == found.E2
    assert found.nu12 == pytest.approx(-S[0, 1] / S[0, 0], rel=SAME_THEORY)


def test_printed_row():
    # 30/60, w = 1, t = .05, euler [derived], to half a unit of the last printed digit
    found = constants(arrowhead(1.0, 30.0, 60.0, 0.05))
    assert pytest.approx(2.97715e-4, abs=0.5e-9) == found.E1
    assert pytest.approx(2.93025e-4, abs=0.5e-9) == found.E2
    assert found.nu12 == pytest.approx(-0.989230, abs=0.5e-6)
    assert found.nu21 == pytest.approx(-0.973644, abs=0.5e-6)
    assert pytest.approx(20.0, rel=0.1) == found.G12 / found.E1, "about 20 E, as stated"


def test_the_shear_modulus_is_carried_by_stretch():
    # E falls as t^3, G12 only as t.
    t = 0.02 / 2.0 ** np.arange(4)
    found = constants(arrowhead(1.0, 30.0, 60.0, t))
    assert orders(found.E1)[-1] == pytest.approx(3.0, abs=0.01)
    assert orders(found.G12)[-1] == pytest.approx(1.0, abs=0.01)
