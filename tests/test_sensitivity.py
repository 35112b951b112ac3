"""Derivatives by parameters, against central differences of the whole pipeline and against what theory says of them."""

import dataclasses
import functools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from samples import case_name, cases, numeric, possible, repeated, with_props

from homog import gradient, results
from homog.cell import Block
from homog.columns import COLUMNS, columns_of, evaluate
from homog.directional import plane_extremes, poisson
from homog.effective import Flag, homogenize
from homog.errors import InputError
from homog.families import FAMILIES, build
from homog.gradient import _walls, sizes, tensor_rates, wall_rates
from homog.joints import applies
from homog.materials import UNIT, material
from homog.results import Results
from homog.sensitivity import column_rates, elasticities, sensitivities, smooth_columns

SEED = 90217
MEMBERS = 3
WORST_CONDITION = 1e5
"""Round-off of the differences that are compared with grows with the stiffest strain over the softest."""
CLOSE = 1e-6
"""What is asked of a derivative, relative to it or to the column over the parameter's size, whichever is larger."""
SETTLED = 1e-7
"""Differences of two step sizes agree to this where they are good enough to be compared with."""
NOTHING = 1e-6
"""Of what a column is measured against (`measure`): symmetry makes it zero, or so small that differences drown."""
TOLERANCES = ("E1_tolerance_percent", "nu12_tolerance", "E1_scatter_percent", "nu12_scatter")


def models(case):
    joints = applies(FAMILIES[case[0]].build(dict(case[1]), UNIT))
    return ("euler", "timoshenko", "joint") if joints else ("euler", "timoshenko")


RUNS = [(case, model) for case in cases() for model in models(case)]
NAMES = [f"{case_name(case)}-{model}" for case, model in RUNS]


@functools.cache
def members(name):
    """Return parameters of some members of a case, not so slender that differences drown in round-off."""
    case = next(c for c in cases() if case_name(c) == name)
    found = possible(case, 40, np.random.default_rng(SEED))
    every = [homogenize(FAMILIES[case[0]].build(found, UNIT), model=model) for model in models(case)]
    sound = np.all([(e.mechanisms == 0) & (np.linalg.cond(e.stiffness) < WORST_CONDITION) for e in every], axis=0)
    good = np.flatnonzero(sound)[:MEMBERS]
    assert len(good) == MEMBERS
    return {name: value if isinstance(value, str) else value[good] for name, value in found.items()}


def differences(case, model, name, names):
    """Return the derivative of columns by one parameter (column, member), and how far two step sizes differ.

    Sixth order, of the whole pipeline: build, assembly, solution and columns at six values of the parameter, at two
    step sizes in one batch.
    """
    family, values = FAMILIES[case[0]], members(case_name(case))
    size = sizes(family, values, [{name: 1.0}])[0]
    steps, weights = np.array([-3, -2, -1, 1, 2, 3]), np.array([-1, 9, -45, 45, -9, 1]) / 60.0
    scale = np.array([4e-3, 2e-3])[:, None]
    near = {key: v if isinstance(v, str) else np.broadcast_to(v, (2, 6, MEMBERS)) for key, v in values.items()}
    near[name] = values[name] + (scale * steps)[..., None] * size
    row = evaluate(homogenize(family.build(near, UNIT), model=model), names)
    y = np.array([np.asarray(row[c], float) for c in names]).reshape(-1, 2, 6, MEMBERS)
    found = np.einsum("csim,i->csm", y, weights) / (scale * size)
    return found[:, 1], np.abs(found[:, 1] - found[:, 0])


def measure(name, now):
    """Return what a column is measured against: a sheet's stiffnesses their own kind, ratios and the like 1."""
    if name[:1] in "AD" and name[1:3].isdigit():
        return np.asarray(now[name[0] + "11" + name[3:]], float)
    return 1.0 if COLUMNS[name].name.startswith(("nu", "eta", "membrane", "bending", "auxetic")) else 0.0


