"""Inverse design: known geometries come back, known doubles are both found, and where nothing fits it says why."""

import json
import shlex

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq

import homog
from homog import cli_tune
from homog.brief import Limit
from homog.cli import main
from homog.columns import evaluate
from homog.effective import homogenize
from homog.errors import InputError
from homog.families import FAMILIES, build
from homog.materials import Process
from homog.problem import meets, merged, posed
from homog.tuning import DISTINCT, LONGEST, Misses, _step, distinct, first_points, shapes, tune

SEED = 51407


def run(line, capsys):
    """Return exit status, standard output and standard error of a command line."""
    status = main(shlex.split(line))
    out, err = capsys.readouterr()
    return status, out, err


# what is found --------------------------------------------------------------------------------------------------------

KNOWN = {
    "reentrant-honeycomb": ({"inclined": 10.0}, {"vertical": 23.0, "angle": -27.0, "thickness": 0.6},
                            ("nu12", "E1_MPa", "density_kg_m3")),
    "hexagonal-honeycomb": ({"vertical": 12.0}, {"inclined": 9.0, "angle": 35.0, "thickness": 0.5},
                            ("nu12", "E2_MPa", "density_kg_m3")),
    "arrowhead": ({"half_width": 10.0}, {"outer_angle": 28.0, "inner_angle": 62.0, "thickness": 0.5},
                  ("nu12", "E1_MPa", "E2_MPa")),
    "kagome-grid": ({"length": 8.0}, {"thickness": 0.45}, ("E_min_MPa",)),
    "anti-tetrachiral": ({"ligament_x": 10.0}, {"ligament_y": 12.0, "node_radius": 2.0, "thickness": 0.6},
                         ("E1_MPa", "E2_MPa", "density_kg_m3")),
    "rotating-triangles": ({"side": 10.0, "ligament_length": 1.0}, {"opening": 20.0, "ligament_thickness": 0.3},
                           ("E1_MPa", "density_kg_m3")),
    "miura-fold": ({"side_a": 10.0, "side_b": 10.0, "crease_length": 10.0},
                   {"sector_angle": 62.0, "fold_angle": 40.0, "sheet_thickness": 0.25},
                   ("nu12", "bending_nu12", "A11_N_per_mm")),
    "octet": ({"length": 10.0}, {"diameter": 0.8}, ("E3_MPa",)),
}  # fmt: skip


@pytest.mark.parametrize("name", KNOWN)
def test_a_known_geometry_comes_back(name):
    fixed, hidden, columns = KNOWN[name]
    row = evaluate(homogenize(build(name, **fixed, **hidden)), columns)
    result = tune(name, {c: float(row[c][0]) for c in columns}, fix=fixed, starts=24, keep=24, seed=SEED)
    units = {p.name: p.column for p in FAMILIES[name].parameters}
    off = [max(abs(one[units[p]] / value - 1.0) for p, value in hidden.items()) for _, one in result.found.iterrows()]
    assert min(off) < 1e-5
    for c in columns:
        np.testing.assert_allclose(result.found[c].to_numpy(float), row[c][0], rtol=1e-3)


@given(vertical=st.floats(22.0, 40.0), angle=st.floats(-45.0, -10.0), thickness=st.floats(0.2, 0.8))
@settings(max_examples=8, deadline=None)
def test_what_some_cell_has_can_be_asked_for(vertical, angle, thickness):
    cell = build("reentrant-honeycomb", inclined=10.0, vertical=vertical, angle=angle, thickness=thickness)
    row = evaluate(homogenize(cell, model="timoshenko"), ["nu12", "E1_MPa"])
    result = tune("reentrant-honeycomb", {c: float(row[c][0]) for c in ("nu12", "E1_MPa")}, fix={"inclined": 10.0},
                  starts=8, model="timoshenko", seed=SEED)  # fmt: skip
    assert len(result.found) and not result.in_the_way
    np.testing.assert_allclose(result.found["nu12"], row["nu12"][0], rtol=1e-3)


