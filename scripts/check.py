"""Check everything on a fresh machine: `python3 scripts/check.py [arguments for pytest]`.

Makes or updates the virtual environment .venv with the developer's tools, then runs ruff, mypy and every test. All
three run even if one fails; the exit status is 0 only if all passed. Safe to run again.
"""

import subprocess
import sys

from _setup import ROOT, ScriptError, Steps, command, prepare, run_main


def checks(pytest_arguments):
    """Return the checks by name, each a list of arguments."""
    return {
        "ruff": ["ruff", "check", "."],
        "mypy": ["mypy", "homog"],
        "pytest": ["pytest", *pytest_arguments],
    }


def main():
    todo = checks(sys.argv[1:])
    steps = Steps(2 + len(todo))
    venv = prepare(steps, ["dev"])
    failed = []
    for name, arguments in todo.items():
        steps.begin(" ".join(arguments))
        tool = [str(command(venv, "python")), "-m", *arguments]
        if subprocess.run(tool, cwd=str(ROOT)).returncode:
            failed.append(name)
    if failed:
        raise ScriptError(f"Checks failed: {', '.join(failed)} ({steps.seconds():.0f} s); their output is above.")
    print(f"All checks passed: {', '.join(todo)} ({steps.seconds():.0f} s).")
    return 0


if __name__ == "__main__":
    run_main(main)
