"""Screen the demo brief on a fresh machine: `python3 scripts/demo.py`.

Makes or updates the virtual environment .venv, installs the package, screens the brief into a new folder below
results/ and says where the results are. Needs only Python and its venv module; safe to run again.
"""

import itertools
import subprocess
from pathlib import Path

from _setup import ROOT, ScriptError, Steps, command, prepare, run_main

BRIEF = Path("data", "briefs", "saddle-core.toml")


def free_folder(parent, name):
    """Return the first of name, name-2, name-3, ... that does not exist: results are never overwritten."""
    candidates = itertools.chain([name], (f"{name}-{k}" for k in itertools.count(2)))
    return next(parent / c for c in candidates if not (parent / c).exists())


def main():
    steps = Steps(3)
    venv = prepare(steps, ["solid"])
    (ROOT / "results").mkdir(exist_ok=True)
    out = free_folder(ROOT / "results", BRIEF.stem)
    arguments = ["screen", str(BRIEF), "--out", str(out.relative_to(ROOT))]
    steps.begin("homog " + " ".join(arguments))
    status = subprocess.run([str(command(venv, "homog")), *arguments], cwd=str(ROOT)).returncode
    if status:
        raise ScriptError(f"The demo failed: the screen ended with status {status} (its message is above).", status)
    print(f"Demo done in {steps.seconds():.0f} s. The results are in {out}: start with summary.md")
    return 0


if __name__ == "__main__":
    run_main(main)
