"""Every element kind: its rows are the derivative of its finite measure, rigid motion strains nothing, weights are
positive; and the wall's and the strut's flexibilities against independent ones."""

import zlib

import numpy as np
import pytest
from samples import ELEMENTS, PROPS, STIFFENERS, nodes_of, random_props, strains_of
from scipy.spatial.transform import Rotation

from homog.cell import LENGTH_POWER, MATRICES
from homog.elements import MODELS, check_block, check_model, element, rotations
from homog.errors import InputError
from homog.tensors import rotation

SEED = 491_120_357
MANY = 40

KIND_IN_SPACE = [(kind, d) for kind, e in ELEMENTS.items() for d in e.dimensions]
every_kind = pytest.mark.parametrize(("kind", "d"), KIND_IN_SPACE)


def samples(kind, d, *, optional=True):
    """Return positions (k, d, many) and properties (many,) of random elements, and the generator."""
    rng = np.random.default_rng([SEED, zlib.crc32(kind.encode()), d, optional])
    x = rng.uniform(-1.0, 1.0, (nodes_of(kind), d, 6 * MANY))
    gap = np.linalg.norm(x[:, None] - x[None], axis=2) + 9.0 * np.eye(len(x))[:, :, None]
    x = x[:, :, gap.min(axis=(0, 1)) > 0.4][:, :, :MANY]  # no two nodes nearer than the arms reach
    assert x.shape[-1] == MANY
    props = random_props(kind, MANY, rng, d=d, optional=optional)
    return x, {name: np.moveaxis(v, 0, -1) for name, v in props.items()}, rng


def motion(kind, d, rng, size):
    r = rotations(d)
    return size * rng.standard_normal((nodes_of(kind), d + (r if element(kind).turns else 0), MANY))


def measured(kind, x, q, props):
    """Return the finite strains of the motion q (k, f, many): translations, then rotations if there are any."""
    d = x.shape[1]
    turn = q[:, d:] if element(kind).turns else np.zeros((len(x), rotations(d), x.shape[2]))
    return element(kind).measure(x, q[:, :d], turn, props)


def rigid(kind, x, R, offset):
    """Return the motion (k, f, many) of a rigid turn R (Rotation, about axis 3 in the plane) and a translation."""
    d = x.shape[1]
    matrix = R.as_matrix()[:d, :d]
    u = np.einsum("ij,kjm->kim", matrix, x) - x + offset[None]
    if not element(kind).turns:
        return u
    turn = R.as_rotvec()[-rotations(d) :]
    return np.concatenate([u, np.broadcast_to(turn[:, None], (len(x), len(turn), x.shape[2]))], axis=1)


def random_turn(d, rng, largest):
    axis = rng.standard_normal(3) if d == 3 else np.array([0.0, 0.0, 1.0])
    return Rotation.from_rotvec(rng.uniform(-largest, largest) * axis / np.linalg.norm(axis))


@every_kind
def test_rows_are_the_central_difference_of_the_measure(kind, d):
    x, props, _ = samples(kind, d)
    rows = element(kind).rows(x, props)
    h = 1e-5  # error h^2 times a third derivative of order 1/0.4^3, and round-off 1e-16/h
    for node in range(rows.shape[1]):
        for freedom in range(rows.shape[2]):
            q = np.zeros((rows.shape[1], rows.shape[2], MANY))
            q[node, freedom] = h
            difference = (measured(kind, x, q, props) - measured(kind, x, -q, props)) / (2.0 * h)
            np.testing.assert_allclose(rows[:, node, freedom], difference, rtol=1e-7, atol=1e-7 / 0.4)


@every_kind
def test_nothing_is_measured_at_rest(kind, d):
    x, props, rng = samples(kind, d)
    np.testing.assert_allclose(measured(kind, x, motion(kind, d, rng, 0.0), props), 0.0, atol=1e-15)


