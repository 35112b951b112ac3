"""The screen: who meets the brief, who misses what, the ranking against brute force, the same whatever the chunk."""

import dataclasses
import math
import re

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import homog
from homog import engine, screening
from homog.brief import Goal, parse_brief
from homog.engine import Plan
from homog.ranking import NEAREST, pareto, shortlist
from homog.report import rebuilt
from homog.screening import run_screen

GRID = """
material = {{ modulus_MPa = 1000.0, poisson = 0.3, density_kg_m3 = 1000.0 }}
model = "euler"
{more}
[[candidates]]
family = "square-grid"
length = 10.0
thickness = {thickness}
"""


def grid(thickness, more=""):
    return parse_brief(GRID.format(thickness=[float(t) for t in thickness], more=more))


MIXED = """
title = "all kinds"
model = "timoshenko"
material = "PLA"
[part]
size_1_mm = 120.0
[limits]
nu12 = { max = 0.1 }
density_kg_m3 = { max = 500 }
E1_MPa = { min = 5.0 }
[rank]
by = { density_kg_m3 = "min" }
keep = 10
[[candidates]]
family = "reentrant-honeycomb"
angle = { from = -60.0, to = -10.0, count = 7 }
thickness = { from = 0.3, to = 3.0, count = 5 }
[[candidates]]
family = "anti-tetrachiral"
node = ["rigid", "ring"]
ligament_x = { from = 7.0, to = 12.0, sampled = true }
node_radius = { from = 1.0, to = 4.0, sampled = true }
samples = 17
seed = 1203
[[candidates]]
family = "miura-fold"
fold_angle = { from = 20.0, to = 70.0, count = 6 }
[[candidates]]
family = "octet"
diameter = [0.5, 1.0, 3.0]
"""


# ------------------------------------------------------------------------------------------- meets and misses


def test_meets_and_misses_by_hand():
    # E1 = E t/l = 100 t MPa and density = (2 t l - t^2)/l^2 1000 = 200 t - 10 t^2 kg/m3; t/l over 0.25 is rejected
    brief = grid([0.2, 0.5, 1.0, 2.0, 3.0], "[limits]\nE1_MPa = { min = 40, max = 150 }\ndensity_kg_m3 = { max = 150 }")
    table = run_screen(brief).candidates
    assert list(table["candidate"]) == [1, 2, 3, 4, 5]
    np.testing.assert_allclose(table["E1_MPa"], [20.0, 50.0, 100.0, 200.0, 300.0])
    np.testing.assert_allclose(table["density_kg_m3"], [39.6, 97.5, 190.0, 360.0, 510.0])
    np.testing.assert_allclose(table["miss_E1_MPa"], [20.0, 0.0, 0.0, 50.0, 150.0], atol=1e-9)
    np.testing.assert_allclose(table["miss_density_kg_m3"], [0.0, 0.0, 40.0, 210.0, 360.0], atol=1e-9)
    assert list(table["misses"]) == ["E1_MPa", "", "density_kg_m3", *["E1_MPa density_kg_m3"] * 2]
    assert list(table["meets"]) == [False, True, False, False, False]
    assert list(table["verdict"]) == ["ok", "ok", "caution", "caution", "reject"]


def test_falls_by_hand():
    brief = grid([0.2, 0.5, 1.0, 2.0, 3.0], "[limits]\nE1_MPa = { min = 40, max = 150 }\ndensity_kg_m3 = { max = 150 }")
    found = run_screen(brief)
    assert [(fall.limit.column, fall.missed, fall.alone) for fall in found.falls] == [
        ("E1_MPa", 3, 1),
        ("density_kg_m3", 3, 1),
    ]
    assert found.met == 1


def test_a_reject_never_meets():
    found = run_screen(grid([0.5, 2.6, 11.0]))  # no limits at all; 11 mm walls of 10 mm length merge
    assert list(found.candidates["verdict"]) == ["ok", "reject", "reject"]
    assert list(found.candidates["meets"]) == [True, False, False]
    assert (found.candidates["misses"] == "").all() and found.met == 1 and found.falls == ()
    assert list(found.shortlist["candidate"]) == [1]


