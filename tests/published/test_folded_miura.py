"""The Miura fold: geometry, in-plane and bending Poisson's ratios of opposite sign, and its soft stiffnesses.

M. Schenk & S. D. Guest 2013, "Geometry of Miura-folded metamaterials", PNAS 110, 3276-3281 and Z. Y. Wei, Z. V. Guo,
L. Dudte, H. Y. Liang & L. Mahadevan 2013, "Geometric mechanics of periodic pleated origami", Phys. Rev. Lett. 110,
215501 [read, abstracts: opposite signs in the rigid-panel limit]; the formulas of the geometry and of nu are from
memory and exact [memory]; the stiffnesses for inextensible panels follow from the folds' energy, those in bending
were fitted to an independent model and checked blind [derived].

Panels a x b with the sector angle gamma, folded to the angle theta against the sheet; axis 1 along S, axis 2 along L.
The checks replace the family's bars and folds by plain numbers: every bar of rigidity EA, creases of stiffness k_a,
k_b per crease length, panels that bend about their short diagonal d_s with k_p per length. "A_S" is the force per
width over the strain in a pull along S with everything else free (uniaxial stress), one over the
11 entry of the inverse of the whole [A B; B D].
"""

import dataclasses

import numpy as np
import pytest
from by_hand import block, cell, compliance, drawn, orders
from hypothesis import given
from hypothesis import strategies as st

from homog.cell import STRAINS, Status
from homog.effective import homogenize
from homog.errors import GeometryError, MechanismError
from homog.families import build
from homog.families.folded import panel_bars
from homog.materials import UNIT
from homog.reference import reference_stiffness
from homog.tensors import isotropic, stiffness_to_voigt

angles = st.tuples(st.floats(40.0, 75.0), st.floats(20.0, 65.0))  # gamma, theta
sides = st.tuples(st.floats(5.0, 20.0), st.floats(5.0, 20.0))  # a, b
stiffnesses = st.tuples(*[st.floats(0.2, 5.0)] * 3)  # k_a, k_b, k_p
# EA in units of the stiffest fold. Bars enter as a power series in k/EA (trend tested below), up to 1e-2 at 1e6 for the
# flattest sheets drawn; two terms taken out (Richardson) left 5e-10 over 400 random sheets, round-off included.
STIFF = (1e6, 1e7, 1e8)


def sheet(a, b, gamma, theta):
    # nu = 0 keeps long panels buildable; its bars are replaced in any case
    return build("miura-fold", material=UNIT.replaced(poisson=0.0), side_a=a, side_b=b, sector_angle=gamma,
                 fold_angle=theta, sheet_thickness=0.01)  # fmt: skip


def edges(made, block, ends):
    """Return the vectors from one to the other of two local nodes of each element of a block."""
    x = made.points[block.nodes] + np.einsum("mkp,pd->mkd", block.shifts, made.lattice)
    return x[:, ends[1]] - x[:, ends[0]]


def diagonals(made):
    """Return which folds are panels' diagonals."""
    edge = edges(made, made.blocks[1], (1, 2))
    return np.flatnonzero((np.abs(edge[:, 0]) > 1e-9) & (np.abs(edge[:, 2]) > 1e-9))


def plain(made, ka, kb, kp, EA):
    """Return the sheet with plain numbers for its stiffnesses, a batch if EA is one.

    A fold is told by the direction of its edge.
    """
    bars, folds = made.blocks
    assert (bars.kind, folds.kind) == ("bar", "fold")
    edge = edges(made, folds, (1, 2))
    height = np.ptp(made.points[:, 2])
    level, across = np.abs(edge[:, 2]) < 1e-9 * height, np.abs(edge[:, 0]) > 1e-9 * height
    k = np.where(level, kb, np.where(across, kp, ka))  # side b stays level, side a stays in the plane x = constant
    assert [np.sum(k_is) for k_is in (level, ~level & across, ~level & ~across)] == [4, 4, 4]
    return dataclasses.replace(
        made,
        blocks=(
            dataclasses.replace(bars, props={"rigidity": np.asarray(EA)[..., None]}),
            dataclasses.replace(folds, props={"stiffness": k.astype(float)}),
        ),
    )


def geometry(a, b, gamma, theta):
    """Return H, S, L, V of Schenk & Guest."""
    g, th = np.radians(gamma), np.radians(theta)
    root = np.sqrt(1.0 + np.cos(th) ** 2 * np.tan(g) ** 2)
    H, S = a * np.sin(th) * np.sin(g), b * np.cos(th) * np.tan(g) / root
    return H, S, a * np.sqrt(1.0 - np.sin(th) ** 2 * np.sin(g) ** 2), b / root