@every_kind
def test_small_rigid_motion_strains_nothing(kind, d):
    x, props, rng = samples(kind, d)
    rows = element(kind).rows(x, props)
    for _ in range(3):
        spin = rng.standard_normal(3) if d == 3 else np.array([0.0, 0.0, rng.standard_normal()])
        flat = np.concatenate([x, np.zeros((len(x), 3 - d, MANY))], axis=1)
        q = np.cross(spin, flat, axisb=1).transpose(0, 2, 1)[:, :d] + rng.standard_normal((1, d, 1))
        if element(kind).turns:
            turn = spin[-rotations(d) :]
            q = np.concatenate([q, np.broadcast_to(turn[:, None], (len(x), len(turn), MANY))], axis=1)
        np.testing.assert_allclose(np.einsum("skfm,kfm->sm", rows, q), 0.0, atol=1e-13)


@every_kind
def test_finite_rigid_motion_strains_nothing(kind, d):
    x, props, rng = samples(kind, d)
    for _ in range(5):
        R = random_turn(d, rng, 3.1)  # up to half a turn, where angles of walls run out of their branch
        q = rigid(kind, x, R, rng.standard_normal((d, 1)))
        np.testing.assert_allclose(measured(kind, x, q, props), 0.0, atol=1e-13)


@every_kind
def test_measure_does_not_see_a_rigid_motion_on_top(kind, d):
    x, props, rng = samples(kind, d)
    q = motion(kind, d, rng, 0.05)
    before = measured(kind, x, q, props)
    R = random_turn(d, rng, 1.0)
    matrix = R.as_matrix()[:d, :d]
    moved = q.copy()
    moved[:, :d] = np.einsum("ij,kjm->kim", matrix, x + q[:, :d]) - x + rng.standard_normal((1, d, 1))
    if element(kind).turns:
        for k in range(len(x)):
            if d == 2:
                moved[k, 2] = q[k, 2] + R.as_rotvec()[2]
            else:
                moved[k, 3:] = (R * Rotation.from_rotvec(q[k, 3:].T)).as_rotvec().T
    np.testing.assert_allclose(measured(kind, x, moved, props), before, atol=1e-13)
    assert np.abs(before).max() > 1e-3


@pytest.mark.parametrize("optional", [False, True])
@pytest.mark.parametrize("model", MODELS)
@every_kind
def test_weights_are_symmetric_and_positive(kind, d, model, optional):
    x, props, _ = samples(kind, d, optional=optional)
    e = element(kind)
    W = np.moveaxis(e.weights(x, props, model), -1, 0)
    assert W.shape[1:] == (len(strains_of(kind, d)), len(strains_of(kind, d)))
    size = np.sqrt(np.diagonal(W, axis1=-2, axis2=-1))
    W = W / (size[:, :, None] * size[:, None, :])
    np.testing.assert_allclose(W, np.swapaxes(W, -1, -2), rtol=0, atol=1e-12)
    assert np.linalg.eigvalsh(W).min() > 1e-6


@every_kind
def test_shear_only_softens(kind, d):
    x, props, _ = samples(kind, d)
    stiff, soft = (np.moveaxis(element(kind).weights(x, props, model), -1, 0) for model in ("euler", "timoshenko"))
    assert np.linalg.eigvalsh(stiff - soft).min() > -1e-12 * np.abs(stiff).max()
    if element(kind).turns and "weight" not in props:
        assert (np.trace(stiff, axis1=1, axis2=2) > np.trace(soft, axis1=1, axis2=2)).all()


@every_kind
def test_optional_properties_at_zero_change_nothing(kind, d):
    x, props, _ = samples(kind, d, optional=False)
    e = element(kind)
    zeros = {**props, **{name: np.zeros(MANY) for name in e.optional}}
    np.testing.assert_allclose(e.rows(x, zeros), e.rows(x, props), atol=1e-14)
    for model in MODELS:
        expected = e.weights(x, props, model)
        # an arc of zero is taken as 1e-9 of a radian
        np.testing.assert_allclose(e.weights(x, zeros, model), expected, rtol=1e-12, atol=1e-8 * np.abs(expected).max())


