"""The regular hexagon as a two-dimensional solid, by a general-purpose finite-element library (scikit-fem).

The true section (sharp inner corners) in plane stress, six-node triangles. By the mirrors through the vertical walls
and through their middles a quarter of the rectangular cell is enough: mirror conditions for a pull, antisymmetric
ones for shear. No published value but a second theory [derived]: it shows what walls between points leave out, the
joint. Found, nu_s = 0.3: timoshenko beams have E and G lower than the solid by 1.0, 2.4 and 5.8 % at t/l = 0.025,
0.05 and 0.1 (stated: within 6 % at 0.1), nu right to 1e-3.
"""

import dataclasses
import functools

import numpy as np
import pytest
import skfem
from by_hand import Constants, constants, from_compliance, orders
from skfem.helpers import ddot, div, sym_grad

from homog.families import build
from homog.materials import UNIT

POISSON = 0.3
MESHES = (4, 8, 16)  # elements across a wall
CORNER_ORDER = 1.23  # twice the exponent of the singularity at the inner corners
SINE, COSINE = 0.5, np.sqrt(3.0) / 2.0


def quad(corners, u, v):
    """Return points and triangles of a quadrilateral's grid, parameters u along 0-1 and v along 0-3."""
    a, b, c, d = np.array(corners, float)
    U, V = (w[..., None] for w in np.meshgrid(u, v, indexing="ij"))
    points = ((1 - U) * (1 - V) * a + U * (1 - V) * b + U * V * c + (1 - U) * V * d).reshape(-1, 2)
    index = np.arange(len(points)).reshape(len(u), len(v))
    p, q, r, s = index[:-1, :-1], index[1:, :-1], index[1:, 1:], index[:-1, 1:]
    return points, np.concatenate([np.stack(x, -1).reshape(-1, 3) for x in ((p, q, r), (p, r, s))])


def triangle(corners, n):
    """Return points and triangles of a triangle cut into n^2 equal ones."""
    a, b, c = np.array(corners, float)
    index = {(i, j): k for k, (i, j) in enumerate((i, j) for i in range(n + 1) for j in range(n + 1 - i))}
    points = [a + (b - a) * i / n + (c - a) * j / n for i, j in index]
    cells = [(index[i, j], index[i + 1, j], index[i, j + 1]) for i in range(n) for j in range(n - i)]
    cells += [(index[i + 1, j], index[i + 1, j + 1], index[i, j + 1]) for i in range(n) for j in range(n - 1 - i)]
    return np.array(points), np.array(cells)


def joined(*pieces):
    """Return one mesh of pieces that meet point to point."""
    points = np.concatenate([p for p, _ in pieces])
    starts = np.cumsum([0] + [len(p) for p, _ in pieces[:-1]])
    cells = np.concatenate([c + start for (_, c), start in zip(pieces, starts, strict=True)])
    size = np.ptp(points)
    _, first, same = np.unique(
        np.round(points / size * 1e9).astype(int), axis=0, return_index=True, return_inverse=True
    )
    return skfem.MeshTri(*(np.ascontiguousarray(x.T) for x in (points[first], same.reshape(-1)[cells])))


def graded(length, first):
    """Return parameters 0 to 1 along a wall: steps of `first` at 0, a quarter longer each, at most four first."""
    steps = [first]
    while sum(steps) < length:
        steps.append(min(1.25 * steps[-1], 4.0 * first))
    return np.concatenate([[0.0], np.cumsum(steps) / sum(steps)])


def quarter_hexagon(t, n):
    """Return the quarter cell of the regular hexagon, l = 1: n elements across a wall and along a joint's side.

    Vertical half wall from (0, 0) up to the joint (0, 1/2), inclined wall to (cos 30, 1), and the same turned by half a
    turn about the middle of the inclined wall. A joint is the triangle between its three inner corners.
    """
    joint = np.array([0.0, 0.5])
    inner = t / (2.0 * np.sqrt(3.0))  # from the joint's centre to a wall's root
    foot, corner, top = joint + [0.0, -inner], joint + [t / 2.0, -inner], joint + [0.0, 2.0 * inner]
    middle = joint + np.array([COSINE, SINE]) / 2.0
    across = t / 2.0 * np.array([-SINE, COSINE])
    along, even = graded(0.5 - inner, t / n), np.linspace(0.0, 1.0, n + 1)
    half = [
        quad([foot, [0.0, 0.0], [t / 2.0, 0.0], corner], along, even),
        triangle([foot, corner, top], n),
        quad([corner, middle - across, middle + across, top], along, even),
    ]
    turned = [(2.0 * middle - points, cells) for points, cells in half]
    return joined(*half, *turned), np.array([COSINE, 1.5])


def stiffness(mesh, box):
    """Return the Voigt stiffness (3, 3) of a mirror-symmetric quarter cell in the box (0, 0) to `box`, E = 1."""
    lame, shear = POISSON / (1.0 - POISSON**2), 1.0 / (2.0 * (1.0 + POISSON))  # plane stress

    @skfem.BilinearForm
    def energy(u, v, _):
        return lame * div(u) * div(v) + 2.0 * shear * ddot(sym_grad(u), sym_grad(v))

    basis = skfem.Basis(mesh, skfem.ElementVector(skfem.ElementTriP2()))
    K = energy.assemble(basis)
    sides = {
        (axis, end): basis.get_dofs(lambda x, axis=axis, end=end: np.abs(x[axis] - end * box[axis]) < 1e-9)
        for axis in (0, 1)
        for end in (0, 1)
    }
    motions = []
    for strain in range(3):
        moved = basis.zeros()
        held = []
        for (axis, end), side in sides.items():
            # a pull: the displacement across a mirror; shear: the one along it, all of it from the upper side
            component = axis if strain < 2 else 1 - axis
            dofs = side.all([f"u^{component + 1}"])
            held.append(dofs)
            moves = end == 1 and (axis == strain if strain < 2 else axis == 1)
            moved[dofs] = box[axis] if moves else 0.0
        motions.append(skfem.solve(*skfem.condense(K, x=moved, D=np.unique(np.concatenate(held)))))
    u = np.stack(motions, -1)
    C = u.T @ (K @ u) / np.prod(box)
    C[:2, 2] = C[2, :2] = 0.0  # pulls and shear are of opposite symmetry; their fields live on different quarters
    return C


