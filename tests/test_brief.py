"""The brief: what it means, and what it says about a fault: one line, the line of the file, what is allowed."""

import copy
import json
import math
import tomllib

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from homog.brief import KEYS, MOST_CANDIDATES, Brief, Limit, line_of, parse_brief, read_brief
from homog.columns import COLUMNS
from homog.effective import DEFAULT_MODEL
from homog.errors import InputError
from homog.families import FAMILIES

LEAST = """
material = "PLA"
[[candidates]]
family = "square-grid"
"""

WHOLE = """\
title = "Insole"            # 1
model = "euler"

[material]
name = "TPU 95A"
modulus_MPa = 40.0          # 6: measured
deep = true

[process]
name = "filament"
min_wall_mm = 0.6           # 11
max_cell_mm = 30.0

[part]
size_1_mm = 260.0           # 15
size_2_mm = 90.0

[limits]                    # 18
nu12 = { max = -0.2 }
E1_MPa = { min = 0.1, max = 5.0 }
largest_cell_mm = { max = 25.0 }

[rank]                      # 23
by = { density_kg_m3 = "min", nu12 = "max" }
front = true
keep = 8
per_family = 3

[[candidates]]              # 29
family = "reentrant-honeycomb"
angle = { from = -40.0, to = -20.0, count = 3 }
thickness = [
    0.6,                    # 33
    0.8,
]

[[candidates]]              # 37
family = "anti-tetrachiral"
node = ["rigid", "ring"]
ligament_x = { from = 9.0, to = 12.0, sampled = true }
thickness = 0.7
samples = 5
seed = 9
"""


def fault(text, name="b.toml"):
    with pytest.raises(InputError) as caught:
        parse_brief(text, name=name)
    message = str(caught.value)
    assert "\n" not in message
    return message


# ---------------------------------------------------------------------------------------------- what it means


def test_everything_a_brief_can_say():
    brief = parse_brief(WHOLE)
    assert (brief.title, brief.model, brief.front, brief.keep, brief.per_family) == ("Insole", "euler", True, 8, 3)
    assert (brief.material.name, brief.material.modulus_MPa, brief.material.deep) == ("TPU 95A, changed", 40.0, True)
    assert brief.material.poisson == 0.465  # what is not given stays
    assert (brief.process.name, brief.process.min_wall_mm) == ("filament, changed", 0.6)
    assert brief.process.wall_tolerance_mm == 0.2
    assert brief.part == (260.0, 90.0)
    assert brief.limits == (
        Limit("nu12", high=-0.2),
        Limit("E1_MPa", 0.1, 5.0),
        Limit("largest_cell_mm", high=25.0, origin="brief and process"),  # the tighter of 25 and 30
        Limit("thinnest_mm", low=0.6, origin="process"),
    )
    assert [(goal.column, goal.better) for goal in brief.goals] == [("density_kg_m3", "min"), ("nu12", "max")]
    assert [c.count for c in brief.candidates] == [6, 5, 5] and brief.count == 16
    assert brief.text == WHOLE


def test_the_least_brief_has_sound_defaults():
    brief = parse_brief(LEAST)
    assert (brief.title, brief.model, brief.limits, brief.part) == ("untitled brief", DEFAULT_MODEL, (), ())
    assert (brief.material.name, brief.process.name) == ("PLA", "no process")
    assert [(goal.column, goal.better) for goal in brief.goals] == [("density_kg_m3", "min")]
    assert (brief.front, brief.keep, brief.per_family, brief.count) == (False, 12, 12, 1)
    assert brief.candidates[0].take(0, 1) == {}


def test_material_and_process_by_values_alone():
    brief = parse_brief(
        LEAST.replace('material = "PLA"', "[material]\nmodulus_MPa = 900\npoisson = 0.4\ndensity_kg_m3 = 1e3\n"
                      "[process]\nmax_cell_mm = 20")
    )  # fmt: skip
    assert (brief.material.name, brief.material.modulus_MPa) == ("given values", 900.0)
    assert (brief.process.name, brief.process.max_cell_mm) == ("given limits", 20.0)
    assert brief.limits == (Limit("largest_cell_mm", high=20.0, origin="process"),)


