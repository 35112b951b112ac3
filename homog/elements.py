"""The elements: a few scalar strains each, their exact finite measure, its derivative, and a small weight.

A kernel takes arrays with the small local axes first and the large ones last, so that one formula serves a block of
a large cell and a batch of small ones:

    x      (k, d, *)   positions of the element's nodes          u, turn (k, d, *), (k, r, *)   their motion
    rows   (s, k, f, *) strain s per unit freedom f of node k;    f = d translations, then r rotations if `turns`
    measure (s, *)      the finite strains that rows differentiate at zero motion
    weights (s, s, *)   symmetric, positive: energy = 1/2 strains . weights . strains

Registering an entry in ELEMENTS is all that a new kind needs; assembly, scaling tests and derivative tests follow.
Bars, hinges and folds carry no joint rotation, walls and struts do, and a cell may mix both.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from homog.errors import InputError, unknown

Array = NDArray[np.float64]
Props = Mapping[str, Array]

MODELS = ("euler", "timoshenko", "joint", "solid")
"""`euler`: flexure and stretch; `timoshenko`: adds shear with kappa = 5/6 (walls), 6 (1 + nu) / (7 + 6 nu) (struts);
`joint`: the same walls or struts between condensed joints where a cell has them, else `timoshenko`; `solid`: the true
section as a continuum, planar wall cells only. Weights know the first two; `effective.homogenize` the others."""

WALL_SHEAR = 5.0 / 6.0
ARC_POINTS = 12  # Gauss points of a curved wall's flexibility: exact to round-off for arcs up to half a turn


@dataclass(frozen=True)
class Element:
    """One kind of element.

    `nodes` is the number of nodes (the least if `more` are allowed: `strains` then repeat for each node but the first),
    `strains` names what is measured (`strains_in_space` if that differs there), `dimensions` the spaces it lives in,
    `turns` whether its nodes carry rotations, `required` and `optional` the property names (optional ones are zero when
    absent).
    """

    kind: str
    nodes: int
    dimensions: tuple[int, ...]
    turns: bool
    strains: tuple[str, ...]
    required: tuple[str, ...]
    optional: tuple[str, ...]
    rows: Callable[[Array, Props], Array]
    measure: Callable[[Array, Array, Array, Props], Array]
    weights: Callable[[Array, Props, str], Array]
    more: bool = False
    strains_in_space: tuple[str, ...] = ()


def element(kind: str) -> Element:
    """Return the registered element, or raise InputError with the nearest names."""
    if kind not in ELEMENTS:
        raise unknown("element kind", kind, ELEMENTS)
    return ELEMENTS[kind]


def rotations(d: int) -> int:
    """Return the number of rotations of a node in d dimensions: 1 in the plane, 3 in space."""
    return 1 if d == 2 else 3


def _dot(a: Array, b: Array) -> Array:
    return np.asarray(np.einsum("i...,i...->...", a, b))


def _cross(a: Array, b: Array) -> Array:
    """Cross product along the first axis: a vector in space, a scalar in the plane."""
    if len(a) == 2:
        return np.asarray(a[0] * b[1] - a[1] * b[0])
    return np.stack([a[1] * b[2] - a[2] * b[1], a[2] * b[0] - a[0] * b[2], a[0] * b[1] - a[1] * b[0]])


def _norm(a: Array) -> Array:
    return np.sqrt(_dot(a, a))


# bar ------------------------------------------------------------------------------------------------------------


def _bar_rows(x: Array, props: Props) -> Array:
    e = (x[1] - x[0]) / _norm(x[1] - x[0])
    return np.stack([-e, e])[None]


def _bar_measure(x: Array, u: Array, turn: Array, props: Props) -> Array:
    return np.asarray(_norm(x[1] + u[1] - x[0] - u[0]) - _norm(x[1] - x[0]))[None]


def _bar_weights(x: Array, props: Props, model: str) -> Array:
    length = _norm(x[1] - x[0])
    return np.asarray(props["rigidity"] / length)[None, None]


# hinge: nodes i, j, k; the angle at j from bar j-i to bar j-k -------------------------------------------------------


def _angle(a: Array, b: Array) -> Array:
    return np.arctan2(_cross(a, b), _dot(a, b))


def _wrapped(angle: Array) -> Array:
    return np.asarray(np.mod(angle + np.pi, 2.0 * np.pi) - np.pi)


def _hinge_rows(x: Array, props: Props) -> Array:
    a, b = x[0] - x[1], x[2] - x[1]
    # the direction of a vector a turns by (-a2, a1) . da / |a|^2
    ga = np.stack([-a[1], a[0]]) / _dot(a, a)
    gb = np.stack([-b[1], b[0]]) / _dot(b, b)
    return np.stack([-ga, ga - gb, gb])[None]


def _hinge_measure(x: Array, u: Array, turn: Array, props: Props) -> Array:
    y = x + u
    return _wrapped(_angle(y[0] - y[1], y[2] - y[1]) - _angle(x[0] - x[1], x[2] - x[1]))[None]


def _hinge_weights(x: Array, props: Props, model: str) -> Array:
    return np.broadcast_to(props["stiffness"], x.shape[2:])[None, None]


# fold: wings i and l, edge j-k -------------------------------------------------------------------------------------


def _fold_rows(x: Array, props: Props) -> Array:
    # Liu & Paulino 2017, Proc. R. Soc. A 473, 20170348 (from memory, confirmed by central differences)
    rij, rkj, rkl = x[0] - x[1], x[2] - x[1], x[2] - x[3]
    m, n = _cross(rij, rkj), _cross(rkj, rkl)
    edge2 = _dot(rkj, rkj)
    edge = np.sqrt(edge2)
    gi = edge / _dot(m, m) * m
    gl = -edge / _dot(n, n) * n
    p, q = _dot(rij, rkj) / edge2, _dot(rkl, rkj) / edge2
    return np.stack([gi, (p - 1.0) * gi - q * gl, (q - 1.0) * gl - p * gi, gl])[None]


def _dihedral(x: Array) -> Array:
    rij, rkj, rkl = x[0] - x[1], x[2] - x[1], x[2] - x[3]
    m, n = _cross(rij, rkj), _cross(rkj, rkl)
    return np.arctan2(_norm(rkj) * _dot(m, rkl), _dot(m, n))


def _fold_measure(x: Array, u: Array, turn: Array, props: Props) -> Array:
    return _wrapped(_dihedral(x + u) - _dihedral(x))[None]


def _fold_weights(x: Array, props: Props, model: str) -> Array:
    return np.asarray(props["stiffness"] * _norm(x[2] - x[1]))[None, None]


# wall: stretch, symmetric bending r2 - r1, antisymmetric bending (r1 + r2)/2 - chord rotation ----------------------


def _arms(x: Array, props: Props) -> tuple[Array, Array] | None:
    """Return the rigid arms (2, *) from the nodes to the wall's ends, or None where the wall meets its nodes."""
    names = ("start_along", "start_across", "end_along", "end_across")
    if not any(name in props for name in names):
        return None
    e = (x[1] - x[0]) / _norm(x[1] - x[0])
    n = np.stack([-e[1], e[0]])
    sa, sc, ea, ec = (props.get(name, np.zeros(1)) for name in names)
    return np.asarray(sa * e + sc * n), np.asarray(ea * e + ec * n)