@every_kind
def test_every_optional_property_counts(kind, d):
    x, props, _ = samples(kind, d)
    e = element(kind)
    for name in e.optional:
        less = {other: value for other, value in props.items() if other != name}
        change = (
            np.abs(e.rows(x, props) - e.rows(x, less)).max()
            + np.abs(e.weights(x, props, "euler") / e.weights(x, less, "euler").max(axis=(0, 1)) - 1.0).max()
        )
        assert change > 1e-3, name


@every_kind
def test_length_powers_cover_every_property(kind, d):
    # the energy of a cell of area or volume V grows like V: weights per strain like length^(d - 2 power of the strain)
    x, props, _ = samples(kind, d)
    e = element(kind)
    s = 1.7
    grown = {}
    for name, value in props.items():
        if name in MATRICES:  # `UnitCell.scaled` knows how, and test_invariants tests it
            return
        power = d - 1 if name == "rigidity" else LENGTH_POWER.get(f"{kind}.{name}", LENGTH_POWER.get(name))
        assert power is not None, f"cell.LENGTH_POWER does not know how '{name}' of '{kind}' grows"
        grown[name] = value * s**power
    lengths = np.array([1.0 if strain == "stretch" else 0.0 for strain in e.strains])
    for model in MODELS:
        expected = e.weights(x, props, model) * s ** (d - lengths[:, None, None] - lengths[None, :, None])
        np.testing.assert_allclose(e.weights(s * x, grown, model), expected, rtol=1e-9, atol=1e-12 * expected.max())


# walls and struts against independent flexibilities -------------------------------------------------------------------


def bending(flexibility_start, flexibility_end, length, EI, GA):
    """Return the stiffness from end rotations relative to the chord to end moments of a beam with hinged ends.

    Unit end moments of a simply supported beam: L/(6 EI) [[2, -1], [-1, 2]] from flexure, 1/(GA L) from shear (each
    moment shears the beam by 1/L; unit load theorem), and each hinge turns by its own compliance.
    """
    F = length / (6.0 * EI) * np.array([[2.0, -1.0], [-1.0, 2.0]]) + 1.0 / (GA * length)
    return np.linalg.inv(F + np.diag([flexibility_start, flexibility_end]))


FROM_STRAINS = np.array([[-0.5, 1.0], [0.5, 1.0]])  # end rotations of symmetric and antisymmetric bending


@pytest.mark.parametrize(("c1", "c2"), [(0.0, 0.0), (3.0, 0.0), (0.0, 3.0), (2.0, 7.0), (1e9, 0.0), (1e9, 1e9)])
def test_wall_with_elastic_hinges_at_its_ends(c1, c2):
    length, t, E, nu = 1.3, 0.2, 2.5, 0.3
    EI, GA = E * t**3 / 12.0, 5.0 / 6.0 * E * t / (2.0 * (1.0 + nu))
    c1, c2 = c1 * length / EI, c2 * length / EI
    x = np.array([[0.0, 0.0], [length * 0.6, length * 0.8]])[:, :, None]
    props = {"thickness": t, "modulus": E, "poisson": nu, "start_compliance": c1, "end_compliance": c2}
    props = {name: np.array([value]) for name, value in props.items()}
    for model, shear in (("euler", np.inf), ("timoshenko", GA)):
        W = element("wall").weights(x, props, model)[..., 0]
        expected = FROM_STRAINS.T @ bending(c1, c2, length, EI, shear) @ FROM_STRAINS
        # two soft hinges in series with a stiff wall leave a difference of large flexibilities
        np.testing.assert_allclose(W[1:, 1:], expected, rtol=1e-6, atol=1e-13 * EI)
        assert W[0, 0] == pytest.approx(E * t / length, rel=1e-12)
        np.testing.assert_allclose(W[0, 1:], 0.0, atol=1e-9 * W[0, 0])