def test_deep_alone_leaves_the_material_its_name():
    brief = parse_brief(LEAST.replace('material = "PLA"', 'material = { name = "pla", deep = true }'))
    assert brief.material.deep and brief.material.name == "PLA"


@pytest.mark.parametrize(
    ("brief_says", "process_says", "expected"),
    [
        ("{ min = 1.0 }", 0.7, (1.0, math.inf)),
        ("{ min = 0.5 }", 0.7, (0.7, math.inf)),
        ("{ min = 0.5, max = 2.0 }", 0.7, (0.7, 2.0)),
    ],
)
def test_the_tighter_of_brief_and_process_counts(brief_says, process_says, expected):
    text = LEAST + f"[limits]\nthinnest_mm = {brief_says}\n[process]\nmin_wall_mm = {process_says}\n"
    (limit,) = parse_brief(text).limits
    assert (limit.low, limit.high) == expected and limit.origin == "brief and process"


@pytest.mark.parametrize("end", ["\n", "\r\n"])
def test_a_file_is_read_as_it_stands(tmp_path, end):
    path = tmp_path / "b.toml"
    data = WHOLE.replace("\n", end).replace("Insole", "Einlage für Füße").encode()
    path.write_bytes(data)
    brief = read_brief(path)
    assert brief.text.encode() == data and brief.title == "Einlage für Füße" and brief.count == 16
    path.write_bytes(b"\xef\xbb\xbf" + data)  # as some editors save UTF-8
    assert read_brief(path) == brief


def test_a_limit_misses_by_how_much():
    limit = Limit("E1_MPa", 2.0, 5.0)
    np.testing.assert_array_equal(limit.miss(np.array([1.5, 2.0, 3.0, 5.0, 7.0, np.nan, np.inf, -np.inf])),
                                  [0.5, 0.0, 0.0, 0.0, 2.0, np.nan, np.inf, np.inf])  # fmt: skip
    np.testing.assert_array_equal(Limit("nu12", high=-0.2).miss(np.array([-0.5, 0.3])), [0.0, 0.5])
    assert limit.words == "E1_MPa from 2 to 5" and limit.scale == 5.0
    assert Limit("nu12", high=-0.2).words == "nu12 at most -0.2" and Limit("nu12", high=-0.2).scale == 0.2
    assert Limit("nu12", low=0.0).words == "nu12 at least 0" and Limit("nu12", low=0.0).scale == 1.0


# ------------------------------------------------------------------------------------------ candidates by number


def sources(text):
    return parse_brief('material = "PLA"\n' + text).candidates


SOURCES = {
    "fixed": '[[candidates]]\nfamily = "octet"\nlength = 8.0',
    "listed": '[[candidates]]\nfamily = "octet"\nlength = [8, 9.5]\ndiameter = [0.5, 0.6, 0.9]',
    "spanned": '[[candidates]]\nfamily = "octet"\nlength = { from = 5, to = 9, count = 5 }\ndiameter = [0.5, 0.6]',
    "sampled": '[[candidates]]\nfamily = "octet"\nlength = { from = 5, to = 9, sampled = true }\n'
    "diameter = { from = 0.2, to = 0.9, sampled = true }\nsamples = 21\nseed = 77",
    "mixed": '[[candidates]]\nfamily = "octet"\nlength = { from = 5, to = 9, sampled = true }\n'
    "diameter = [0.3, 0.4]\nsamples = 6\nseed = 5",
}


def test_values_by_hand():
    (fixed,) = sources(SOURCES["fixed"])
    assert fixed.count == 1 and list(fixed.take(0, 9)["length"]) == [8.0]
    (listed,) = sources(SOURCES["listed"])
    taken = listed.take(0, 6)  # the last named runs fastest
    assert list(taken["length"]) == [8.0] * 3 + [9.5] * 3 and list(taken["diameter"]) == [0.5, 0.6, 0.9] * 2
    (spanned,) = sources(SOURCES["spanned"])
    assert sorted(set(spanned.take(0, 10)["length"])) == [5.0, 6.0, 7.0, 8.0, 9.0]
    (mixed,) = sources(SOURCES["mixed"])
    taken = mixed.take(0, 99)
    assert mixed.count == 12 and list(taken["diameter"]) == [0.3] * 6 + [0.4] * 6
    np.testing.assert_array_equal(taken["length"][:6], taken["length"][6:])  # the same samples for each listed value
    rigid, ring = sources(
        '[[candidates]]\nfamily = "anti-tetrachiral"\nnode = ["rigid", "ring"]\nthickness = [0.5, 0.6]'
    )
    assert rigid.take(0, 2)["node"] == "rigid" and ring.take(0, 2)["node"] == "ring" and ring.count == 2
    (single,) = sources('[[candidates]]\nfamily = "anti-tetrachiral"\nnode = "ring"')
    assert single.take(0, 1) == {"node": "ring"}