def extrapolated(values):
    """Return the limit for inextensible bars of values at EA that grow tenfold, by Richardson's rule."""
    values, ratio = [np.asarray(v) for v in values], 10.0
    while len(values) > 1:
        values = [(ratio * stiff - soft) / (ratio - 1.0) for soft, stiff in zip(values, values[1:], strict=False)]
        ratio *= 10.0
    return values[0]


def inextensible(parameters, k, pick):
    """Return pick(compliance) in the limit of inextensible bars, and how far the softest bars were from it.

    By the reference, which tests hold to the fast path: at EA/k of 1e9 the elimination's round-off is 1e-7.
    """
    cells = plain(sheet(*parameters), *k, np.array(STIFF) * max(k))
    stiffness = [reference_stiffness(cells.at(i), "timoshenko")[0] for i in range(len(STIFF))]
    C = np.linalg.inv(stiffness_to_voigt(np.array(stiffness), sheet=True))
    values = np.stack(pick(np.moveaxis(C, 0, -1)), axis=-1)
    limit = extrapolated(values)
    return limit, np.abs(values[0] / limit - 1.0).max()


# ------------------------------------------------------------------------------------------ geometry


@drawn
@given(sides, angles)
def test_geometry_of_the_cell(lengths, folded):
    a, b = lengths
    gamma, theta = folded
    made = sheet(a, b, gamma, theta)
    H, S, L, V = geometry(a, b, gamma, theta)
    assert made.lattice == pytest.approx(np.array([[2.0 * S, 0.0, 0.0], [0.0, 2.0 * L, 0.0]]), rel=1e-12, abs=1e-12)
    assert np.ptp(made.points[:, 2]) == pytest.approx(H, rel=1e-12)
    lengths_of_bars = np.linalg.norm(edges(made, made.blocks[0], (0, 1)), axis=-1)
    d_s = np.sqrt(a**2 + b**2 - 2.0 * a * b * np.cos(np.radians(gamma)))
    assert np.sort(lengths_of_bars) == pytest.approx(np.sort([a] * 4 + [b] * 4 + [d_s] * 4), rel=1e-12)
    # sides a lie in planes x = constant and climb by H; sides b stay level and go to and fro by V
    for vector in edges(made, made.blocks[0], (0, 1)):
        if abs(vector[0]) < 1e-9 * S:
            assert np.abs(vector) == pytest.approx([0.0, L, H], rel=1e-12, abs=1e-9 * S)
        elif abs(vector[2]) < 1e-9 * H:
            assert np.abs(vector) == pytest.approx([S, V, 0.0], rel=1e-12, abs=1e-9 * H)


@drawn
@given(sides, angles)
def test_panels_are_flat_and_stand_at_the_fold_angle(lengths, folded):
    gamma, theta = folded
    made = sheet(*lengths, gamma, theta)
    for fold in diagonals(made):
        block = made.blocks[1]
        x = made.points[block.nodes[fold]] + block.shifts[fold] @ made.lattice
        one, other = np.cross(x[1] - x[0], x[2] - x[0]), np.cross(x[2] - x[3], x[1] - x[3])
        assert np.cross(one, other) == pytest.approx(np.zeros(3), abs=1e-9 * (one @ one)), "flat"
        assert abs(one[2]) / np.linalg.norm(one) == pytest.approx(np.cos(np.radians(theta)), rel=1e-9)
        # the wings' corners have the sector angle, so that four panels at a vertex make a full turn: developable
        for corner in (0, 3):
            u, v = x[1] - x[corner], x[2] - x[corner]
            assert u @ v / np.linalg.norm(u) / np.linalg.norm(v) == pytest.approx(np.cos(np.radians(gamma)), rel=1e-9)


# ------------------------------------------------------------------------------------------ Poisson's ratios


@drawn
@given(sides, angles, stiffnesses)
def test_poisson_ratio_in_the_plane(lengths, folded, k):
    # nu (pull along S) = -S^2/V^2 = -cos^2 th tan^2 g, along L its inverse; inextensible panels
    parameters = (*lengths, *folded)
    nu, off = inextensible(parameters, k, lambda S: [-S[0, 1] / S[0, 0], -S[0, 1] / S[1, 1]])
    _, S, _, V = geometry(*parameters)
    expected = -(np.cos(np.radians(folded[1])) ** 2) * np.tan(np.radians(folded[0])) ** 2
    assert pytest.approx(expected, rel=1e-12) == -(S**2) / V**2
    assert nu == pytest.approx([expected, 1.0 / expected], rel=1e-7)
    assert off > 1e-9, "bars that stretch do matter: the limit is a limit"


