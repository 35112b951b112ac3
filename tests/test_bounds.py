"""Bounds: stability, limits of Poisson's ratio, Voigt, Hashin-Shtrikman; every checker also where it must object.

Sources: Hashin 1965, J. Mech. Phys. Solids 13, 119 and Hashin & Shtrikman 1963, J. Mech. Phys. Solids 11, 127 (upper
bounds of a porous isotropic material); Lempriere 1968 (limits of an orthotropic Poisson's ratio, from memory); lattice
and turning-unit values derived from beam and hinge energy.

Seeds were drawn, not chosen: 385559, 71852, 794202.
"""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.linalg import eigh
from scipy.optimize import minimize
from scipy.spatial.transform import Rotation

from homog import bounds, tensors
from homog.errors import InputError

ROUND_OFF = 1e-12

densities = st.floats(1e-3, 1.0)
plane_nus = st.floats(-0.9, 0.9)
space_nus = st.floats(-0.9, 0.49)


def drawn(seed, count, size, low=-2.0):
    """Return symmetric positive definite matrices with eigenvalues spread over 10^low to 1."""
    rng = np.random.default_rng(seed)
    Q = np.linalg.qr(rng.normal(size=(count, size, size)))[0]
    return (Q * 10.0 ** rng.uniform(low, 0.0, (count, 1, size))) @ Q.transpose(0, 2, 1)


def material(K, G, d):
    """Return the isotropic Mandel stiffness of any K and G, stable or not."""
    if d == 2:
        return np.array([[K + G, K - G, 0.0], [K - G, K + G, 0.0], [0.0, 0.0, 2.0 * G]])
    C = np.diag([2.0 * G] * 6)
    C[:3, :3] += K - 2.0 / 3.0 * G
    return C


def exceeded(report):
    """Return the names of the bounds that a report says are exceeded."""
    return {name for name in ("not_positive", "above_voigt", "above_hashin_shtrikman", "nu_outside")
            if getattr(report, name).any()}  # fmt: skip


# ------------------------------------------------------------------------------------------------ Hashin-Shtrikman


def test_hashin_shtrikman_in_space():
    """nu_s .3, rho .1: K .0338409, G .0211538, E .0525185 (six digits printed; Hashin & Shtrikman 1963)."""
    bound = bounds.hashin_shtrikman(0.1, 1.0, 0.3, d=3)
    assert tuple(bound) == pytest.approx((0.0338409, 0.0211538, 0.0525185), abs=5e-8)


@settings(max_examples=60, deadline=None)
@given(rho=densities, nu=plane_nus, E=st.floats(0.1, 1e5))
def test_plane_young_bound_knows_no_poisson_ratio(rho, nu, E):
    """E <= rho/(3 - 2 rho) for any nu_s (Hashin 1965)."""
    young = bounds.hashin_shtrikman(rho, E, nu, d=2).E
    assert young == pytest.approx(E * rho / (3.0 - 2.0 * rho), rel=1e-10)


@settings(max_examples=60, deadline=None)
@given(rho=densities, nu=space_nus, d=st.sampled_from([2, 3]))
def test_hashin_shtrikman_is_below_voigt_and_ends_at_the_parent(rho, nu, d):
    bound, parent = (bounds.hashin_shtrikman(x, 1.0, nu, d=d) for x in (rho, 1.0))
    for name in ("K", "G", "E"):
        assert getattr(bound, name) <= rho * getattr(parent, name) * (1.0 + ROUND_OFF)
    full = tensors.isotropic(1.0, nu, d=d)
    np.testing.assert_allclose(material(parent.K, parent.G, d), full, rtol=1e-10, atol=1e-10 * np.abs(full).max())


def test_hashin_shtrikman_has_two_dimensions():
    with pytest.raises(InputError, match="d = 1"):
        bounds.hashin_shtrikman(0.1, 1.0, 0.3, d=1)