def test_a_value_on_the_limit_meets_it():
    brief = grid([0.5], "[limits]\nthinnest_mm = { min = 0.5, max = 0.5 }")
    assert run_screen(brief).met == 1
    assert run_screen(grid([np.nextafter(0.5, 1.0)], "[limits]\nthinnest_mm = { max = 0.5 }")).met == 0


def test_what_has_no_value_for_a_limit_misses_it():
    brief = parse_brief(MIXED.replace("nu12 = { max = 0.1 }", "bending_nu12 = { min = 0.5 }"))
    table = run_screen(brief).candidates
    sheets = table["family"] == "miura-fold"
    assert table.loc[~sheets, "miss_bending_nu12"].isna().all() and not table.loc[~sheets, "meets"].any()
    assert all("bending_nu12" in text.split() for text in table.loc[~sheets, "misses"])
    assert (table.loc[sheets, "miss_bending_nu12"] == 0.0).any()


def test_a_mix_of_kinds_is_one_table():
    brief = parse_brief(MIXED)
    table = run_screen(brief).candidates
    assert len(table) == brief.count == 35 + 34 + 6 + 3
    assert list(table["candidate"]) == list(range(1, 79))
    assert list(table["family"].unique()) == ["reentrant-honeycomb", "anti-tetrachiral", "miura-fold", "octet"]
    assert table.loc[table["family"] == "octet", "E3_MPa"].notna().any()
    assert table.loc[table["family"] != "octet", "E3_MPa"].isna().all()
    assert list(table.columns[:6]) == ["candidate", "family", "meets", "misses", "verdict", "reasons"]
    assert [name for name in table.columns if name.startswith("miss_")] == list(table.columns[-3:])
    expected = (table["misses"] == "") & (table["verdict"] != "reject")
    assert (table["meets"] == expected).all() and 0 < expected.sum() < 78
    for text, *misses in table[["misses", "miss_nu12", "miss_density_kg_m3", "miss_E1_MPa"]].itertuples(index=False):
        names = ["nu12", "density_kg_m3", "E1_MPa"]
        assert text.split() == [name for name, miss in zip(names, misses, strict=True) if miss != 0.0]
    assert table["cells_across"].notna().all()  # the part of the brief


@pytest.mark.parametrize("size", [1, 2, 7, 34, 35, 10_000])
def test_the_size_of_a_part_changes_nothing(size, monkeypatch):
    brief = parse_brief(MIXED)
    expected = run_screen(brief)
    monkeypatch.setattr(engine, "LEAST_ROWS", size)
    monkeypatch.setattr(engine, "MOST_ROWS", size)
    counts = []
    found = run_screen(brief, progress=counts.append)
    assert sum(counts) == 78 and max(counts) <= size
    for name in ("candidates", "shortlist", "nearest"):
        # a batch of another length may sum in another order: a few units in the last place of a near-cancelled value,
        # and the square root of that, 1e-8 rad, in where a flat extreme lies
        one, other = getattr(found, name), getattr(expected, name)
        flat = [column for column in one if re.match("(nu|E)_(min|max)_deg", column)]
        assert len(flat) == 4
        pd.testing.assert_frame_equal(one[flat], other[flat], rtol=0.0, atol=1e-5)
        pd.testing.assert_frame_equal(one.drop(columns=flat), other.drop(columns=flat), rtol=1e-9, atol=1e-10)
    assert [dataclasses.astuple(f) for f in found.falls] == [dataclasses.astuple(f) for f in expected.falls]


def test_parts_are_numbered_through(monkeypatch):
    monkeypatch.setattr(engine, "LEAST_ROWS", 10)
    monkeypatch.setattr(engine, "MOST_ROWS", 10)
    parts = list(Plan(parse_brief(MIXED)))
    assert [part.first for part in parts] == [1, 11, 21, 31, 36, 46, 53, 63, 70, 76]
    assert sum(part.stop - part.start for part in parts) == 78
    assert [part.source.family.id for part in parts[3:5]] == ["reentrant-honeycomb", "anti-tetrachiral"]


def test_a_row_makes_its_cell_again():
    brief = parse_brief(MIXED)
    for row in screening.records(run_screen(brief).candidates)[::7]:
        if row["verdict"] == "reject":
            continue
        again = homog.homogenize(rebuilt(row, brief), model=brief.model).table()
        np.testing.assert_allclose(again["E1_MPa"][0], row["E1_MPa"], rtol=1e-9)
        np.testing.assert_allclose(again["density_kg_m3"][0], row["density_kg_m3"], rtol=1e-12)