@drawn
@given(sides, angles)
def test_poisson_ratio_is_that_of_the_folding_geometry(lengths, folded):
    # -(dL/L)/(dS/S) by central differences of the built cell over the fold angle: no mechanics involved
    gamma, theta = folded
    step = 1e-3  # deg; error of the order step^2 = 1e-10 rad^2
    more, less = (sheet(*lengths, gamma, theta + d).lattice for d in (step, -step))
    _, S, _, V = geometry(*lengths, *folded)
    dS, dL = more[0, 0] - less[0, 0], more[1, 1] - less[1, 1]
    middle = sheet(*lengths, *folded).lattice
    assert -(dL / middle[1, 1]) / (dS / middle[0, 0]) == pytest.approx(-(S**2) / V**2, rel=1e-6)


@drawn
@given(sides, angles, stiffnesses)
def test_bending_has_the_opposite_sign(lengths, folded, k):
    # nu in bending = -nu in the plane: pulled it grows in both directions, bent it makes a saddle
    parameters = (*lengths, *folded)
    nu, _ = inextensible(parameters, k, lambda S: [-S[0, 1] / S[0, 0], -S[3, 4] / S[3, 3], -S[3, 4] / S[4, 4]])
    assert nu[0] < 0.0 < nu[1]
    assert nu[1] == pytest.approx(-nu[0], rel=1e-7)
    assert nu[2] == pytest.approx(-1.0 / nu[0], rel=1e-7)


# ------------------------------------------------------------------------------------------ stiffnesses


@drawn
@given(sides, angles, stiffnesses)
def test_stiffnesses_with_inextensible_panels(lengths, folded, k):
    # A_S = (4 b k_b + 4 a k_a (V a/(b L))^2)/(S L tan^2 th (V/b)^4), A_L = A_S (V/S)^4,
    # 1/(D^-1)_11 = (S/V)^2/(S L) (k_a a^3 + k_b b^3 (L/V - 1)^2 + k_p d_s^3), along L times (V/S)^4,
    # D_66 = (k_b b^3 + k_p d_s^3)/(4 S L)
    a, b = lengths
    gamma, theta = folded
    ka, kb, kp = k
    _, S, L, V = geometry(a, b, gamma, theta)
    d_s = np.sqrt(a**2 + b**2 - 2.0 * a * b * np.cos(np.radians(gamma)))
    tan = np.tan(np.radians(theta))
    A_S = (4.0 * b * kb + 4.0 * a * ka * (V * a / (b * L)) ** 2) / (S * L * tan**2 * (V / b) ** 4)
    D_S = (S / V) ** 2 / (S * L) * (ka * a**3 + kb * b**3 * (L / V - 1.0) ** 2 + kp * d_s**3)
    D_66 = (kb * b**3 + kp * d_s**3) / (4.0 * S * L)
    expected = [A_S, A_S * (V / S) ** 4, D_S, D_S * (V / S) ** 4, D_66]
    soft = (0, 1, 3, 4, 5)
    found, off = inextensible((a, b, gamma, theta), k, lambda C: [1.0 / C[i, i] for i in soft])
    assert found == pytest.approx(expected, rel=1e-7)
    assert off > 1e-7


def test_printed_rows():
    # a = b = 1, gamma 60, theta 45, all k 1: inextensible, and with bars EA = 1e3; half a unit of the last digit, but
    # D_22, where the formulas give 2.2453655 and the row has 2.24536
    unit, k = (1.0, 1.0, 60.0, 45.0), (1.0, 1.0, 1.0)
    limit, _ = inextensible(unit, k, lambda C: [1.0 / C[i, i] for i in (0, 1, 3, 4, 5)])
    assert limit[0] == pytest.approx(66.9527, abs=0.5e-4)
    assert limit[1] == pytest.approx(29.7568, abs=0.5e-4)
    assert limit[2] == pytest.approx(5.05207, abs=0.5e-5)
    assert limit[3] == pytest.approx(2.24536, abs=0.6e-5)
    assert limit[4] == pytest.approx(0.816497, abs=0.5e-6)
    C = compliance(plain(sheet(*unit), *k, 1e3))
    assert -C[0, 1] / C[0, 0] == pytest.approx(-1.383355, abs=0.5e-6)
    assert 1.0 / C[0, 0] == pytest.approx(63.4857, abs=0.5e-4)
    assert 1.0 / C[2, 2] == pytest.approx(306.80, abs=0.5e-2)