@pytest.mark.parametrize("tau", [0.1, 0.01, 0.001])
def test_triangular_grid_reaches_the_bound_as_it_gets_light(tau):
    """K = (sqrt3/2) tau, G = (sqrt3/4) tau (1 + tau^2), rho = 2 sqrt3 tau: K's ratio nears 1 (Wang & McDowell 2004 for
    the leading order, from memory; derived, euler walls).

    K/K_bound = (1/K_s + (1 - rho)/G_s)/4 = 1 - rho/(4 G_s) with E_s = 1, since 1/K_s + 1/G_s = 4.
    """
    rho, nu = 2.0 * np.sqrt(3.0) * tau, 0.3
    report = bounds.report(
        material(0.5 * np.sqrt(3.0) * tau, 0.25 * np.sqrt(3.0) * tau * (1.0 + tau**2), 2), rho, 1.0, nu
    )
    assert report.bulk_ratio == pytest.approx(1.0 - rho * (1.0 + nu) / 2.0, rel=1e-10)
    assert exceeded(report) == set()


def test_square_grid_may_pass_the_isotropic_limit():
    """E1 = rho/2 is over rho/(3 - 2 rho) at low density, and right: the grid is not isotropic [derived]."""
    tau = 0.01
    report = bounds.report(tensors.orthotropic(tau, tau, 0.0, 0.5 * tau**3), 2.0 * tau, 1.0, 0.3)
    assert tau > bounds.hashin_shtrikman(2.0 * tau, 1.0, 0.3, d=2).E
    assert report.isotropy_error > bounds.ISOTROPY_TOLERANCE
    assert np.isnan(report.hashin_shtrikman_ratio) and np.isnan(report.young_ratio)
    assert exceeded(report) == set()


@pytest.mark.parametrize("d", [2, 3])
def test_hashin_shtrikman_objects(d):
    """An isotropic cell between the two bounds, for one modulus at a time; and one a hair over and a hair under."""
    rho, nu = 0.3, 0.3
    bound = bounds.hashin_shtrikman(rho, 1.0, nu, d=d)
    for K, G in ((1.05, 0.5), (0.5, 1.05)):
        report = bounds.report(material(K * bound.K, G * bound.G, d), rho, 1.0, nu)
        assert exceeded(report) == {"above_hashin_shtrikman"}
        assert (report.bulk_ratio, report.shear_ratio) == pytest.approx((K, G), rel=1e-10)
        assert report.hashin_shtrikman_ratio == pytest.approx(1.05, rel=1e-10)
        assert report.voigt_ratio < 1.0
    C = material(bound.K, bound.G, d)
    over, under = (bounds.report(x * C, rho, 1.0, nu) for x in (1.0 + 1e-5, 1.0 + 1e-7))
    assert exceeded(over) == {"above_hashin_shtrikman"} and exceeded(under) == set()
    assert under.young_ratio == pytest.approx(1.0 + 1e-7, rel=1e-10)


def test_what_is_not_quite_isotropic_has_that_much_room():
    """Off isotropy by 5e-4, a value 1e-4 over the bound may be the anisotropy; 1e-2 over is not."""
    rho = 0.3
    bound = bounds.hashin_shtrikman(rho, 1.0, 0.3, d=2)
    tilt = 5e-4 * np.diag([1.0, -1.0, 0.0]) * bound.K
    near, far = (bounds.report(x * material(bound.K, bound.G, 2) + tilt, rho, 1.0, 0.3) for x in (1.0001, 1.01))
    assert 1e-4 < near.isotropy_error < bounds.ISOTROPY_TOLERANCE
    assert exceeded(near) == set() and exceeded(far) == {"above_hashin_shtrikman"}


# ------------------------------------------------------------------------------------------------ Voigt


@pytest.mark.parametrize(("size", "d"), [(3, 2), (6, 3)])
def test_voigt_ratio_is_the_largest_generalized_eigenvalue(size, d):
    """Of C against rho C_s, one at a time by a general solver."""
    C, rho, E, nu = (
        drawn(385559, 6, size),
        np.linspace(0.1, 0.9, 6),
        np.linspace(1.0, 9.0, 6),
        np.linspace(-0.4, 0.4, 6),
    )
    found = bounds.voigt_excess(C, rho, E, nu)
    for i in range(6):
        expected = eigh(C[i], rho[i] * tensors.isotropic(E[i], nu[i], d=d), eigvals_only=True)[-1]
        assert found[i] == pytest.approx(expected, rel=1e-10)
    np.testing.assert_allclose(
        bounds.voigt_excess(C, 0.5, 2.0, 0.3), [bounds.voigt_excess(c, 0.5, 2.0, 0.3) for c in C]
    )


