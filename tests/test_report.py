"""What is handed over: files whole or not at all, the summary's numbers, provenance, tables that read back."""

import dataclasses
import errno
import hashlib
import json
import math
import os
import re
import sys
import xml.etree.ElementTree as ElementTree

import numpy as np
import pandas as pd
import pytest

import homog
from homog import plots
from homog.brief import parse_brief, read_brief
from homog.cell import Status
from homog.columns import COLUMNS, columns_of
from homog.engine import Plan
from homog.errors import InputError
from homog.files import check_free, whole_file, whole_folder
from homog.materials import material
from homog.report import (
    check_table,
    evaluation,
    markdown,
    number,
    parameter_words,
    provenance,
    summary,
    write_screening,
    write_table,
)
from homog.screening import records, run_screen
from homog.store import Folder
from homog.tensors import stiffness_to_voigt


def names(folder):
    return sorted(str(path.relative_to(folder)) for path in folder.rglob("*"))


class SomeError(Exception):
    pass


STOPS = [SomeError, KeyboardInterrupt, SystemExit]

# ------------------------------------------------------------------------------------------------ whole files


def test_a_file_appears_when_the_block_ends(tmp_path):
    place = tmp_path / "a.csv"
    with whole_file(place) as temporary:
        temporary.write_text("new")
        assert temporary.suffix == ".csv" and not place.exists()
    assert names(tmp_path) == ["a.csv"] and place.read_text() == "new"
    mask = os.umask(0)
    os.umask(mask)
    assert place.stat().st_mode & 0o777 == 0o666 & ~mask  # as any other new file


@pytest.mark.parametrize("stop", STOPS)
@pytest.mark.parametrize("there", [False, True])
def test_a_file_that_fails_leaves_nothing_and_what_was_there(tmp_path, stop, there):
    place = tmp_path / "a.csv"
    if there:
        place.write_text("old")
    with pytest.raises(stop), whole_file(place, overwrite=there) as temporary:
        temporary.write_text("half")
        raise stop
    assert names(tmp_path) == (["a.csv"] if there else [])
    assert not there or place.read_text() == "old"


def test_a_file_is_replaced_only_if_that_is_asked_for(tmp_path):
    place = tmp_path / "a.csv"
    place.write_text("old")
    with (
        pytest.raises(InputError, match="a.csv' is there already; choose another name or add --overwrite"),
        whole_file(place),
    ):
        raise SomeError
    with whole_file(place, overwrite=True) as temporary:
        temporary.write_text("new")
    assert place.read_text() == "new"


@pytest.mark.parametrize("overwrite", [False, True])
def test_places_where_no_file_can_go(tmp_path, overwrite):
    (tmp_path / "d.csv").mkdir()
    (tmp_path / "file").write_text("")
    for place, words in [
        (tmp_path / "d.csv", "is a folder; give the name of a file"),
        (tmp_path / "no" / "a.csv", "no folder '.*no' that may be written to; make it first"),
        (tmp_path / "file" / "a.csv", "no folder '.*file' that may be written to|Not a directory"),
        (tmp_path / ("a" * 300 + ".csv"), "File name too long; choose another place"),
    ]:
        with pytest.raises(InputError, match=words), whole_file(place, overwrite=overwrite):
            raise SomeError
    assert names(tmp_path) == ["d.csv", "file"]


@pytest.mark.parametrize("make", [whole_file, whole_folder])
def test_a_full_disk_is_said_and_leaves_nothing(tmp_path, make):
    with (
        pytest.raises(InputError, match="No space left on device; choose another place or make room"),
        make(tmp_path / "a") as temporary,
    ):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC), str(temporary))
    assert names(tmp_path) == []


@pytest.mark.parametrize("make", [whole_file, whole_folder])
def test_what_went_wrong_inside_for_another_reason_is_not_called_unwritable(tmp_path, make):
    with pytest.raises(FileNotFoundError), make(tmp_path / "a"):
        (tmp_path / "a font that is missing").read_bytes()
    assert names(tmp_path) == []


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="the superuser may write anywhere")
def test_a_folder_without_permission(tmp_path):
    tmp_path.chmod(0o500)
    try:
        with pytest.raises(InputError, match="may be written to"):
            check_free(tmp_path / "a.csv")
        with pytest.raises(InputError, match="Permission denied; choose another place"), whole_folder(tmp_path / "a"):
            raise SomeError
    finally:
        tmp_path.chmod(0o700)
    assert names(tmp_path) == []