def _wall_chord(x: Array, props: Props) -> Array:
    arms = _arms(x, props)
    return np.asarray(x[1] - x[0] if arms is None else x[1] + arms[1] - x[0] - arms[0])


def _wall_rows(x: Array, props: Props) -> Array:
    arms = _arms(x, props)
    chord = _wall_chord(x, props)
    length = _norm(chord)
    e = chord / length
    n = np.stack([-e[1], e[0]])
    rows = np.zeros((3, 2, 3) + x.shape[2:])
    rows[0, 0, :2], rows[0, 1, :2] = -e, e
    rows[1, 0, 2], rows[1, 1, 2] = -1.0, 1.0
    rows[2, 0, :2], rows[2, 1, :2] = n / length, -n / length
    rows[2, 0, 2] = rows[2, 1, 2] = 0.5
    if arms is not None:  # an end at arm o moves by turn x o = turn (-o2, o1)
        for node, sign, o in ((0, -1.0, arms[0]), (1, 1.0, arms[1])):
            across = np.stack([-o[1], o[0]])
            rows[0, node, 2] += sign * _dot(e, across)
            rows[2, node, 2] -= sign * _dot(n, across) / length
    return rows


def _turned(o: Array, angle: Array) -> Array:
    c, s = np.cos(angle), np.sin(angle)
    return np.stack([c * o[0] - s * o[1], s * o[0] + c * o[1]])


def _wall_measure(x: Array, u: Array, turn: Array, props: Props) -> Array:
    arms = _arms(x, props)
    before = _wall_chord(x, props)
    after = x[1] + u[1] - x[0] - u[0]
    if arms is not None:
        after = after + _turned(arms[1], turn[1, 0]) - _turned(arms[0], turn[0, 0])
    psi = _angle(before, after)
    r1, r2 = turn[0, 0], turn[1, 0]
    return np.stack([_norm(after) - _norm(before), r2 - r1, (r1 + r2) / 2.0 - psi])


