"""The arithmetic over the batch: swept inverses, Jacobi eigenvalues, cubic closed forms, joints computed once."""

import dataclasses

import numpy as np
import pytest

from homog import joints, tensors
from homog.cell import Status
from homog.directional import cubic, frames, space_extremes
from homog.effective import homogenize
from homog.families import build

SEED = 61_907_233


def positive(rng, count, size, spread):
    """Symmetric positive definite matrices whose eigenvalues span `spread` decades."""
    Q = np.linalg.qr(rng.normal(size=(count, size, size)))[0]
    return np.einsum("bij,bj,bkj->bik", Q, 10.0 ** rng.uniform(-spread, 0.0, (count, size)), Q)


@pytest.mark.parametrize("size", [3, 6])
def test_the_inverse_is_one(size):
    A = positive(np.random.default_rng(SEED), 500, size, 4.0)
    np.testing.assert_allclose(tensors.inverse(A) @ A, np.broadcast_to(np.eye(size), A.shape), atol=1e-10)
    np.testing.assert_array_equal(tensors.inverse(A)[7], tensors.inverse(A[7]))  # a batch is a loop, to the last bit


@pytest.mark.parametrize("size", [3, 6])
def test_eigenvalues_are_those_of_lapack(size):
    A = positive(np.random.default_rng(SEED + 1), 500, size, 6.0)
    found = np.sort(tensors.eigenvalues(np.moveaxis(A, 0, -1)), axis=0).T
    expected = np.linalg.eigvalsh(A)
    np.testing.assert_allclose(found, expected, atol=1e-14 * expected.max())
    indefinite = A - 0.3 * np.eye(size)
    found = np.sort(tensors.eigenvalues(np.moveaxis(indefinite, 0, -1)), axis=0).T
    np.testing.assert_allclose(found, np.linalg.eigvalsh(indefinite), atol=1e-14)


def test_small_eigenvalues_are_exact_and_members_do_not_know_each_other():
    steep = np.array([[1.0, 1e-9, 0.0], [1e-9, 2e-18, 0.0], [0.0, 0.0, 3.0]])  # 1 and 1e-18: LAPACK gives 1e-16 or so
    many = np.stack([steep, np.eye(3), np.full((3, 3), np.nan), np.zeros((3, 3)), np.diag([1.0, -2.0, 0.0])], axis=-1)
    found = np.sort(tensors.eigenvalues(many), axis=0).T
    np.testing.assert_allclose(found[0], [1e-18, 1.0, 3.0], rtol=1e-12)
    assert np.isnan(found[2]).any() and found[3].tolist() == [0.0, 0.0, 0.0] and found[4].tolist() == [-2.0, 0.0, 1.0]
    np.testing.assert_array_equal(found[0], np.sort(tensors.eigenvalues(steep)))


def cubic_compliances(count):
    """Cubic compliances with bulk and both shear compliances anywhere within four decades, Mandel."""
    values = 10.0 ** np.random.default_rng(SEED + 2).uniform(-2.0, 2.0, (3, count, 1, 1))
    J = np.pad(np.full((3, 3), 1.0 / 3.0), (0, 3))
    D, H = np.diag([1.0, 1.0, 1.0, 0.0, 0.0, 0.0]) - J, np.diag([0.0, 0.0, 0.0, 1.0, 1.0, 1.0])
    return values[0] * J + values[1] * D + values[2] * H


def test_cubic_extremes_are_those_of_the_search():
    S = cubic_compliances(200)
    assert cubic.is_cubic(S).all()
    closed, searched = cubic.extremes(S), frames.extremes(S, 1e-12)
    for row, name in ((0, "nu_min"), (2, "nu_max")):
        np.testing.assert_allclose(closed[row], searched[row], rtol=1e-9, atol=1e-9, err_msg=name)
    for row, name in ((4, "E_min"), (6, "E_max"), (8, "G_min"), (9, "G_max")):
        np.testing.assert_allclose(closed[row], searched[row], rtol=1e-9, err_msg=name)
    for row in (1, 3, 5, 7):  # where, in degrees; a search finds a place to the root of what it finds the height to
        np.testing.assert_allclose(closed[row], searched[row], atol=0.02)
    np.testing.assert_array_equal(frames.auxetic_share(S, 1e-12), searched[10])


