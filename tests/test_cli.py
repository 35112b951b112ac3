"""The command line: exit statuses, one line for bad input, nothing half-written, and numbers that are the library's."""

import io
import json
import math
import re
import shlex
import signal
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from samples import case_name, cases

import homog
from homog import cli, engine, files, plots, report, terminal
from homog.cell import STRAINS
from homog.cli import cells, main
from homog.columns import COLUMNS, columns_of
from homog.elements import MODELS
from homog.families import FAMILIES
from homog.materials import materials, processes
from homog.reasons import reason_text

ROOT = Path(__file__).resolve().parent.parent

BRIEF = """
title = "two cells"
material = "PLA"
[limits]
nu12 = { max = -0.5 }
[rank]
by = { density_kg_m3 = "min" }
keep = 1
[[candidates]]
family = "reentrant-honeycomb"
angle = [-20.0, -30.0]
"""


@pytest.fixture
def place(tmp_path, monkeypatch):
    """A folder to stand in: a brief, a file, a folder that holds something, an empty one."""
    (tmp_path / "b.toml").write_text(BRIEF)
    (tmp_path / "never.toml").write_text(BRIEF.replace("-0.5", "-50"))
    (tmp_path / "wrong.toml").write_text(BRIEF.replace("nu12", "nu_12"))
    (tmp_path / "latin.toml").write_bytes(b'title = "d\xe9"')
    (tmp_path / "there.csv").write_text("mine")
    (tmp_path / "other.meta.json").write_text("mine")
    (tmp_path / "full").mkdir()
    (tmp_path / "full" / "mine.txt").write_text("mine")
    (tmp_path / "empty").mkdir()
    monkeypatch.chdir(tmp_path)
    return tmp_path


def contents(folder):
    return {str(path.relative_to(folder)): path.read_bytes() if path.is_file() else None for path in folder.rglob("*")}


def run(line, capsys):
    """Return exit status, standard output and standard error of a command line."""
    status = main(shlex.split(line))
    out, err = capsys.readouterr()
    return status, out, err


# ----------------------------------------------------------------------------------------------- bad input