def test_a_wall_hinged_at_one_end_is_a_propped_beam():
    # 3 EI/L at the far end (any handbook); nothing at the hinge
    length, t = 2.0, 0.1
    x = np.array([[0.0, 0.0], [length, 0.0]])[:, :, None]
    props = {"thickness": t, "modulus": 1.0, "poisson": 0.3, "start_compliance": 1e12}
    W = element("wall").weights(x, {name: np.array([value]) for name, value in props.items()}, "euler")[1:, 1:, 0]
    back = np.linalg.inv(FROM_STRAINS)
    K = back.T @ W @ back
    assert K[1, 1] == pytest.approx(3.0 * t**3 / 12.0 / length, rel=1e-6)
    np.testing.assert_allclose(K[0], 0.0, atol=1e-6 * K[1, 1])


@pytest.mark.parametrize(("c1", "c2"), [(0.0, 0.0), (2.0, 7.0), (0.0, 1e9)])
def test_strut_with_elastic_hinges_at_its_ends(c1, c2):
    length, diameter, E, nu = 1.5, 0.3, 2.0, 0.35
    area, EI, G = np.pi * diameter**2 / 4.0, E * np.pi * diameter**4 / 64.0, E / (2.0 * (1.0 + nu))
    kappa = 6.0 * (1.0 + nu) / (7.0 + 6.0 * nu)  # Cowper 1966, J. Appl. Mech. 33, 335 (from memory)
    c1, c2 = c1 * length / EI, c2 * length / EI
    x = np.array([[0.0, 0.0, 0.0], [1.0, 0.5, 1.0]])[:, :, None]
    props = {"diameter": diameter, "modulus": E, "poisson": nu, "start_compliance": c1, "end_compliance": c2}
    props = {name: np.array([value]) for name, value in props.items()}
    for model, shear in (("euler", np.inf), ("timoshenko", kappa * G * area)):
        W = element("strut").weights(x, props, model)[..., 0]
        expected = np.zeros((6, 6))
        expected[0, 0], expected[1, 1] = E * area / length, G * np.pi * diameter**4 / 32.0 / length
        for first in (2, 4):
            plane = slice(first, first + 2)
            expected[plane, plane] = FROM_STRAINS.T @ bending(c1, c2, length, EI, shear) @ FROM_STRAINS
        np.testing.assert_allclose(W, expected, rtol=1e-6, atol=1e-13 * EI)


def chain(points, t, E, nu, model):
    """Return the stiffness (6, 6) between the ends of straight walls through points (n, 2), inner nodes condensed."""
    n = len(points)
    K = np.zeros((3 * n, 3 * n))
    for i in range(n - 1):
        x = points[i : i + 2, :, None]
        props = {"thickness": np.array([t]), "modulus": np.array([E]), "poisson": np.array([nu])}
        rows = element("wall").rows(x, props)[..., 0].reshape(3, 6)
        K[3 * i : 3 * i + 6, 3 * i : 3 * i + 6] += rows.T @ element("wall").weights(x, props, model)[..., 0] @ rows
    ends = np.r_[0:3, 3 * n - 3 : 3 * n]
    inner = np.r_[3 : 3 * n - 3]
    link = K[np.ix_(inner, ends)]
    return K[np.ix_(ends, ends)] - link.T @ np.linalg.solve(K[np.ix_(inner, inner)], link)


@pytest.mark.parametrize("model", MODELS)
@pytest.mark.parametrize("arc", [-np.pi / 2.0, 0.4, 2.2, np.pi])
def test_a_curved_wall_is_the_limit_of_many_straight_ones(arc, model):
    # positive: the middle lies to the left of the chord, so the way from start to end turns to the right
    t, E, nu, radius = 0.12, 1.7, 0.3, 0.8
    chord = 2.0 * radius * np.sin(abs(arc) / 2.0) * np.array([0.8, 0.6])
    x = np.array([[0.3, -0.2], [0.3, -0.2] + chord])
    props = {name: np.array([value]) for name, value in
             {"thickness": t, "modulus": E, "poisson": nu, "arc": arc}.items()}  # fmt: skip
    rows = element("wall").rows(x[:, :, None], props)[..., 0].reshape(3, 6)
    curved = rows.T @ element("wall").weights(x[:, :, None], props, model)[..., 0] @ rows
    left = np.array([-chord[1], chord[0]]) / np.linalg.norm(chord)
    centre = x.mean(axis=0) - np.sign(arc) * left * radius * np.cos(arc / 2.0)
    errors = []
    for n in (20, 40, 80):
        on_arc = [centre + rotation(-np.degrees(arc) * s) @ (x[0] - centre) for s in np.linspace(0.0, 1.0, n + 1)]
        np.testing.assert_allclose(on_arc[-1], x[1], atol=1e-12)
        errors.append(np.abs(chain(np.array(on_arc), t, E, nu, model) - curved).max() / np.abs(curved).max())
    # polygons approach the circle with the square of their step
    assert errors[0] / errors[1] == pytest.approx(4.0, rel=0.05)
    assert errors[1] / errors[2] == pytest.approx(4.0, rel=0.05)
    assert errors[2] < 2e-3