@pytest.mark.parametrize("name", SOURCES)
def test_any_slice_is_that_of_the_whole(name):
    (source,) = sources(SOURCES[name])
    whole = source.take(0, source.count)
    for start in range(source.count):
        for stop in range(start + 1, source.count + 2):  # one past the end is cut
            for key, values in source.take(start, stop).items():
                np.testing.assert_array_equal(values, whole[key][start:stop])


def test_samples_follow_the_seed_and_fill_the_range():
    (one,) = sources(SOURCES["sampled"])
    (again,) = sources(SOURCES["sampled"])
    (other,) = sources(SOURCES["sampled"].replace("77", "78"))
    (more,) = sources(SOURCES["sampled"].replace("samples = 21", "samples = 64"))
    for key in ("length", "diameter"):
        a, b, c, d = (source.take(0, 64)[key] for source in (one, again, other, more))
        np.testing.assert_array_equal(a, b)
        assert (a != c).all()
        np.testing.assert_array_equal(a, d[:21])  # more samples go on where fewer stopped
    length, diameter = more.take(0, 64)["length"], more.take(0, 64)["diameter"]
    assert ((length >= 5.0) & (length <= 9.0) & (diameter >= 0.2) & (diameter <= 0.9)).all()
    # 64 scrambled Sobol points are a net: every one of 64 strips holds one point, in each parameter
    assert len(set(((length - 5.0) / 4.0 * 64).astype(int))) == 64
    assert len(set(((diameter - 0.2) / 0.7 * 64).astype(int))) == 64


def test_one_sample_is_a_sample():
    (source,) = sources(SOURCES["sampled"].replace("samples = 21", "samples = 1"))
    assert source.count == 1 and source.take(0, 1)["length"].shape == (1,)


# --------------------------------------------------------------------------------------------------- faults


