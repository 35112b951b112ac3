"""What all figures share: colours, how names and numbers are written, the foot of the page, and saving.

Ink, blue and ochre differ in lightness as well as in hue, and every meaning has a second sign (width, dash, hairs,
marker), so that nothing is lost in greyscale or to the colour-blind. `save` writes a figure whole or not at all, and
the same figure gives the same bytes.
"""

from __future__ import annotations

import math
import os
import re
import threading
from collections.abc import Callable
from functools import cache, wraps
from pathlib import Path
from typing import TYPE_CHECKING, Any, ParamSpec, Protocol, TypeVar

import numpy as np
from numpy.typing import NDArray

from homog.errors import InputError

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

INK, BLUE, OCHRE, PALE, WEDGE = "#1d232e", "#2f5d94", "#b5651d", "#f5dfb8", "#ece9e2"
GREY, RULE, BODY, FAINT = "#555d69", "#cfd4da", "#41587a", "#cdd5df"
SMALL, PLAIN, HEAD, TITLE = 8.0, 9.0, 10.5, 13.5
"""Sizes of letters in points; figures are laid out in inches at the size they are printed."""

MEANING = "linear, small strain, infinite perfect lattice, room temperature; screening only, not design evidence"
"""What every number of a figure is."""

SUFFIXES = (".pdf", ".png", ".svg")
DOTS_PER_INCH = 200
"""Of a PNG, and of the parts of an SVG or PDF that are too many to be drawn one by one."""
UNITS = {"MPa": "MPa", "kg_m3": "kg/m³", "N_per_mm": "N/mm", "N_mm": "N mm", "deg": "°", "mm": "mm"}

_drawing = threading.RLock()
P = ParamSpec("P")
R = TypeVar("R")


def one_at_a_time(function: Callable[P, R]) -> Callable[P, R]:
    """Return the function behind a lock: measuring text and the salt of SVG names are global in matplotlib."""

    @wraps(function)
    def locked(*args: P.args, **kwargs: P.kwargs) -> R:
        with _drawing:
            return function(*args, **kwargs)

    return locked


class Limit(Protocol):
    """A requirement on an output column: low <= value <= high, infinite where open."""

    @property
    def column(self) -> str:
        """Name of the column."""

    @property
    def low(self) -> float:
        """Least value allowed."""

    @property
    def high(self) -> float:
        """Largest value allowed."""


def symbol(column: str) -> tuple[str, str]:
    """Return a column's symbol and unit as they are printed.

    >>> symbol("E1_MPa"), symbol("bending_nu12"), symbol("eta1_12")
    (('E₁', 'MPa'), ('bending ν₁₂', ''), ('η₁,₁₂', ''))
    """
    unit = next((u for u in UNITS if column.endswith("_" + u)), "")
    name = column.removesuffix("_" + unit) if unit else column
    for word, letter in (("nu", "ν"), ("eta", "η")):
        name = re.sub(rf"(?<![a-z]){word}(?=[0-9_]|$)", letter, name)
    name = re.sub(r"(?<=[A-Zνη])[0-9]+(_[0-9]+)?", _lowered, name)
    return name.replace("_", " "), UNITS.get(unit, "")


def _lowered(match: re.Match[str]) -> str:
    return match.group().translate(str.maketrans("0123456789_", "₀₁₂₃₄₅₆₇₈₉,"))