BAD = {
    # command
    "nonsense": "No such command 'nonsense'",
    "evaluate": "Missing argument 'ID'; try 'homog evaluate --help'",
    "evaluate octet --modle euler": "--modle",
    "evaluate octet --json extra": "'extra' is not PARAM=VALUE",
    "processes x": "unexpected extra argument",
    "families octet square-grid": "unexpected extra argument",
    # family, parameter, material, model
    "evaluate kagom": "Unknown family 'kagom'; nearest known: kagome-grid",
    "families kagom": "Unknown family 'kagom'; nearest known: kagome-grid",
    'evaluate ""': "Unknown family ''",
    "sweep octets --out x.csv": "Unknown family 'octets'; nearest known: octet",
    "polar octets --out x.png": "Unknown family 'octets'; nearest known: octet",
    "evaluate octet lenth=3": "Unknown parameter 'lenth'; nearest known: length",
    "sweep octet lenth=1:2:3 --out x.csv": "Unknown parameter 'lenth'; nearest known: length",
    "evaluate octet --material PLAA": "Unknown material 'PLAA'; nearest known: PLA",
    "materials plaa": "Unknown material 'plaa'",
    "evaluate octet --deep": "--deep is for planar cells, whose walls may be deep along axis 3; 'octet' is spatial",
    "sensitivity square-grid --column nu31": "Column 'nu31' is not one of planar cells",
    "evaluate octet --model beam": f"Unknown model 'beam'; known: {', '.join(sorted(MODELS))}",
    # assignments
    "evaluate octet length": "'length' is not PARAM=VALUE",
    "evaluate octet length=": "'length=' is not PARAM=VALUE",
    "evaluate octet =3": "'=3' is not PARAM=VALUE",
    "evaluate octet length=3 length=4": "Parameter 'length' is given twice",
    "evaluate octet length=abc": "Parameter 'length' = 'abc' is not a number",
    "evaluate octet length=10mm": "Parameter 'length' = '10mm' is not a number",
    "evaluate octet length=true": "Parameter 'length' = 'true' is not a number",
    "evaluate octet length=1:2:3": "Parameter 'length' has 3 values; give one, or use 'homog sweep'",
    "evaluate octet length=10,5": "Parameter 'length' has 2 values",
    "evaluate anti-tetrachiral node=soft": "'node' = 'soft' for 'anti-tetrachiral': allowed are rigid or ring",
    "evaluate anti-tetrachiral node=1": "allowed are rigid or ring",
    "evaluate anti-tetrachiral node=rigid,ring": "Parameter 'node' has 2 values",
    # values
    "evaluate octet length=nan": "Parameter 'length' = nan mm is not finite",
    "evaluate octet length=-inf": "Parameter 'length' = -inf mm is not finite",
    "evaluate octet length=1e9": "outside its range for 'octet': allowed 0.05 to 1000 mm",
    "evaluate octet length=0.01": "is it in metres? lengths are in mm",
    "evaluate hexagonal-honeycomb angle=95": "Parameter 'angle' = 95 deg is outside its range",
    "evaluate hexagonal-honeycomb angle=0.52": "is it in radians? angles are in degrees",
    "evaluate reentrant-honeycomb vertical=5": "Impossible 'reentrant-honeycomb': opposite tips of the bow-tie touch",
    "evaluate square-grid thickness=15": "Impossible 'square-grid': the joints run into each other",
    "evaluate octet --modulus abc": "Option --modulus = 'abc' is not a number",
    "evaluate octet --modulus nan": "modulus_MPa = nan is outside 0.01 to 2e+06; give a finite number",
    "evaluate octet --modulus 2e11": "is it in Pa? 1 MPa = 1e6 Pa",
    "evaluate octet --material PLA --poisson 0.5": "Material 'PLA': poisson = 0.5 is outside -0.9999 to 0.4999",
    "evaluate octet --solid-density 1.2": "is it in g/cm3? 1 g/cm3 = 1000 kg/m3",
    # ranges
    "sweep octet length=1:2 --out x.csv": "Parameter 'length' = '1:2' is no range; write length=LOW:HIGH:COUNT",
    "sweep octet length=1:2:3:4 --out x.csv": "'1:2:3:4' is no range",
    "sweep octet length=1:2:2.5 --out x.csv": "'1:2:2.5' is no range; write length=LOW:HIGH:COUNT, COUNT",
    "sweep octet length=1::3 --out x.csv": "Parameter 'length' = '' is not a number",
    "sweep octet length=1,,3 --out x.csv": "Parameter 'length' = '' is not a number",
    "sweep octet length=1:2:0 --out x.csv": "COUNT must be 1 (0 is an empty range) to",
    "sweep octet length=1:2:-4 --out x.csv": "COUNT must be 1 (0 is an empty range) to",
    "sweep octet length=1:2:99999999999 --out x.csv": "COUNT must be 1 (0 is an empty range) to",
    "sweep octet length=1:2:99999999999999999999 --out x.csv": "is no range",
    "sweep octet length=2:1:3 --out x.csv": "an empty range, 2 is above 1; swap them",
    "sweep octet length=1:nan:3 --out x.csv": "is not finite",
    "sweep octet length=1:5000:3 --out x.csv": "outside its range for 'octet'",
    "sweep octet length=1:2:40000 diameter=0.1:0.2:40000 --out x.csv": "1,600,000,000 combinations; at most",
    "sweep anti-tetrachiral node=rigid,round --out x.csv": "Parameter 'node' = 'round'",
    # places
    "polar octet": "Missing option '--out'; try 'homog polar --help'",
    "polar octet --out x.jpg": "Figure 'x.jpg' has the suffix '.jpg'; allowed are .svg, .png, .pdf",
    "polar octet --out x": "Figure 'x' has the suffix ''",
    "polar octet --out no/x.png": "no folder 'no' that may be written to; make it first",
    "sweep octet --out x": "Table 'x' has the suffix ''; allowed are .csv, .parquet",
    "sweep octet --out x.xlsx": "Table 'x.xlsx' has the suffix '.xlsx'",
    "sweep octet --out there.csv": "File 'there.csv' is there already; choose another name or add --overwrite",
    "sweep octet --out other.csv": "File 'other.meta.json' is there already",
    "sweep octet --out no/x.csv": "no folder 'no' that may be written to; make it first",
    "sweep octet --out there.csv/x.csv": "Cannot write 'there.csv/x.csv'",
    # briefs
    "screen": "Missing argument 'BRIEF'",
    "screen b.toml": "Missing option '--out'; try 'homog screen --help'",
    "screen no.toml --out x": "Brief 'no.toml' cannot be read: No such file or directory; give a TOML file",
    "screen full --out x": "Brief 'full' cannot be read: Is a directory",
    "screen latin.toml --out x": "Brief 'latin.toml', line 1: not text in UTF-8",
    "screen wrong.toml --out x": "wrong.toml, line 5: Unknown column 'nu_12'; nearest known: nu12",
    "screen b.toml --out full": "Folder 'full' already holds results; choose another name or remove it first",
    "screen b.toml --out .": "Folder '.' already holds results",
    "screen b.toml --out there.csv": "is a file; give the name of a new folder",
    "screen b.toml --out there.csv/x": "is a file; give the name of a new folder",
    f"screen b.toml --out {'x' * 300}": "File name too long",
}


