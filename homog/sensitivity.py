"""How every output quantity changes with every parameter of a family, from one solution.

A column is a function of the tensor, the density and the cell. `gradient` says how stiffness and compliance move; each
column is then differenced along that line, C +- h dC and S +- h dS side by side (so that no soft strain is lost in an
inverse), on cells built at p +- h. Extremes over directions need nothing more: at an extreme the direction does not
count (envelope theorem). Where a column has a kink (the thinner of two equal walls) the result is the mean of both
sides. Words, counts and the directions of extremes (`Column.smooth`) have no derivative: NaN.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from homog.cell import Kind
from homog.columns import COLUMNS, column, columns_of, evaluate
from homog.effective import DEFAULT_MODEL, Effective, homogenize
from homog.errors import InputError
from homog.families import FAMILIES, Family, family
from homog.gradient import Move, check_differentiable, moved, numeric, parameters_of, sizes, sound, tensor_rates
from homog.materials import UNIT, Material
from homog.materials import material as named_material
from homog.results import Results

if TYPE_CHECKING:
    import pandas as pd

Array = NDArray[np.float64]

FINE = 3e-6
"""Step of the columns along the tensor's line: share of a length, radians of an angle. With k the stiffest strain over
the softest, some columns have a round-off of 1e-16 k / FINE, and the difference leaves out FINE^2 k / 6."""
ZERO = 1e-12
"""A value below this is the round-off of a zero, of which nothing is a percentage."""


def smooth_columns(kind: Kind) -> list[str]:
    """Return the columns of a kind of cell that have a derivative, in order."""
    return [name for name in columns_of(kind) if COLUMNS[name].smooth]


def column_rates(
    effective: Effective, names: Sequence[str], *, moves: Sequence[Move] | None = None, part: Sequence[float] = ()
) -> dict[str, Array]:
    """Return the derivative of columns along moves of the parameters, ndarray of shape (q, b) by column name.

    Parameters
    ----------
    effective : Effective
        What `homogenize` made of a family's cell, any batch (b members when flattened); not of the model `solid`.
    names : sequence of str
        Columns; NaN for one that is not smooth, or that the kind of cell does not have.
    moves : sequence of q mappings from parameter to rate
        One for each numeric parameter in the family's order if not given.
    part : sequence of float
        Size of the part along the axes, mm, for `cells_across`.

    Returns
    -------
    dict of str to ndarray of shape (q, b)
        Per mm or degree (per unit of the move); NaN for members without a compliance.
    """
    check_differentiable(effective)
    found = FAMILIES[effective.cell.family]
    along = [{name: 1.0} for name in numeric(found)] if moves is None else moves
    q, count, v = len(along), int(effective.status.size), effective.stiffness.shape[-1]
    out = {name: np.full((q, count), np.nan) for name in names}
    wanted = [name for name in names if column(name).smooth and effective.kind in column(name).kinds]
    good = sound(effective)
    if not (wanted and len(good) and q):
        return out
    dC, dS = (x[:, None, good] for x in tensor_rates(effective, along))
    C = effective.stiffness.reshape(-1, v, v)[good]
    h = FINE * sizes(found, parameters_of(effective.cell, good), along)
    steps = np.array([-1.0, 1.0])[:, None] * h[:, None]  # (q, 2, b)
    cell = moved(effective.cell, good, along, steps)
    every = np.tile(good, 2 * q)
    beside = dataclasses.replace(
        effective,
        stiffness=(C + steps[..., None, None] * dC).reshape(-1, v, v),
        relative_density=np.broadcast_to(cell.relative_density, every.shape),
        mechanisms=effective.mechanisms.reshape(-1)[every],
        status=effective.status.reshape(-1)[every],
        flags=np.broadcast_to(effective.flags, effective.status.shape).reshape(-1)[every],
        cell=cell,
    )
    results = Results(beside, part)
    results.compliance = (np.linalg.inv(C) + steps[..., None, None] * dS).reshape(-1, v, v)
    with np.errstate(all="ignore"):
        for name in wanted:
            value = np.asarray(COLUMNS[name].of(results), float).reshape(q, 2, -1)
            out[name][:, good] = (value[:, 1] - value[:, 0]) / (2.0 * h)
    return out


def sensitivities(
    family_id: str,
    given: Mapping[str, ArrayLike] | None = None,
    *,
    material: Material | str = UNIT,
    model: str = DEFAULT_MODEL,
    columns: Sequence[str] | None = None,
    relative: bool = False,
) -> pd.DataFrame:
    """Return the derivative of output quantities by each numeric parameter of a family, the others held.

    Parameters
    ----------
    family_id : str
    given : mapping of parameter to float or array_like
        mm and degrees; defaults otherwise. A parameter that follows another by default (`vertical_thickness`) is still
        one of its own: add both for walls that change together.
    material, model : as in `homog.build` and `homog.homogenize`
    columns : sequence of str
        All that have a derivative if not given.
    relative : bool
        In percent per percent (elasticities) instead of the column's unit per mm or degree.

    Returns
    -------
    DataFrame
        One row a column and one column a parameter; for a batch one row a (member, column). NaN where there is no
        derivative: words, counts, directions, members that do not exist.

    Examples
    --------
    >>> found = sensitivities("square-grid", {"length": 10.0, "thickness": 0.5}, model="euler", relative=True)
    >>> found.loc["E1_MPa"].round(6).tolist()  # E1 = E t/l
    [-1.0, 1.0]
    """
    import pandas as pd

    found = family(family_id)
    parent = named_material(material) if isinstance(material, str) else material
    names = chosen_columns(found, columns)
    cell = found.build(given or {}, parent)
    single = not cell.shape
    effective = homogenize(cell, model=model)
    by = numeric(found)
    rates = column_rates(effective, names)
    values = np.stack([rates[name] for name in names])  # (column, parameter, member)
    if relative:
        values = elasticities(effective, names, values)
    if single:
        return pd.DataFrame(values[..., 0], index=pd.Index(names, name="column"), columns=by)
    index = pd.MultiIndex.from_product([range(values.shape[-1]), names], names=["member", "column"])
    return pd.DataFrame(np.moveaxis(values, -1, 0).reshape(len(index), len(by)), index=index, columns=by)


def chosen_columns(found: Family, columns: Sequence[str] | None) -> list[str]:
    """Return the columns asked for, or all smooth ones; InputError for one that the family's cells do not have."""
    if not columns:
        return smooth_columns(found.kind)
    for name in columns:
        if found.kind not in column(name).kinds:
            raise InputError(f"Column '{name}' is not one of {found.kind} cells, which '{found.id}' are; "
                             f"'homog families {found.id}' lists theirs")  # fmt: skip
    return list(columns)


def elasticities(effective: Effective, names: Sequence[str], rates: Array) -> Array:
    """Return derivatives (column, parameter, member) as percent per percent; NaN where the column is 0."""
    found = FAMILIES[effective.cell.family]
    values = parameters_of(effective.cell, np.arange(effective.status.size))
    x = np.stack([values[name] for name in numeric(found)])
    row = evaluate(effective, names)
    y = np.stack([np.asarray(row[n], float) if not COLUMNS[n].text else np.full(x.shape[-1], np.nan) for n in names])
    with np.errstate(all="ignore"):
        return np.where(np.abs(y[:, None]) > ZERO, rates * x / y[:, None], np.nan)