def test_both_angles_of_one_stiffness_are_found():
    # E2 = E (t/l)^3 (h/l + sin a)/cos^3 a (Gibson & Ashby 1997, ch. 4) falls and rises again as the walls are folded in
    def modulus(a):
        return (2.0 + np.sin(a)) / np.cos(a) ** 3

    wanted, turning = 1.94, np.radians(-12.0)
    roots = sorted(np.degrees([brentq(lambda a: modulus(a) - wanted, turning, -1e-3),
                               brentq(lambda a: modulus(a) - wanted, np.radians(-30.0), turning)]))  # fmt: skip
    result = tune("reentrant-honeycomb", {"E2_MPa": wanted * 1e-6}, model="euler", seed=SEED,
                  fix={"inclined": 10.0, "vertical": 20.0, "thickness": 0.1})  # fmt: skip
    assert sorted(result.found["angle_deg"]) == pytest.approx(roots, abs=0.1)


def test_one_ratio_of_poisson_is_that_of_many_honeycombs():
    # nu12 = cos^2 a/((h/l + sin a) sin a): a whole curve of slender honeycombs
    result = tune("hexagonal-honeycomb", {"nu12": 0.8}, fix={"inclined": 10.0, "thickness": 0.05}, model="euler",
                  within={"vertical": (2.0, 60.0)}, seed=SEED)  # fmt: skip
    a, h = np.radians(result.found["angle_deg"].to_numpy()), result.found["vertical_mm"].to_numpy() / 10.0
    assert len(a) >= 6 and np.ptp(a) > 0.2
    np.testing.assert_allclose(np.cos(a) ** 2 / ((h + np.sin(a)) * np.sin(a)), 0.8, rtol=3e-3)
    assert result.found["density_kg_m3"].is_monotonic_increasing


def test_listed_shapes_differ_and_sizes_alone_do_not_count():
    result = tune("octet", {"density_kg_m3": 100.0}, starts=32, seed=SEED)
    assert result.met == 32 and len(result.found) == 1
    asked = {"nu12": (-2.0, -0.5), "E1_MPa": (1e-4, None)}
    problem = posed("reentrant-honeycomb", asked, limits={}, fix={}, within={}, free=(), material=homog.material("PLA"),
                    model="euler", process=None, rank={"density_kg_m3": "min"})  # fmt: skip
    result = tune("reentrant-honeycomb", asked, material="PLA", model="euler", seed=SEED, keep=30)
    x = np.array([v.coordinate(result.found[FAMILIES["reentrant-honeycomb"].parameter(v.name).column].to_numpy(float))
                  for v in problem.variables])  # fmt: skip
    z = shapes(problem, x)
    apart = np.abs(z[:, :, None] - z[:, None]).max(axis=0)
    assert len(result.found) > 10
    assert apart[~np.eye(len(apart), dtype=bool)].min() > DISTINCT
    np.testing.assert_allclose(
        shapes(problem, x + np.array([[v.unit == "mm"] for v in problem.variables])), z, atol=1e-9
    )


def test_shapes_are_told_apart_at_five_percent():
    problem = posed("square-grid", {"nu12": 0.0}, limits={}, fix={"length": 10.0}, within={}, free=(), material="PLA",
                    model="euler", process=None, rank={"density_kg_m3": "min"})  # fmt: skip
    # half of a thickness's logarithm is its own, the other half that of the mean of the two lengths
    x = np.log([[0.5, 0.5 * np.exp(1.9 * DISTINCT), 0.5 * np.exp(2.1 * DISTINCT), 0.5 * np.exp(9.0 * DISTINCT)]])
    assert distinct(problem, x, np.arange(4), 9) == [0, 2, 3]
    assert distinct(problem, x, np.array([1, 0, 3]), 9) == [1, 3] and distinct(problem, x, np.arange(4), 1) == [0]


def test_the_end_of_a_range_is_reached_from_inside():
    result = tune(
        "square-grid", {"E1_MPa": (0.0513, 0.0527)}, fix={"length": 10.0}, model="euler", starts=32, seed=SEED
    )
    assert result.met == 32 and result.found["E1_MPa"].between(0.0513, 0.0527).all()