LINES = {  # what to change in WHOLE, what it must say, and in which line
    "top key": ("model =", "modle =", 2, "Unknown key 'modle'; nearest known: model"),
    "top table": ("[limits]  ", "[limit]  ", 18, "Unknown key 'limit'; nearest known: limits"),
    "top list": ("[[candidates]]              # 29", "[[candidate]]", 29, "Unknown key 'candidate'; nearest"),
    "title": ('title = "Insole"', "title = 5", 1, "title = 5 must be text in quotes"),
    "model": ('"euler"', '"beam"', 2, "Unknown model 'beam'; known: "),
    "material name": ("TPU 95A", "TPU 95", 5, "Unknown material 'TPU 95'; nearest known: TPU 95A, TPU 85A"),
    "material key": ("modulus_MPa", "modulus", 6, "Unknown key of [material] 'modulus'; nearest known: modulus_MPa"),
    "material value": ("40.0", "4e10", 6, "modulus_MPa = 4e+10 is outside 0.01 to 2e+06; is it in Pa?"),
    "material type": ("40.0", "true", 6, "modulus_MPa = True is not a number"),
    "deep": ("deep = true", 'deep = "no"', 7, "deep = 'no'; allowed: true or false"),
    "process name": ('"filament"', '"filaments"', 10, "Unknown process 'filaments'; nearest known: filament"),
    "process value": ("min_wall_mm = 0.6", "min_wall_mm = 600.0", 11, "is it in micrometres?"),
    "process nan": ("max_cell_mm = 30.0", "max_cell_mm = nan", 12, "give a finite number"),
    "part": ("size_1_mm = 260.0", "size_1_mm = -3", 15, "size_1_mm = -3 mm; allowed: more than 0"),
    "part inf": ("size_2_mm = 90.0", "size_2_mm = inf", 16, "size_2_mm = inf is not a finite number"),
    "part order": ("size_1_mm", "size_3_mm", 14, "sizes in order"),
    "limit column": ("E1_MPa = {", "E1_Mpa = {", 20, "Unknown column 'E1_Mpa'; nearest known: E1_MPa"),
    "limit key": ("{ max = -0.2 }", "{ maximum = -0.2 }", 19, "Unknown key of the limit on 'nu12' 'maximum'"),
    "limit type": ("{ max = -0.2 }", "-0.2", 19, "limit on 'nu12' = -0.2; write { min = ... }"),
    "limit empty": ("{ max = -0.2 }", "{}", 19, "limit on 'nu12' = {}; write { min = ... }"),
    "limit text": ("max = -0.2", 'max = "-0.2"', 19, "nu12 max = '-0.2' is not a finite number"),
    "limit bool": ("max = -0.2", "max = false", 19, "nu12 max = false is not a finite number"),
    "limit nan": ("min = 0.1", "min = nan", 20, "E1_MPa min = nan is not a finite number"),
    "limit order": ("min = 0.1", "min = 6.0", 20, "min 6 is above max 5"),
    "limit words": ("nu12 = { max", "verdict = { max", 19, "column 'verdict' holds text"),
    "limit kind": ("nu12 = { max", "nu13 = { max", 19, "no candidate family has the column 'nu13'; spatial cells do"),
    "limit process": ("E1_MPa = { min = 0.1, max = 5.0 }", "thinnest_mm = { max = 0.5 }", 20, "process asks for"),
    "rank key": ("front =", "pareto =", 25, "Unknown key of [rank] 'pareto'"),
    "rank column": ("density_kg_m3 =", "density =", 24, "Unknown column 'density'; nearest known: density_kg_m3"),
    "rank words": ('nu12 = "max"', 'reasons = "max"', 24, "column 'reasons' holds text"),
    "rank kind": ('nu12 = "max"', 'D11_N_mm = "max"', 24, "family has the column 'D11_N_mm'; sheet cells do"),
    "rank sense": ('nu12 = "max"', 'nu12 = "small"', 24, "rank by 'nu12' = 'small'; allowed: 'min' or 'max'"),
    "front": ("front = true", "front = 1", 25, "front = 1; allowed: true or false"),
    "keep": ("keep = 8", "keep = 0", 26, "keep = 0; allowed: a whole number from 1 to 200"),
    "keep float": ("keep = 8", "keep = 8.0", 26, "keep = 8.0; allowed: a whole number from 1 to 200"),
    "keep bool": ("keep = 8", "keep = true", 26, "keep = true; allowed"),
    "per family": ("per_family = 3", "per_family = 900", 27, "per_family = 900; allowed"),
    "family": ("reentrant-honeycomb", "re-entrant-honeycomb", 30, "nearest known: reentrant-honeycomb"),
    "no family": ('family = "anti-tetrachiral"', "", 37, "[[candidates]] needs a family"),
    "second family": ("anti-tetrachiral", "antichiral", 38, "Unknown family 'antichiral'; nearest known: anti-t"),
    "parameter": ("angle =", "angel =", 31, "Unknown parameter of 'reentrant-honeycomb' 'angel'; nearest known: angle"),
    "samples name": ("samples =", "sample =", 42, "parameter of 'anti-tetrachiral' 'sample'; nearest known: samples"),
    "range of the first": ("from = -40.0", "from = -95.0", 31, "Parameter 'angle' = -95 deg is outside its range"),
    "empty range": ("from = -40.0", "from = -10.0", 31, "'angle': empty range, from -10 is above to -20"),
    "count 0": ("count = 3", "count = 0", 31, "'angle' count = 0; allowed: a whole number from 1"),
    "count float": ("count = 3", "count = 2.5", 31, "'angle' count = 2.5; allowed"),
    "count huge": ("count = 3", "count = 3000000000", 31, "'angle' count = 3000000000; allowed"),
    "span key": ("count = 3", "counts = 3", 31, "Unknown key of 'angle' 'counts'; nearest known: count"),
    "span short": (", count = 3", "", 31, "write a number, a list, { from, to, count }"),
    "list type": ("    0.8,", '    "0.8",', 32, "'thickness' = '0.8' is not a finite number"),
    "list range": ("    0.8,", "    0.0008,", 32, "is it in metres? lengths are in mm"),
    "list empty": ("    0.6,                    # 33\n    0.8,", "", 32, "'thickness': empty list"),
    "word": ('"ring"', '"round"', 39, "Parameter 'node' = 'round' for 'anti-tetrachiral': allowed are rigid or ring"),
    "word type": ('["rigid", "ring"]', "[1]", 39, "node = 1 must be text in quotes"),
    "word empty": ('["rigid", "ring"]', "[]", 39, "'node': empty list"),
    "second span": ("from = 9.0", "from = 13.0", 40, "'ligament_x': empty range"),
    "second range": ("thickness = 0.7", "thickness = 7e5", 41, "Parameter 'thickness' = 700000 mm is outside"),
    "infinite": ("thickness = 0.7", "thickness = inf", 41, "'thickness' = inf is not a finite number"),
    "bool": ("thickness = 0.7", "thickness = true", 41, "'thickness' = true is not a finite number"),
    "date": ("thickness = 0.7", "thickness = 2020-01-01", 41, "is not a finite number"),
    "very long": ("thickness = 0.7", f"thickness = 1{'0' * 400}", 41, "a whole number of more than 18 digits"),
    "samples": ("samples = 5", "samples = 0", 42, "samples = 0; allowed: a whole number from 1"),
    "no samples": ("samples = 5\n", "", 37, "'samples' (how many points, with a seed) belong together"),
    "sampled word": ("sampled = true", 'sampled = "yes"', 40, "write a number, a list"),
    "seed": ("seed = 9", "seed = -9", 43, "seed = -9; allowed"),
}  # fmt: skip