@settings(max_examples=40, deadline=None)
@given(rho=densities, nu=space_nus, share=st.floats(0.01, 2.0), d=st.sampled_from([2, 3]))
def test_voigt_of_a_share_of_the_parent(rho, nu, share, d):
    report = bounds.report(share * rho * tensors.isotropic(7.0, nu, d=d), rho, 7.0, nu)
    assert report.voigt_ratio == pytest.approx(share, rel=1e-9)
    assert bool(report.above_voigt) == (share > 1.0 + bounds.BOUND_TOLERANCE)


def test_voigt_objects_to_one_strain_alone():
    """A cell that is soft but for one strain: 1 % too stiff in shear only; with the joints' density it is right."""
    C = 0.2 * tensors.isotropic(1.0, 0.3, d=2)
    C[2, 2] = 0.303 / 1.3
    assert bounds.voigt_excess(C, 0.3, 1.0, 0.3) == pytest.approx(1.01, rel=1e-12)
    assert exceeded(bounds.report(C, 0.3, 1.0, 0.3)) == {"above_voigt"}
    assert exceeded(bounds.report(C, 0.31, 1.0, 0.3)) == set()


@pytest.mark.parametrize(
    ("t", "density", "E1", "E2", "G12", "nu12"),
    [(0.05, 0.0756, 2.594, 2.554, 0.0939, -0.994), (0.1, 0.1483, 2.878, 2.693, 0.1020, -0.970),
     (0.2, 0.2852, 3.346, 2.618, 0.1222, -0.852)],
)  # fmt: skip
def test_solids_of_the_reentrant_cell_are_inside(t, density, E1, E2, G12, nu12):
    """h/l 2, -30 deg, nu_s .3: two-dimensional finite elements, moduli over t^3 (read as printed)."""
    report = bounds.report(tensors.orthotropic(E1 * t**3, E2 * t**3, nu12, G12 * t**3), density, 1.0, 0.3)
    assert exceeded(report) == set()


# ------------------------------------------------------------------------------------------------ isotropy


@pytest.mark.parametrize(("size", "d"), [(3, 2), (6, 3)])
def test_nearest_isotropic_tensor_is_the_nearest(size, d):
    """A general-purpose minimiser finds no isotropic tensor nearer, and the same K and G to half its precision."""
    for C in drawn(71852, 3, size):
        best = minimize(lambda x, C=C: ((C - material(x[0], x[1], d)) ** 2).sum(), [0.1, 0.1], tol=1e-14)
        found = bounds.isotropic_moduli(C)
        assert tuple(found)[:2] == pytest.approx(tuple(best.x), abs=1e-6)
        assert bounds.isotropy_error(C) == pytest.approx(np.sqrt(best.fun / (C**2).sum()), rel=1e-6)


@pytest.mark.parametrize("d", [2, 3])
def test_isotropic_tensors_have_no_error(d):
    nu = np.array([-0.9, -0.3, 0.0, 0.3, 0.45])
    C = tensors.isotropic(3.0, nu, d=d)
    np.testing.assert_allclose(bounds.isotropy_error(C), 0.0, atol=1e-14)
    np.testing.assert_allclose(bounds.isotropic_moduli(C).E, 3.0, rtol=1e-12)
    C[:, 0, 0] *= 1.01
    assert bounds.isotropy_error(C).min() > bounds.ISOTROPY_TOLERANCE


@pytest.mark.parametrize(("size", "d"), [(3, 2), (6, 3)])
def test_a_turned_body_has_the_same_report(size, d):
    """All but the orthotropic limits, which are about the axes."""
    rng = np.random.default_rng(794202)
    C = np.concatenate([drawn(794202, 5, size), tensors.isotropic(0.2, [0.1, -0.5], d=d)])
    R = tensors.rotation(rng.uniform(0.0, 360.0, 7)) if d == 2 else Rotation.random(7, rng).as_matrix()
    one, two = (bounds.report(x, 0.3, 1.0, 0.3) for x in (C, tensors.rotate(C, R)))
    for name in ("stability", "voigt_ratio", "isotropy_error", "bulk_ratio", "shear_ratio", "young_ratio"):
        np.testing.assert_allclose(getattr(two, name), getattr(one, name), rtol=1e-10, atol=1e-12, err_msg=name)
    assert np.isfinite(one.bulk_ratio[5:]).all() and np.isnan(one.bulk_ratio[:5]).all()