def test_bars_enter_to_first_order():
    # The trend behind the limits above, for every soft figure.
    unit, k = (1.0, 1.3, 60.0, 40.0), (1.0, 2.0, 0.5)
    values = []
    for EA in 10.0 ** np.arange(3, 7):
        C = compliance(plain(sheet(*unit), *k, EA))
        values.append([1.0 / C[0, 0], -C[0, 1] / C[0, 0], 1.0 / C[3, 3], -C[3, 4] / C[3, 3], 1.0 / C[5, 5]])
    errors = np.array(values)[:-1] - extrapolated(values[-2:])
    assert orders(errors, 10.0)[-1] == pytest.approx(np.ones(5), abs=0.02)


# ------------------------------------------------------------------------------------------ soft modes and mechanisms


@drawn
@given(sides, angles, stiffnesses)
def test_exactly_three_soft_macroscopic_modes(lengths, folded, k):
    # one in the plane, saddle and twist out of it; the other three need the bars to stretch (Schenk & Guest 2013, for
    # a triangulated periodic sheet): they grow with EA, the soft ones do not
    size = np.sqrt(lengths[0] * lengths[1])
    scale = np.diag([1.0] * 3 + [1.0 / size] * 3)
    made = sheet(*lengths, *folded)
    less, more = (
        np.linalg.eigvalsh(scale @ homogenize(plain(made, *k, EA * max(k))).stiffness @ scale) for EA in (1e6, 1e7)
    )
    assert more / less == pytest.approx([1.0] * 3 + [10.0] * 3, rel=0.01)


@pytest.mark.parametrize(
    ("k", "free"),
    [
        ((0.0, 0.0, 0.0), 3),  # a bare truss: all three soft modes cost nothing
        ((0.0, 0.0, 1.0), 1),  # panels that resist bending on free creases: it still folds, as paper does
        ((1.0, 0.0, 0.0), 1),  # D_66 = (k_b b^3 + k_p d_s^3)/(4SL) is zero: it twists freely
        ((0.0, 1.0, 0.0), 0),
        ((1.0, 1.0, 0.0), 0),
    ],
)
def test_without_stiffness_at_its_folds_the_sheet_is_a_mechanism(k, free):
    made = plain(sheet(1.0, 1.0, 60.0, 45.0), *k, 1e3)
    effective = homogenize(made.at(None))
    assert effective.mechanisms[0] == free
    assert np.linalg.matrix_rank(effective.stiffness[0], tol=1e-10 * effective.stiffness.max()) == 6 - free
    assert effective.status[0] == (Status.MECHANISM if free else Status.OK)
    if free:
        with pytest.raises(MechanismError, match=f"uniform strain .*({'|'.join(STRAINS['sheet'])})"):
            homogenize(made)


def test_panels_that_do_not_bend_leave_the_sheet_as_it_is_in_the_plane():
    # Folding bends no diagonal, so A is the same for soft and for hard panels. (A sheet whose panels are only ten times
    # stiffer than its creases is said to lose its nu, from -1.76 to -1.03; -1.76 is gamma 60, theta 40, but panels that
    # bend about one diagonal only do not show the loss.)
    made = sheet(1.0, 1.0, 60.0, 40.0)
    soft, hard = (
        stiffness_to_voigt(homogenize(plain(made, 1.0, 1.0, kp, 1e4)).stiffness, sheet=True) for kp in (0.1, 1e3)
    )
    assert hard[:3, :3] == pytest.approx(soft[:3, :3], rel=1e-9, abs=1e-9 * soft[0, 0])
    assert hard[5, 5] > 100.0 * soft[5, 5]
    C = compliance(plain(made, 1.0, 1.0, 1.0, 1e7))
    assert -C[0, 1] / C[0, 0] == pytest.approx(-1.76, abs=0.005)


# ------------------------------------------------------------------------------------------ mid-height


def from_height(stiffness, z):
    """Return the Mandel [A B; B D] for membrane strain measured at the height z above the plane of the given one.

    e(z) = e(0) + z k, so e(0) = e(z) - z k.
    """
    T = np.eye(6)
    T[:3, 3:] = -z * np.eye(3)
    return T.T @ stiffness @ T


@drawn
@given(sides, angles, stiffnesses)
def test_stretch_and_bending_part_at_mid_height(lengths, folded, k):
    C = homogenize(plain(sheet(*lengths, *folded), *k, 1e4)).stiffness
    A, B, D = C[:3, :3], C[:3, 3:], C[3:, 3:]
    assert np.abs(B).max() < 1e-9 * np.sqrt(np.abs(A).max() * np.abs(D).max())