@pytest.mark.parametrize("name", LINES)
def test_a_fault_says_what_and_in_which_line(name):
    old, new, line, words = LINES[name]
    assert WHOLE.count(old) >= 1
    message = fault(WHOLE.replace(old, new, 1))
    assert words in message
    assert message.startswith(f"b.toml, line {line}: ")


def test_the_comments_of_the_whole_brief_are_its_lines():
    for number, line in enumerate(WHOLE.split("\n"), 1):
        mark = line.partition("#")[2].strip().split(":")[0]
        assert not mark or int(mark) == number, "the expected lines above would be wrong"


@pytest.mark.parametrize(
    ("text", "line", "words"),
    [
        (LEAST + "limits.nu12.max = 0", 5, "Unknown parameter"),  # under the header of the candidate
        ("limits.nu12.maxi = 0\n" + LEAST, 1, "'maxi'"),
        ('# a\n\n"limits"."nu12" = { maxi = 0 }\n' + LEAST, 3, "'maxi'"),
        (LEAST + "[limits]\n[ limits . nu12 ]\n# b\nmaxi = 0", 8, "'maxi'"),
        (LEAST + "[limits]\nnu12.max = 1\nnu12.maxi = 0", 7, "'maxi'"),
        (LEAST + "[candidates.length]\nfrom = 1\nto = 2\ncounts = 3", 8, "'counts'"),
        (
            LEAST + '[[candidates]]\nfamily = "octet"\n' + "[candidates.length]\nfrom = 3\nto = 2\ncount = 3",
            7,
            "empty range",
        ),
        ('material = "PLA"\ncandidates = [\n  { family = "octet" },\n  { family = "octet", x = 1 },\n]', 2, "'x'"),
        ('title = """\n[limits]\nnu12 = 3\n"""\n' + LEAST + "[limits]\nnu12 = 3", 10, "limit on 'nu12' = 3"),
        ("title = '''\n[[candidates]]\nx = 1'''\n" + LEAST + "y = 1 # x = 1", 8, "'y'"),
        (LEAST + "[rank.by]\nnu12 = 'min'\nE1_MPa = 'most'", 7, "'most'"),
        (LEAST + '"a = b" = 3', 5, "Unknown parameter of 'square-grid' 'a = b'"),
        (LEAST + '"a\\nb" = 3', 5, "'a b'"),  # one line, whatever the name
        (LEAST + "'' = 3", 5, "Unknown parameter of 'square-grid' ''"),
        ("'' = 3\n" + LEAST, 1, "Unknown key ''"),
    ],
)
def test_lines_in_every_way_of_writing_toml(text, line, words):
    message = fault(text)
    assert words in message and message.startswith(f"b.toml, line {line}: ")


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "b.toml: no [[candidates]]: name at least one family to try"),
        ('candidates = "octet"', "b.toml, line 1: 'candidates' must be a list of tables"),
        ("candidates = [3]", "b.toml, line 1: [[candidates]] needs a family"),
        (LEAST.replace('"PLA"', "7"), "b.toml, line 2: 'material' = 7 must be a table: [material]"),
        (
            LEAST.replace('material = "PLA"', ""),
            "b.toml: [material] needs a name or modulus_MPa, poisson, density_kg_m3",
        ),
        (
            LEAST.replace('material = "PLA"', "material.poisson = 0.3"),
            "b.toml, line 2: [material] needs a name or modulus_MPa",
        ),
        (LEAST + "[process]\nname = 3", "line 6: name = 3 must be text in quotes"),
        (LEAST + "[rank]\nby = 'nu12'", "line 6: by must name columns"),
        (LEAST + "[rank]\nby = {}", "line 6: by must name columns"),
        (LEAST + "length = [1, 2]\nlength = 3", "b.toml, line 6: not valid TOML: Cannot overwrite a value"),
        (LEAST + "length = 3 mm", "b.toml, line 5: not valid TOML: Expected newline or end of document"),
        (LEAST + "length = [1, 2", "b.toml, line 5: not valid TOML: Unclosed array"),
        (LEAST + "length = 1" + "0" * 5000, "b.toml: not valid TOML: Exceeds the limit"),
        (LEAST + "length = " + "[" * 20000, "b.toml: lists or tables are nested too deep"),
    ],
)
def test_other_faults(text, words):
    assert words in fault(text)


