"""Numbered candidates: parameters made from a number alone, so that any slice of them can be had at any time.

Listed and spanned values are multiplied out, the last named runs fastest; sampled ranges take Sobol' points,
however far into the sequence the slice lies.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from homog.families import Family

SOBOL_BITS = 30
"""Binary digits of a Sobol' point and of its number."""


@dataclass(frozen=True)
class Span:
    """Evenly spread values from low to high, made from their number alone."""

    low: float
    high: float
    count: int

    def __len__(self) -> int:
        return self.count

    def __getitem__(self, number: NDArray[np.int64]) -> NDArray[np.float64]:
        step = (self.high - self.low) / max(self.count - 1, 1)
        inner = (number < self.count - 1) | (number == 0)
        return np.asarray(np.where(inner, self.low + number * step, self.high))


@dataclass(frozen=True)
class Candidates:
    """Numbered candidates of one family: the product of listed values, times the Sobol samples of sampled ranges."""

    family: Family
    words: Mapping[str, str]
    listed: Mapping[str, tuple[float, ...] | Span]
    sampled: Mapping[str, tuple[float, float]]
    samples: int = 1
    seed: int = 0

    @property
    def count(self) -> int:
        """How many candidates there are."""
        return math.prod(len(values) for values in self.listed.values()) * self.samples

    @cached_property
    def _net(self) -> NDArray[np.int64]:
        """Scrambled Sobol' points 0, 1, 2, 4, 8, ... as whole numbers of SOBOL_BITS digits, (1 + k, axes)."""
        from scipy.stats import qmc

        sobol = qmc.Sobol(len(self.sampled), scramble=True, bits=SOBOL_BITS, rng=np.random.default_rng(self.seed))
        points = [sobol.random(1)]
        for digit in range((self.samples - 1).bit_length()):
            if digit:
                sobol.fast_forward(2 ** (digit - 1) - 1)
            points.append(sobol.random(1))
        return np.rint(np.concatenate(points) * 2.0**SOBOL_BITS).astype(np.int64)

    def _points(self, number: NDArray[np.int64]) -> NDArray[np.float64]:
        """Return the Sobol' points of those numbers, (m, axes), in [0, 1).

        A digitally scrambled sequence is affine over the binary digits of its number (Niederreiter 1992; Matousek
        1998): point n is point 0, changed for every digit k of n by what changes point 0 into point 2^k.
        """
        found = np.repeat(self._net[:1], len(number), axis=0)
        for digit, point in enumerate(self._net[1:]):
            found ^= np.where((number >> digit & 1)[:, None], point ^ self._net[0], 0)
        return np.asarray(found / 2.0**SOBOL_BITS)

    def take(self, start: int, stop: int) -> dict[str, Any]:
        """Return the parameters of candidates start to stop - 1, arrays by name."""
        number = np.arange(start, min(stop, self.count))
        given: dict[str, Any] = dict(self.words)
        grid, sample = np.divmod(number, self.samples)
        sizes = [len(values) for values in self.listed.values()]
        where = np.unravel_index(grid, sizes) if sizes else ()
        for (name, values), index in zip(self.listed.items(), where, strict=True):
            given[name] = values[index] if isinstance(values, Span) else np.asarray(values)[index]
        points = self._points(sample) if self.sampled else sample
        for axis, (name, (low, high)) in enumerate(self.sampled.items()):
            given[name] = low + (high - low) * points[:, axis]
        return given
