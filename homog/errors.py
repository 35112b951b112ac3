"""The project's exceptions.

Every message is one line that says what was given, what is allowed and what to do. Only the command line turns
them into exit codes; library code raises and never prints.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class HomogError(Exception):
    """Base of everything the package raises on purpose."""


class InputError(HomogError, ValueError):
    """A value from outside is missing, unknown or out of range."""


class GeometryError(InputError):
    """The parameters describe a cell that cannot exist (walls that collide, voids that close)."""


class MechanismError(HomogError):
    """The single cell deforms at no energy, so its compliance does not exist."""


class MissingExtra(HomogError, ImportError):
    """A feature needs an optional dependency that is not installed."""

    def __init__(self, feature: str, extra: str) -> None:
        super().__init__(f"{feature} needs the extra '{extra}': pip install 'homog-cells[{extra}]'")
        self.given = feature, extra

    def __reduce__(self) -> tuple[type[MissingExtra], tuple[str, str]]:
        """Travel from a worker process as what it was made from."""
        return MissingExtra, self.given


def unknown(what: str, got: str, known: Iterable[str], remedy: str = "") -> InputError:
    """Return the error for a name that is not in a list, with the nearest known names.

    >>> print(unknown("family", "kagom", ["kagome-grid", "square-grid"]))
    Unknown family 'kagom'; nearest known: kagome-grid
    """
    names = sorted(known)
    near = difflib.get_close_matches(got, names, n=3, cutoff=0.5)
    if not near:
        near = [name for name in names if got and got.lower() in name.lower()][:3]
    listed = f"nearest known: {', '.join(near)}" if near else f"known: {', '.join(names)}"
    return InputError(f"Unknown {what} '{got}'; {listed}" + (f"; {remedy}" if remedy else ""))
