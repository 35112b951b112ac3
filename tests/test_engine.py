"""The engine: the same parts and shortlist whatever computes them, killed or not, in bounded memory."""

import gc
import json
import os
import random
import signal
import subprocess
import sys
import time
import tracemalloc
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from homog import engine, ranking, store
from homog.brief import parse_brief
from homog.candidates import Span
from homog.columns import COLUMNS
from homog.engine import Plan, started
from homog.errors import HomogError, InputError, MissingExtra
from homog.ranking import NEAREST, Ranking, digest, sampled, shortlist
from homog.screening import run_screen
from homog.store import Folder, Memory, Nowhere, decoded, frame, has_parts, schema, tabled

ROOT = Path(__file__).resolve().parent.parent
SEED = 20_917

BRIEF = """
title = "two families"
model = "euler"
material = "PLA"
[limits]
nu12 = { max = 0.1 }
density_kg_m3 = { max = 600 }
[rank]
by = { density_kg_m3 = "min", E1_MPa = "max" }
keep = 7
per_family = 5
[[candidates]]
family = "reentrant-honeycomb"
angle = { from = -40.0, to = -10.0, sampled = true }
thickness = { from = 0.3, to = 2.0, sampled = true }
samples = 1300
seed = 618
[[candidates]]
family = "anti-tetrachiral"
node = "ring"
thickness = { from = 0.3, to = 2.0, count = 300 }
"""
ROWS = 50  # of a part, so that a small brief has 32


@pytest.fixture
def small(monkeypatch):
    """Parts of ROWS candidates."""
    monkeypatch.setattr(engine, "MOST_ROWS", ROWS)
    monkeypatch.setattr(engine, "LEAST_ROWS", ROWS)


def opened(place, brief):
    place.mkdir(parents=True, exist_ok=True)
    return Folder(place, Plan(brief).about())


def bytes_of(place):
    """Return the parts of a place by name, as bytes."""
    return {path.name: path.read_bytes() for path in sorted((place / "candidates").iterdir())}


def same(found, other):
    pd.testing.assert_frame_equal(found.shortlist, other.shortlist)
    pd.testing.assert_frame_equal(found.nearest, other.nearest)
    pd.testing.assert_frame_equal(found.sample, other.sample)
    assert found.tally == other.tally and found.met == other.met


# ---------------------------------------------------------------------------------------------- the same parts


def test_one_worker_is_two_workers(small, tmp_path):
    brief = parse_brief(BRIEF)
    one = run_screen(brief, parts=opened(tmp_path / "one", brief))
    with started(2, parts=32) as using:
        two = run_screen(brief, parts=opened(tmp_path / "two", brief), using=using)
        with pytest.raises(InputError, match="no such thing"):  # what goes wrong in a worker is what went wrong
            list(engine.results(engine.Job(Broken(), 5), range(3), using))
    assert len(bytes_of(tmp_path / "one")) == 32
    assert bytes_of(tmp_path / "one") == bytes_of(tmp_path / "two")
    same(one, two)
    memory = Memory()
    same(one, run_screen(brief, parts=memory))
    assert [memory.get(k).equals(pq.read_table(tmp_path / "one" / "candidates" / f"part-{k:06d}.parquet"))
            for k in memory.done()] == [True] * 32  # fmt: skip
    assert one.met > 100 and len(one.shortlist) == 7 and one.shortlist["family"].nunique() == 2
    pd.testing.assert_frame_equal(run_screen(brief, parts=Nowhere()).shortlist, one.shortlist)


RUN = """
import sys
from pathlib import Path
from homog import engine
from homog.brief import read_brief
from homog.screening import run_screen
from homog.store import Folder
if __name__ == "__main__":
    engine.MOST_ROWS = engine.LEAST_ROWS = {rows}
    brief = read_brief(sys.argv[1])
    place = Path(sys.argv[2])
    place.mkdir(exist_ok=True)
    with engine.started(int(sys.argv[3]), parts=32) as using:
        run_screen(brief, parts=Folder(place, engine.Plan(brief).about()), using=using)
"""