@pytest.mark.parametrize("line", BAD)
def test_bad_input_is_one_line_status_2_and_leaves_nothing(line, place, capsys):
    before = contents(place)
    status, out, err = run(line, capsys)
    assert BAD[line] in err
    assert status == 2 and out == "" and err.count("\n") == 1 and err.startswith("homog: ")
    assert contents(place) == before


def test_a_place_is_looked_at_before_anything_is_computed(place, capsys, monkeypatch):
    def computing(*args, **options):
        raise AssertionError("computed first")

    monkeypatch.setattr("homog.effective.homogenize", computing)
    for line in ("sweep octet --out there.csv", "sweep octet --out no/x.csv", "polar octet --out no/x.png"):
        assert run(line, capsys)[0] == 2


def test_overwrite_replaces_a_file_but_no_folder(place, capsys):
    (place / "d.csv").mkdir()
    assert run("sweep octet --out there.csv --overwrite", capsys)[0] == 0
    assert len(pd.read_csv("there.csv")) == 1 and (place / "there.meta.json").exists()
    status, _, err = run("sweep octet --out d.csv --overwrite", capsys)
    assert status == 2 and "'d.csv' is a folder" in err


# -------------------------------------------------------------------------------------------------- evaluate

KEYS = ["family", "parameters", "material", "model", "relative_density", "mechanisms", "stiffness", "columns"]


def strict(text):
    """Return JSON, refusing NaN and Infinity, which are none."""

    def refuse(word):
        raise AssertionError(f"{word} is not JSON")

    return json.loads(text, parse_constant=refuse)


@pytest.mark.parametrize("case", cases(), ids=case_name)
def test_json_has_its_keys_shapes_and_units(case, capsys):
    name, words = case
    given = " ".join(f"{key}={value}" for key, value in words.items())
    status, out, err = run(f"evaluate {name} {given} --material PLA --model timoshenko --json", capsys)
    assert (status, err) == (0, "")
    card = strict(out)
    assert list(card) == KEYS
    found = homog.family(name)
    assert (card["family"], card["model"], card["material"]["name"]) == (name, "timoshenko", "PLA")
    assert list(card["parameters"]) == [p.name for p in found.parameters]
    assert all(isinstance(v, float) or k in words for k, v in card["parameters"].items())
    assert list(card["columns"]) == columns_of(found.kind)
    size = len(STRAINS[found.kind])
    C = np.array(card["stiffness"], float)
    assert C.shape == (size, size) and np.isfinite(C).all()
    np.testing.assert_allclose(C, C.T, atol=1e-12 * np.abs(C).max())
    # Voigt with engineering shear: the compliance's diagonal is 1/E and 1/G themselves, a sheet's over its slab
    S, row = np.linalg.inv(C), card["columns"]
    height = row.get("height_mm", 1.0)
    np.testing.assert_allclose(row["E1_MPa"], 1.0 / (S[0, 0] * height), rtol=1e-9)
    np.testing.assert_allclose(row["nu12"], -S[1, 0] / S[0, 0], rtol=1e-7, atol=1e-9)
    last = 2 if size == 3 or found.kind == "sheet" else 5
    np.testing.assert_allclose(row["G12_MPa"], 1.0 / (S[last, last] * height), rtol=1e-9)
    if found.kind == "sheet":
        assert row["A11_N_per_mm"] == C[0, 0] and row["D66_N_mm"] == C[5, 5]
    assert row["relative_density"] == card["relative_density"]
    np.testing.assert_allclose(row["density_kg_m3"], 1240.0 * card["relative_density"])