@functools.cache
def solid(t, n):
    return from_compliance(np.linalg.inv(stiffness(*quarter_hexagon(t, n))))


def honeycomb(t):
    parent = UNIT.replaced(poisson=POISSON)
    return build("hexagonal-honeycomb", material=parent, inclined=1.0, vertical=1.0, angle=30.0, thickness=t)


def beams(t):
    return constants(honeycomb(t), "timoshenko")


def test_a_full_plate_returns_its_parent():
    box = np.array([COSINE, 1.5])
    whole = quad([[0.0, 0.0], [box[0], 0.0], box, [0.0, box[1]]], np.linspace(0.0, 1.0, 4), np.linspace(0.0, 1.0, 6))
    found = from_compliance(np.linalg.inv(stiffness(joined(whole), box)))
    assert found == pytest.approx((1.0, 1.0, POISSON, POISSON, 0.5 / (1.0 + POISSON)), rel=1e-10)


@pytest.mark.parametrize("t", [0.05, 0.1])
def test_the_mesh_is_the_true_section(t):
    mesh, box = quarter_hexagon(t, 2)
    a, b, c = (mesh.p[:, corner] for corner in mesh.t)
    area = np.abs((b - a)[0] * (c - a)[1] - (b - a)[1] * (c - a)[0]).sum() / 2.0
    assert area / np.prod(box) == pytest.approx(honeycomb(t).relative_density, rel=1e-12)


def test_the_solid_converges_and_is_isotropic():
    # The inner corners (240 deg of solid) leave a singularity of exponent 0.6157, so that the energy converges at the
    # order 1.23, from above as in every conforming method.
    values = np.array([solid(0.05, n) for n in MESHES])[:, [0, 1, 4]]
    steps = -np.diff(values, axis=0)
    assert (steps > 0.0).all()
    assert np.log2(steps[0] / steps[1]) == pytest.approx(CORNER_ORDER, abs=0.25)
    assert (steps[1] / values[-1]).max() < 0.0015, "the finer mesh is within about this of the limit"
    E1, E2, nu12, nu21, G12 = solid(0.05, MESHES[-1])
    # two directions and the shear, three different loads, one isotropic material: to the mesh's error
    assert pytest.approx(E1, rel=1e-4) == E2
    assert nu12 == pytest.approx(nu21, rel=1e-4)
    assert pytest.approx(E1 / (2.0 * (1.0 + nu12)), rel=1e-3) == G12


def limit(t):
    """Return the constants of the two finer meshes, extrapolated with the corners' order."""
    coarse, fine = (np.array(solid(t, n)) for n in MESHES[-2:])
    return Constants(*(fine + (fine - coarse) / (2.0**CORNER_ORDER - 1.0)))


def test_beams_fall_short_of_the_solid_by_their_joints():
    # Found at t/l = 0.05: E and G of the timoshenko beams 2.4 % too low, nu right to 1e-4. The extrapolation of the
    # mesh moves the solid by 0.1 %: that is the tolerance.
    found, true = beams(0.05), limit(0.05)
    for name in ("E1", "E2", "G12"):
        assert 100.0 * (1.0 - getattr(found, name) / getattr(true, name)) == pytest.approx(2.4, abs=0.1), name
    for name in ("nu12", "nu21"):
        assert getattr(found, name) == pytest.approx(getattr(true, name), rel=2e-4), name


def test_the_shortfall_shrinks_with_the_thickness():
    # a joint is a share t/l of its walls: first order and a little more; 6 % at t/l = 0.1, as stated
    thicknesses = (0.1, 0.05, 0.025)
    for name in ("E1", "G12"):
        short = [1.0 - getattr(beams(t), name) / getattr(limit(t), name) for t in thicknesses]
        assert short[0] == pytest.approx(0.058, abs=0.002) and short[0] < 0.06
        assert orders(short) == pytest.approx([1.2, 1.2], abs=0.15)


@pytest.mark.parametrize("t", [0.05, 0.1])
def test_a_rigid_zone_of_a_tenth_of_the_thickness_makes_up_for_it(t):
    # "for the regular hexagon the right zone is about 0.1 t" at each wall end. What is made up for is in proportion to
    # the zone, which is stated to one digit, +-0.05 t: half of the gap. (Found: 0.08 t and 0.10 t.)
    cell = honeycomb(t)
    (walls,) = cell.blocks
    arms = {"start_along": np.array([0.1 * t]), "end_along": np.array([-0.1 * t])}
    joined_by_zones = dataclasses.replace(cell, blocks=(dataclasses.replace(walls, props={**walls.props, **arms}),))
    found, short = constants(joined_by_zones, "timoshenko").E1, 1.0 - beams(t).E1 / limit(t).E1
    assert found == pytest.approx(limit(t).E1, rel=0.5 * short)