# ------------------------------------------------------------------------------------------------ Poisson's ratio


@pytest.mark.parametrize(
    ("d", "nu", "ratio"), [(2, 0.8, 0.8), (2, -0.8, 0.8), (3, 0.4, 0.8), (3, -0.8, 0.8), (3, 0.0, 0.0)]
)
def test_isotropic_limits(d, nu, ratio):
    """-1 < nu < 1 in the plane, -1 < nu < 1/2 in space."""
    C = tensors.isotropic(5.0, nu, d=d)
    assert bounds.isotropic_poisson_excess(C) == pytest.approx(ratio, abs=1e-12)
    assert exceeded(bounds.report(C, 1.0, 5.0, nu)) == set()


@pytest.mark.parametrize(("d", "K", "G"), [(2, -0.1, 1.0), (2, 1.0, -0.1), (3, -0.1, 1.0), (3, 1.0, -0.1)])
def test_isotropic_limits_object(d, K, G):
    """nu = (K - G)/(K + G) or (3 K - 2 G)/(6 K + 2 G) is outside as soon as a modulus is negative."""
    report = bounds.report(material(K, G, d), 1.0, 100.0, 0.3)
    assert report.nu_ratio > 1.05
    assert exceeded(report) == {"not_positive", "nu_outside"}


@settings(max_examples=60, deadline=None)
@given(E1=st.floats(0.1, 10.0), E2=st.floats(0.1, 10.0), r=st.floats(-0.99, 0.99), G=st.floats(0.1, 10.0))
def test_orthotropic_limit_in_the_plane(E1, E2, r, G):
    """nu12^2 < E1/E2 (Lempriere 1968, from memory)."""
    C = tensors.orthotropic(E1, E2, r * np.sqrt(E1 / E2), G)
    assert bounds.orthotropic_poisson_excess(C) == pytest.approx(r * r, rel=1e-9, abs=1e-12)


def test_turning_rectangles_stand_at_the_orthotropic_limit():
    """a 2, b 1, th 30: nu12 -5.510847, E1 58.78237, E2 1.935576: one degree of freedom, hence nu12 nu21 = 1
    (Grima, Gatt, Alderson & Evans 2005, from memory; seven digits printed).
    """
    C = tensors.orthotropic(58.78237, 1.935576, 0.999 * -5.510847, 10.0)
    assert bounds.orthotropic_poisson_excess(C) == pytest.approx(0.999**2, rel=1e-6)


def test_orthotropic_limits_in_space():
    """nu_ij nu_ji < 1 and nu12 nu21 + nu23 nu32 + nu13 nu31 + 2 nu21 nu32 nu13 < 1, written out in the six ratios.

    Each pair of -.6 is far from its limit; together, with a product of ratios that is positive, they are beyond it.
    """
    E, nu12, nu23, nu13, worst = np.array([4.0, 2.0, 1.0]), 0.5, -0.4, 0.6, []
    for sign in (1.0, -1.0):
        S = np.diag([*(1.0 / E), 1.0, 1.0, 1.0])
        for (i, j), nu in zip(((0, 1), (1, 2), (0, 2)), (nu12, nu23, sign * nu13), strict=True):
            S[i, j] = S[j, i] = -nu / E[i]
        nu21, nu32, nu31 = nu12 * E[1] / E[0], nu23 * E[2] / E[1], sign * nu13 * E[2] / E[0]
        three = nu12 * nu21 + nu23 * nu32 + sign * nu13 * nu31 + 2.0 * nu21 * nu32 * sign * nu13
        worst.append(max(three, nu12 * nu21, nu23 * nu32, sign * nu13 * nu31))
        assert bounds.orthotropic_poisson_excess(np.linalg.inv(S)) == pytest.approx(worst[-1], rel=1e-10)
    assert worst[0] != pytest.approx(worst[1], rel=1e-2)  # the sign of the product counts

    S = np.diag([1.0, 1.0, 1.0, 1.0, 1.0, 1.0])
    S[:3, :3] -= 0.6 * (1.0 - np.eye(3))
    report = bounds.report(np.linalg.inv(S), 1.0, 100.0, 0.3)
    assert report.nu_ratio == pytest.approx(3 * 0.36 + 2.0 * 0.216, rel=1e-10)
    assert exceeded(report) == {"not_positive", "nu_outside"}