@pytest.mark.parametrize(("case", "model"), RUNS, ids=NAMES)
def test_every_derivative_is_that_of_the_whole_pipeline(case, model):
    family, values = FAMILIES[case[0]], members(case_name(case))
    names = smooth_columns(family.kind)
    effective = homogenize(family.build(values, UNIT), model=model)
    found = column_rates(effective, names)
    now = evaluate(effective, names)
    compared = finite = 0
    for q, p in enumerate(numeric(case[0])):
        expected, unsettled = differences(case, model, p.name, names)
        size = sizes(family, values, [{p.name: 1.0}])[0]
        for name, want, doubt in zip(names, expected, unsettled, strict=True):
            value, against = np.abs(np.asarray(now[name], float)), measure(name, now)
            scale = np.maximum(np.abs(want), value / size) + 1e-12 / size
            zero = value < NOTHING * against
            tiny = 10.0 * NOTHING * np.broadcast_to(against, zero.shape)
            assert (np.abs(found[name][q] * size) < tiny)[zero].all()
            sure = (doubt <= SETTLED * scale) & ~zero
            finite += int((np.isfinite(want) & ~zero).sum())
            compared += int(sure.sum())
            off = np.abs(found[name][q] - want)[sure] / scale[sure]
            assert (off <= CLOSE).all(), f"{name} by {p.name}: {off.max():.1e}"
    assert compared > 0.9 * finite, f"only {compared} of {finite} differences settled"


@pytest.mark.parametrize(("case", "model"), RUNS, ids=NAMES)
def test_a_batch_is_a_loop(case, model):
    family, values = FAMILIES[case[0]], members(case_name(case))
    names = ["E1_MPa", "nu12", "nu_min", "density_kg_m3", "largest_cell_mm"]
    whole = column_rates(homogenize(family.build(values, UNIT), model=model), names)
    for i in range(MEMBERS):
        one = {key: value if isinstance(value, str) else value[i] for key, value in values.items()}
        alone = column_rates(homogenize(family.build(one, UNIT), model=model), names)
        for name in names:
            assert np.isfinite(whole[name]).all()
            np.testing.assert_allclose(alone[name][:, 0], whole[name][:, i], rtol=1e-6, atol=1e-9)


def test_equal_walls_stay_in_their_own_table():
    """One move's joints are looked up without the others': equal walls that turn are no unequal ones."""
    effective = homogenize(build("reentrant-honeycomb", angle=-20.0, thickness=1.0))
    together, _ = tensor_rates(effective, [{"angle": 1.0}, {"thickness": 1.0}])
    alone, _ = tensor_rates(effective, [{"angle": 1.0}])
    np.testing.assert_array_equal(together[0], alone[0])


def test_at_the_edge_of_a_joint_table_there_is_no_derivative():
    # the narrowest gap of a fork's table is 9 deg: inclined walls that leave the stem at 81 deg from the horizontal
    values = {"angle": [-80.0, -80.98, -81.5], "thickness": 0.1, "inclined": 10.0, "vertical": 40.0}
    effective = homogenize(FAMILIES["reentrant-honeycomb"].build(values, UNIT))
    assert (effective.flags & Flag.JOINT_OUTSIDE).astype(bool).tolist() == [False, False, True]
    rates = column_rates(effective, ["E1_MPa"], moves=[{"angle": 1.0}, {"thickness": 1.0}])["E1_MPa"]
    assert np.isfinite(rates).tolist() == [[True, False, True], [True] * 3]


SOLID_RUNS = [(case, model) for case, model in RUNS if FAMILIES[case[0]].kind != "sheet"]
"""A sheet's tensor has lengths in its unit."""


@pytest.mark.parametrize(("case", "model"), SOLID_RUNS)
def test_a_cell_that_grows_as_a_whole_stays_as_stiff(case, model):
    """Euler's theorem: a function of ratios of lengths has sum of l dC/dl = 0 over all lengths."""
    family, values = FAMILIES[case[0]], members(case_name(case))
    effective = homogenize(family.build(values, UNIT), model=model)
    back = np.linalg.inv(np.linalg.cholesky(effective.stiffness))
    lengths = [p.name for p in numeric(case[0]) if p.unit == "mm"]
    dC, dS = tensor_rates(effective, [{name: 1.0} for name in lengths])
    by_length = np.array([np.broadcast_to(effective.cell.parameters[name], MEMBERS) for name in lengths])
    relative = back @ (dC * by_length[..., None, None]) @ np.swapaxes(back, -1, -2)
    assert np.abs(relative.sum(axis=0)).max() < 1e-6 * np.abs(relative).max()
    np.testing.assert_allclose(
        dS, -np.linalg.inv(effective.stiffness) @ dC @ np.linalg.inv(effective.stiffness),
        atol=1e-7 * np.abs(dS).max(), rtol=1e-7,
    )  # fmt: skip


