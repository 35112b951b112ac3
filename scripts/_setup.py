"""What demo.py and check.py share: one virtual environment in the clone, and progress that a person can follow.

Only the standard library, and only syntax that Python 3.7 can read, so that an old Python is told so in one line.
The package is installed editable by both scripts: whatever was run last, the environment runs the source as it is now,
and pip is only called again when pyproject.toml changes, an extra is missing or the clone was moved.
"""

import hashlib
import importlib.util
import json
import os
import subprocess
import sys
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
MINIMUM = (3, 11)
BAD_SETUP = 2  # exit status: this machine lacks something, and the message says what to do


class ScriptError(Exception):
    """End with one clear line and a status."""

    def __init__(self, message, status=1):
        super().__init__(message)
        self.status = status


class Steps:
    """Numbered progress lines with the time since the start."""

    def __init__(self, total):
        self.total, self.done, self.start = total, 0, time.monotonic()

    def seconds(self):
        return time.monotonic() - self.start

    def begin(self, text):
        self.done += 1
        print(f"[{self.done}/{self.total}] {self.seconds():4.0f} s  {text}", flush=True)


def run_main(main):
    """Run `main()` and exit with its status; a ScriptError or Ctrl-C becomes one line."""
    try:
        sys.exit(main())
    except ScriptError as error:
        print(error, file=sys.stderr)
        sys.exit(error.status)
    except KeyboardInterrupt:
        print("\nStopped; it is safe to run this again.", file=sys.stderr)
        sys.exit(130)


def require_python(version=sys.version_info, find=importlib.util.find_spec):
    """Raise ScriptError if this Python is too old or cannot make a virtual environment."""
    if tuple(version[:2]) < MINIMUM:
        needed, got = (".".join(map(str, v[:2])) for v in (MINIMUM, version))
        raise ScriptError(
            f"Python {needed} or newer is needed, this is {got}; run the script as python{needed} or newer.",
            BAD_SETUP,
        )
    if find("venv") is None or find("ensurepip") is None:
        raise ScriptError(
            "This Python lacks its venv or ensurepip module; install it (Debian and Ubuntu: apt install python3-venv).",
            BAD_SETUP,
        )


def command(venv, name):
    """Return the path of a command in a virtual environment."""
    return venv / "Scripts" / (name + ".exe") if os.name == "nt" else venv / "bin" / name


def wanted(root, extras):
    """Return what an up-to-date installation records."""
    digest = hashlib.sha256((root / "pyproject.toml").read_bytes()).hexdigest()
    return {"root": str(root), "pyproject": digest, "extras": sorted(extras)}


def recorded(stamp):
    """Return what the last complete installation recorded, or an empty one."""
    try:
        return dict({"root": None, "pyproject": None, "extras": []}, **json.loads(stamp.read_text(encoding="utf-8")))
    except (OSError, ValueError):
        return {"root": None, "pyproject": None, "extras": []}


def quietly(arguments):
    """Run a command, its output in .venv.log, counting seconds on a terminal; if it fails show the end of the log."""
    log = ROOT / ".venv.log"
    arguments = [str(a) for a in arguments]
    with open(str(log), "w", encoding="utf-8") as output:
        process = subprocess.Popen(
            arguments, stdin=subprocess.DEVNULL, stdout=output, stderr=subprocess.STDOUT, cwd=str(ROOT)
        )
        seconds = 0
        while True:
            try:
                status = process.wait(timeout=1)
                break
            except subprocess.TimeoutExpired:
                seconds += 1
                if sys.stdout.isatty():
                    print(f"\r      {seconds} s", end="", flush=True)
            except BaseException:
                process.kill()
                process.wait()
                raise
        if seconds and sys.stdout.isatty():
            print("\r" + " " * 20 + "\r", end="", flush=True)
    if status:
        lines = log.read_text(encoding="utf-8", errors="replace").splitlines()
        print("\n".join(lines[-40:]), file=sys.stderr)
        raise ScriptError(f"Setting up failed (status {status}); the whole log is {log}. Is the registry reachable?")


def works(venv):
    """Say whether the environment has a running Python of the right age with pip."""
    probe = f"import sys, pip; sys.exit(sys.version_info < {MINIMUM})"
    try:
        return subprocess.run([str(command(venv, "python")), "-c", probe], stderr=subprocess.DEVNULL).returncode == 0
    except OSError:
        return False


def prepare(steps, extras=()):
    """Bring the clone's environment up to date in two steps and return its path."""
    require_python()
    venv = ROOT / ".venv"
    stamp = venv / "homog-installed.json"
    before = recorded(stamp)
    moved = before["root"] not in (None, str(ROOT))  # the commands in it still name the old place

    if works(venv) and not moved:
        steps.begin("Virtual environment .venv is there")
    else:
        steps.begin("Making the virtual environment .venv")
        clear = ["--clear"] if moved else []
        quietly([sys.executable, "-m", "venv", *clear, "--prompt", "homog", venv])
        before["root"] = None  # what was recorded is not in the new one

    # Extras of earlier runs stay: the demo after a check must not take the developer's tools away.
    now = wanted(ROOT, set(extras) | set(before["extras"]))
    if before == now and command(venv, "homog").exists():
        steps.begin("Packages are up to date")
        return venv
    target = "." + ("[" + ",".join(now["extras"]) + "]" if now["extras"] else "")
    steps.begin(f"pip install -e {target}  (a minute or two the first time)")
    if stamp.exists():
        stamp.unlink()
    quietly([command(venv, "python"), "-m", "pip", "install", "--no-input", "-e", target])
    stamp.write_text(json.dumps(now), encoding="utf-8")
    return venv