def test_json_says_what_was_given(capsys):
    parent = "--modulus 2000 --poisson 0.2 --solid-density 900 --deep"
    card = strict(run(f"evaluate square-grid length=8 thickness=0.4 {parent} --model euler --json", capsys)[1])
    assert card["parameters"] == {"length": 8.0, "thickness": 0.4} and card["model"] == "euler"
    assert card["material"] == {"name": "given values", "modulus_MPa": 2000.0, "poisson": 0.2, "density_kg_m3": 900.0,
                                "yield_MPa": None, "deep": True}  # fmt: skip
    np.testing.assert_allclose(card["columns"]["E1_MPa"], 2000.0 / (1.0 - 0.04) * 0.05)  # plane strain, t/l
    named = strict(run("evaluate square-grid --material pla --modulus 2000 --json", capsys)[1])["material"]
    assert (named["name"], named["modulus_MPa"], named["poisson"]) == ("PLA, changed", 2000.0, 0.345)


def test_without_a_parent_it_is_the_unit_parent(capsys):
    card = strict(run("evaluate square-grid --json", capsys)[1])
    assert (card["material"]["name"], card["material"]["modulus_MPa"]) == ("unit parent", 1.0)


def test_a_parent_without_poisson_leaves_a_sound_cell_or_a_named_reject(capsys):
    # braces of the units and of the panels carry what Poisson's ratio couples: at 0 they vanish
    for name in FAMILIES:
        status, out, err = run(f"evaluate {name} --poisson 0 --json", capsys)
        if status == 2:
            assert "Impossible" in err
            continue
        row = strict(out)["columns"]
        if row["verdict"] == "reject":
            assert row["reasons"] and (row["soft_mode"] or row["nu12"] is not None)
            continue
        usual = strict(run(f"evaluate {name} --poisson 0.3 --json", capsys)[1])["columns"]
        assert math.copysign(1.0, row["nu12"]) == math.copysign(1.0, usual["nu12"]) or abs(usual["nu12"]) < 1e-9, name


def test_the_table_says_it_all_to_a_reader(capsys):
    line = "evaluate reentrant-honeycomb angle=-20 --material PLA --model timoshenko"
    status, out, err = run(line, capsys)
    assert (status, err) == (0, "")
    card = strict(run(f"{line} --json", capsys)[1])
    assert out.startswith("Re-entrant honeycomb  (reentrant-honeycomb):  caution")
    assert "angle -20 deg" in out and "E 3000 MPa, nu 0.345, 1240 kg/m3; model timoshenko" in out
    lines = {line.split()[0]: line.split()[1] for line in out.splitlines() if len(line.split()) > 1}
    for name, value in card["columns"].items():
        if COLUMNS[name].text or value is None:
            assert name not in lines
        else:
            assert lines[name] == report.number(value)
    for code in card["columns"]["reasons"].split():
        assert f"{code}: {reason_text(code)}" in " ".join(out.split())
    for i, axis in enumerate(("11", "22", "12")):
        assert lines[axis] == report.number(card["stiffness"][i][0])
    assert "Screening only, not design evidence" in " ".join(out.split())
    assert "plane strain" not in out and "plane strain" in run("evaluate square-grid --deep", capsys)[1]


@pytest.mark.parametrize(("name", "axes"), [("miura-fold", "N11 N22 N12 M11 M22 M12"), ("octet", "11 22 33 23 13 12")])
def test_the_stiffness_names_its_axes(name, axes, capsys):
    out = run(f"evaluate {name}", capsys)[1]
    assert axes.split() in [line.split() for line in out.splitlines()]


def test_a_mechanism_is_reported_and_named(capsys, monkeypatch):
    real = homog.homogenize

    def soft(cell, **options):
        import dataclasses

        found = real(cell, **options)
        C = found.stiffness.copy()
        C[..., 2, :] = C[..., :, 2] = 0.0
        return dataclasses.replace(found, stiffness=C, status=np.full(found.status.shape, 2, np.int8),
                                   mechanisms=np.ones(found.status.shape, int))  # fmt: skip

    monkeypatch.setattr("homog.effective.homogenize", soft)
    status, out, _ = run("evaluate square-grid", capsys)
    assert status == 0 and "(square-grid):  reject" in out and "soft mode: g12 +1.00" in out
    assert "soft-mode: a uniform strain costs no energy" in out and "nu12 " not in out


