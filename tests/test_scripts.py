"""The two scripts of a fresh machine: what they say when it lacks something, and what they leave alone.

The whole run, from a clean clone to results, is too long for a unit test; here are the decisions in it.
"""

import ast
import json
import sys
from pathlib import Path

import pytest

SCRIPTS = Path(__file__).resolve().parent.parent / "scripts"


@pytest.fixture
def scripts(monkeypatch):
    """Import the scripts as they import each other: from their own folder."""
    monkeypatch.syspath_prepend(str(SCRIPTS))
    import _setup
    import check
    import demo

    yield {"setup": _setup, "check": check, "demo": demo}
    for name in ("_setup", "check", "demo"):
        sys.modules.pop(name, None)


@pytest.mark.parametrize("name", ["_setup.py", "check.py", "demo.py"])
def test_an_old_python_can_read_the_script_that_refuses_it(name):
    ast.parse((SCRIPTS / name).read_text(encoding="utf-8"), feature_version=(3, 7))


@pytest.mark.parametrize("name", ["_setup.py", "check.py", "demo.py"])
def test_only_the_standard_library_is_imported(name):
    tree = ast.parse((SCRIPTS / name).read_text(encoding="utf-8"))
    imported = {a.name for n in ast.walk(tree) if isinstance(n, ast.Import) for a in n.names}
    imported |= {n.module for n in ast.walk(tree) if isinstance(n, ast.ImportFrom)}
    assert {module.split(".")[0] for module in imported} <= set(sys.stdlib_module_names) | {"_setup"}


def test_an_old_python_is_told_so(scripts):
    setup = scripts["setup"]
    setup.require_python((3, 11, 0))
    with pytest.raises(setup.ScriptError, match=r"3\.11 or newer is needed, this is 3\.9") as caught:
        setup.require_python((3, 9, 18))
    assert caught.value.status == 2


@pytest.mark.parametrize("missing", ["venv", "ensurepip"])
def test_a_python_without_venv_is_told_the_remedy(scripts, missing):
    setup = scripts["setup"]
    with pytest.raises(setup.ScriptError, match="apt install python3-venv") as caught:
        setup.require_python(find=lambda name: None if name == missing else object())
    assert caught.value.status == 2


def test_results_are_never_overwritten(scripts, tmp_path):
    names = []
    for _ in range(3):
        folder = scripts["demo"].free_folder(tmp_path, "core")
        folder.mkdir()
        names.append(folder.name)
    assert names == ["core", "core-2", "core-3"]


@pytest.fixture
def clone(scripts, tmp_path, monkeypatch):
    """A made-up clone whose commands are recorded, not run; yields its setup module and the list of commands."""
    setup, commands = scripts["setup"], []
    (tmp_path / "pyproject.toml").write_text("one", encoding="utf-8")

    def quietly(arguments):
        commands.append([str(a) for a in arguments])
        homog = setup.command(tmp_path / ".venv", "homog")
        homog.parent.mkdir(parents=True, exist_ok=True)
        homog.touch()

    monkeypatch.setattr(setup, "ROOT", tmp_path)
    monkeypatch.setattr(setup, "quietly", quietly)
    monkeypatch.setattr(setup, "works", lambda venv: venv.exists())
    return setup, commands


def prepare(clone, extras=()):
    """Return how often the environment was made and what was installed by one call."""
    setup, commands = clone
    commands.clear()
    setup.prepare(setup.Steps(2), extras)
    return sum("venv" in c for c in commands), [c[-1] for c in commands if "pip" in c]


def test_the_second_run_installs_nothing(clone):
    assert prepare(clone) == (1, ["."])
    assert prepare(clone) == (0, [])


def test_demo_and_check_share_the_environment_in_either_order(clone):
    assert prepare(clone) == (1, ["."])
    assert prepare(clone, ["dev"]) == (0, [".[dev]"])
    assert prepare(clone) == (0, [])
    clone[0].ROOT.joinpath("pyproject.toml").write_text("two", encoding="utf-8")
    assert prepare(clone) == (0, [".[dev]"]), "a demo after a change must keep the developer's tools"


def test_an_interrupted_installation_is_done_again(clone, monkeypatch):
    setup, _ = clone
    with monkeypatch.context() as broken:
        setup_quietly = setup.quietly

        def quietly(arguments):
            if "pip" in arguments:
                raise KeyboardInterrupt
            setup_quietly(arguments)

        broken.setattr(setup, "quietly", quietly)
        with pytest.raises(KeyboardInterrupt):
            setup.prepare(setup.Steps(2))
    assert prepare(clone) == (0, ["."])


def test_a_moved_clone_gets_a_new_environment(clone):
    prepare(clone, ["dev"])
    stamp = clone[0].ROOT / ".venv" / "homog-installed.json"
    stamp.write_text(json.dumps(dict(json.loads(stamp.read_text()), root="/elsewhere")), encoding="utf-8")
    assert prepare(clone) == (1, [".[dev]"])
    assert "--clear" in clone[1][0]


def test_an_environment_that_broke_is_made_and_filled_again(clone, monkeypatch):
    prepare(clone)
    monkeypatch.setattr(clone[0], "works", lambda venv: False)
    assert prepare(clone) == (1, ["."])


def test_a_failing_command_shows_the_end_of_its_log(scripts, tmp_path, monkeypatch, capsys):
    setup = scripts["setup"]
    monkeypatch.setattr(setup, "ROOT", tmp_path)
    setup.quietly([sys.executable, "-c", "print('fine')"])
    assert capsys.readouterr() == ("", "")
    with pytest.raises(setup.ScriptError, match=r"status 3.*\.venv\.log"):
        setup.quietly([sys.executable, "-c", "print('no such package'); raise SystemExit(3)"])
    assert "no such package" in capsys.readouterr().err


@pytest.mark.parametrize(("failing", "status"), [([], 0), (["mypy"], 1), (["ruff", "pytest"], 1)])
def test_check_runs_everything_and_fails_if_anything_failed(scripts, monkeypatch, capsys, failing, status):
    check, ran = scripts["check"], []

    class Result:
        def __init__(self, returncode):
            self.returncode = returncode

    def run(arguments, cwd):
        ran.append(arguments[2:])
        return Result(int(arguments[2] in failing))

    monkeypatch.setattr(check, "prepare", lambda steps, extras: Path("env"))
    monkeypatch.setattr(check.subprocess, "run", run)
    monkeypatch.setattr(sys, "argv", ["check.py", "-k", "one"])
    with pytest.raises(SystemExit) as caught:
        scripts["setup"].run_main(check.main)
    assert caught.value.code == status
    assert [r[0] for r in ran] == ["ruff", "mypy", "pytest"] and ran[-1] == ["pytest", "-k", "one"]
    said = capsys.readouterr()
    assert ("All checks passed" in said.out) == (not failing)
    assert all(name in said.err for name in failing)