def _wall_weights(x: Array, props: Props, model: str) -> Array:
    """EA/L, EI/L and 12 EI/(L (1 + phi)) per unit depth, phi = 12 EI/(kappa G A L^2); inverse flexibility if curved
    or hinged at the ends.

    A curved wall (`arc`, the angle it turns through from start to end, positive where its middle lies to the left)
    has the exact flexibility of a thin circular bar (virtual forces); an end compliance c (rad per N mm/mm) adds
    c1 + c2, (c1 + c2)/4 and (c2 - c1)/2 to the flexibility in symmetric and antisymmetric bending and between them.
    """
    E, t = props["modulus"], props["thickness"]
    length = _norm(_wall_chord(x, props))
    EA = E * t
    EI = EA * t * t / 12.0
    shear = 0.0 if model == "euler" else 1.0
    GA = WALL_SHEAR * EA / (2.0 * (1.0 + props["poisson"]))
    W = np.zeros((3, 3) + x.shape[2:])
    if not any(name in props for name in ("arc", "start_compliance", "end_compliance")):
        phi = shear * 12.0 * EI / (GA * length**2)
        W[0, 0], W[1, 1], W[2, 2] = EA / length, EI / length, 12.0 * EI / (length * (1.0 + phi))
        return W
    f = np.zeros((3, 3) + x.shape[2:])
    arc = np.where(np.abs(props.get("arc", np.zeros(1))) < 1e-9, 1e-9, props.get("arc", np.zeros(1)))
    radius = length / (2.0 * np.sin(arc / 2.0))
    sq, cq = np.sin(arc / 4.0), np.cos(arc / 4.0)
    points, gauss = np.polynomial.legendre.leggauss(ARC_POINTS)
    for point, share in zip(points[ARC_POINTS // 2 :], gauss[ARC_POINTS // 2 :], strict=True):  # both halves are alike
        sh, ch = np.sin(point * arc / 4.0), np.cos(point * arc / 4.0)
        sine, cosine = 2.0 * sh * ch, 1.0 - 2.0 * sh * sh  # of the angle from the middle
        along, height = radius * sine / length, 2.0 * radius * (sq * ch + cq * sh) * (sq * ch - cq * sh)
        ds = share * radius * arc
        # internal moment, axial and shear force of unit stretching force: height, cosine, sine; of unit symmetric end
        # moments: one, none, none; of antisymmetric ones: along, sine/length, -cosine/length, odd about the middle
        bend, pull, shift = ds / EI, ds / EA, ds / GA * shear
        f[0, 0] += height * height * bend + cosine * cosine * pull + sine * sine * shift
        f[0, 1] += height * bend
        f[1, 1] += bend
        f[2, 2] += along * along * bend + (sine * sine * pull + cosine * cosine * shift) / length**2
    f[1, 0] = f[0, 1]
    c1, c2 = props.get("start_compliance", np.zeros(1)), props.get("end_compliance", np.zeros(1))
    f[1, 1] += c1 + c2
    f[2, 2] += (c1 + c2) / 4.0
    f[1, 2] += (c2 - c1) / 2.0
    f[2, 1] += (c2 - c1) / 2.0
    return _inverse3(f)


def _inverse3(f: Array) -> Array:
    """Return the inverse of symmetric 3 x 3 matrices (3, 3, *) by cofactors."""
    w = np.empty_like(f)
    for i in range(3):
        for j in range(i, 3):
            a, b = [k for k in range(3) if k != i], [k for k in range(3) if k != j]
            minor = f[a[0], b[0]] * f[a[1], b[1]] - f[a[0], b[1]] * f[a[1], b[0]]
            w[i, j] = w[j, i] = minor if (i + j) % 2 == 0 else -minor
    return np.asarray(w / (f[0, 0] * w[0, 0] + f[0, 1] * w[0, 1] + f[0, 2] * w[0, 2]))


# strut: stretch, twist, bending in two planes ------------------------------------------------------------------------


def _triad(x: Array) -> tuple[Array, Array, Array, Array]:
    """Return length and an orthonormal triad (e1 along the strut); a round strut does not mind which."""
    axis = x[1] - x[0]
    length = _norm(axis)
    e1 = axis / length
    upright = np.abs(e1[2]) > 0.9
    helper = np.stack([np.where(upright, 1.0, 0.0), np.zeros_like(length), np.where(upright, 0.0, 1.0)])
    e2 = _cross(helper, e1)
    e2 = e2 / _norm(e2)
    return length, e1, e2, _cross(e1, e2)


def _strut_rows(x: Array, props: Props) -> Array:
    length, e1, e2, e3 = _triad(x)
    rows = np.zeros((6, 2, 6) + x.shape[2:])
    rows[0, 0, :3], rows[0, 1, :3] = -e1, e1
    rows[1, 0, 3:], rows[1, 1, 3:] = -e1, e1
    for first, axis, across, sign in ((2, e3, e2, 1.0), (4, e2, e3, -1.0)):
        rows[first, 0, 3:], rows[first, 1, 3:] = -axis, axis
        rows[first + 1, 0, 3:] = rows[first + 1, 1, 3:] = 0.5 * axis
        # chord rotation about e3 is dv2/L, about e2 it is -dv3/L
        rows[first + 1, 0, :3], rows[first + 1, 1, :3] = sign * across / length, -sign * across / length
    return rows


def _rodrigues(v: Array, turn: Array) -> Array:
    """Return the vectors v (3, *) turned by rotation vectors (3, *)."""
    angle = _norm(turn)
    safe = np.where(angle > 0.0, angle, 1.0)
    k = turn / safe
    kxv = _cross(k, v)
    return np.asarray(v + np.sin(angle) * kxv + (1.0 - np.cos(angle)) * _cross(k, kxv))


def _strut_measure(x: Array, u: Array, turn: Array, props: Props) -> Array:
    length, e1, e2, e3 = _triad(x)
    chord = x[1] + u[1] - x[0] - u[0]
    after = _norm(chord)
    c = chord / after
    a2, a3, b2, b3 = (_rodrigues(e, turn[node]) for node in (0, 1) for e in (e2, e3))
    twist = (_dot(b2, a3) - _dot(b3, a2)) / 2.0
    # rotation of each end about e3 and e2 relative to the chord
    s3, t3 = -_dot(c, a2), -_dot(c, b2)
    s2, t2 = _dot(c, a3), _dot(c, b3)
    return np.stack([after - length, twist, t3 - s3, (s3 + t3) / 2.0, t2 - s2, (s2 + t2) / 2.0])


def _strut_weights(x: Array, props: Props, model: str) -> Array:
    """EA/L, GJ/L, and per bending plane EI/L and 12 EI/(L (1 + phi)) of a round strut, with end compliances in
    series (rad per N mm, the same in both planes)."""
    E, diameter, nu = props["modulus"], props["diameter"], props["poisson"]
    length = _norm(x[1] - x[0])
    EA, EI, G = E * np.pi * diameter**2 / 4.0, E * np.pi * diameter**4 / 64.0, E / (2.0 * (1.0 + nu))
    kappa = 6.0 * (1.0 + nu) / (7.0 + 6.0 * nu)
    phi = 0.0 if model == "euler" else 12.0 * EI / (kappa * G / E * EA * length**2)
    W = np.zeros((6, 6) + x.shape[2:])
    W[0, 0], W[1, 1] = EA / length, G * np.pi * diameter**4 / 32.0 / length
    c1, c2 = props.get("start_compliance", np.zeros(1)), props.get("end_compliance", np.zeros(1))
    fs, fa, fsa = length / EI + c1 + c2, length * (1.0 + phi) / (12.0 * EI) + (c1 + c2) / 4.0, (c2 - c1) / 2.0
    whole = fs * fa - fsa**2
    for first in (2, 4):
        W[first, first], W[first + 1, first + 1] = fa / whole, fs / whole
        W[first, first + 1] = W[first + 1, first] = -fsa / whole
    return W


# joint: motion of tips 1 to n - 1 relative to the rigid motion of tip 0, in the frame of the first tips ---


def _joint_frame(x: Array) -> Array:
    """Return the axes (d, d, *): the line from tip 0 to tip 1; in space tip 2 lies in the plane of the first two."""
    if len(x[0]) == 2:
        e = (x[1] - x[0]) / _norm(x[1] - x[0])
        return np.stack([e, np.stack([-e[1], e[0]])])
    if len(x) == 2:  # any frame round the line: the weight has to be the same for all
        return np.stack(_triad(x)[1:])
    e = (x[1] - x[0]) / _norm(x[1] - x[0])
    upright = _cross(e, x[2] - x[0])
    upright = upright / _norm(upright)
    return np.stack([e, _cross(upright, e), upright])


def _joint_rows(x: Array, props: Props) -> Array:
    frame, d = _joint_frame(x), len(x[0])
    r = rotations(d)
    rows = np.zeros(((d + r) * (len(x) - 1), len(x), d + r) + x.shape[2:])
    for i in range(1, len(x)):
        k, arm = (d + r) * (i - 1), x[i] - x[0]
        for row, axis in enumerate(frame, k):
            rows[row, i, :d], rows[row, 0, :d] = axis, -axis
            rows[row, 0, d:] = -_cross(arm, axis)  # axis . (turn x arm) = turn . (arm x axis)
        if d == 2:
            rows[k + 2, i, 2], rows[k + 2, 0, 2] = 1.0, -1.0
        else:
            rows[k + 3 : k + 6, i, 3:], rows[k + 3 : k + 6, 0, 3:] = frame, -frame
    return rows


def _joint_measure(x: Array, u: Array, turn: Array, props: Props) -> Array:
    frame = _joint_frame(x)
    strains = []
    if len(frame) == 2:
        for i in range(1, len(x)):
            moved = _turned(x[i] + u[i] - x[0] - u[0], -turn[0, 0]) - (x[i] - x[0])
            strains += [_dot(frame[0], moved), _dot(frame[1], moved), turn[i, 0] - turn[0, 0]]
        return np.stack(strains)
    mine = [_rodrigues(axis, turn[0]) for axis in frame]
    for i in range(1, len(x)):
        strains += [_dot(a, x[i] + u[i] - x[0] - u[0]) - _dot(b, x[i] - x[0]) for a, b in zip(mine, frame, strict=True)]
        his = [_rodrigues(axis, turn[i]) for axis in frame]
        # the turn relative to tip 0's, about each axis, as a strut's twist is measured
        strains += [(_dot(his[j], mine[k]) - _dot(his[k], mine[j])) / 2.0 for j, k in ((1, 2), (2, 0), (0, 1))]
    return np.stack(strains)


def _joint_weights(x: Array, props: Props, model: str) -> Array:
    return np.asarray(props["weight"])


def _entry(*args: Any) -> tuple[str, Element]:
    return args[0], Element(*args)


ENDS = ("start_compliance", "end_compliance")
ARMS = ("start_along", "start_across", "end_along", "end_across")
BENDING = ("symmetric_bending", "antisymmetric_bending")

ELEMENTS: Mapping[str, Element] = dict(
    [
        _entry("bar", 2, (2, 3), False, ("stretch",), ("rigidity",), (), _bar_rows, _bar_measure, _bar_weights),
        _entry("hinge", 3, (2,), False, ("angle",), ("stiffness",), (), _hinge_rows, _hinge_measure, _hinge_weights),
        _entry("fold", 4, (3,), False, ("dihedral",), ("stiffness",), (), _fold_rows, _fold_measure, _fold_weights),
        _entry("wall", 2, (2,), True, ("stretch", *BENDING), ("thickness", "modulus", "poisson"),
               ("arc", *ENDS, *ARMS), _wall_rows, _wall_measure, _wall_weights),
        _entry("joint", 2, (2, 3), True, ("along", "across", "rotation"), ("weight",), (), _joint_rows, _joint_measure,
               _joint_weights, True, ("along", "across", "upright", "turn_along", "turn_across", "turn_upright")),
        _entry("strut", 2, (3,), True, ("stretch", "twist", *(f"{b}_{i}" for i in (3, 2) for b in BENDING)),
               ("diameter", "modulus", "poisson"), ENDS, _strut_rows, _strut_measure, _strut_weights),
    ]
)  # fmt: skip


def check_block(kind: str, d: int, k: int, props: Props) -> None:
    """Raise InputError where a block does not fit its kind: dimension, number of nodes, property names."""
    e = element(kind)
    if d not in e.dimensions:
        raise InputError(
            f"Element '{kind}' lives in {' or '.join(map(str, e.dimensions))} dimensions, the cell has {d}"
        )
    if k != e.nodes and not (e.more and k > e.nodes):
        more = " or more" if e.more else ""
        raise InputError(f"Element '{kind}' joins {e.nodes}{more} nodes, the block gives {k}")
    for name in e.required:
        if name not in props:
            raise InputError(f"Element '{kind}' needs the property '{name}'; given: {', '.join(props) or 'none'}")
    for name in props:
        if name not in e.required + e.optional:
            raise unknown(f"property of '{kind}'", name, e.required + e.optional)


def check_model(model: str) -> str:
    """Return `model` if it is one of MODELS, else raise InputError."""
    if model not in MODELS:
        raise unknown("model", model, MODELS)
    return model