def number(value: float, unit: str = "", *, places: int | None = None) -> str:
    """Return three figures (or fixed `places`) with a true minus sign, powers of ten written out, and the unit.

    >>> number(-0.4, places=2), number(12345.0, "MPa"), number(4.2e-7)
    ('−0.40', '12300 MPa', '4.2·10⁻⁷')
    """
    if not math.isfinite(value):
        return "no value" if math.isnan(value) else "∞"
    if places is not None and abs(value) < 100.0:
        text = f"{value:.{places}f}"
    elif value == 0.0 or 1e-3 <= abs(value) < 1e5:
        text = f"{float(f'{value:.3g}'):.12g}"
    else:
        mantissa, power = f"{value:.2e}".split("e")
        raised = str(int(power)).translate(str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"))
        times = "" if float(mantissa) == 1.0 else f"{float(mantissa):g}·"
        text = f"{times}10{raised}"
    text = re.sub(r"^-(?=0(\.0*)?$)", "", text).replace("-", "−")
    return text + (unit if unit in ("", "°") else f" {unit}")


def value_of(column: str, value: float) -> str:
    """Return a value of a column with its unit, Poisson's ratios and couplings with two decimals."""
    name, unit = symbol(column)
    return number(value, unit, places=2 if "ν" in name or "η" in name else None)


def bounds_of(limit: Limit) -> str:
    """Return the requirement as it is printed, `ν₁₂ ≤ −0.40`."""
    span = [f"≥ {value_of(limit.column, limit.low)}"] if math.isfinite(limit.low) else []
    span += [f"≤ {value_of(limit.column, limit.high)}"] if math.isfinite(limit.high) else []
    return f"{symbol(limit.column)[0]} {' and '.join(span)}"


def blank_figure(width: float, height: float) -> Figure:
    """Return an empty white figure of that size in inches, with a canvas that needs no screen."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width, height), dpi=DOTS_PER_INCH, facecolor="white")
    FigureCanvasAgg(figure)
    return figure


def axes_at(figure: Figure, x: float, y: float, width: float, height: float, label: str) -> Axes:
    """Return axes at a place given in inches from the lower left corner."""
    w, h = figure.get_size_inches()
    return figure.add_axes((x / w, y / h, width / w, height / h), label=label)


def axes_size(ax: Axes) -> NDArray[np.float64]:
    """Return width and height of axes in inches."""
    from matplotlib.figure import Figure

    figure, box = ax.get_figure(), ax.get_position()
    assert isinstance(figure, Figure), "axes that stand on no page"
    return np.asarray(figure.get_size_inches() * np.array([box.width, box.height]))


def write(figure: Figure, x: float, y: float, text: str, **style: Any) -> Any:
    """Write text at a place given in inches, small ink letters unless the style says otherwise."""
    w, h = figure.get_size_inches()
    style = {"fontsize": SMALL, "color": INK, "va": "top", "ha": "left", **style}
    return figure.text(x / w, y / h, text, **style)


@cache
def wide(text: str, size: float = SMALL) -> float:
    """Return the width of a text in inches."""
    from matplotlib.font_manager import FontProperties
    from matplotlib.textpath import text_to_path

    return float(text_to_path.get_text_width_height_descent(text, FontProperties(size=size), ismath=False)[0]) / 72.0


def wrapped(text: str, inches: float, size: float = SMALL) -> list[str]:
    """Return the lines of a text that fit a width; a word that is too long has a line of its own."""
    lines = [""]
    for word in text.split(" "):
        longer = f"{lines[-1]} {word}".strip() if lines[-1] else word
        if lines[-1] and wide(longer, size) > inches:
            lines.append(word)
        else:
            lines[-1] = longer
    return lines


def foot(figure: Figure, basis: str) -> None:
    """Write at the foot what the numbers rest on (`basis`: model, parent) and what they are."""
    width = float(figure.get_size_inches()[0])
    lines = wrapped(f"{basis}. {MEANING[0].upper()}{MEANING[1:]}.", width - 0.4)
    write(figure, 0.2, 0.1 + 0.14 * len(lines), "\n".join(lines), color=GREY, gid="foot")


@one_at_a_time
def save(figure: Figure, path: str | os.PathLike[str]) -> None:
    """Write a figure as SVG, PNG or PDF, by its suffix; whole or not at all, the same bytes for the same figure.

    Raises
    ------
    InputError
        Another suffix, or a folder that cannot be written.
    """
    import matplotlib

    target = Path(path)
    suffix = target.suffix.lower()
    if suffix not in SUFFIXES:
        raise InputError(f"Figure '{target.name}' has the suffix '{target.suffix}'; allowed are {', '.join(SUFFIXES)}")
    metadata: dict[str, Any] = {".pdf": {"CreationDate": None}, ".png": {}, ".svg": {"Date": None}}[suffix]
    part = target.with_name(f".{target.name}.{os.getpid()}-{threading.get_ident()}.part")
    try:
        with matplotlib.rc_context({"svg.hashsalt": "homog"}):
            figure.savefig(part, format=suffix[1:], dpi=DOTS_PER_INCH, metadata=metadata)
        os.replace(part, target)
    except OSError as error:
        raise InputError(f"Cannot write '{target}': {error.strerror or error}; choose a folder you may write") from None
    finally:
        part.unlink(missing_ok=True)