@given(angle=st.floats(-60.0, -12.0), thickness=st.floats(0.2, 1.0), vertical=st.floats(25.0, 60.0))
@settings(max_examples=15, deadline=None)
def test_moves_add_up(angle, thickness, vertical):
    # not with condensed joints, where walls of equal and of unequal thickness have tables of their own
    cell = build("reentrant-honeycomb", angle=angle, thickness=thickness, vertical=vertical)
    effective = homogenize(cell, model="timoshenko")
    moves = [{"thickness": 1.0}, {"vertical_thickness": 1.0}, {"thickness": 1.0, "vertical_thickness": 1.0},
             {"thickness": 2.0, "angle": -3.0}, {"angle": 1.0}]  # fmt: skip
    rates = column_rates(effective, ["E1_MPa", "nu12", "G_max_MPa", "density_kg_m3"], moves=moves)
    for rate in rates.values():
        scale = np.abs(rate[:, 0]).max()
        assert rate[2, 0] == pytest.approx(rate[0, 0] + rate[1, 0], rel=1e-6, abs=1e-7 * scale)
        assert rate[3, 0] == pytest.approx(2.0 * rate[0, 0] - 3.0 * rate[4, 0], rel=1e-6, abs=1e-7 * scale)


def test_stretching_and_bending_have_the_powers_of_theory():
    # E1 of a square grid is E t/l; a slender bending honeycomb goes with (t/l)^3 (Gibson & Ashby 1997, ch. 4)
    grid = sensitivities("square-grid", {"length": 10.0, "thickness": 0.3}, model="euler", relative=True)
    np.testing.assert_allclose(grid.loc["E1_MPa"], [-1.0, 1.0], atol=1e-8)
    comb = sensitivities("hexagonal-honeycomb", {"thickness": 0.01}, model="euler", relative=True, columns=["E1_MPa"])
    assert comb.loc["E1_MPa", "thickness"] == pytest.approx(3.0, abs=1e-5)
    assert comb.loc["E1_MPa", "vertical_thickness"] == pytest.approx(0.0, abs=1e-5)


def test_extremes_follow_the_envelope():
    """The derivative of an extreme is that of nu in the direction where it stands, held."""
    effective = homogenize(build("reentrant-honeycomb", angle=-25.0, thickness=0.7, vertical=22.0))
    (_, dS), names = tensor_rates(effective, [{"angle": 1.0}]), ["nu_min", "nu_max"]
    rates = column_rates(effective, names, moves=[{"angle": 1.0}])
    S = np.linalg.inv(effective.stiffness)
    for name in names:
        direction = np.radians(getattr(plane_extremes(S), f"{name}_deg"))
        h = 1e-6
        beside = [poisson(np.linalg.inv(S + k * h * dS[0]), angle=direction)[0] for k in (-1.0, 1.0)]
        assert rates[name][0, 0] == pytest.approx((beside[1] - beside[0]) / (2.0 * h), rel=1e-5)
        moved = np.radians(np.degrees(direction) + 0.5)
        off = [poisson(np.linalg.inv(S + k * h * dS[0]), angle=moved)[0] for k in (-1.0, 1.0)]
        assert name == "nu_min" or abs((off[1] - off[0]) / (2.0 * h) - rates[name][0, 0]) > 1e-5