def test_a_run_that_is_killed_goes_on_to_the_same_bytes(small, tmp_path):
    psutil = pytest.importorskip("psutil")
    (tmp_path / "b.toml").write_text(BRIEF)
    (tmp_path / "run.py").write_text(RUN.format(rows=ROWS))
    place, draw = tmp_path / "out", random.Random(SEED)
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    there, kills = 0, 0
    for count in ("1", "2", "1"):
        command = [sys.executable, str(tmp_path / "run.py"), str(tmp_path / "b.toml"), str(place), count]
        with subprocess.Popen(command, env=environment) as process:
            until = there + draw.randint(1, 8)
            while process.poll() is None and len(list(place.glob("candidates/*.parquet"))) < until:
                time.sleep(0.001)
            children = psutil.Process(process.pid).children() if process.poll() is None else []
            time.sleep(draw.uniform(0.0, 0.03))
            process.kill()
        kills += process.returncode == -signal.SIGKILL
        _, alive = psutil.wait_procs(children, timeout=30)
        assert not alive, "a worker outlived its run"
        there = len(list(place.glob("candidates/*.parquet")))
    assert kills == 3 and 0 < there < 32, (kills, there)
    brief = parse_brief(BRIEF)
    (place / "candidates" / "part-000031.parquet").write_bytes(b"PAR1 half a file")  # and the disk lost a part
    resumed = run_screen(brief, parts=opened(place, brief))
    whole = run_screen(brief, parts=opened(tmp_path / "whole", brief))
    assert bytes_of(place) == bytes_of(tmp_path / "whole")
    same(resumed, whole)


def test_parts_that_are_there_are_not_computed_again(small, tmp_path, monkeypatch):
    brief = parse_brief(BRIEF)
    run_screen(brief, parts=opened(tmp_path, brief))
    for name in ("part-000003.parquet", "part-000030.parquet"):
        (tmp_path / "candidates" / name).unlink()
    computed, real = [], engine.rows
    monkeypatch.setattr(engine, "rows", lambda brief, part: computed.append(part.first) or real(brief, part))
    counts = []
    run_screen(brief, parts=opened(tmp_path, brief), progress=counts.append)
    assert computed == [151, 1501] and sum(counts) == brief.count == 1600  # 1300 are 26 parts


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda text: text.replace("keep = 7", "keep = 8"), "of another brief (brief_sha256 "),
        (lambda text: text + "\n", "of another brief (brief_sha256 "),
    ],
)
def test_a_changed_brief_is_refused(small, tmp_path, change, words):
    opened(tmp_path, parse_brief(BRIEF))
    before = (tmp_path / "run.json").read_bytes()
    with pytest.raises(InputError) as caught:
        opened(tmp_path, parse_brief(change(BRIEF)))
    assert words in str(caught.value) and "\n" not in str(caught.value) and "remove it" in str(caught.value)
    assert (tmp_path / "run.json").read_bytes() == before


@pytest.mark.parametrize("key", ["version", "schema", "sizes"])
def test_a_run_of_another_program_is_refused(small, tmp_path, key):
    brief = parse_brief(BRIEF)
    opened(tmp_path, brief)
    told = json.loads((tmp_path / "run.json").read_text())
    (tmp_path / "run.json").write_text(json.dumps({**told, key: "other"}))
    with pytest.raises(InputError, match=f"{key} other, now"):
        opened(tmp_path, brief)


def test_a_worker_of_another_version_is_refused():
    with pytest.raises(HomogError, match="A worker has homog-cells .*, this is 9.9; install the same there"):
        engine.compute(b"", 0, "9.9")