def test_ranges_and_process_are_kept_to_the_letter():
    made_by = Process("mine", min_wall_mm=0.8, wall_tolerance_mm=0.1, max_cell_mm=40.0)
    result = tune("reentrant-honeycomb", {"nu12": (None, -0.7), "E1_MPa": (3.0, 30.0)}, material="PLA", process=made_by,
                  limits={"density_kg_m3": (None, 400.0), "auxetic_reach_deg": (8.0, None)}, seed=SEED)  # fmt: skip
    found = result.found
    assert len(found) >= 3
    assert (found["nu12"] <= -0.7).all() and found["E1_MPa"].between(3.0, 30.0).all()
    assert (found["density_kg_m3"] <= 400.0).all() and (found["auxetic_reach_deg"] >= 8.0).all()
    assert (found["thinnest_mm"] >= 0.8).all() and (found["largest_cell_mm"] <= 40.0).all()
    assert (found["verdict"] != "reject").all() and np.isfinite(found["E1_tolerance_percent"]).all()


def test_a_parameter_follows_its_leader_unless_it_is_free():
    tied = tune("hexagonal-honeycomb", {"E1_MPa": 1e-3}, starts=8, seed=SEED, model="euler").found
    np.testing.assert_allclose(tied["vertical_thickness_mm"], tied["thickness_mm"])
    freed = tune(
        "hexagonal-honeycomb", {"E1_MPa": 1e-3}, starts=8, seed=SEED, model="euler", free=["vertical_thickness"]
    )
    assert (np.abs(freed.found["vertical_thickness_mm"] / freed.found["thickness_mm"] - 1.0) > 0.01).any()
    led = tune("hexagonal-honeycomb", {"nu12": 1.2}, fix={"thickness": 0.4}, starts=8, seed=SEED, model="euler").found
    np.testing.assert_allclose(led["vertical_thickness_mm"], 0.4)


def test_words_stay_and_ranks_rule():
    result = tune(
        "anti-tetrachiral", {"E1_MPa": 1e-3}, fix={"node": "ring"}, rank={"E2_MPa": "max"}, starts=16, seed=SEED
    )
    assert set(result.found["node"]) == {"ring"} and result.found["E2_MPa"].is_monotonic_decreasing
    again = tune(
        "anti-tetrachiral", {"E1_MPa": 1e-3}, fix={"node": "ring"}, rank={"E2_MPa": "max"}, starts=16, seed=SEED
    )
    pd.testing.assert_frame_equal(result.found, again.found)


# what is in the way ---------------------------------------------------------------------------------------------------


def test_a_bound_in_the_way_is_named():
    result = tune("square-grid", {"E1_MPa": 0.01}, fix={"length": 10.0}, process=Process("mine", min_wall_mm=0.5),
                  model="euler", starts=8)  # fmt: skip
    assert result.found.empty and result.met == 0
    assert result.nearest["thickness_mm"].item() == pytest.approx(0.5)
    assert any("E1_MPa = 0.01 (target): missed, it is 0.05" in line for line in result.in_the_way)
    assert "thickness is at its lowest, 0.5 mm (process)" in result.in_the_way


def test_a_rule_in_the_way_is_named():
    # at h = l the tips meet before nu12 comes down to -0.5
    result = tune("reentrant-honeycomb", {"nu12": -0.5}, fix={"inclined": 10.0, "vertical": 10.0, "thickness": 0.3},
                  model="timoshenko", starts=16)  # fmt: skip
    assert result.found.empty
    assert any(line.startswith("tips-collide: opposite tips") for line in result.in_the_way), result.in_the_way


def test_a_limit_in_the_way_is_named():
    result = tune(
        "square-grid", {"E1_MPa": 200.0}, limits={"density_kg_m3": (None, 60.0)}, material="PLA", model="euler"
    )
    assert result.found.empty
    assert any(line.startswith("density_kg_m3 at most 60 (limit)") for line in result.in_the_way), result.in_the_way
    assert any(line.startswith("E1_MPa = 200 (target): missed") for line in result.in_the_way)


def test_a_rejected_cell_is_not_found():
    # as stout a cell meets the density, but its beams are no beams any more
    result = tune("square-grid", {"relative_density": 0.6}, fix={"length": 10.0}, model="euler", starts=4)
    assert result.found.empty and any("walls-thick" in line for line in result.in_the_way)