def test_what_does_not_exist_or_jumps_is_nan():
    cell = build("reentrant-honeycomb", angle=[-30.0, -80.0, -30.0], thickness=1.0)
    effective = homogenize(cell, model="timoshenko")
    assert np.isnan(effective.stiffness[1]).all()
    names = columns_of("planar")
    rates = column_rates(effective, [*names, "D11_N_mm"])
    assert np.isfinite(rates["E1_MPa"][:, [0, 2]]).all() and np.isnan(rates["E1_MPa"][:, 1]).all()
    for name in [*(n for n in names if not COLUMNS[n].smooth), "D11_N_mm"]:
        assert np.isnan(rates[name]).all(), name
    assert {"verdict", "mechanisms", "nu_min_deg"} <= {n for n in names if not COLUMNS[n].smooth}
    nothing = column_rates(dataclasses.replace(effective, status=np.full(3, 2, np.int8)), ["nu12"])
    assert np.isnan(nothing["nu12"]).all()


def test_a_cell_taken_for_a_mechanism_has_the_same_derivative():
    """The pseudo-inverse that relaxes a cell with a mechanism inside agrees with the solution where there is none."""
    effective = homogenize(build("reentrant-honeycomb", thickness=[0.5, 0.8]), model="euler")
    plain, _ = tensor_rates(effective, [{"angle": 1.0}])
    loose, _ = tensor_rates(dataclasses.replace(effective, mechanisms=np.array([1, 0])), [{"angle": 1.0}])
    np.testing.assert_allclose(loose, plain, rtol=1e-6, atol=1e-12)


def test_a_mechanism_inside_does_not_matter():
    """A bar that hangs in the void turns at no energy; the derivative is that of the cell without it."""
    family = FAMILIES["square-grid"]

    def hung(values, parent):
        cell = family.make(values, parent)
        free = np.broadcast_to([[3.0, 0.0]], (*cell.shape, 1, 2))
        block = Block("bar", np.array([[0, 1]]), np.zeros((1, 2, 2), int), {"rigidity": np.ones(1)})
        return dataclasses.replace(cell, points=np.concatenate([cell.points, free], -2), blocks=(*cell.blocks, block))

    gradient._open.cache_clear()
    with pytest.MonkeyPatch.context() as patch:
        other = dataclasses.replace(family, make=hung)
        patch.setattr(gradient, "FAMILIES", {"square-grid": other})
        loose = homogenize(other.build({"thickness": [0.5, 1.0]}, UNIT), model="euler")
        assert (loose.mechanisms == 1).all()
        dC, _ = tensor_rates(loose, [{"length": 1.0}])
    gradient._open.cache_clear()
    plain, _ = tensor_rates(homogenize(build("square-grid", thickness=[0.5, 1.0]), model="euler"), [{"length": 1.0}])
    np.testing.assert_allclose(dC, plain, rtol=1e-6, atol=1e-12)


def test_models_and_cells_without_derivatives_say_so():
    effective = homogenize(build("square-grid", thickness=1.0), model="euler")
    with pytest.raises(InputError, match="Model 'solid' is meshed"):
        column_rates(dataclasses.replace(effective, model="solid"), ["nu12"])
    with pytest.raises(InputError, match="Model 'solid' is meshed"):
        tensor_rates(dataclasses.replace(effective, model="solid"), [{"thickness": 1.0}])
    own = dataclasses.replace(effective, cell=dataclasses.replace(effective.cell, family="custom"))
    with pytest.raises(InputError, match="'custom' is of no family"):
        column_rates(own, ["nu12"])
    with pytest.raises(InputError, match="nearest known: E1_MPa"):
        sensitivities("square-grid", columns=["E1_MP"])


def test_frames_and_elasticities():
    table = sensitivities("square-grid", {"thickness": [0.5, 1.0]}, model="euler", columns=["E1_MPa", "thinnest_mm"])
    assert table.index.names == ["member", "column"] and list(table.columns) == ["length", "thickness"]
    assert table.loc[(1, "E1_MPa"), "thickness"] == pytest.approx(0.1)
    given = {"thickness": 0.5}
    share = sensitivities("square-grid", given, model="euler", relative=True, columns=["eta1_12", "verdict"])
    assert np.isnan(share.to_numpy()).all()
    sheet = sensitivities("miura-fold", relative=True, columns=["A11_N_per_mm", "A16_N_per_mm", "D26_N_mm"])
    assert np.isnan(sheet).all(axis=1).tolist() == [False, True, True]
    effective = homogenize(build("square-grid", thickness=0.5), model="euler")
    rates = np.ones((1, 2, 1))
    np.testing.assert_allclose(elasticities(effective, ["E1_MPa"], rates)[0, :, 0], [10.0 / 0.05, 0.5 / 0.05])