def test_too_many_candidates_are_refused_before_any_is_made():
    text = LEAST + "length = { from = 5, to = 9, count = 31999 }\nthickness = { from = 0.1, to = 0.9, count = 31999 }"
    assert f"1,023,936,001 candidates; at most {MOST_CANDIDATES:,} in one run" in fault(text)
    assert parse_brief(text.replace("31999", "31000")).count == 31000**2


@pytest.mark.parametrize(
    ("data", "words"),
    [
        (b'title = "d\xe9"', r"Brief '.*b.toml', line 1: not text in UTF-8; save the file as UTF-8"),
        (b'title = "a"\n# \xff\xfe', r"b.toml', line 2: not text in UTF-8"),
        (b'title = "a\x00b"', r"b.toml, line 1: not valid TOML: "),
        ('title = "a"'.encode("utf-16"), r"not text in UTF-8"),
    ],
)
def test_a_file_that_is_no_text(tmp_path, data, words):
    path = tmp_path / "b.toml"
    path.write_bytes(data)
    with pytest.raises(InputError, match=words):
        read_brief(path)


def test_a_file_that_is_not_there(tmp_path):
    with pytest.raises(InputError, match="nowhere.toml' cannot be read: No such file or directory; give a TOML file"):
        read_brief(tmp_path / "nowhere.toml")
    with pytest.raises(InputError, match="cannot be read: Is a directory; give a TOML file"):
        read_brief(tmp_path)


# ---------------------------------------------------------------------------------------------- any nonsense