# ---------------------------------------------------------------------------------------------- whole folders


def fill(temporary):
    (temporary / "a.txt").write_text("a")
    (temporary / "b").mkdir()
    (temporary / "b" / "c.txt").write_text("c")


CONTENTS = ["a.txt", "b", "b/c.txt"]


@pytest.mark.parametrize("path", ["new", "deep/er/new", "empty", "link"])
def test_a_folder_appears_when_the_block_ends(tmp_path, path):
    (tmp_path / "empty").mkdir()
    (tmp_path / "link").symlink_to(tmp_path / "empty")
    place = tmp_path / path
    with whole_folder(place) as temporary:
        fill(temporary)
        assert not place.exists() or all(entry.name.startswith(".") for entry in place.iterdir())
        # what is there may be a mount, with nothing writable beside it
        assert temporary.parent == (place if path in ("empty", "link") else place.parent)
    assert names(place) == CONTENTS
    assert all(not name.startswith(".") for name in names(tmp_path))


@pytest.mark.parametrize("stop", STOPS)
@pytest.mark.parametrize("path", ["new", "deep/er/new", "empty"])
def test_a_folder_that_fails_leaves_nothing(tmp_path, path, stop):
    (tmp_path / "empty").mkdir()
    with pytest.raises(stop), whole_folder(tmp_path / path) as temporary:
        fill(temporary)
        raise stop
    assert names(tmp_path) == ["empty"]


