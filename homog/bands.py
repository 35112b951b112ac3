"""How far a model can be trusted: bands round E1 and nu12 in which a solid of the true section was found to lie.

`bands.csv` holds, for each measured family group, model and slenderness (largest t/l), the envelope over shapes of what
the solid has against the model (`scripts/model_errors.py`):

    E1_solid = E1_model * factor,    nu12_solid = nu12_model + shift * sqrt(E1/E2)

sqrt(E1/E2) is the limit of |nu12| (Lempriere 1968), so one shift serves cells of any anisotropy. A factor never
excludes 1, nor a shift 0: where a model only errs to one side the band is one-sided. Between slendernesses the envelope
is linear; below the least measured one it is held, which is wide, since the error dies with t/l; above the largest, and
for shapes, parents and families that were not measured, there is no band: NaN. A band is a record of what was seen over
a sample of shapes, with the coverage that the documentation states; it is not a bound. Arrays only.
"""

from __future__ import annotations

import csv
from collections.abc import Callable, Mapping
from functools import cache
from importlib import resources
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

TABLE = "bands.csv"
ENTRIES = ("E1_low", "E1_high", "nu12_low", "nu12_high")
NEAR = "joint, near"
"""The rows of the joint model for members whose joints are so near each other that they interact."""
BANDED: Mapping[str, tuple[str, str]] = {
    "E1_MPa": ("E1_low_MPa", "E1_high_MPa"),
    "nu12": ("nu12_low", "nu12_high"),
}
"""The columns that have a band, with the columns of its ends."""
LEAST_POISSON = 0.0
"""Parents were drawn from nu 0 to 0.49, half of them deep."""


class Span(NamedTuple):
    """One measure of a family's shape and the range of it that was measured."""

    words: str
    of: Callable[[Mapping[str, Any]], Any]
    low: float
    high: float


def _honeycomb(low: float, high: float, least: float, most: float) -> tuple[Span, ...]:
    return (
        Span("angle", lambda p: p["angle"], low, high),
        Span("vertical / inclined", lambda p: p["vertical"] / p["inclined"], least, most),
        Span("vertical_thickness / thickness", lambda p: p["vertical_thickness"] / p["thickness"], 0.5, 2.0),
    )


SPANS: Mapping[str, tuple[Span, ...]] = {
    "hexagonal-honeycomb": _honeycomb(5.0, 60.0, 0.4, 2.5),
    "reentrant-honeycomb": _honeycomb(-60.0, -5.0, 0.8, 3.0),
    "square-grid": (),
    "triangular-grid": (),
    "kagome-grid": (),
    "arrowhead": (
        Span("outer_angle", lambda p: p["outer_angle"], 15.0, 60.0),
        Span("inner_angle", lambda p: p["inner_angle"], 30.0, 80.0),
        Span("inner_angle - outer_angle", lambda p: p["inner_angle"] - p["outer_angle"], 15.0, 65.0),
    ),
    "anti-tetrachiral": (
        Span("ligament_y / ligament_x", lambda p: p["ligament_y"] / p["ligament_x"], 0.6, 1.6),
        Span("node_radius / ligament_x", lambda p: p["node_radius"] / p["ligament_x"], 0.1, 0.35),
    ),
}
"""The families that were measured, and over which shapes."""


class Band(NamedTuple):
    """Ends of the bands of E1 (MPa) and nu12, ndarrays of shape (m,); NaN where nothing was measured."""

    E1_low: Array
    E1_high: Array
    nu12_low: Array
    nu12_high: Array

    @property
    def columns(self) -> dict[str, Array]:
        """The ends by column name."""
        return dict(zip((name for pair in BANDED.values() for name in pair), self, strict=True))


def group(family: str, parameters: Mapping[str, Any]) -> str:
    """Return the name under which a family's cells stand in the table: chirals are told by their nodes.

    >>> group("anti-tetrachiral", {"node": "ring"})
    'anti-tetrachiral ring'
    """
    node = np.asarray(parameters.get("node", "")).flat[0]
    return f"{family} {node}".strip()


def measured(family: str, parameters: Mapping[str, Any], poisson: float) -> Mask:
    """Return where a family's shapes (parameters that broadcast to one shape) lie within what was measured."""
    shape = np.broadcast_shapes(*(np.shape(value) for value in parameters.values()))
    inside = np.full(shape, family in SPANS and poisson >= LEAST_POISSON)
    for span in SPANS.get(family, ()):
        value = np.asarray(span.of(parameters))
        slack = 1e-9 * max(abs(span.low), abs(span.high))
        inside &= (value >= span.low - slack) & (value <= span.high + slack)
    return inside