def toml(value):
    """Return a value in TOML, all inline."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, float):
        return {math.inf: "inf", -math.inf: "-inf"}.get(value, "nan" if math.isnan(value) else repr(value))
    if isinstance(value, int):
        return str(value)
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    if isinstance(value, list):
        return f"[{', '.join(map(toml, value))}]"
    return "{ " + ", ".join(f"{toml(key)} = {toml(entry)}" for key, entry in value.items()) + " }"


def document(data):
    """Return a document, its candidates as [[candidates]] where they are tables, all else inline, a key a line."""
    lines = [f"{toml(key)} = {toml(value)}" for key, value in data.items() if key != "candidates"]
    listed = data.get("candidates", [])
    if isinstance(listed, list) and all(isinstance(one, dict) for one in listed):
        for one in listed:
            lines += ["[[candidates]]", *(f"{toml(key)} = {toml(value)}" for key, value in one.items())]
    else:
        lines.append(f"candidates = {toml(listed)}")
    return "\n".join(lines)


NAMES = sorted(
    {key for keys in KEYS.values() for key in keys} | set(COLUMNS) | set(FAMILIES)
    | {p.name for one in FAMILIES.values() for p in one.parameters}
    | {"from", "to", "count", "sampled", "min", "max", "samples", "seed", "family", "PLA", "resin", "rigid", "ring"}
)  # fmt: skip
TEXT = st.text(st.characters(exclude_categories=["Cs"]), max_size=4)
SCALARS = st.one_of(
    *(st.booleans(), st.integers(-10, 40), st.just(10**400), st.floats(), st.floats(0.1, 40.0)),
    *(st.sampled_from(NAMES), TEXT),
)  # fmt: skip
VALUES = st.recursive(
    SCALARS,
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.sampled_from(NAMES) | TEXT, inner, max_size=3),
    max_leaves=6,
)


def places(data, path=()):
    yield path
    entries = data.items() if isinstance(data, dict) else enumerate(data) if isinstance(data, list) else ()
    for key, value in entries:
        yield from places(value, (*path, key))


SOUND = tomllib.loads(WHOLE)
CHANGES = st.tuples(st.sampled_from([p for p in places(SOUND) if p]), st.sampled_from(["set", "delete", "add"]),
                    st.sampled_from(NAMES) | TEXT, VALUES)  # fmt: skip


def changed(data, changes):
    for path, how, name, value in changes:
        inner = data
        try:
            for key in path[:-1]:
                inner = inner[key]
            if how == "set":
                inner[path[-1]] = value
            elif how == "delete":
                del inner[path[-1]]
            else:
                inner[path[-1]][name] = value
        except (LookupError, TypeError):
            pass  # an earlier change took the place away
    return data


@settings(max_examples=250, deadline=None)
@given(st.lists(CHANGES, min_size=1, max_size=2))
def test_a_sound_brief_with_any_nonsense_in_it(changes):
    text = document(changed(copy.deepcopy(SOUND), changes))
    try:
        brief = parse_brief(text)
    except InputError as error:
        assert "\n" not in str(error) and str(error).count("brief") < 3
        return
    assert isinstance(brief, Brief) and brief.count >= 1
    for source in brief.candidates:
        source.family.build(source.take(0, 2), brief.material)


@settings(max_examples=100, deadline=None)
@given(st.dictionaries(st.sampled_from(KEYS[""]) | TEXT, VALUES, max_size=4))
def test_nothing_but_nonsense(data):
    with pytest.raises(InputError):
        parse_brief(document(data))


@settings(max_examples=60, deadline=None)
@given(st.sampled_from([p for p in places(SOUND) if p and not isinstance(p[-1], int)]))
def test_the_line_of_every_key_holds_the_key(path):
    line = WHOLE.split("\n")[line_of(WHOLE, path) - 1]
    assert path[-1] in line or path[0] in line
    assert path[:2] != ("candidates", 0) or line_of(WHOLE, path) < 36
    assert path[:2] != ("candidates", 1) or line_of(WHOLE, path) >= 37


def test_the_line_of_what_is_not_there_is_0():
    assert line_of(WHOLE, ("limits", "nu21")) == line_of("", ("title",)) == 0


@pytest.mark.parametrize(
    ("limit", "words"),
    [
        (
            "yield_1_MPa = { min = 1.0 }",
            "no candidate can have a value of 'yield_1_MPa': the parent TPU 85A has no yield",
        ),
        ("cells_across = { min = 4.0 }", "the part's size is not known; give size_1_mm"),
        ("E1_tolerance_percent = { max = 9.0 }", "the process has no tolerance; give wall_tolerance_mm"),
    ],
)
def test_a_limit_that_no_candidate_can_have_a_value_for_is_refused_at_once(limit, words):
    text = f'material = "TPU 85A"\n[limits]\n{limit}\n[[candidates]]\nfamily = "square-grid"\n'
    with pytest.raises(InputError, match="line 3") as caught:
        parse_brief(text)
    assert words in str(caught.value)