# tolerance and scatter ----------------------------------------------------------------------------------------------


def test_a_bias_of_slender_bending_walls_counts_three_times():
    # +10 % on every wall: 33 % in full, 30 % to first order, nu as it was
    effective = homogenize(build("reentrant-honeycomb", thickness=0.1), model="euler")
    row = evaluate(effective, [*TOLERANCES, "E1_MPa"], tolerance=0.01)
    thicker = evaluate(homogenize(build("reentrant-honeycomb", thickness=0.11), model="euler"), ["E1_MPa"])
    assert row["E1_tolerance_percent"][0] == pytest.approx(30.0, abs=0.05)
    assert 100.0 * (thicker["E1_MPa"][0] / row["E1_MPa"][0] - 1.0) == pytest.approx(33.1, abs=0.05)
    assert row["nu12_tolerance"][0] < 1e-3
    # under a pull along 1 the two inclined walls bend, as springs in series: half of 30 % each, in quadrature
    assert row["E1_scatter_percent"][0] == pytest.approx(30.0 / np.sqrt(2.0), abs=0.05)


def test_scatter_averages_over_many_walls():
    """At the same mean, scattered walls hardly count: each one's first-order share is small and signs cancel."""
    rng = np.random.default_rng(SEED)
    cell = build("hexagonal-honeycomb", thickness=0.3)
    big = repeated(cell.supercell((4, 4)), 12)
    walls = len(big.blocks[0])
    share = 0.1 * rng.standard_normal((12, walls))
    share -= share.mean(axis=1, keepdims=True)
    scattered = homogenize(with_props(big, 0, thickness=0.3 * (1.0 + share)), model="euler").stiffness
    E = 1.0 / np.linalg.inv(scattered)[:, 0, 0]
    plain = 1.0 / np.linalg.inv(homogenize(cell, model="euler").stiffness)[0, 0]
    mean = E.mean() / plain - 1.0
    assert -0.10 < mean < 0.0  # a second-order loss, against 30 % of a bias
    one = evaluate(homogenize(cell, model="euler"), TOLERANCES, tolerance=0.03)
    assert E.std() / plain < 0.01 * one["E1_scatter_percent"][0]


@pytest.mark.parametrize(("case", "model"), RUNS, ids=NAMES)
def test_tolerance_is_the_derivative_by_all_that_is_made(case, model):
    family, values = FAMILIES[case[0]], members(case_name(case))
    effective = homogenize(family.build(values, UNIT), model=model)
    bias = {p.name: 1.0 for p in family.parameters if p.made}
    rates = column_rates(effective, ["E1_MPa", "nu12"], moves=[bias])
    row = evaluate(effective, [*TOLERANCES, "E1_MPa"], tolerance=0.02)
    percent = 100.0 * 0.02 * np.abs(rates["E1_MPa"][0]) / row["E1_MPa"]
    np.testing.assert_allclose(row["E1_tolerance_percent"], percent, rtol=1e-5)
    np.testing.assert_allclose(row["nu12_tolerance"], 0.02 * np.abs(rates["nu12"][0]), rtol=1e-4, atol=1e-7)


@pytest.mark.parametrize("case", [c for c in cases() if FAMILIES[c[0]].kind != "sheet"], ids=case_name)
def test_walls_apart_add_up_to_all_together(case):
    effective = homogenize(FAMILIES[case[0]].build(members(case_name(case)), UNIT), model="timoshenko")
    together, apart, plain = wall_rates(effective)
    np.testing.assert_allclose(apart.sum(axis=0), together, rtol=1e-6, atol=1e-8 * np.abs(together).max())
    np.testing.assert_allclose(plain, np.linalg.inv(effective.stiffness), rtol=1e-6, atol=1e-9 * np.abs(plain).max())


