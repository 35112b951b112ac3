"""The README's commands and their printed numbers, run as a reader would run them."""

import doctest
import re
import shlex
from pathlib import Path

import pytest

from homog.cli import main

README = Path(__file__).resolve().parent.parent / "README.md"


def blocks(language):
    """Return the fenced blocks of a language."""
    return re.findall(rf"```{language}\n(.*?)```", README.read_text(encoding="utf-8"), re.S)


def squeezed(text):
    """Return the lines of a text with runs of blanks made one, empty lines left out."""
    return [" ".join(line.split()) for line in text.splitlines() if line.strip()]


def sessions():
    """Yield (command, lines it must print) of every console block."""
    for block in blocks("console"):
        for part in re.split(r"^\$ ", block, flags=re.M)[1:]:
            command, *printed = part.splitlines()
            yield command, [line for line in squeezed("\n".join(printed)) if line != "..."]


def missing(expected, printed):
    """Return the expected lines that a printout does not hold."""
    have = set(squeezed(printed))
    return [line for line in expected if line not in have]


@pytest.mark.parametrize(("command", "expected"), list(sessions()), ids=lambda value: str(value)[:40])
def test_console_blocks_print_what_they_say(command, expected, tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    words = shlex.split(command)
    assert words[0] == "homog"
    assert expected, "a command of the README shows nothing that could be checked"
    assert main(words[1:]) == 0
    assert missing(expected, capsys.readouterr().out) == []


def test_a_wrong_number_in_the_readme_would_be_seen():
    assert missing(["nu12 -0.9625"], " nu12   -0.9624") == ["nu12 -0.9625"]


def test_python_blocks_print_what_they_say():
    found = blocks("python")
    assert found
    for block in found:
        test = doctest.DocTestParser().get_doctest(block, {}, "README", str(README), 0)
        runner = doctest.DocTestRunner(optionflags=doctest.NORMALIZE_WHITESPACE)
        runner.run(test)
        assert runner.failures == 0
        assert runner.tries > 0