def test_the_brief_decides_model_and_parent():
    thick = "[[candidates]]\nfamily = 'reentrant-honeycomb'\nthickness = 2.0\n[material]\nname = 'PLA'\n"
    soft = run_screen(parse_brief("model = 'timoshenko'\n" + thick)).candidates["E1_MPa"][0]
    stiff = run_screen(parse_brief("model = 'euler'\n" + thick)).candidates["E1_MPa"][0]
    deep = run_screen(parse_brief("model = 'timoshenko'\n" + thick + "deep = true")).candidates["E1_MPa"][0]
    assert soft < 0.98 * stiff  # shear makes a thick wall softer
    np.testing.assert_allclose(deep / soft, 1.0 / (1.0 - 0.345**2), rtol=0.02)  # plane strain, but for its shear


# ------------------------------------------------------------------------------------------------- ranking


def brief_for(goals, *, front=False, keep=200, per_family=200):
    return dataclasses.replace(grid([0.5]), goals=tuple(Goal(*goal) for goal in goals), front=front, keep=keep,
                               per_family=per_family)  # fmt: skip


def frame(values, families=None):
    """Return meeting candidates 1, 2, ... with goals a, b, c."""
    array = np.asarray(values, float).reshape(len(values), -1)
    table = pd.DataFrame({"candidate": np.arange(1, len(array) + 1), "family": families or ["f"] * len(array)})
    for i in range(array.shape[1]):
        table["abc"[i]] = array[:, i]
    return table


def keys_of(values, better):
    """Return what to minimise, tuples; no value is the worst."""
    return [
        tuple(math.inf if math.isnan(v) else v if b == "min" else -v for v, b in zip(row, better, strict=True))
        for row in values
    ]


ENTRIES = st.sampled_from([0.0, 1.0, 2.0, 3.0, -1.0, math.nan])  # few, so that ties are common
TABLES = st.integers(1, 3).flatmap(
    lambda goals: st.tuples(
        st.lists(st.lists(ENTRIES | st.floats(-9.0, 9.0), min_size=goals, max_size=goals), min_size=1, max_size=14),
        st.lists(st.sampled_from(["min", "max"]), min_size=goals, max_size=goals),
    )
)


@settings(max_examples=50, deadline=None)
@given(TABLES)
def test_lexicographic_ranking_is_the_obvious_one(case):
    values, better = case
    keys = keys_of(values, better)
    expected = sorted(range(len(values)), key=lambda i: (*keys[i], i))
    found = shortlist(frame(values), brief_for(list(zip("abc", better, strict=False))))
    assert list(found["candidate"] - 1) == expected
    assert list(found["rank"]) == list(range(1, len(values) + 1))


@settings(max_examples=120, deadline=None)
@given(TABLES)
def test_the_front_is_the_obvious_one(case):
    values, better = case
    keys = keys_of(values, better)

    def beaten(i):
        """Whether another is at least as good in all; of equals the first stays."""
        return any(
            all(a <= b for a, b in zip(keys[j], keys[i], strict=True)) and (keys[j] != keys[i] or j < i)
            for j in range(len(keys))
            if j != i
        )

    expected = sorted((i for i in range(len(keys)) if not beaten(i)), key=lambda i: (*keys[i], i))
    found = shortlist(frame(values), brief_for(list(zip("abc", better, strict=False)), front=True))
    assert list(found["candidate"] - 1) == expected and expected


@pytest.mark.parametrize("goals", [1, 2, 3])
def test_the_front_of_nothing_is_empty(goals):
    assert pareto(np.empty((0, goals))).size == 0


def test_at_most_so_many_of_a_family():
    families = ["x", "x", "x", "y", "x", "y", "z"]
    table = frame([1.0, 2.0, 3.0, 4.0, 5.0, 6.0, 7.0], families)
    found = shortlist(table, brief_for([("a", "min")], per_family=2))
    assert list(found["candidate"]) == [1, 2, 4, 6, 7]
    found = shortlist(table, brief_for([("a", "min")], per_family=2, keep=3))
    assert list(found["candidate"]) == [1, 2, 4] and list(found["rank"]) == [1, 2, 3]
    found = shortlist(table, brief_for([("a", "max")], per_family=1))
    assert list(found["candidate"]) == [7, 6, 5]