def test_each_wall_apart_is_a_difference_of_that_wall():
    cell = build("reentrant-honeycomb", angle=-25.0, thickness=0.6)
    effective = homogenize(cell, model="timoshenko")
    _, apart, _ = wall_rates(effective)
    for i in range(3):
        h = 1e-4 * 0.6
        near = [with_props(cell, 0, thickness=0.6 + k * h * np.eye(3)[i]) for k in (-1.0, 1.0)]
        S = [np.linalg.inv(homogenize(one, model="timoshenko").stiffness) for one in near]
        atol = 1e-6 * np.abs(apart[i]).max()
        np.testing.assert_allclose(apart[i, 0], (S[1] - S[0]) / (2.0 * h), rtol=1e-5, atol=atol)


def test_both_hinges_of_a_ligament_are_one_wall():
    cell = build("rotating-squares", opening=30.0, ligament_thickness=0.4)
    _, apart, _ = wall_rates(homogenize(cell))
    hinges, h = cell.blocks[1], 1e-4
    groups = _walls("hinge", np.array([[1, 0, 2], [1, 5, 2], [3, 0, 4]]))
    assert len(apart) == 4 and [group.tolist() for group in groups] == [[0, 2], [1]]
    for pin in range(4):
        stiffness = hinges.props["stiffness"] * (1.0 + np.array([[-h], [h]]) * (hinges.nodes[:, 1] == pin))
        S = np.linalg.inv(homogenize(with_props(repeated(cell, 2), 1, stiffness=stiffness)).stiffness)
        rate = 3.0 / 0.4 * (S[1] - S[0]) / (2.0 * h)  # the stiffness goes with the cube of the ligament's thickness
        np.testing.assert_allclose(apart[pin, 0], rate, rtol=1e-4, atol=1e-6 * np.abs(rate).max())


def test_without_a_tolerance_there_is_no_column_and_no_work(monkeypatch):
    effective = homogenize(build("square-grid", thickness=[0.5, 1.0]), model="euler")

    def never(effective):
        raise AssertionError("computed, though nobody asked for it")

    monkeypatch.setattr(results, "wall_rates", never)
    assert all(np.isnan(evaluate(effective)[name]).all() for name in TOLERANCES)
    evaluate(effective, ["E1_MPa"], tolerance=0.1)
    with pytest.raises(AssertionError, match="nobody asked"):
        evaluate(effective, ["nu12_scatter"], tolerance=0.1)
    own = dataclasses.replace(effective, cell=dataclasses.replace(effective.cell, family="custom"))
    assert np.isnan(Results(own, tolerance=0.1).tolerances).all()


def test_a_solid_takes_the_tolerances_of_its_joints():
    effective = homogenize(build("reentrant-honeycomb", thickness=0.5))
    solid = dataclasses.replace(effective, stiffness=1.1 * effective.stiffness, model="solid")
    mine, theirs = (Results(one, tolerance=0.1).tolerances for one in (solid, effective))
    assert np.isfinite(theirs).all()
    np.testing.assert_allclose(mine, theirs)


def test_a_sheet_is_of_one_piece_and_bad_members_stay_alone():
    row = evaluate(homogenize(build("miura-fold")), TOLERANCES, tolerance=0.02)
    assert np.isfinite(row["E1_tolerance_percent"]).all() and np.isnan(row["E1_scatter_percent"]).all()
    mixed = homogenize(build("reentrant-honeycomb", angle=[-30.0, -80.0]), model="timoshenko")
    row = evaluate(mixed, TOLERANCES, tolerance=0.1)
    assert np.isfinite(row["E1_scatter_percent"][0]) and np.isnan(row["E1_scatter_percent"][1])


def test_a_brief_hands_its_tolerance_over():
    from homog.brief import parse_brief
    from homog.screening import run_screen

    text = """
    material = "PLA"
    [process]
    wall_tolerance_mm = 0.05
    [limits]
    E1_tolerance_percent = { max = 20.0 }
    [[candidates]]
    family = "square-grid"
    thickness = [0.2, 1.0]
    """
    table = run_screen(parse_brief(text)).candidates
    assert table["meets"].tolist() == [False, True]
    cell = build("square-grid", thickness=[0.2, 1.0], material=material("PLA"))
    at = evaluate(homogenize(cell), TOLERANCES, tolerance=0.05)
    np.testing.assert_allclose(table["E1_tolerance_percent"], at["E1_tolerance_percent"])