def test_the_folder_one_stands_in(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    from pathlib import Path

    with whole_folder(Path(".")) as temporary:
        fill(temporary)
    assert sorted(os.listdir()) == ["a.txt", "b"]  # seen from where one stood all the time


def test_a_folder_that_holds_something_is_left_alone(tmp_path):
    (tmp_path / "full").mkdir()
    (tmp_path / "full" / "mine.txt").write_text("mine")
    (tmp_path / "file").write_text("mine")
    for path, words in [
        ("full", "full' already holds results; choose another name or remove it first"),
        ("file", "file' is a file; give the name of a new folder"),
        ("file/new", "file' is a file; give the name of a new folder"),
        ("a" * 300, "File name too long"),
    ]:
        with pytest.raises(InputError, match=words), whole_folder(tmp_path / path):
            raise SomeError
    assert names(tmp_path) == ["file", "full", "full/mine.txt"]


# ---------------------------------------------------------------------------------------------------- tables


TEXTS = ["family", "misses", "node", *(name for name, column in COLUMNS.items() if column.text)]


def read(path):
    table = pd.read_csv(path, dtype=dict.fromkeys(TEXTS, str))
    return table.fillna({name: "" for name in TEXTS if name in table})


def some_table():
    angles = [-20.0, -30.0, -80.0]  # the last does not exist
    effective = homog.homogenize(homog.build("reentrant-honeycomb", angle=angles, material="PLA"))
    return effective.table()


def test_a_table_reads_back(tmp_path):
    table = some_table()
    meta = provenance("9.9", "euler", material("PLA"), rows=3)
    write_table(table, tmp_path / "t.csv", meta)
    assert names(tmp_path) == ["t.csv", "t.meta.json"]
    back = read(tmp_path / "t.csv")
    assert list(back.columns) == list(table.columns)
    for name in table.columns:
        if name in TEXTS:
            assert list(back[name]) == list(table[name])
        else:
            np.testing.assert_allclose(back[name], table[name], rtol=1e-7)  # single precision: 6e-8
    assert json.loads((tmp_path / "t.meta.json").read_text()) == meta


def test_provenance_is_enough_to_do_it_again():
    meta = provenance("9.9", "euler", material("silicone"), seeds=[3])
    plain = json.loads(json.dumps(meta, allow_nan=False))  # silicone has no yield: NaN is no JSON
    assert plain["material"] == {
        "name": "silicone",
        "modulus_MPa": 1.1,
        "poisson": 0.49,
        "density_kg_m3": 1110.0,
        "deep": False,
    }
    assert (plain["program"], plain["version"], plain["model"], plain["seeds"]) == ("homog-cells", "9.9", "euler", [3])
    assert plain["python"] == ".".join(map(str, sys.version_info[:3])) and plain["numpy"] == np.__version__
    assert re.fullmatch(r"20\d\d-\d\d-\d\dT\d\d:\d\d:\d\d\+00:00", plain["written"])
    assert "Screening only" in plain["note"] and "small strain" in plain["note"]


def test_neither_table_nor_provenance_of_another_is_overwritten(tmp_path):
    table = some_table()
    write_table(table, tmp_path / "t.csv", {"first": 1})
    for name in ("t.csv", "t.parquet"):  # t.parquet would share t.meta.json
        with pytest.raises(InputError, match="is there already; choose another name or add --overwrite"):
            write_table(table, tmp_path / name, {"second": 2})
    assert names(tmp_path) == ["t.csv", "t.meta.json"] and "first" in (tmp_path / "t.meta.json").read_text()
    write_table(table.head(1), tmp_path / "t.csv", {"third": 3}, overwrite=True)
    assert len(pd.read_csv(tmp_path / "t.csv")) == 1 and "third" in (tmp_path / "t.meta.json").read_text()


@pytest.mark.parametrize("name", ["t", "t.xlsx", "t.CSV", ".csv"])
def test_a_table_of_another_suffix(tmp_path, name):
    with pytest.raises(InputError, match=r"has the suffix '.*'; allowed are \.csv, \.parquet"):
        check_table(tmp_path / name)
    with pytest.raises(InputError, match="allowed are"):
        write_table(some_table(), tmp_path / name, {})
    assert names(tmp_path) == []


def test_parquet_reads_back(tmp_path):
    write_table(some_table(), tmp_path / "t.parquet", {})
    pd.testing.assert_frame_equal(pd.read_parquet(tmp_path / "t.parquet"), some_table(), check_dtype=False)


# ------------------------------------------------------------------------------------------- words and numbers


@pytest.mark.parametrize(
    ("value", "words"),
    [
        (0.0, "0"), (-1e-17, "0"), (1.0, "1"), (-0.96237, "-0.9624"), (1234.56, "1235"), (0.00123456, "0.001235"),
        (12345.6, "12346"), (99999.9, "100000"), (123456.0, "1.235e+05"), (0.000123456, "1.235e-04"),
        (math.nan, "-"), (math.inf, "-"), (np.float64(2.5), "2.5"), (3, "3"),
    ],
)  # fmt: skip
def test_numbers_in_words(value, words):
    assert number(value) == words


def test_a_markdown_table_survives_a_bar_in_a_cell():
    lines = markdown(["a", "b"], [["sin|x|", "2"]]).splitlines()
    assert lines == ["| a | b |", "| --- | --- |", r"| sin\|x\| | 2 |"]


def test_parameters_in_words():
    row = homog.homogenize(homog.build("anti-tetrachiral", node="ring", thickness=[0.51234])).table().iloc[0].to_dict()
    assert parameter_words(row) == (
        "ligament_x 10 mm, ligament_y 10 mm, node_radius 2.5 mm, thickness 0.5123 mm, node ring"
    )


# ------------------------------------------------------------------------------------------------- evaluation


@pytest.mark.parametrize(("name", "size"), [("arrowhead", 3), ("miura-fold", 6), ("octet", 6)])
def test_evaluation_is_plain_and_agrees_with_table_and_tensor(name, size):
    p = next(iter(homog.family(name).parameters))
    effective = homog.homogenize(homog.build(name, material="PLA", **{p.name: [p.default]}))
    card = json.loads(json.dumps(evaluation(effective), allow_nan=False))
    assert list(card) == ["family", "parameters", "material", "model", "relative_density", "mechanisms", "stiffness",
                          "columns"]  # fmt: skip
    expected = stiffness_to_voigt(effective.stiffness[0], sheet=name == "miura-fold")
    assert np.shape(card["stiffness"]) == (size, size)
    np.testing.assert_array_equal(card["stiffness"], expected)
    row = effective.table().iloc[0]
    assert list(card["columns"]) == columns_of(effective.kind)
    for key, value in card["columns"].items():
        if value is None:
            assert math.isnan(row[key])
        else:
            assert value == row[key], key
    assert card["relative_density"] == card["columns"]["relative_density"]
    assert card["mechanisms"] == card["columns"]["mechanisms"] == 0 and isinstance(card["mechanisms"], int)


def test_evaluation_of_a_mechanism_has_none_for_what_does_not_exist():
    effective = homog.homogenize(homog.build("square-grid", thickness=[0.5]))
    C = effective.stiffness.copy()
    C[0, 2] = C[0, :, 2] = 0.0
    soft = dataclasses.replace(
        effective, stiffness=C, status=np.array([Status.MECHANISM], np.int8), mechanisms=np.array([1])
    )
    card = json.loads(json.dumps(evaluation(soft), allow_nan=False))
    assert card["columns"]["nu12"] is None and card["columns"]["verdict"] == "reject"
    assert card["columns"]["soft_mode"] == "g12 +1.00" and card["stiffness"][2] == [0.0, 0.0, 0.0]


# ---------------------------------------------------------------------------------------------------- summary

BRIEF = """
title = "Insole $5 | test"
model = "timoshenko"
material = "PLA"
[process]
name = "filament"
min_wall_mm = 0.5
[part]
size_1_mm = 100
size_2_mm = 80
[limits]
nu12 = { max = -0.5 }
density_kg_m3 = { max = 400 }
[rank]
by = { density_kg_m3 = "min", E1_MPa = "max" }
keep = KEEP
[[candidates]]
family = "reentrant-honeycomb"
angle = { from = -80.0, to = -10.0, count = 8 }
thickness = [0.4, 0.5, 1.0, 2.0, 3.0]
[[candidates]]
family = "anti-tetrachiral"
node = ["rigid", "ring"]
thickness = [0.5, 1.0]
node_radius = { from = 1.0, to = 5.0, sampled = true }
samples = 4
seed = 88
"""


def screened(keep=3, **changes):
    text = BRIEF.replace("KEEP", str(keep))
    for old, new in changes.items():
        text = text.replace({"limit": "{ max = -0.5 }", "front": "[rank]"}[old], new)
    return run_screen(parse_brief(text))


def tables_of(text):
    """Return the Markdown tables of a text as lists of rows, without the rule below the header."""
    found, rows = [], []
    for line in [*text.splitlines(), ""]:
        if line.startswith("|"):
            rows.append([cell.strip() for cell in re.split(r"(?<!\\)\|", line)[1:-1]])
        elif rows:
            assert len({len(row) for row in rows}) == 1, "a table whose rows differ in length"
            found.append([rows[0], *rows[2:]])
            rows = []
    return found


def test_the_summary_says_what_was_asked_and_found():
    found = screened()
    text = summary(found, figures=["polar-01-x.png"], version="9.9")
    assert text.startswith("# Insole $5 | test\n")
    met = found.met
    assert 3 < met < 56 and f"**{met} of 56 candidates meet the brief**; the 3 best are listed here." in text
    asked, best, falls, families, reasons = tables_of(text)
    assert asked[1:] == [
        ["nu12 at most -0.5", "brief"],
        ["density_kg_m3 at most 400", "brief"],
        ["thinnest_mm at least 0.5", "process"],
    ]
    assert "E 3000 MPa, nu 0.345, 1240 kg/m3" in text and "to be confirmed by the supplier's sheet" in text
    assert "filament, changed, wall +-0.2 mm; recommended wall 1.2 mm" in text and "- Part: 100 x 80 mm." in text
    assert "- Ranked by smallest density_kg_m3, largest E1_MPa; 3 kept." in text and "- Model: timoshenko." in text
    assert len(best) == 4
    for line, row in zip(best[1:], records(found.shortlist), strict=True):
        cells = dict(zip(best[0], line, strict=True))
        assert cells["rank"] == str(row["rank"]) and cells["no."] == str(row["candidate"])
        assert cells["parameters"] == parameter_words(row) and cells["nu12"] == number(row["nu12"])
        assert cells["density_kg_m3"] == number(row["density_kg_m3"])
        for code in row["reasons"].split():
            assert code in cells["cautions"] and f"- `{code}`: " in text
    table = found.candidates
    for line, fall in zip(falls[1:], found.falls, strict=False):
        assert line == [fall.limit.words, str(fall.missed), f"{fall.missed / 56:.1%}", str(fall.alone)]
    rejected = int((table["verdict"] == "reject").sum())
    assert falls[-1][:2] == ["verdict not reject", str(rejected)]
    assert sum(int(line[1]) for line in families[1:]) == 56
    assert sum(int(line[2]) for line in families[1:]) == met
    counts = {line[0].strip("`"): int(line[2]) for line in reasons[1:]}
    assert counts == {code: sum(code in codes.split() for codes in table["reasons"]) for code in counts}
    assert set(counts) == {code for codes in table["reasons"] for code in codes.split()}
    assert [line[1] for line in reasons[1:]] == sorted((line[1] for line in reasons[1:]), reverse=True)  # rejects first
    assert "![property chart](chart.png)" in text and "![polar-01-x.png](polar-01-x.png)" in text
    assert "Screening only, not design evidence" in text and text.rstrip().endswith("homog-cells 9.9.")
    assert "\n\n\n" not in text


def test_the_summary_says_what_the_wall_tolerance_does():
    found = screened()
    text = summary(found, figures=[], version="9.9")
    thinnest = found.shortlist["thinnest_mm"].min()
    share = 0.2 / thinnest
    assert f"A wall that is 0.2 mm off everywhere is {share:.0%} of the thinnest shortlisted wall" in text
    said = {
        "E1_tolerance_percent": "moves E1 of the shortlisted cells by {} %", "nu12_tolerance": "and nu12 by {} (",
        "E1_scatter_percent": "E1 moves by {} %",
    }  # fmt: skip
    for name, words in said.items():
        values = found.shortlist[name].dropna()
        assert len(values) and words.format(f"{number(values.min())} to {number(values.max())}") in text
    thin = (found.shortlist["thinnest_mm"] < 1.2).sum()
    assert f"Walls under the 1.2 mm that the process recommends: {thin} of 3 shortlisted cells." in text
    without = run_screen(parse_brief(BRIEF.replace("KEEP", "3").replace('name = "filament"', "")))
    assert "wall tolerance" not in summary(without, figures=[], version="9.9")


def test_the_summary_of_a_front_says_so():
    text = summary(screened(front="[rank]\nfront = true"), figures=[], version="9.9")
    assert "of their Pareto front are listed here" in text and "Pareto front; 3 kept" in text


def test_the_summary_when_nothing_meets():
    found = screened(limit="{ max = -50 }")
    text = summary(found, figures=[], version="9.9")
    assert "**Nothing meets the brief**: none of 56 candidates." in text and "What was found" not in text
    fall = found.falls[0]
    assert f"- nu12 at most -50: 56 miss it, {fall.alone} of them nothing else" in text
    assert re.search(r"- verdict not reject: \d+ miss it \(.*tips-collide \d+", text)
    nearest = tables_of(text)[1]
    assert nearest[0][-1] == "misses" and len(nearest) == 1 + len(found.nearest)
    for line, row in zip(nearest[1:], records(found.nearest), strict=True):
        assert f"nu12 by {number(row['miss_nu12'])}" in line[-1]
    assert "chart.png" in text


def test_the_summary_when_all_are_rejected():
    found = run_screen(
        parse_brief('model = "euler"\nmaterial = "PLA"\n[[candidates]]\nfamily = "octet"\ndiameter = [3.0, 6.0]')
    )
    text = summary(found, figures=[], version="9.9")
    assert "- verdict not reject: 2 miss it (struts-merge 1, walls-thick 1)" in text
    assert "Every candidate is rejected, and no limit can help" in text
    assert "None: every candidate is rejected" in text and "chart.png" not in text and "No limits." in text


# ------------------------------------------------------------------------------------------------ the folder


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """A screening with two shortlisted cells, written by its command's own steps."""
    place = tmp_path_factory.mktemp("report") / "out"
    path = place.parent / "b.toml"
    path.write_bytes(BRIEF.replace("KEEP", "2").replace("\n", "\r\n").encode())
    brief = read_brief(path)
    with whole_folder(place) as temporary:
        found = run_screen(brief, parts=Folder(temporary, Plan(brief).about()))
        write_screening(found, temporary, version="9.9", brief_name=path.name)
    found.parts.place = place / "candidates"  # where they are now
    return place, found


def test_the_folder_holds_everything_and_nothing_else(folder):
    place, found = folder
    stems = [f"polar-{row['rank']:02d}-{row['family']}" for row in records(found.shortlist)]
    parts = [f"candidates/part-{k:06d}.parquet" for k in range(3)]
    expected = ["b.toml", "candidates", *parts, "candidates.csv", "candidates.meta.json", "run.json", "chart.png",
                "chart.svg", "shortlist.csv",
                "shortlist.meta.json", "summary.md", *(f"{s}{x}" for s in stems for x in (".png", ".svg"))]  # fmt: skip
    assert names(place) == sorted(expected) and len(stems) == 2
    assert all((place / name).stat().st_size > 300 for name in expected)
    for name in expected:
        if name.endswith(".png"):
            assert (place / name).read_bytes().startswith(b"\x89PNG")
        elif name.endswith(".svg"):
            assert ElementTree.parse(place / name).getroot().tag.endswith("svg")
    text = (place / "summary.md").read_text(encoding="utf-8")
    for image in re.findall(r"!\[.*?\]\((.*?)\)", text):
        assert (place / image).exists()
    assert all(f"![{stem}.png]({stem}.png)" in text for stem in stems)
    assert text == summary(found, figures=[f"{stem}.png" for stem in stems], version="9.9")


def test_the_tables_of_the_folder_read_back(folder):
    place, found = folder
    for name, table in (("candidates", found.candidates), ("shortlist", found.shortlist)):
        back = read(place / f"{name}.csv")
        assert list(back.columns) == list(table.columns) and len(back) == len(table)
        assert (back["meets"] == table["meets"]).all() and (back["candidate"] == table["candidate"]).all()
        assert list(back["misses"]) == list(table["misses"])
        np.testing.assert_allclose(back["E1_MPa"], table["E1_MPa"], rtol=1e-7)
        np.testing.assert_allclose(back["miss_nu12"], table["miss_nu12"], rtol=1e-7, atol=1e-12)
        assert list(back["node"]) == list(table["node"].fillna(""))


def test_the_brief_is_handed_over_as_it_was(folder):
    place, found = folder
    data = (place / "b.toml").read_bytes()
    assert data == (place.parent / "b.toml").read_bytes() and b"\r\n" in data
    meta = json.loads((place / "candidates.meta.json").read_text(encoding="utf-8"))
    assert meta["brief_sha256"] == hashlib.sha256(data).hexdigest()
    assert (meta["candidates"], meta["meeting"], meta["seeds"], meta["version"]) == (56, found.met, [88], "9.9")
    assert meta["title"] == "Insole $5 | test" and meta["material"]["name"] == "PLA"


@pytest.mark.parametrize("fails", ["polar_figure", "property_chart", "save"])
def test_a_figure_that_fails_leaves_no_folder(tmp_path, monkeypatch, fails):
    def failing(*args, **kwargs):
        raise SomeError

    monkeypatch.setattr(plots, fails, failing)
    with pytest.raises(SomeError), whole_folder(tmp_path / "deep" / "out") as temporary:
        write_screening(screened(2), temporary, version="9.9")
    assert names(tmp_path) == []


def test_no_brief_overwrites_a_result(tmp_path, monkeypatch):
    monkeypatch.setattr(plots, "save", lambda figure, path: path.write_text("figure"))
    found = screened(1)
    for name, copy in (
        ("candidates.csv", "brief.toml"),
        ("summary.md", "brief.toml"),
        ("my brief.toml", "my brief.toml"),
    ):
        with whole_folder(tmp_path / name) as temporary:
            write_screening(found, temporary, version="9.9", brief_name=name)
        assert (tmp_path / name / copy).read_text() == found.brief.text
        assert len(pd.read_csv(tmp_path / name / "candidates.csv")) == 56
        assert (tmp_path / name / "summary.md").read_text().startswith("# Insole")