# ------------------------------------------------------------------------------------------- lists and help


@pytest.mark.parametrize("command", [
    "families", "materials", "processes", "evaluate", "polar", "sweep", "screen", "sensitivity", "tune"])  # fmt: skip
def test_help_teaches(command, capsys):
    status, out, err = run(f"{command} --help", capsys)
    assert (status, err) == (0, "")
    words = " ".join(out.split())
    (taught,) = (found.callback.__doc__ for found in cli.app.registered_commands if found.callback.__name__ == command)
    assert f"homog {command}" in words and taught.split(".")[0].split("\n")[0][:40] in words
    if command in ("evaluate", "polar", "sweep"):
        example = re.search(r"Example: (homog .*?) (╭|\+|Arguments|Options)", words)
        assert example, "no example"
        assert {"evaluate": "angle=-30", "polar": "--out", "sweep": "20:40:21"}[command] in example[1]
    if command == "screen":
        assert "summary.md" in words and "Exit status 3" in words


def test_the_top_help_and_no_arguments_say_where_to_start(capsys):
    for line in ("--help", ""):
        status, out, err = run(line, capsys)
        words = " ".join((out + err).split())
        assert status == 0 and "Start with 'homog families'" in words
        assert "0 done, 2 bad input, 3 nothing meets the brief" in words
        for command in ("families", "materials", "processes", "evaluate", "polar", "sweep", "screen"):
            assert f" {command} " in words


def test_the_examples_of_the_help_work(place, capsys):
    for command in (cells.evaluate, cells.sweep, cells.polar):
        example = command.__doc__.split("Example: homog ")[1].strip().splitlines()[0]
        status, _, err = run(example, capsys)
        assert (status, err) == (0, ""), example
    assert len(pd.read_csv("sweep.csv")) == 21 * 31 and (place / "bow-tie.png").stat().st_size > 10_000


def test_version(capsys):
    assert run("--version", capsys) == (0, f"homog-cells {homog.__version__}\n", "")


def test_families_lists_and_explains(capsys):
    out = run("families", capsys)[1]
    for name, found in FAMILIES.items():
        (line,) = [line for line in out.splitlines() if line.split()[:1] == [name]]
        assert found.kind in line
    for name, found in FAMILIES.items():
        status, out, err = run(f"families {name}", capsys)
        words = " ".join(out.split())
        assert (status, err) == (0, "") and found.title in words
        for p in found.parameters:
            assert p.name in words and p.allowed.split()[0] in words
        for column in columns_of(found.kind):
            assert f" {column} " in words
        for rule in found.rules:
            assert f"{rule.code}: " in words


def test_materials_and_processes_list_everything(capsys):
    out = run("materials", capsys)[1]
    assert all(name in out for name in materials()) and "to be confirmed" in out
    for name in materials():
        status, out, _ = run(f'materials "{name}"', capsys)
        assert status == 0 and "modulus_MPa" in out and ("read" in out or "memory" in out)
    out = run("processes", capsys)[1]
    assert all(name in out for name in processes()) and "Lengths in mm" in out


# ----------------------------------------------------------------------------------------------------- sweep


def test_a_sweep_is_all_combinations(place, capsys):
    before = set(contents(place))
    given = "outer_angle=20:40:3 inner_angle=50,60 thickness=0.8 --material PLA --model euler"
    status, out, err = run(f"sweep arrowhead {given} --out s.csv", capsys)
    assert (status, out, err) == (0, "wrote s.csv: 6 rows\n", "")
    table = pd.read_csv("s.csv")
    assert list(table["outer_angle_deg"]) == [20, 20, 30, 30, 40, 40] and list(table["inner_angle_deg"]) == [50, 60] * 3
    assert (table["thickness_mm"] == 0.8).all() and (table["half_width_mm"] == 10.0).all()
    library = homog.homogenize(
        homog.build("arrowhead", outer_angle=table["outer_angle_deg"], inner_angle=table["inner_angle_deg"],
                    thickness=0.8, material="PLA"), model="euler").table()  # fmt: skip
    assert list(table.columns) == list(library.columns)
    for name in ("E1_MPa", "nu12", "density_kg_m3", "auxetic_share"):
        np.testing.assert_allclose(table[name], library[name], rtol=1e-7)
    meta = strict((place / "s.meta.json").read_text())
    assert (meta["family"], meta["rows"], meta["model"], meta["material"]["name"]) == ("arrowhead", 6, "euler", "PLA")
    assert set(contents(place)) - before == {"s.csv", "s.meta.json"}