def test_a_front_is_thinned_evenly_and_keeps_its_ends():
    a = np.arange(21.0)
    table = frame(np.stack([a, -a], axis=1))  # all on the front
    for keep in (1, 2, 5, 7, 20):
        found = shortlist(table, brief_for([("a", "min"), ("b", "min")], front=True, keep=keep))
        assert len(found) == keep and found["a"].iloc[0] == 0.0
        assert keep == 1 or found["a"].iloc[-1] == 20.0
        gaps = np.diff(found["a"])
        assert keep < 3 or gaps.max() - gaps.min() <= 1.0
    both = frame(np.stack([a, -a], axis=1), ["x"] * 14 + ["y"] * 7)
    found = shortlist(both, brief_for([("a", "min"), ("b", "min")], front=True, per_family=3))
    assert list(found["a"]) == [0.0, 6.0, 13.0, 14.0, 17.0, 20.0]  # each family's part of it


def test_the_ranking_of_a_whole_screen():
    text = MIXED.replace("keep = 10", "keep = 6\nper_family = 4").replace('= "min"', '= "min", nu12 = "max"')
    found = run_screen(parse_brief(text))
    meeting = found.candidates[found.candidates["meets"]].sort_values(["density_kg_m3", "candidate"])
    expected = meeting.groupby("family", sort=False).head(4).head(6)
    assert list(found.shortlist["candidate"]) == list(expected["candidate"])
    pd.testing.assert_frame_equal(homog.screen(parse_brief(text)), found.shortlist)
    assert found.shortlist["meets"].all()


def test_a_front_of_a_whole_screen_is_not_beaten():
    text = MIXED.replace("keep = 10", "front = true\nkeep = 200").replace('= "min"', '= "min", E1_MPa = "max"')
    found = run_screen(parse_brief(text))
    meeting = found.candidates[found.candidates["meets"]]
    for density, modulus in found.shortlist[["density_kg_m3", "E1_MPa"]].to_numpy():
        better = (meeting["density_kg_m3"] <= density) & (meeting["E1_MPa"] >= modulus)
        strictly = (meeting["density_kg_m3"] < density) | (meeting["E1_MPa"] > modulus)
        assert not (better & strictly).any()
    assert 1 < len(found.shortlist) < len(meeting)


# --------------------------------------------------------------------------------------------- nothing meets


def test_the_nearest_when_nothing_meets():
    # miss of E1 over its limit 400, plus miss of the density over its limit 100; the rejected 3.5 mm would be nearest
    thickness = [0.2, 0.5, 1.0, 1.5, 2.0, 2.2, 2.4, 3.5]
    found = run_screen(grid(thickness, "[limits]\nE1_MPa = { min = 400 }\ndensity_kg_m3 = { max = 100 }"))
    assert found.met == 0 and len(found.shortlist) == 0
    assert list(found.shortlist.columns) == ["rank", *found.candidates.columns]
    t = np.array(thickness)
    total = np.maximum(400 - 100 * t, 0) / 400 + np.maximum(200 * t - 10 * t**2 - 100, 0) / 100
    expected = [i + 1 for i in np.argsort(total) if thickness[i] < 2.5][:NEAREST]
    assert list(found.nearest["candidate"]) == expected


def test_no_nearest_among_rejects():
    found = run_screen(grid([3.0, 4.0], "[limits]\nE1_MPa = { min = 1e4 }"))
    assert found.met == 0 and len(found.nearest) == 0 and len(found.candidates) == 2


def test_nearest_ignores_what_has_no_value():
    found = run_screen(parse_brief(MIXED.replace("nu12 = { max = 0.1 }", "bending_nu12 = { min = 99 }")))
    assert found.met == 0 and set(found.nearest["family"]) == {"miura-fold"}


def test_a_goal_that_no_candidate_has_is_an_input_error():
    brief = dataclasses.replace(grid([0.5]), goals=(Goal("E3_MPa", "min"),))  # past the brief's own check
    with pytest.raises(homog.InputError, match="No candidate family has the column 'E3_MPa' to rank by"):
        run_screen(brief)
