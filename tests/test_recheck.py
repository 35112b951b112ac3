"""The second look: the best of a screen again as solids, what it keeps, what it costs when a solid cannot be had."""

import os

import numpy as np
import pytest

from homog import recheck, report
from homog.brief import parse_brief
from homog.cli import main
from homog.effective import homogenize
from homog.families import build
from homog.materials import material
from homog.recheck import SCREENED, Task, given, has_section, looks, second_look
from homog.report import summary
from homog.screening import records, run_screen

pytest.importorskip("shapely")
pytest.importorskip("gmsh")

BRIEF = """
material = "PLA"
model = "timoshenko"
[limits]
E1_MPa = { max = 7.0 }
[rank]
by = { E1_MPa = "max" }
keep = 3
[[candidates]]
family = "reentrant-honeycomb"
thickness = [0.7, 0.8, 0.85, 0.9, 0.95, 1.0, 1.05]
[[candidates]]
family = "miura-fold"
fold_angle = 30.0
"""


def task(name="square-grid", **values):
    return Task(name, values, material("PLA"))


def here(best, brief):
    return second_look(best, brief, workers=1)


def dies(one):
    """Return the thickness of a task, or end the process where it is 0.5."""
    if one.given["thickness"] == 0.5:
        os._exit(1)
    return {"thickness": one.given["thickness"]}


def test_who_has_a_section():
    assert has_section(task()) and has_section(task("anti-tetrachiral"))
    assert not any(has_section(task(name)) for name in ("rotating-squares", "miura-fold", "octet"))


def test_every_row_is_what_its_solid_is():
    brief = parse_brief(BRIEF)
    found = run_screen(brief, second=here)
    looked, before = found.looked, run_screen(brief)
    assert len(looked) == 6 and list(looked["model"]) == ["solid"] * 6  # twice as many as are kept
    for row in records(looked):
        solid = homogenize(build("reentrant-honeycomb", **given(row), material=material("PLA")), model="solid")
        beams = homogenize(build("reentrant-honeycomb", **given(row), material=material("PLA")), model="timoshenko")
        for name in SCREENED:
            assert row[name] == pytest.approx(solid.table()[name][0], rel=1e-9)
            assert row[f"screened_{name}"] == pytest.approx(beams.table()[name][0], rel=1e-9)
        assert row["miss_E1_MPa"] == pytest.approx(max(row["E1_MPa"] - 7.0, 0.0))
        assert row["meets"] == (row["miss_E1_MPa"] == 0.0) and row["misses"] == ("" if row["meets"] else "E1_MPa")
    # beams are softer: the thickest that met as beams no longer do, and others take their place
    assert not looked["meets"].all() and found.shortlist["meets"].all()
    assert list(found.shortlist["candidate"]) != list(before.shortlist["candidate"])
    assert list(found.shortlist["rank"]) == list(range(1, len(found.shortlist) + 1))
    assert (found.shortlist["E1_MPa"].diff().dropna() <= 0.0).all()
    assert before.looked is None and found.met == before.met


def test_what_has_no_section_keeps_its_numbers():
    brief = parse_brief(BRIEF.replace("E1_MPa = { max = 7.0 }", "nu12 = { max = 2.0 }").replace("keep = 3", "keep = 8"))
    found = run_screen(brief, second=here)
    sheets = found.looked[found.looked["family"] == "miura-fold"]
    assert len(sheets) == 1 and list(sheets["model"]) == ["timoshenko"]
    assert (sheets["E1_MPa"] == sheets["screened_E1_MPa"]).all() and list(sheets["note"]) == [""]


def test_a_solid_that_fails_costs_one_candidate_a_note(monkeypatch):
    real = recheck.look

    def look(one):
        return "The mesher gave up" if one.given["thickness"] == 0.9 else real(one)

    monkeypatch.setattr(recheck, "looks", lambda tasks, **options: looks(tasks, workers=1, what=look))
    found = run_screen(parse_brief(BRIEF), second=here)
    failed = found.looked[found.looked["thickness_mm"] == 0.9].iloc[0]
    assert (failed["note"], failed["model"]) == ("The mesher gave up", "timoshenko")
    assert failed["E1_MPa"] == failed["screened_E1_MPa"] and failed["meets"]
    text = summary(found, figures=[], version="9.9")
    assert f"- candidate {failed['candidate']}: The mesher gave up" in text