# pieces ---------------------------------------------------------------------------------------------------------------


@given(y=st.floats(0.2, 5.0), log=st.booleans(), low=st.floats(0.5, 1.0), width=st.sampled_from([0.0, 0.5, np.inf]))
@settings(max_examples=60, deadline=None)
def test_residuals_vanish_in_the_range_and_have_the_slope_they_say(y, log, low, width):
    limit = Limit("E1_MPa", low, low + width)
    misses = Misses((limit,), (log,))

    def at(value):
        r, J, cost = misses.of(np.array([[value]]), np.ones((1, 1, 1)))
        return r[0, 0], J[0, 0, 0], cost[0]

    r, J, cost = at(y)
    assert cost == r**2
    if low + 1e-3 < y < low + width - 1e-3:
        assert r == J == 0.0
    elif not low - 1e-3 < y < low + 1e-3 and not low + width - 1e-3 < y < low + width + 1e-3:
        assert np.sign(r) == np.sign(y - low)
        assert pytest.approx((at(y + 1e-6)[0] - at(y - 1e-6)[0]) / 2e-6, rel=1e-6) == J


def test_misses_of_nothing_are_infinite():
    misses = Misses((Limit("nu12", -1.0, -1.0),), (False,))
    assert misses.of(np.array([[np.nan, -1.0]]), np.zeros((1, 2, 2)))[2].tolist() == [np.inf, 0.0]
    misses = Misses((Limit("E1_MPa", 1.0, 1.0),), (True,))
    assert misses.of(np.array([[-1.0, 1.0]]), np.zeros((1, 2, 2)))[2].tolist() == [np.inf, 0.0]


@given(st.integers(0, 10**6))
@settings(max_examples=40, deadline=None)
def test_a_step_goes_down_and_stays_inside(seed):
    rng = np.random.default_rng(seed)
    low, high = np.full((3, 1), -1.0), np.full((3, 1), 1.0)
    x = np.clip(rng.uniform(-1.5, 1.5, (3, 6)), low, high)
    r, J = rng.standard_normal((2, 6)), rng.standard_normal((2, 3, 6))
    trial = _step(x, r, J, np.full(6, 1e-3), low, high)
    assert (trial >= low).all() and (trial <= high).all()
    gradient = np.einsum("knb,kb->nb", J, r)
    assert (trial - x)[(x == high) & (gradient < 0.0)].tolist() == [0.0] * int(((x == high) & (gradient < 0.0)).sum())
    assert np.abs(trial - x).max() <= LONGEST + 1e-12
    assert np.abs(_step(0.0 * x, 9.0 * r, J, np.full(6, 1e-9), 9.0 * low, 9.0 * high)).max() == pytest.approx(LONGEST)


def test_starts_are_cells_that_exist():
    problem = posed("reentrant-honeycomb", {"nu12": -0.5}, limits={}, fix={"vertical": 12.0}, within={}, free=(),
                    material="PLA", model="euler", process=None, rank={"density_kg_m3": "min"})  # fmt: skip
    x = first_points(problem, 32, SEED)
    assert x.shape == (3, 32) and problem.exists(x).all()


def test_values_are_met_within_their_tolerance_and_ranges_exactly():
    assert meets(Limit("nu12", -0.5, -0.5), np.array([-0.5004, -0.501])).tolist() == [True, False]
    assert meets(Limit("nu12", -1.0, -0.5), np.array([-0.5, -0.4999, np.nan])).tolist() == [True, False, False]
    both = merged([Limit("E1_MPa", 1.0, np.inf, "target"), Limit("E1_MPa", -np.inf, 3.0, "limit")])
    assert (both[0].low, both[0].high) == (1.0, 3.0)


# bad input and the command line ---------------------------------------------------------------------------------------

