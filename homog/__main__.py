"""`python -m homog` is the command line."""

from homog.cli import entry

entry()