def test_a_cell_that_closes_up_is_a_note():
    assert "closes up" in recheck.look(task(thickness=9.9999999999))
    assert "Impossible" in recheck.look(Task("arrowhead", {"outer_angle": 60.0, "inner_angle": 40.0}, material("PLA")))


def test_processes_give_what_this_one_gives():
    tasks = [task(thickness=t) for t in (0.5, 1.0)]
    done = []
    for one, other in zip(looks(tasks, workers=1), looks(tasks, workers=2, progress=done.append), strict=True):
        assert one.keys() == other.keys()
        np.testing.assert_allclose(one["E1_MPa"], other["E1_MPa"], rtol=1e-12)
    assert done == [1, 1]


def test_a_process_that_dies_takes_its_cell_alone():
    tasks = [task(thickness=t) for t in (0.4, 0.5, 0.6, 0.7)]
    found = looks(tasks, workers=2, what=dies)
    assert found[1] == "the solver's process died"
    assert [found[i]["thickness"] for i in (0, 2, 3)] == [0.4, 0.6, 0.7]


def test_only_so_many_are_looked_at(monkeypatch):
    monkeypatch.setattr(recheck, "MOST", 2)
    looked = run_screen(parse_brief(BRIEF), second=here).looked
    assert list(looked["model"]) == ["solid"] * 2 + ["timoshenko"] * 4


def test_the_summary_shows_both_numbers_and_says_where_models_part():
    found = run_screen(parse_brief(BRIEF), second=here)
    text = summary(found, figures=[], version="9.9")
    row = records(found.looked)[0]
    assert f"{report.number(row['screened_E1_MPa'])} -> {report.number(row['E1_MPa'])}" in text
    gone = int((~found.looked["meets"]).sum())
    assert f"{gone} of them no longer meet the brief." in text
    off = max(abs(row[n] / row[f"screened_{n}"] - 1.0) for row in records(found.looked) for n in SCREENED[:3])
    assert f"by the model `timoshenko`, stiffness was off by {off:.2%} at most" in text
    assert "The second look" not in summary(run_screen(parse_brief(BRIEF)), figures=[], version="9.9")
    why = summary(run_screen(parse_brief(BRIEF)), figures=[], version="9.9", unlooked="no mesher")
    assert "Nothing was looked at again: no mesher." in why


def test_none_of_the_best_as_a_solid(tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "b.toml").write_text(BRIEF.replace("[0.7, 0.8, 0.85, 0.9, 0.95, 1.0, 1.05]", "0.95"))
    assert main(["screen", "b.toml", "--out", "r", "--workers", "1"]) in (0, 3)
    capsys.readouterr()
    text = BRIEF.replace("[0.7, 0.8, 0.85, 0.9, 0.95, 1.0, 1.05]", "0.95").split('[[candidates]]\nfamily = "miu')[0]
    limit = float(homogenize(build("reentrant-honeycomb", thickness=0.95, material=material("PLA")),
                             model="timoshenko").table()["E1_MPa"][0]) * 1.01  # fmt: skip
    (tmp_path / "c.toml").write_text(text.replace("max = 7.0", f"max = {limit}"))
    assert main(["screen", "c.toml", "--out", "s", "--workers", "1"]) == 3
    assert (
        "1 of 1 candidates meet the brief by the screen's model, none of the best as a solid" in capsys.readouterr().out
    )
    assert "misses E1_MPa" in (tmp_path / "s" / "summary.md").read_text()
    assert main(["screen", "c.toml", "--out", "t", "--no-solids"]) == 0
    assert "Nothing was looked at again: it was not asked for" in (tmp_path / "t" / "summary.md").read_text()


def test_without_the_extra_the_summary_says_what_to_install(tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    monkeypatch.setitem(__import__("sys").modules, "gmsh", None)
    assert "solid" in recheck.missing_extra()
    (tmp_path / "b.toml").write_text(BRIEF)
    assert main(["screen", "b.toml", "--out", "r"]) == 0
    assert "homog-cells[solid]" in (tmp_path / "r" / "summary.md").read_text()


def test_a_screen_by_solids_is_not_looked_at_again(tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    text = BRIEF.replace("timoshenko", "solid").split('[[candidates]]\nfamily = "miu')[0]
    (tmp_path / "b.toml").write_text(text.replace("[0.7, 0.8, 0.85, 0.9, 0.95, 1.0, 1.05]", "0.7"))
    assert main(["screen", "b.toml", "--out", "r"]) == 0
    assert "second look" not in (tmp_path / "r" / "summary.md").read_text()