BAD = {
    "tune reentrant-honeycomb": "Missing option '--target'",
    "tune reentrant-honeycom --target nu12=-1": "nearest known: reentrant-honeycomb",
    "tune square-grid --target nu_12=0": "Unknown column 'nu_12'; nearest known: nu12",
    "tune square-grid --target nu12": "--target 'nu12' is not COLUMN=VALUE",
    "tune square-grid --target nu12=x": "Target 'nu12' = 'x' is not a number",
    "tune square-grid --target nu12=1:": "None of",
    "tune square-grid --target nu12=:": "is no number or range",
    "tune square-grid --target nu12=nan": "is no number or range",
    "tune square-grid --target nu12=1:0": "the range is empty, 1 is above 0",
    "tune square-grid --target nu12=1 --target nu12=2": "'nu12' is given twice",
    "tune square-grid --target verdict=ok": "Target 'verdict' = 'ok' is not a number",
    "tune square-grid --target verdict=1": "Target 'verdict' is text; aim at a number",
    "tune square-grid --target nu_min_deg=1": "has no derivative",
    "tune square-grid --target E3_MPa=1": "'square-grid' is planar and has no such quantity",
    "tune square-grid --target E1_MPa=3: --limit E1_MPa<2": "E1_MPa at least 3 (target), but E1_MPa at most 2 (limit)",
    "tune square-grid --target E1_MPa=1 --limit E1_MPa=2": "--limit 'E1_MPa=2' is not COLUMN<VALUE",
    "tune square-grid --target E1_MPa=1 --limit 'nu12<1' --limit 'nu12<2'": "given twice with '<'",
    "tune square-grid --target thinnest_mm=0.5 --min-wall 1": "thinnest_mm = 0.5 (target), but thinnest_mm at least 1",
    "tune square-grid --target nu12=0 --fix lenth=3": "Unknown parameter 'lenth'; nearest known: length",
    "tune square-grid --target nu12=0 --fix length=3:4": "--within takes a range",
    "tune square-grid --target nu12=0 --fix length=1e9": "is outside its range",
    "tune square-grid --target nu12=0 --fix length=3 --within length=2:4": "is fixed and shall vary",
    "tune square-grid --target nu12=0 --within length=4:2": "an empty range, 4 is above 2",
    "tune square-grid --target nu12=0 --within length=4:": "has an open end",
    "tune square-grid --target nu12=0 --fix length=3 --fix thickness=0.1": "nothing to tune",
    "tune square-grid --target nu12=0 --fix thickness=0.1 --min-wall 1": "the process makes no wall under 1 mm",
    "tune square-grid --target nu12=0 --within thickness=0.1:0.5 --min-wall 1": "nothing from 1 (process) to 0.5 mm",
    "tune square-grid --target nu12=0 --process lasers": "Unknown process 'lasers'",
    "tune square-grid --target nu12=0 --model solid": "Model 'solid' is meshed and has no derivatives",
    "tune square-grid --target nu12=0 --starts 0": "starts = 0; allowed",
    "tune square-grid --target nu12=0 --rank nu12=up": "allowed: 'min' or 'max'",
    "tune square-grid --target nu12=0 --rank reasons=min": "'square-grid' has no such number",
    "tune square-grid --target nu12=0 --min-wall x": "Option --min-wall = 'x' is not a number",
    "tune square-grid --target nu12=0 --out there.csv": "is there already",
    "tune square-grid --target nu12=0 --out x.txt": "the suffix '.txt'",
    "tune reentrant-honeycomb --target nu12=-1 --fix inclined=10 --fix vertical=0.3": "exists in these ranges",
    "sensitivity square-grid --column nu_12": "nearest known: nu12",
    "sensitivity square-grid length=1,2": "give one",
    "sensitivity square-grid --model solid": "Model 'solid' is meshed",
}


@pytest.mark.parametrize("line", BAD)
def test_bad_input_is_one_line_that_helps(line, tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "there.csv").write_text("mine")
    status, out, err = run(line, capsys)
    if line.endswith("nu12=1:"):  # no fault, but nothing: a square grid hardly contracts
        assert status == 3 and BAD[line] in out
        return
    assert status == 2 and out == "" and err.count("\n") == 1
    assert BAD[line] in err, err
    assert [p.name for p in tmp_path.iterdir()] == ["there.csv"] and (tmp_path / "there.csv").read_text() == "mine"