def test_what_is_not_cubic_is_searched():
    S = cubic_compliances(3)
    S[1, 0, 1] = S[1, 1, 0] = S[1, 0, 1] * (1.0 + 1e-6)
    S[2] = tensors.rotate(S[2], tensors.rotation(10.0, axis=[1.0, 2.0, 0.5]))
    assert cubic.is_cubic(S).tolist() == [True, False, False]
    found, alone = space_extremes(S), [space_extremes(one) for one in S]
    np.testing.assert_allclose(found.nu_min, [one.nu_min for one in alone], rtol=1e-12)
    np.testing.assert_allclose(found.E_max, [one.E_max for one in alone], rtol=1e-12)


def test_congruent_joints_are_computed_once(monkeypatch):
    calls = []
    original = joints.corrections
    monkeypatch.setattr(joints, "corrections", lambda *given: calls.append(given) or original(*given))
    homogenize(build("reentrant-honeycomb", thickness=[0.5, 1.0], vertical_thickness=[1.0, 0.4]))
    assert len(calls) == 1  # the second joint is the first one, turned by half a turn
    homogenize(build("arrowhead", inner_angle=65.0, thickness=[0.5, 1.0]))
    assert len(calls) == 2  # so is the side joint of an arrowhead its apex


def test_joints_that_differ_are_told_apart(monkeypatch):
    cell = build("reentrant-honeycomb", thickness=[0.5, 1.0])
    found = homogenize(cell)
    monkeypatch.setattr(joints, "SAME", -1.0)  # nothing is the same any more
    np.testing.assert_allclose(homogenize(cell).stiffness, found.stiffness, rtol=1e-11, atol=1e-15)
    gaps, t = np.array([[1.0], [2.0], [3.28]]), np.ones((3, 1))
    monkeypatch.undo()
    known = (gaps, t, 5.0 * t, t, 0.3 * t)
    assert joints._same(known, tuple(np.roll(x, 1, axis=0) for x in known), 0) == 1
    for k in range(5):
        other = tuple(x * (1.0 + 1e-9 * (i == k)) for i, x in enumerate(known))
        assert joints._same(known, other, 0) is None


@pytest.mark.parametrize("name", ["reentrant-honeycomb", "kagome-grid", "arrowhead"])
def test_a_bad_member_leaves_joints_alone_to_the_last_bit(name):
    cell = build(name, thickness=np.linspace(0.4, 1.2, 7))
    found = homogenize(cell)
    assert found.model == "joint" and (found.status == Status.OK).all()
    for bad in (np.nan, np.inf, 1e3):
        points = cell.points.copy()
        points[3, -1] = bad
        status = cell.status.copy()
        status[3] = Status.IMPOSSIBLE if np.isfinite(bad) else Status.OK
        after = homogenize(dataclasses.replace(cell, points=points, status=status))
        others = np.arange(7) != 3
        assert after.status[3] == Status.IMPOSSIBLE
        np.testing.assert_array_equal(after.stiffness[others], found.stiffness[others])
        np.testing.assert_array_equal(after.flags[others], found.flags[others])


def test_joints_of_a_batch_are_those_of_a_loop():
    cell = build("hexagonal-honeycomb", angle=np.linspace(10.0, 60.0, 9), thickness=0.8, vertical_thickness=1.3)
    found = homogenize(cell)
    for i in range(9):
        np.testing.assert_allclose(found.stiffness[i], homogenize(cell.at(i)).stiffness, rtol=1e-11, atol=1e-15)