# ------------------------------------------------------------------------------------------------ stability


@pytest.mark.parametrize("size", [3, 6])
def test_stability_is_the_ratio_of_eigenvalues(size):
    C = drawn(385559, 5, size)
    expected = [np.linalg.eigvalsh(c)[0] / np.linalg.eigvalsh(c)[-1] for c in C]
    np.testing.assert_allclose(bounds.positive_definite(C), expected, rtol=1e-10)
    assert not bounds.report(C, 1.0, 100.0, 0.3).not_positive.any()
    C[2] -= 1.01 * np.linalg.eigvalsh(C[2])[0] * np.eye(size)
    assert bounds.report(C, 1.0, 100.0, 0.3).not_positive.tolist() == [False, False, True, False, False]


def test_a_mechanism_is_not_positive():
    v = np.array([1.0, -0.7, 0.3])
    assert bounds.report(np.eye(3) - np.outer(v, v) / (v @ v), 1.0, 100.0, 0.3).not_positive


def test_a_sheet_knows_only_stability_and_no_units():
    """[A B; B D]: N/mm to N/m and N mm to N m change nothing; an unstable one is found in any unit."""
    C = drawn(71852, 4, 6)
    C[3, 4, 4] = -1.0
    units = np.array([1e3, 1e3, 1e3, 1e-3, 1e-3, 1e-3])
    one, two = (bounds.report(x, 0.1, 1.0, 0.3, sheet=True) for x in (C, C * units * units[:, None]))
    np.testing.assert_allclose(two.stability, one.stability, rtol=1e-9)
    assert one.not_positive.tolist() == two.not_positive.tolist() == [False, False, False, True]
    for name in ("voigt_ratio", "isotropy_error", "bulk_ratio", "shear_ratio", "young_ratio", "nu_ratio"):
        assert np.isnan(getattr(one, name)).all()
    assert exceeded(one) == {"not_positive"}
    flat = C[0].copy()
    flat[5, :] = flat[:, 5] = 0.0
    assert bounds.report(flat, 0.1, 1.0, 0.3, sheet=True).not_positive


# ------------------------------------------------------------------------------------------------ batches


@pytest.mark.parametrize("size", [3, 6])
@pytest.mark.parametrize("bad", [np.nan, np.inf])
def test_a_bad_member_is_alone_and_breaks_no_bound(size, bad):
    C = drawn(385559, 3, size)
    C[1, 0, 0] = bad
    found, fine = (bounds.report(x, 0.9, 100.0, 0.3) for x in (C, C[[0, 2]]))
    for name in bounds.Report.__dataclass_fields__:
        values = getattr(found, name)
        assert np.isnan(values[1]), name
        np.testing.assert_allclose(values[[0, 2]], getattr(fine, name), rtol=1e-12)
    for name in ("not_positive", "above_voigt", "above_hashin_shtrikman", "nu_outside"):
        assert not getattr(found, name)[1]


def test_shapes():
    C = np.broadcast_to(0.1 * np.eye(3), (2, 4, 3, 3))
    report = bounds.report(C, np.full((2, 4), 0.3), 1.0, np.full(4, 0.3))
    for name in (*bounds.Report.__dataclass_fields__, "hashin_shtrikman_ratio", "above_voigt"):
        assert getattr(report, name).shape == (2, 4), name
    assert bounds.report(np.empty((0, 6, 6)), np.empty(0), 1.0, 0.3).voigt_ratio.shape == (0,)


@pytest.mark.parametrize("shape", [(4, 4), (3,), (2, 3, 6)])
def test_bad_shape(shape):
    with pytest.raises(InputError, match="Mandel"):
        bounds.report(np.ones(shape), 0.1, 1.0, 0.3)