def test_the_library_says_the_same():
    with pytest.raises(InputError, match="No target"):
        tune("square-grid", {})
    with pytest.raises(InputError, match="keep = 0"):
        tune("square-grid", {"nu12": 0.0}, keep=0)


def test_the_command_lists_writes_and_counts(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    line = ("tune reentrant-honeycomb --target nu12=-0.8 --target E1_MPa=3: --limit 'density_kg_m3<200' --starts 16 "
            "--fix inclined=10 --within angle=-60:-15 --material PLA --min-wall 0.5 --keep 4 "
            "--out found.csv")  # fmt: skip
    status, out, err = run(line, capsys)
    assert (status, err) == (0, "")
    table = pd.read_csv(tmp_path / "found.csv")
    assert f"wrote found.csv: {len(table)} rows" in out and 1 <= len(table) <= 4
    assert "held: inclined 10, vertical_thickness as thickness" in out
    assert "asked: nu12 = -0.8 (target); E1_MPa at least 3 (target); density_kg_m3 at most 200 (limit)" in out
    assert (table["inclined_mm"] == 10.0).all() and table["angle_deg"].between(-60.0, -15.0).all()
    meta = json.loads((tmp_path / "found.meta.json").read_text())
    assert meta["asked"][0] == "nu12 = -0.8" and meta["starts"] == 16 and meta["seed"] == 0
    status, out, err = run(line + " --json --overwrite", capsys)
    card = json.loads(out)
    assert [one["columns"]["density_kg_m3"] for one in card["found"]] == pytest.approx(table["density_kg_m3"], rel=1e-7)
    assert card["nearest"] == [] and card["in_the_way"] == [] and card["found"][0]["parameters"]["inclined"] == 10.0


def test_nothing_found_is_status_3_and_writes_nothing(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    line = "tune square-grid --target E1_MPa=200 --limit 'density_kg_m3<60' --material PLA --starts 8 --out found.csv"
    status, out, err = run(line, capsys)
    assert (status, err) == (3, "") and list(tmp_path.iterdir()) == []
    assert "None of 8 searches met everything" in out and "in the way: density_kg_m3 at most 60 (limit)" in out
    status, out, _ = run(line + " --json", capsys)
    card = json.loads(out)
    assert status == 3 and card["found"] == [] and len(card["nearest"]) == 1 and card["in_the_way"]


def test_the_sensitivity_command_shows_what_the_library_finds(capsys):
    status, out, err = run("sensitivity reentrant-honeycomb angle=-25 thickness=0.8 --material PLA --json", capsys)
    card = json.loads(out)
    table = homog.sensitivities("reentrant-honeycomb", {"angle": -25.0, "thickness": 0.8}, material="PLA")
    assert (status, err) == (0, "") and set(card["columns"]) == set(table.index)
    assert card["columns"]["E1_MPa"]["by"]["angle"] == pytest.approx(table.loc["E1_MPa", "angle"], rel=1e-9)
    status, out, _ = run("sensitivity reentrant-honeycomb --relative --column E1_MPa --column verdict", capsys)
    assert status == 0 and "thickness %/%" in out and "angle per deg" not in out
    assert [line.split()[2:] for line in out.splitlines() if line.strip().startswith("verdict")] == [["-"] * 5]
    share = homog.sensitivities("reentrant-honeycomb", relative=True, columns=["E1_MPa"]).loc["E1_MPa", "thickness"]
    assert f"{share:.4g}" in next(line for line in out.splitlines() if line.strip().startswith("E1_MPa"))
    status, out, _ = run("sensitivity miura-fold", capsys)
    assert status == 0 and "bending_nu12" in out and "fold_angle per" in out
    density = next(line for line in out.splitlines() if line.strip().startswith("density"))
    assert density.split()[3] == "0"  # side_b, to round-off


def test_the_commands_show_their_progress(monkeypatch, capsys):
    told = []
    monkeypatch.setattr(cli_tune, "teller", lambda: told.append)
    assert main(shlex.split("tune square-grid --target E1_MPa=0.05 --starts 4 --model euler")) == 0
    capsys.readouterr()
    assert told[0] == "step 0: 4 searches" and told[-1] == ""