def test_a_sweep_of_words_and_of_nothing(place, capsys):
    assert run("sweep anti-tetrachiral node=ring,rigid thickness=0.5:0.7:2 --out w.csv", capsys)[0] == 0
    table = pd.read_csv("w.csv")
    assert list(table["node"]) == ["ring", "ring", "rigid", "rigid"] and list(table["thickness_mm"]) == [0.5, 0.7] * 2
    assert run("sweep anti-tetrachiral node=ring --out r.csv", capsys)[0] == 0
    assert list(pd.read_csv("r.csv")["node"]) == ["ring"]
    assert run("sweep square-grid --out d.csv", capsys)[0] == 0
    assert list(pd.read_csv("d.csv")["length_mm"]) == [10.0]
    assert run("sweep square-grid length=1:2:1 --out o.csv", capsys)[0] == 0
    assert list(pd.read_csv("o.csv")["length_mm"]) == [1.0]


def test_a_sweep_keeps_impossible_cells_as_rejects(place, capsys):
    assert run("sweep reentrant-honeycomb angle=-80:-20:4 --out s.csv", capsys)[0] == 0
    table = pd.read_csv("s.csv")
    assert list(table["verdict"] == "reject") == [True, False, False, False]
    assert table["E1_MPa"].isna().tolist() == [True, False, False, False] and table["reasons"][0] == "tips-collide"


def parts_of(rows, monkeypatch):
    monkeypatch.setattr(engine, "LEAST_ROWS", rows)
    monkeypatch.setattr(engine, "MOST_ROWS", rows)


def test_neither_the_size_of_a_part_nor_workers_nor_the_format_change_a_sweep(place, capsys, monkeypatch):
    run("sweep square-grid thickness=0.1:2:11 --out a.csv", capsys)
    parts_of(4, monkeypatch)
    run("sweep square-grid thickness=0.1:2:11 --out b.csv", capsys)
    assert run("sweep square-grid thickness=0.1:2:11 --out c.parquet --workers 2", capsys)[0] == 0
    one, other, exact = pd.read_csv("a.csv"), pd.read_csv("b.csv"), pd.read_parquet("c.parquet")
    pd.testing.assert_frame_equal(one, other, rtol=1e-6)
    assert list(exact.columns) == list(one.columns)
    np.testing.assert_allclose(exact["E1_MPa"], one["E1_MPa"], rtol=1e-7)
    np.testing.assert_array_equal(exact["thickness_mm"], np.linspace(0.1, 2.0, 11))
    assert strict((place / "c.meta.json").read_text())["rows"] == 11


# ----------------------------------------------------------------------------------------- polar and screen


@pytest.mark.parametrize(("suffix", "start"), [("svg", b"<?xml"), ("png", b"\x89PNG"), ("pdf", b"%PDF")])
def test_polar_draws(suffix, start, place, capsys):
    before = set(contents(place))
    status, out, err = run(f"polar square-grid --out p.{suffix}", capsys)
    assert (status, out, err) == (0, f"wrote p.{suffix}\n", "")
    assert (place / f"p.{suffix}").read_bytes().startswith(start)
    assert set(contents(place)) - before == {f"p.{suffix}"}


def test_screen_finds(place, capsys):
    status, out, err = run("screen b.toml --out deep/out", capsys)
    assert (status, err) == (0, "")  # quiet in a pipe
    assert out == (
        "2 of 2 candidates meet the brief; first: reentrant-honeycomb (candidate 1).\nResults: deep/out/summary.md\n"
    )
    assert (place / "deep" / "out" / "b.toml").read_text() == BRIEF
    assert {"candidates.csv", "shortlist.csv", "summary.md", "chart.svg", "chart.png"} <= {
        path.name for path in (place / "deep" / "out").iterdir()
    }
    assert not [path for path in place.rglob(".*")]
    again = contents(place)
    assert run("screen b.toml --out deep/out", capsys)[0] == 2
    assert contents(place) == again