def test_a_worker_that_is_killed_is_told_in_a_line(small):
    psutil = pytest.importorskip("psutil")
    brief = parse_brief(BRIEF)

    def kill(number):
        for child in psutil.Process().children():
            if "spawn_main" in " ".join(child.cmdline()):
                child.kill()

    with (
        pytest.raises(HomogError, match="A worker process was killed, perhaps for want of memory; use fewer"),
        started(2, parts=32) as using,
    ):
        run_screen(brief, using=using, progress=kill)


class Broken:
    """A plan whose parts cannot be computed."""

    brief = None

    def __getitem__(self, number):
        raise InputError("no such thing")


def test_errors_survive_the_way_home():
    import pickle

    again = pickle.loads(pickle.dumps(MissingExtra("Meshing", "solid")))
    assert type(again) is MissingExtra and str(again) == str(MissingExtra("Meshing", "solid"))


def test_fewer_workers_than_cores_for_few_parts(monkeypatch):
    monkeypatch.setattr(engine, "cores", lambda: 64)
    with started(parts=engine.SERIAL_PARTS) as using:
        assert using.words == "in this process"
    monkeypatch.setattr(engine, "_in_processes", lambda count: iter([count]))
    for parts, expected in ((2 * engine.SERIAL_PARTS, 2), (10_000, 64)):
        with started(parts=parts) as using:
            assert using == expected


# ------------------------------------------------------------------------------------------------ a cluster