@cache
def _table() -> Mapping[tuple[str, str], tuple[Array, Array]]:
    """Return slendernesses (k,) and entries (4, k) of each group and model."""
    rows: dict[tuple[str, str], list[list[float]]] = {}
    with resources.files("homog").joinpath(TABLE).open("r", encoding="utf-8") as file:
        for row in csv.DictReader(file):
            entry = [float(row[name]) for name in ("slenderness", *ENTRIES)]
            rows.setdefault((row["group"], row["model"]), []).append(entry)
    return {key: (x[:, 0], x[:, 1:].T) for key, entries in rows.items() for x in [np.array(entries)]}


def envelope(group: str, model: str, slenderness: ArrayLike) -> Array:
    """Return the factors of E1, low and high, and the shifts of nu12, low and high, ndarray of shape (4, m).

    NaN above the largest slenderness that was measured, and for a group or model that was not.
    """
    x = np.atleast_1d(np.asarray(slenderness, float))
    if (group, model) not in _table():
        return np.full((4, *x.shape), np.nan)
    at, entries = _table()[group, model]
    found = np.array([np.interp(x, at, values) for values in entries])
    return np.where(x <= at[-1] * (1.0 + 1e-9), found, np.nan)


def _wider(one: Array, other: Array) -> Array:
    """Return the envelope (4, m) of two; NaN where either is."""
    lows = np.minimum(one[::2], other[::2])
    highs = np.maximum(one[1::2], other[1::2])
    return np.stack([lows[0], highs[0], lows[1], highs[1]])


def band(
    group: str, model: str, slenderness: Array, E1: Array, E2: Array, nu12: Array, *,
    outside: ArrayLike = False, near: ArrayLike = False,
) -> Band:  # fmt: skip
    """Return the band of members of one group, all arguments of shape (m,).

    Parameters
    ----------
    group, model : str
        See `group`; the model that was used (`Effective.model`), not `solid`.
    slenderness : ndarray
        Largest thickness over length of the cell.
    E1, E2, nu12 : ndarray
        What the model says, MPa.
    outside, near : ndarray of bool
        Flags of the joint model: a joint was taken as a point, so the band is also timoshenko's; joints are near each
        other, which has rows of its own. Where joints overlap no band is known; the caller drops it.
    """
    found = envelope(group, model, slenderness)
    if model == "joint":
        found = np.where(near, _wider(found, envelope(group, NEAR, slenderness)), found)
        found = np.where(outside, _wider(found, envelope(group, "timoshenko", slenderness)), found)
    limit = np.sqrt(E1 / E2)
    return Band(E1 * found[0], E1 * found[1], nu12 + limit * found[2], nu12 + limit * found[3])


def spread(E1: Array, nu12: Array, E1_spread: Array, nu12_spread: Array) -> Band:
    """Return the band of a solid from its own error estimates, relative of E1 and absolute of nu12."""
    return Band(E1 * (1.0 - E1_spread), E1 * (1.0 + E1_spread), nu12 - nu12_spread, nu12 + nu12_spread)


def favourable(value: ArrayLike, low: ArrayLike, high: ArrayLike, least: float, most: float) -> Mask:
    """Return where a limit is met by the value but not by its whole band: met at the favourable end only.

    Parameters
    ----------
    value, low, high : array_like of shape (m,)
        A quantity and the ends of its band.
    least, most : float
        The limit, least <= value <= most, infinite where open.

    Notes
    -----
    False where the value misses the limit (it is not met at all) and where there is no band (nothing is known, which
    is a reason of its own).

    >>> favourable([3.1, 3.1, 2.9], [2.9, 3.05, 2.7], [3.2, 3.2, 3.0], 3.0, np.inf)
    array([ True, False, False])
    """
    x, a, b = (np.asarray(v, float) for v in (value, low, high))
    return np.asarray((x >= least) & (x <= most) & ((a < least) | (b > most)))


def within_band(values: Mapping[str, Any], limits: Mapping[str, tuple[float, float]], count: int) -> Mask:
    """Return where any limit of a column with a band is met at the favourable end only, ndarray of shape (count,).

    `values` are arrays by column name with the ends of the bands among them (BANDED), `limits` (least, most) by column;
    limits of other columns are passed over.
    """
    found = np.zeros(count, bool)
    for name, (least, most) in limits.items():
        if name in BANDED:
            low, high = BANDED[name]
            found |= favourable(values[name], values[low], values[high], least, most)
    return found