def test_from_the_lower_vertices_the_sheet_looks_like_an_ordinary_one():
    # The trap: nu = +0.6 instead of -1.5 (a = b, gamma 60, theta 45, panels that bend freely). A pull that acts at the
    # height of the lower vertices bends the sheet, and the strain at that height is mostly bending.
    made = plain(sheet(1.0, 1.0, 60.0, 45.0), 1.0, 1.0, 0.0, 1e6)
    C = homogenize(made).stiffness
    height = np.ptp(made.points[:, 2])
    nu = {}
    for z in (0.0, -height / 2.0):
        S = np.linalg.inv(from_height(C, z))
        nu[z] = -S[0, 1] / S[0, 0]
    assert nu[0.0] == pytest.approx(-1.5, abs=1e-3)
    assert nu[-height / 2.0] == pytest.approx(0.6, abs=0.05), "as printed, one digit"
    # [derived] S_11 at z = 1/A_S + z^2/D_S and S_12 = -nu (1/A_S - z^2/D_S): from the formulas above, k_p = 0
    _, S, L, V = geometry(1.0, 1.0, 60.0, 45.0)
    A_S = (4.0 + 4.0 * (V / L) ** 2) / (S * L * V**4)
    D_S = (S / V) ** 2 / (S * L) * (1.0 + (L / V - 1.0) ** 2)
    stretch, bend = 1.0 / A_S, height**2 / 4.0 / D_S
    assert nu[-height / 2.0] == pytest.approx(-1.5 * (stretch - bend) / (stretch + bend), abs=1e-3)
    # a moment does not mind where the pull would act: nu in bending is the same from every plane
    S = np.linalg.inv(from_height(C, -height / 2.0))
    assert -S[3, 4] / S[3, 3] == pytest.approx(1.5, abs=1e-3)


# ------------------------------------------------------------------------------------------ bars of a panel


@drawn
@given(st.floats(0.6, 1.6), st.floats(0.0, 0.35))
def test_bars_that_stand_for_a_plate(aspect, poisson):
    """Filipov, Liu, Tachi, Schenk & Paulino 2017, Int. J. Solids Struct. 124, 26 [memory; confirmed].

    A_x = t (H^2 - nu W^2)/(2 H (1 - nu^2)), A_y likewise, A_d = t nu (H^2 + W^2)^1.5/(2 H W (1 - nu^2)): with both
    diagonals of a W x H panel it stretches as a plate does at any nu, and shears as one at nu = 1/3 only. An endless
    sheet of such panels, each side shared by two; E = t = 1.
    """
    W, H = 1.0, aspect
    along, across, diagonal = panel_bars(W, H, 1.0, poisson)
    bars = [[(0, (0, 0)), (0, image)] for image in ((1, 0), (0, 1), (1, 1), (-1, 1))]
    rigidity = [2.0 * along, 2.0 * across, diagonal, diagonal]
    truss = cell([[0.0, 0.0]], np.diag([W, H]), block("bar", bars, rigidity=rigidity))
    C = stiffness_to_voigt(homogenize(truss.at(None)).stiffness[0])
    plate = stiffness_to_voigt(isotropic(1.0, poisson, d=2))
    assert C[:2, :2] == pytest.approx(plate[:2, :2], rel=1e-12, abs=1e-12)
    assert C[2, 2] == pytest.approx(plate[0, 1], rel=1e-12, abs=1e-12), "a truss' G is its C12"


def test_bars_shear_as_a_plate_at_one_third_only():
    for poisson, ratio in ((1.0 / 3.0, 1.0), (0.3, 2.0 * 0.3 / 0.7), (0.2, 2.0 * 0.2 / 0.8)):
        _, _, diagonal = panel_bars(1.0, 1.0, 1.0, poisson)
        shear = 2.0 * diagonal * np.sqrt(2.0) / 4.0  # two bars, length sqrt2, (cos sin)^2 = 1/4, unit panel
        assert shear * 2.0 * (1.0 + poisson) == pytest.approx(ratio, rel=1e-12)


def test_a_panel_whose_bars_would_have_negative_areas_is_refused():
    # A_x < 0 if H^2 < nu W^2
    assert panel_bars(2.0, 1.0, 1.0, 0.3)[0] < 0.0 < panel_bars(1.8, 1.0, 1.0, 0.3)[0]
    with pytest.raises(GeometryError, match="too long"):
        build("miura-fold", side_a=20.0, side_b=5.0)