def test_screen_finds_nothing(place, capsys):
    status, out, err = run("screen never.toml --out empty", capsys)
    assert (status, err) == (3, "")
    assert "nothing of 2 candidates meets the brief; most miss: nu12 at most -50." in out
    text = (place / "empty" / "summary.md").read_text()
    assert "Nothing meets the brief" in text and "Nearest candidates" in text
    assert "![property chart](chart.png)" in text and (place / "empty" / "chart.png").exists()
    assert len(pd.read_csv(place / "empty" / "shortlist.csv")) == 0
    assert len(pd.read_csv(place / "empty" / "candidates.csv")) == 2


def test_screen_where_all_are_rejected(place, capsys):
    (place / "r.toml").write_text(
        'model = "euler"\nmaterial = "PLA"\n[[candidates]]\nfamily = "octet"\ndiameter = [3.0, 4.0]'
    )
    status, out, err = run("screen r.toml --out x", capsys)
    assert (status, err) == (3, "") and "every one is rejected" in out


def test_a_title_is_plain_text_everywhere(place, capsys):
    title = r"50 % of $5 & $\frac{ <b> #1 _x_ ^"
    (place / "t.toml").write_text(BRIEF.replace('"two cells"', f"'{title}'"))
    status, _, err = run("screen t.toml --out x", capsys)
    assert (status, err) == (0, "")
    assert (place / "x" / "summary.md").read_text().startswith(f"# {title}\n")


STOPS = [
    (KeyboardInterrupt, 130),
    (SystemExit(143), 143),
    (RuntimeError("a bug"), 1),
    (homog.InputError("bad luck"), 2),
]


@pytest.mark.parametrize(("stop", "status"), STOPS)
def test_stopped_before_anything_is_done_leaves_nothing(stop, status, place, capsys, monkeypatch):
    def stopping(*args, **kwargs):
        raise stop

    monkeypatch.setattr(engine, "rows", stopping)
    before = contents(place)
    found, out, err = run("screen b.toml --out deep/out", capsys)
    assert (found, out) == (status, "") and contents(place) == before
    assert err.strip().splitlines()[-1] == {
        1: "homog: internal fault: RuntimeError: a bug; please report it with the command", 2: "homog: bad luck"
    }.get(status, "homog: stopped; nothing was written")  # fmt: skip


@pytest.mark.parametrize(("stop", "status"), STOPS)
@pytest.mark.parametrize("where", ["screening", "figures"])
@pytest.mark.parametrize("out", ["deep/out", "empty"])
def test_stopped_in_the_middle_can_be_gone_on_with(stop, status, where, out, place, capsys, monkeypatch):
    monkeypatch.setattr(plots, "save", lambda figure, path: path.write_text("figure"))
    parts_of(1, monkeypatch)
    before = contents(place)
    real, done = engine.rows, []

    def stopping(*args, **kwargs):
        done.append(1)
        if where == "figures" or len(done) == 2:
            raise stop
        return real(*args, **kwargs)

    with monkeypatch.context() as stopped:
        stopped.setattr(*((engine, "rows") if where == "screening" else (plots, "polar_figure")), stopping)
        found, printed, err = run(f"screen b.toml --out {out}", capsys)
    kept = place / (f"{out}.partial" if out == "deep/out" else "empty/.partial")
    assert (found, printed) == (status, "")
    assert f"what is done is kept in '{kept}': give the same command with --resume to go on" in err
    assert len(list(kept.glob("candidates/*.parquet"))) == (1 if where == "screening" else 2)
    found, printed, err = run(f"screen b.toml --out {out}", capsys)
    assert found == 2 and "has stopped; go on with --resume, or remove '" in err and err.count("\n") == 1
    (place / "other.toml").write_text(BRIEF + "# changed")
    found, printed, err = run(f"screen other.toml --out {out} --resume", capsys)
    assert found == 2 and "of another brief" in err and err.count("\n") == 1 and "same command" not in err
    found, printed, err = run(f"screen b.toml --out {out} --resume", capsys)
    assert (found, err) == (0, "") and printed.startswith("2 of 2 candidates meet the brief")
    assert not kept.exists() and (place / out / "summary.md").exists()
    assert len(pd.read_csv(place / out / "candidates.csv")) == 2
    again = contents(place)
    for more in ("", "--resume"):
        assert run(f"screen b.toml --out {out} {more}", capsys)[0] == 2
    assert contents(place) == again and before.items() <= again.items()


