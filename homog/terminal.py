"""What the command line shows while it works: progress, an estimate, and how to go on with what was stopped."""

from __future__ import annotations

import shutil
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

from homog.errors import HomogError

if TYPE_CHECKING:
    from homog.store import Folder

LARGE = 1_000_000
"""Candidates from which an estimate of time and room is told."""
TELL_AFTER = 10.0
"""Seconds that a rate is measured for before anything is estimated from it."""
TELL_EVERY = 60.0
"""Seconds between lines of progress where there is no terminal."""


class Stopped(Exception):  # noqa: N818, being told to stop is no error
    """Told to stop: what to say, and the exit status."""

    def __init__(self, words: str, status: int) -> None:
        super().__init__(words)
        self.status = status


@contextmanager
def kept(place: Path) -> Iterator[None]:
    """Say what a run leaves in its place, and how to go on with it, if it is stopped or fails."""
    from homog.store import has_parts

    def words(why: str) -> str:
        if has_parts(place):
            return f"{why}; what is done is kept in '{place}': give the same command with --resume to go on"
        return f"{why}; nothing was written" if why == "stopped" else why

    try:
        yield
    except KeyboardInterrupt:
        raise Stopped(words("stopped"), 130) from None
    except SystemExit as stop:
        raise Stopped(words("stopped"), int(stop.code or 0)) from None
    except HomogError as error:
        raise HomogError(words(str(error))) from error
    except Exception as error:
        error.add_note(words("The run has failed"))
        raise


@contextmanager
def progress(
    total: int, words: str, *, parts: Folder | None = None, computing: str = ""
) -> Iterator[Callable[[int], None]]:
    """Show a bar with rate and time left on a terminal, a line a minute in a pipe; yield a function of the number done.

    Of a large run, time and room are estimated on standard error as soon as some of it is done.
    """
    started = told = time.monotonic()
    done = fresh = 0
    there = len(parts.done()) if parts is not None else 0
    estimated = total < LARGE or parts is None

    def line(text: str) -> None:
        print(f"homog: {text}", file=sys.stderr, flush=True)

    def estimate(say: Callable[[str], None]) -> None:
        nonlocal estimated
        if estimated or parts is None or time.monotonic() - started < TELL_AFTER or not fresh:
            return
        estimated = True
        size, free = parts.size() * total / done, shutil.disk_usage(parts.place).free
        left = (total - done) * (time.monotonic() - started) / fresh
        say(f"{total:,} candidates, {computing}: about {_duration(left)} and {size / 1e9:.1f} GB "
            f"({free / 1e9:.0f} GB free); Ctrl-C stops, --resume goes on")  # fmt: skip

    def count(number: int) -> None:
        nonlocal done, fresh, there, started, told
        done += number
        if there >= 0:  # what was read and not computed, and the first, which waited for workers, tell no rate
            there -= 1
            started = told = time.monotonic()
        else:
            fresh += number

    if not sys.stderr.isatty():

        def advance(number: int) -> None:
            nonlocal told
            count(number)
            estimate(line)
            now = time.monotonic()
            if now - told > TELL_EVERY and fresh:
                told, rate = now, fresh / (now - started)
                line(f"{words}: {done:,} of {total:,}, {rate:,.0f} a second, "
                     f"{_duration((total - done) / rate)} left")  # fmt: skip

        yield advance
        return
    from rich.console import Console
    from rich.progress import (
        BarColumn,
        MofNCompleteColumn,
        Progress,
        ProgressColumn,
        Task,
        TextColumn,
        TimeRemainingColumn,
    )
    from rich.text import Text

    class Rate(ProgressColumn):
        def render(self, task: Task) -> Text:
            return Text(f"{task.speed:,.0f} a second" if task.speed else "")

    columns = (TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), Rate(), TimeRemainingColumn())
    with Progress(*columns, console=Console(stderr=True), transient=True, speed_estimate_period=120.0) as bar:
        task = bar.add_task(words, total=total)

        def advance(number: int) -> None:
            count(number)
            estimate(lambda text: bar.console.print(text, highlight=False))
            bar.advance(task, number)

        yield advance


def _duration(seconds: float) -> str:
    """Return a time in the unit that reads well."""
    for unit, size in (("days", 86400.0), ("h", 3600.0), ("min", 60.0)):
        if seconds >= 1.5 * size:
            return f"{seconds / size:.1f} {unit}" if seconds < 10 * size else f"{seconds / size:.0f} {unit}"
    return f"{seconds:.0f} s"


def teller() -> Any:
    """Return a function that shows what is being written, on a terminal only."""
    if not sys.stderr.isatty():
        return lambda step: None
    return lambda step: print(f"\r\033[K{f'writing {step}' if step else ''}", end="", file=sys.stderr, flush=True)