def test_a_cluster_that_loses_a_worker_finds_the_same(small, tmp_path):
    pytest.importorskip("distributed")
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "OPENBLAS_NUM_THREADS": "1"}
    told = tmp_path / "scheduler.json"
    dask = [sys.executable, "-W", "ignore", "-m", "dask"]
    quiet = {"stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL, "env": environment, "cwd": tmp_path}
    at = ["--host", "127.0.0.1", "--no-dashboard"]
    processes = [subprocess.Popen([*dask, "scheduler", "--port", "0", "--scheduler-file", str(told), *at], **quiet)]
    brief = parse_brief(BRIEF)
    try:
        for _ in range(2):
            processes.append(subprocess.Popen([*dask, "worker", "--scheduler-file", str(told), "--nthreads", "1",
                                               "--no-nanny", *at], **quiet))  # fmt: skip
        expected = run_screen(brief, parts=opened(tmp_path / "here", brief))
        deadline = time.monotonic() + 60.0
        while not told.exists() and time.monotonic() < deadline:
            time.sleep(0.05)
        address = json.loads(told.read_text())["address"]
        seen = []
        with started(cluster=address, parts=32) as using:
            while using.wanted() < 4:  # both are there
                assert time.monotonic() < deadline, "the workers did not come"
                time.sleep(0.05)

            def lose(number):
                seen.append(number)
                if len(seen) == 3:
                    processes[-1].kill()

            found = run_screen(brief, parts=opened(tmp_path / "there", brief), using=using, progress=lose)
        assert processes[-1].wait(timeout=30) == -signal.SIGKILL and processes[1].poll() is None
        assert sum(seen) == brief.count
        assert bytes_of(tmp_path / "here") == bytes_of(tmp_path / "there")
        same(expected, found)
    finally:
        for process in reversed(processes):
            process.kill()
            process.wait()


def test_no_cluster_is_a_line(monkeypatch):
    distributed = pytest.importorskip("distributed")

    def refuse(*args, **options):
        raise OSError("Timed out trying to connect")

    monkeypatch.setattr(distributed, "Client", refuse)
    with (
        pytest.raises(InputError, match="No scheduler answers at 'tcp://nowhere:1' .*; start one with"),
        started(cluster="tcp://nowhere:1", parts=1),
    ):
        pass
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(MissingExtra, match=r"homog-cells\[cluster\]"), started(cluster="x", parts=1):
        pass


# ------------------------------------------------------------------------------------------------- ranking

VALUES = st.sampled_from([0.0, 1.0, 2.0, -1.0, np.nan]) | st.floats(-5.0, 5.0)
CANDIDATE = st.tuples(VALUES, VALUES, VALUES, st.sampled_from("xyz"), st.booleans(), st.booleans())


def made(rows, brief, whole):
    """Return a table of candidates 1, 2, ... of given columns."""
    a, b, c, families, meets, rejected = (np.array(column) for column in zip(*rows, strict=True))
    verdict = np.where(rejected, "reject", "ok")
    return tabled(
        {"candidate": np.arange(1, len(rows) + 1), "family": families, "meets": meets & ~rejected, "verdict": verdict,
         "misses": np.where(meets, "", "nu12"), "reasons": np.where(rejected, "soft-mode coupled", ""),
         "density_kg_m3": a, "E1_MPa": b, "nu12": c, "miss_nu12": np.abs(c), "miss_density_kg_m3": np.abs(a)}, whole,
    )  # fmt: skip


@settings(max_examples=30, deadline=None)
@given(
    rows=st.lists(CANDIDATE, min_size=1, max_size=30),
    goals=st.permutations(["density_kg_m3", "E1_MPa", "nu12"]),
    many=st.integers(1, 3), front=st.booleans(), keep=st.integers(1, 9), per_family=st.integers(1, 9),
    seed=st.integers(0, 10**6), parts=st.integers(1, 6),
)  # fmt: skip
def test_merged_digests_are_the_digest_of_the_whole(rows, goals, many, front, keep, per_family, seed, parts):
    by = ", ".join(f'{name} = "{better}"' for name, better in zip(goals[:many], ("min", "max", "min"), strict=False))
    text = BRIEF.replace('by = { density_kg_m3 = "min", E1_MPa = "max" }', f"by = {{ {by} }}\nfront = {front}".lower())
    text = text.replace("density_kg_m3".lower(), "density_kg_m3").replace("e1_mpa", "E1_MPa")
    text = text.replace("keep = 7", f"keep = {keep}").replace("per_family = 5", f"per_family = {per_family}")
    brief = parse_brief(text)
    whole = schema(brief, {})
    table = made(rows, brief, whole)
    draw = np.random.default_rng(seed)
    where = draw.integers(0, parts, len(table))
    depth = min(keep, per_family)
    merged = Ranking(brief, depth)
    for part in draw.permutation(parts):
        merged.add(digest(table.filter(pa.array(where == part)), brief, depth))
        if draw.random() < 0.3:
            merged.result()  # settles early
    found = merged.result()
    data = frame(table)
    expected = shortlist(data[data["meets"]], brief)
    best = shortlist(frame(found.best[0]), brief)  # who is best and why; the whole rows stay in the parts
    assert {"rank", "candidate", "family", *(goal.column for goal in brief.goals)} == set(best.columns)
    pd.testing.assert_frame_equal(best, expected[list(best.columns)], check_dtype=False)
    assert len(found.best[0]) <= (len(data) if front else 3 * depth)
    missed = data["miss_nu12"] / 0.1 + data["miss_density_kg_m3"] / 600.0
    near = data.assign(missed=missed)[(data["verdict"] != "reject") & missed.notna()]
    near = near.sort_values(["missed", "candidate"]).head(NEAREST)
    assert found.near[0]["candidate"].to_pylist() == list(near["candidate"])
    tally = found.tally
    assert tally.total("candidates") == len(data) and tally.total("meets") == data["meets"].sum()
    for family, group in data.groupby("family"):
        for verdict in ("ok", "reject"):
            assert tally.families[family, verdict] == (group["verdict"] == verdict).sum()
    assert tally.reasons["coupled"] == (data["verdict"] == "reject").sum()
    miss, other = ~(data["miss_nu12"] == 0.0), ~(data["miss_density_kg_m3"] == 0.0)
    assert (tally.missed["nu12"], tally.alone["nu12"]) == (miss.sum(), (miss & ~other).sum())
    assert found.sample[0]["candidate"].to_pylist() == list(data["candidate"])


def test_a_front_of_many_goals_is_that_of_a_plain_loop(monkeypatch):
    monkeypatch.setattr(ranking, "BLOCK", 7)
    keys = np.random.default_rng(SEED).random((300, 4)).round(1)
    keys = keys[np.lexsort(keys.T[::-1])]
    expected = [i for i in range(300)
                if not any((keys[j] <= keys[i]).all() and ((keys[j] != keys[i]).any() or j < i)
                           for j in range(300) if j != i)]  # fmt: skip
    assert list(ranking.pareto(keys)) == expected and 10 < len(expected) < 100


def test_a_sample_is_bounded_and_the_same_however_it_was_merged(monkeypatch):
    brief = parse_brief(BRIEF)
    draw = np.random.default_rng(SEED)
    rows = [(1.0, 1.0, 1.0, "x", bool(m), False) for m in draw.random(400) < 0.1]
    table = made(rows, brief, schema(brief, {}))
    monkeypatch.setattr(ranking, "SAMPLE", 30)
    once = sampled(table, 30)
    assert once["meets"].to_pylist().count(True) == 30 and len(once) == 60
    merged = Ranking(brief, 1)
    for start in range(0, 400, 37):
        merged.add(digest(table.slice(start, 37), brief, 1))
    assert merged.result().sample[0]["candidate"].equals(once["candidate"])
    numbers = np.array(once["candidate"].to_pylist())
    assert 130 < np.median(numbers) < 270  # spread over all of them


def test_a_second_look_gets_twice_as_many_and_has_the_last_word(small):
    brief = parse_brief(BRIEF)
    first = run_screen(brief)
    given = []

    def second(rows, asked):
        given.append(rows)
        assert asked is brief
        return rows.assign(density_kg_m3=-rows["density_kg_m3"], meets=rows["candidate"] != rows["candidate"].iloc[-1])

    again = run_screen(brief, second=second)
    assert len(given[0]) == 14 and given[0]["family"].value_counts().max() <= 10
    assert list(given[0]["candidate"][:5]) == list(first.shortlist["candidate"][:5])
    assert given[0]["candidate"].iloc[-1] not in set(again.shortlist["candidate"]) and len(again.shortlist) == 7
    assert again.shortlist["density_kg_m3"].is_monotonic_increasing and (again.shortlist["density_kg_m3"] < 0).all()
    assert again.met == first.met


# -------------------------------------------------------------------------------------------- bounded memory


def held_by(brief, parts):
    """Return the memory, in Python's and in Arrow's hands, that a run holds after every fourth part."""
    python, arrow = [], []

    def look(number):
        arrow.append(pa.total_allocated_bytes())
        if len(arrow) % 4 == 0:
            gc.collect()
            python.append(tracemalloc.get_traced_memory()[0])

    tracemalloc.start()
    run_screen(brief, parts=parts, progress=look)
    tracemalloc.stop()
    return np.array(python), np.array(arrow)


def growth(held):
    """Return by how much the last quarter of a run holds more than the second."""
    quarter = len(held) // 4
    return held[-quarter:].max() - held[quarter : 2 * quarter].max()


def test_memory_does_not_grow_with_the_number_of_candidates(small, monkeypatch):
    monkeypatch.setattr(ranking, "SAMPLE", 100)
    monkeypatch.setattr(ranking, "LOOSE", 20)
    brief = parse_brief(BRIEF.replace("samples = 1300", "samples = 5000"))
    python, arrow = held_by(brief, Nowhere())
    kept = growth(held_by(brief, Memory())[0])  # which keeps every part
    assert len(arrow) == 106 and kept > 0
    assert growth(python) < 0.1 * kept and growth(arrow) < 0.1 * kept  # counters, and what the allocator rounds up


def test_the_size_of_a_part_follows_the_size_of_the_cell():
    def size(family, model="euler", more=""):
        return Plan(
            parse_brief(f'model = "{model}"\nmaterial = "PLA"\n[[candidates]]\nfamily = "{family}"\n{more}')
        ).sizes[0]

    assert size("square-grid") == engine.MOST_ROWS > size("rotating-squares") > size("octet") >= 256
    assert size("square-grid", "solid") == engine.LEAST_ROWS
    assert size("square-grid") == size("square-grid", more="length = { from = 5, to = 20, count = 30000 }")


def test_a_billion_candidates_are_made_where_they_are_asked_for():
    text = """
material = "PLA"
[[candidates]]
family = "octet"
length = { from = 5.0, to = 9.0, sampled = true }
diameter = { from = 0.2, to = 0.9, sampled = true }
samples = SAMPLES
seed = 77
"""
    from scipy.stats import qmc

    (source,) = parse_brief(text.replace("SAMPLES", "5000")).candidates
    points = qmc.Sobol(2, scramble=True, rng=np.random.default_rng(77)).random_base2(13)
    taken = source.take(3000, 5000)
    np.testing.assert_array_equal(taken["length"], 5.0 + 4.0 * points[3000:5000, 0])
    np.testing.assert_array_equal(taken["diameter"], 0.2 + (0.9 - 0.2) * points[3000:5000, 1])
    (source,) = parse_brief(text.replace("SAMPLES", "3000000")).candidates
    sobol = qmc.Sobol(2, scramble=True, rng=np.random.default_rng(77))
    sobol.fast_forward(2_999_000)
    np.testing.assert_array_equal(source.take(2_999_000, 3_000_000)["length"], 5.0 + 4.0 * sobol.random(1000)[:, 0])
    grid = text.replace("sampled = true", "count = 31000").replace("samples = SAMPLES\nseed = 77\n", "")
    brief = parse_brief(grid)
    plan = Plan(brief)
    last = plan[len(plan) - 1]
    assert brief.count == 31000**2 == last.first + last.stop - last.start - 1
    assert last.source.take(last.stop - 1, last.stop) == {"length": [9.0], "diameter": [0.9]}


@pytest.mark.parametrize(("low", "high", "count"), [(0.1, 0.7, 1), (0.1, 0.7, 2), (-50.0, -10.0, 41), (3.0, 3.0, 5)])
def test_a_span_is_evenly_spread(low, high, count):
    np.testing.assert_array_equal(Span(low, high, count)[np.arange(count)], np.linspace(low, high, count))


# --------------------------------------------------------------------------------------------------- files


def test_a_part_says_where_it_comes_from_and_what_its_columns_are(small, tmp_path):
    brief = parse_brief(BRIEF)
    run_screen(brief, parts=opened(tmp_path, brief))
    assert has_parts(tmp_path)
    table = pq.read_table(tmp_path / "candidates")  # the folder is one data set
    assert len(table) == 1600 and table["candidate"].to_pylist() == list(range(1, 1601))
    about = json.loads(table.schema.metadata[b"homog"])
    assert about == json.loads((tmp_path / "run.json").read_text())
    assert (about["schema"], about["model"], about["seeds"], about["parts"]) == (1, "euler", [618], 32)
    assert about["brief_sha256"] == store.sha256(BRIEF) and about["version"] == engine.__version__
    assert "Screening only" in about["note"]
    assert table.schema.field("E1_MPa").metadata[b"meaning"].decode() == COLUMNS["E1_MPa"].meaning
    plain = table.to_pandas()
    assert plain["node"].isna().sum() == 1300 and set(plain["node"].dropna()) == {"ring"}
    assert table["angle_deg"].null_count == 300 and plain["mechanisms"].dtype == np.int64
    assert {str(table.schema.field(name).type) for name in ("family", "verdict", "reasons", "misses", "soft_mode")} == {
        str(store.TEXT)
    }


def test_a_part_is_the_bytes_of_its_table(small):
    brief = parse_brief(BRIEF)
    memory = Memory()
    run_screen(brief, parts=memory)
    table = memory.get(2)
    assert decoded(store.encoded(table)).equals(table)
    with pytest.raises(InputError, match="were not kept"):
        Nowhere().get(0)