def test_resume_without_a_run_to_go_on_with_begins_one(place, capsys, monkeypatch):
    monkeypatch.setattr(plots, "save", lambda figure, path: path.write_text("figure"))
    assert run("screen b.toml --out x --resume", capsys)[0] == 0 and (place / "x" / "summary.md").exists()


def test_a_large_screen_writes_its_csv_only_if_asked(place, capsys, monkeypatch):
    monkeypatch.setattr(plots, "save", lambda figure, path: path.write_text("figure"))
    monkeypatch.setattr(report, "MOST_CSV", 1)
    assert run("screen b.toml --out x", capsys)[0] == 0 and not (place / "x" / "candidates.csv").exists()
    assert run("screen b.toml --out y --csv", capsys)[0] == 0 and len(pd.read_csv(place / "y" / "candidates.csv")) == 2
    assert len(pd.read_parquet(place / "x" / "candidates")) == 2


def test_a_long_run_in_a_pipe_tells_rate_room_and_time_left(place, capsys, monkeypatch):
    monkeypatch.setattr(plots, "save", lambda figure, path: path.write_text("figure"))
    parts_of(1, monkeypatch)
    for name, value in (("LARGE", 2), ("TELL_AFTER", 0.0), ("TELL_EVERY", 0.0)):
        monkeypatch.setattr(terminal, name, value)
    status, _, err = run("screen b.toml --out x --no-solids", capsys)
    first, second = err.splitlines()
    assert status == 0
    assert re.fullmatch(r"homog: 2 candidates, in this process: about 0 s and 0\.0 GB \(\d+ GB free\); "
                        "Ctrl-C stops, --resume goes on", first)  # fmt: skip
    assert re.fullmatch(r"homog: screening: 2 of 2, [\d,]+ a second, 0 s left", second)


@pytest.mark.parametrize(("seconds", "words"), [(0.4, "0 s"), (80, "80 s"), (100, "1.7 min"), (3000, "50 min"),
                                                (7200, "2.0 h"), (90000, "25 h"), (10**6, "12 days")])  # fmt: skip
def test_a_time_is_told_in_its_unit(seconds, words):
    assert terminal._duration(seconds) == words


def test_a_terminal_sees_progress(place, monkeypatch):
    class Terminal(io.StringIO):
        def isatty(self):
            return True

    monkeypatch.setattr(plots, "save", lambda figure, path: path.write_text("figure"))
    terminal = Terminal()
    monkeypatch.setattr(sys, "stderr", terminal)
    assert main(["screen", "b.toml", "--out", "x"]) == 0
    shown = terminal.getvalue()
    assert "screening" in shown and "2/2" in shown and "writing polar plot 1 of 1" in shown


# -------------------------------------------------------------------------------------------------- processes


def start(*arguments, **options):
    return subprocess.Popen([sys.executable, "-m", "homog", *arguments], stdout=subprocess.PIPE, stderr=subprocess.PIPE,
                            text=True, cwd=ROOT, **options)  # fmt: skip


def test_the_module_runs_as_the_command():
    with start("evaluate", "octet", "--json") as process:
        out, err = process.communicate(timeout=60)
    assert (process.returncode, err) == (0, "") and list(strict(out)) == KEYS
    with start("evaluate", "octets") as process:
        out, err = process.communicate(timeout=60)
    assert (process.returncode, out) == (2, "") and err.startswith("homog: Unknown family 'octets'")


def test_a_reader_that_stops_reading_is_no_fault():
    with start("families", "octet") as process:
        process.stdout.close()
        err = process.stderr.read()
        assert process.wait(timeout=60) == 0 and err == ""


def test_being_told_to_stop_leaves_nothing(tmp_path, monkeypatch):
    told = []
    monkeypatch.setattr(signal, "signal", lambda number, handler: told.append((number, handler)))
    monkeypatch.setattr(cli, "main", lambda: 0)
    with pytest.raises(SystemExit) as ended:
        cli.entry()
    assert ended.value.code == 0
    ((number, handler),) = told
    assert number == signal.SIGTERM
    with pytest.raises(SystemExit) as ended, files.whole_folder(tmp_path / "x"):
        handler(number, None)
    assert ended.value.code == 143 and list(tmp_path.iterdir()) == []
