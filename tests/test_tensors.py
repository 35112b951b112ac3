"""Mandel and Voigt, rotations, isotropic and orthotropic tensors: relations that hold by definition."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from homog import tensors

SEED = 337_905_184
D = pytest.mark.parametrize("d", [2, 3])


def symmetric(d, rng, shape=()):
    a = rng.standard_normal((*shape, d, d))
    return a + np.swapaxes(a, -1, -2)


def stiffnesses(size, rng, shape=()):
    a = rng.standard_normal((*shape, size, size))
    return a @ np.swapaxes(a, -1, -2)


def turns(d, rng):
    if d == 2:
        return tensors.rotation(rng.uniform(-180.0, 180.0))
    return tensors.rotation(rng.uniform(-180.0, 180.0), axis=rng.standard_normal(3))


@D
def test_basis_is_orthonormal(d):
    b = tensors.basis(d)
    np.testing.assert_allclose(np.einsum("vij,wij->vw", b, b), np.eye(len(b)), atol=1e-15)
    np.testing.assert_array_equal(b, np.swapaxes(b, 1, 2))


@D
def test_vector_keeps_the_inner_product(d):
    rng = np.random.default_rng(SEED)
    a, b = symmetric(d, rng, (2, 5))
    va, vb = tensors.vector(a), tensors.vector(b)
    np.testing.assert_allclose((va * vb).sum(-1), np.einsum("nij,nij->n", a, b), rtol=1e-12)
    np.testing.assert_allclose(np.einsum("nv,vij->nij", va, tensors.basis(d)), a, atol=1e-14)


def test_order_of_components():
    t = np.arange(9.0).reshape(3, 3)
    t = (t + t.T) / 2.0
    root2 = np.sqrt(2.0)
    expected = [t[0, 0], t[1, 1], t[2, 2], root2 * t[1, 2], root2 * t[0, 2], root2 * t[0, 1]]
    np.testing.assert_allclose(tensors.vector(t), expected, rtol=1e-15)
    np.testing.assert_allclose(tensors.vector(t[:2, :2]), [t[0, 0], t[1, 1], root2 * t[0, 1]], rtol=1e-15)


SIZES = pytest.mark.parametrize(("size", "sheet"), [(3, False), (6, False), (6, True)])


@SIZES
def test_voigt_and_back(size, sheet):
    C = stiffnesses(size, np.random.default_rng(SEED), (4,))
    there = tensors.stiffness_to_voigt(C, sheet=sheet)
    np.testing.assert_allclose(tensors.stiffness_from_voigt(there, sheet=sheet), C, rtol=1e-14)
    S = tensors.compliance_to_voigt(np.linalg.inv(C), sheet=sheet)
    np.testing.assert_allclose(S @ there, np.broadcast_to(np.eye(size), C.shape), atol=1e-9)


@SIZES
def test_voigt_keeps_the_energy_in_engineering_strains(size, sheet):
    rng = np.random.default_rng(SEED)
    C, e = stiffnesses(size, rng), rng.standard_normal(size)
    engineering = e * tensors.voigt_factors(size, sheet=sheet)
    assert engineering @ tensors.stiffness_to_voigt(C, sheet=sheet) @ engineering == pytest.approx(e @ C @ e, rel=1e-12)


def test_voigt_shear_is_the_shear_modulus():
    # tau = G gamma: Voigt's C66 is G where Mandel's is 2 G, in plane and space, and for both halves of a sheet
    E, nu = 3.0, 0.25
    G = E / (2.0 * (1.0 + nu))
    for d in (2, 3):
        C = tensors.isotropic(E, nu, d=d)
        assert C[-1, -1] == pytest.approx(2.0 * G, rel=1e-14)
        assert tensors.stiffness_to_voigt(C)[-1, -1] == pytest.approx(G, rel=1e-14)
    sheet = tensors.stiffness_to_voigt(np.diag([1.0, 1, 2 * G, 1, 1, 2 * G]), sheet=True)
    np.testing.assert_allclose(np.diagonal(sheet), [1, 1, G, 1, 1, G], rtol=1e-14)


@D
def test_isotropic_constants_come_back(d):
    E, nu = np.array([[1.0, 70e3]]), np.array([[0.3], [-0.6], [0.0]])
    C = tensors.isotropic(E, nu, d=d)
    size = 3 if d == 2 else 6
    assert C.shape == (3, 2, size, size)
    S = np.linalg.inv(C)
    found_E, found_nu = np.broadcast_arrays(1.0 / S[..., 0, 0], -S[..., 0, 1] / S[..., 0, 0])
    np.testing.assert_allclose(found_E, np.broadcast_to(E, (3, 2)), rtol=1e-12)
    np.testing.assert_allclose(found_nu, np.broadcast_to(nu, (3, 2)), atol=1e-12)


@D
def test_isotropic_does_not_mind_turning(d):
    rng = np.random.default_rng(SEED)
    C = tensors.isotropic(2.0, -0.3, d=d)
    for _ in range(3):
        np.testing.assert_allclose(tensors.rotate(C, turns(d, rng)), C, atol=1e-14)
    mirror = np.diag([-1.0] + [1.0] * (d - 1))
    np.testing.assert_allclose(tensors.rotate(C, mirror), C, atol=1e-14)


def test_orthotropic_constants_come_back():
    E1, E2, nu12, G12 = np.array([4.0, 1.0]), 1.0, np.array([0.5, -0.9]), 0.3
    S = tensors.compliance_to_voigt(np.linalg.inv(tensors.orthotropic(E1, E2, nu12, G12)))
    for i in (0, 1):
        expected = [[1 / E1[i], -nu12[i] / E1[i], 0], [-nu12[i] / E1[i], 1 / E2, 0], [0, 0, 1 / G12]]
        np.testing.assert_allclose(S[i], expected, atol=1e-12)


@D
def test_rotations_are_proper_and_orthogonal(d):
    rng = np.random.default_rng(SEED)
    for _ in range(5):
        R = turns(d, rng)
        np.testing.assert_allclose(R @ R.T, np.eye(d), atol=1e-15)
        assert np.linalg.det(R) == pytest.approx(1.0, rel=1e-14)
        Q = tensors.mandel_rotation(R)
        np.testing.assert_allclose(Q @ Q.T, np.eye(len(Q)), atol=1e-14)


def test_rotations_turn_the_right_way():
    # counter-clockwise seen from the tip of the axis: 1 to 2, 2 to 3, 3 to 1
    np.testing.assert_allclose(tensors.rotation(90.0) @ [1.0, 0.0], [0.0, 1.0], atol=1e-15)
    for k in range(3):
        R = tensors.rotation(90.0, axis=2.0 * np.eye(3)[k])
        np.testing.assert_allclose(R @ np.eye(3)[(k + 1) % 3], np.eye(3)[(k + 2) % 3], atol=1e-15)
        np.testing.assert_allclose(R @ np.eye(3)[k], np.eye(3)[k], atol=1e-15)
    assert tensors.rotation([0.0, 30.0, 60.0]).shape == (3, 2, 2)
    assert tensors.rotation([0.0, 30.0], axis=[0, 0, 1]).shape == (2, 3, 3)
    np.testing.assert_allclose(tensors.rotation(33.0, axis=[0, 0, 1])[:2, :2], tensors.rotation(33.0), atol=1e-15)


@D
def test_turning_a_vector_is_turning_its_tensor(d):
    rng = np.random.default_rng(SEED)
    R, t = turns(d, rng), symmetric(d, rng)
    np.testing.assert_allclose(tensors.mandel_rotation(R) @ tensors.vector(t), tensors.vector(R @ t @ R.T), atol=1e-14)


@D
def test_turning_a_matrix_is_turning_its_fourth_order_tensor(d):
    rng = np.random.default_rng(SEED)
    R, C = turns(d, rng), stiffnesses(3 if d == 2 else 6, rng)
    full = tensors.fourth_order(C)
    for swapped in ("jikl", "ijlk", "klij"):
        np.testing.assert_allclose(full, np.einsum(f"ijkl->{swapped}", full), atol=1e-13)
    turned = np.einsum("ia,jb,kc,ld,abcd->ijkl", R, R, R, R, full)
    np.testing.assert_allclose(tensors.fourth_order(tensors.rotate(C, R)), turned, atol=1e-12)


@D
def test_fourth_order_acts_as_the_matrix_does(d):
    rng = np.random.default_rng(SEED)
    C, e = stiffnesses(3 if d == 2 else 6, rng), symmetric(d, rng)
    stress = np.einsum("ijkl,kl->ij", tensors.fourth_order(C), e)
    np.testing.assert_allclose(tensors.vector(stress), C @ tensors.vector(e), atol=1e-12)


def test_a_sheet_turns_both_of_its_vectors():
    rng = np.random.default_rng(SEED)
    R = turns(2, rng)
    M, Q = stiffnesses(6, rng), tensors.mandel_rotation(R)
    turned = tensors.rotate(M, R, sheet=True)
    for a in (slice(0, 3), slice(3, 6)):
        for b in (slice(0, 3), slice(3, 6)):
            np.testing.assert_allclose(turned[a, b], Q @ M[a, b] @ Q.T, atol=1e-13)


@given(first=st.floats(-360, 360), second=st.floats(-360, 360))
def test_turns_add_up(first, second):
    one, two, both = (tensors.mandel_rotation(tensors.rotation(a)) for a in (first, second, first + second))
    np.testing.assert_allclose(two @ one, both, atol=1e-12)


@given(angle=st.floats(-180, 180))
def test_eigenvalues_do_not_mind_turning(angle):
    C = tensors.orthotropic(4.0, 1.0, 0.5, 0.3)
    turned = tensors.rotate(C, tensors.rotation(angle))
    np.testing.assert_allclose(np.linalg.eigvalsh(turned), np.linalg.eigvalsh(C), rtol=1e-12)