def test_a_wall_on_arms_is_the_wall_between_its_moved_ends():
    x, props, rng = samples("wall", 2)
    e = (x[1] - x[0]) / np.linalg.norm(x[1] - x[0], axis=0)
    n = np.stack([-e[1], e[0]])
    o = [props[f"{end}_along"] * e + props[f"{end}_across"] * n for end in ("start", "end")]
    bare = {name: value for name, value in props.items() if not name.endswith(("along", "across"))}
    ends = x + np.stack(o)
    q = motion("wall", 2, rng, 1.0)
    carried = q.copy()
    for k in (0, 1):  # a small turn moves the end of its arm across it
        carried[k, :2] += q[k, 2] * np.stack([-o[k][1], o[k][0]])
    wall = element("wall")
    strains = np.einsum("skfm,kfm->sm", wall.rows(x, props), q)
    np.testing.assert_allclose(strains, np.einsum("skfm,kfm->sm", wall.rows(ends, bare), carried), atol=1e-12)
    for model in MODELS:
        np.testing.assert_allclose(wall.weights(x, props, model), wall.weights(ends, bare, model), rtol=1e-10)


def test_a_fold_opens_by_what_its_panels_turn():
    # panels in the plane of axes 1 and 2, the edge along axis 2: turning one panel by b about the edge folds it by b
    x = np.array([[-1.0, 0.3, 0.0], [0.0, 0.0, 0.0], [0.0, 1.0, 0.0], [1.0, 0.6, 0.0]])[:, :, None]
    for angle in (-150.0, -20.0, 1.0, 90.0, 175.0):
        u = np.zeros_like(x)
        u[3, :, 0] = rotation(angle, axis=[0, 1, 0]) @ x[3, :, 0] - x[3, :, 0]
        found = element("fold").measure(x, u, np.zeros((4, 3, 1)), {})
        assert abs(found[0, 0]) == pytest.approx(np.radians(abs(angle)), rel=1e-12)


# what does not fit ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("call", "words"), [
    (lambda: element("wal"), r"Unknown element kind 'wal'; nearest known: wall"),
    (lambda: check_model("timoshenco"), r"Unknown model 'timoshenco'; nearest known: timoshenko"),
    (lambda: check_block("wall", 3, 2, {}), r"'wall' lives in 2 dimensions, the cell has 3"),
    (lambda: check_block("hinge", 2, 2, {"stiffness": 1.0}), r"'hinge' joins 3 nodes, the block gives 2"),
    (lambda: check_block("bar", 2, 2, {}), r"'bar' needs the property 'rigidity'; given: none"),
    (lambda: check_block("bar", 2, 2, {"rigidity": 1.0, "rigidty": 1.0}), r"Unknown property of 'bar' 'rigidty'"),
])  # fmt: skip
def test_what_does_not_fit_is_told(call, words):
    with pytest.raises(InputError, match=words):
        call()


@pytest.mark.parametrize(("kind", "d"), KIND_IN_SPACE)
def test_a_good_block_fits(kind, d):
    e = element(kind)
    assert check_block(kind, d, e.nodes, dict.fromkeys(e.required + e.optional, 1.0)) is None
    assert set(e.required + e.optional) <= {*PROPS, *STIFFENERS}, "give the new property a range in samples.PROPS"
