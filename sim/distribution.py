"""What a family of stays is made of: its questions, steps or a smooth curve, and the inversion of a curve."""

import math
from abc import ABC, abstractmethod
from collections.abc import Callable
from functools import cached_property
from numbers import Real

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["Array", "Curve", "Discrete", "Distribution", "Inverted", "Smooth", "check_number"]

Array = NDArray[np.float64]
Curve = tuple[Array, Array, Array]  # distribution function, survival function, density

_SMALLEST, _LARGEST = 1e-300, 1e300  # times outside are read as these: no logarithm of 0, no inf - inf
_LOWEST_HAZARD, _HIGHEST_HAZARD = 2.0**-70, 45.0  # beyond -log(1 - u) of every uniform with 53 bits
_NODES = 512


def check_number(
    name: str, value: float, *, least: float = -math.inf, above: float = -math.inf, most: float = math.inf
) -> None:
    """Raise ValueError unless `value` is a finite number from `least` to `most` and above `above`."""
    real = isinstance(value, Real) and not isinstance(value, bool)
    if real and math.isfinite(value) and least <= value <= most and value > above:
        return
    bounds = [f"above {above:g}"] * (above > -math.inf) + [f"{least:g} or more"] * (least > -math.inf)
    bounds += [f"{most:g} or less"] * (most < math.inf)
    raise ValueError(f"{name} must be a finite number, {', '.join(bounds)}; got {value!r}")


class Distribution(ABC):
    """What every family of stays and delays can tell."""

    def quantile(self, u: ArrayLike) -> Array:
        """The stays that belong to uniform numbers.

        `u`: any shape, each strictly between 0 and 1. Returns the same shape, in the unit of the mean:
        finite, 0 or more, and non-decreasing in u (to the last bit for constant and empirical stays, within
        rounding elsewhere). Raises ValueError where a number lies outside (0, 1).
        """
        u = np.asarray(u, dtype=float)
        if u.size and not (u.min() > 0.0 and u.max() < 1.0):  # false too for NaN
            raise ValueError("a uniform number must lie strictly between 0 and 1")
        # One contiguous row, whatever came in: numpy may take another code path for strided numbers.
        return self._quantile(np.ascontiguousarray(u).ravel()).reshape(u.shape)

    @abstractmethod
    def _quantile(self, u: Array) -> Array: ...

    @abstractmethod
    def cdf(self, x: ArrayLike) -> Array:
        """Probability of a stay of at most `x` (any shape, unit of the mean). Returns the same shape."""

    @abstractmethod
    def survival(self, x: ArrayLike) -> Array:
        """Probability of a stay longer than `x`, accurate where 1 - cdf is not. Returns the shape of `x`."""

    @abstractmethod
    def mean(self) -> float:
        """Mean stay, in the unit the family was given."""

    @abstractmethod
    def cv(self) -> float:
        """Coefficient of variation: standard deviation over mean (0 where the mean is 0)."""

    def median(self) -> float:
        """The quantile at one half, in the unit of the mean."""
        return float(self.quantile(0.5))


class Discrete(Distribution):
    """Stays that take finitely many values, each entry of `ordered` being equally likely."""

    @property
    @abstractmethod
    def ordered(self) -> Array:
        """(n,) the values in rising order, repeated ones repeated."""

    def _quantile(self, u: Array) -> Array:
        size = self.ordered.size
        return self.ordered[np.minimum((size * u).astype(np.int64), size - 1)]  # n * u may round up to n

    def cdf(self, x: ArrayLike) -> Array:
        return np.searchsorted(self.ordered, x, side="right") / self.ordered.size

    def survival(self, x: ArrayLike) -> Array:
        return (self.ordered.size - np.searchsorted(self.ordered, x, side="right")) / self.ordered.size


class Smooth(Distribution):
    """Stays with a density."""

    @abstractmethod
    def curve(self, x: Array) -> Curve:
        """Distribution function, survival function and density at times `x` ((n,), above 0, finite)."""

    def cdf(self, x: ArrayLike) -> Array:
        return np.where(np.asarray(x) > 0.0, self._at(x)[0], 0.0)

    def survival(self, x: ArrayLike) -> Array:
        return np.where(np.asarray(x) > 0.0, self._at(x)[1], 1.0)

    def _at(self, x: ArrayLike) -> Curve:
        x = np.asarray(x, dtype=float)
        with np.errstate(all="ignore"):
            below, above, density = self.curve(np.clip(np.ascontiguousarray(x).ravel(), _SMALLEST, _LARGEST))
        return below.reshape(x.shape), above.reshape(x.shape), density.reshape(x.shape)


class Inverted(Smooth):
    """Stays without a closed quantile.

    The cumulative hazard, -log(survival), of a random stay is a unit exponential variable. It is inverted
    with both axes in logarithms, where it is nearly straight at both ends, by Newton's method kept inside a
    bracket that a table of nodes provides.
    """

    def _quantile(self, u: Array) -> Array:
        return self.invert(-np.log1p(-u))

    def invert(self, hazard: Array) -> Array:
        """The times, (n,), at which the cumulative hazard reaches `hazard`, (n,)."""
        nodes, table = self._table
        hazard = np.clip(hazard, table[0], table[-1])
        cell = np.clip(np.searchsorted(table, hazard, side="right") - 1, 0, _NODES - 2)
        low, high = nodes[cell], nodes[cell + 1]
        with np.errstate(all="ignore"):
            share = np.log(hazard / table[cell]) / np.log(table[cell + 1] / table[cell])
            start = low * np.power(high / low, np.where(share >= 0.0, share, 0.5))
            return _solve(self.curve, hazard, low, high, start)

    @cached_property
    def _table(self) -> tuple[Array, Array]:
        octaves = np.geomspace(_SMALLEST, _LARGEST, 2000)
        hazard = _cumulative_hazard(self._at(octaves))
        low = octaves[max(np.count_nonzero(hazard <= _LOWEST_HAZARD) - 1, 0)]
        high = octaves[min(np.count_nonzero(hazard < _HIGHEST_HAZARD), octaves.size - 1)]
        nodes = np.geomspace(low, high, _NODES)
        hazard = np.clip(_cumulative_hazard(self._at(nodes)), _SMALLEST, 2.0 * _HIGHEST_HAZARD)
        return nodes, np.maximum.accumulate(hazard)


def _cumulative_hazard(curve: Curve) -> Array:
    below, above, _ = curve
    with np.errstate(divide="ignore"):  # -log(survival), taken from whichever of the two is precise
        return np.where(above < 0.5, -np.log(above), -np.log1p(-np.minimum(below, 0.75)))


def _solve(curve: Callable[[Array], Curve], target: Array, low: Array, high: Array, x: Array) -> Array:
    """Where the cumulative hazard reaches `target`; every element walks its own path and stops by itself."""
    active = np.arange(x.size)
    for _ in range(200):
        now, goal = x[active], target[active]
        values = curve(now)
        hazard = _cumulative_hazard(values)
        low[active] = bottom = np.where(hazard < goal, now, low[active])
        high[active] = top = np.where(hazard < goal, high[active], now)
        step = np.log(goal / hazard) * hazard * values[1] / (now * values[2])
        newton = now * np.exp(step)
        inside = (newton >= bottom) & (newton <= top)  # false too for NaN, where the density is 0
        x[active] = np.where(inside, newton, np.sqrt(bottom) * np.sqrt(top))
        # Convergence is quadratic: after a step of 1e-9 the error is far below rounding.
        active = active[~((inside & (np.abs(step) < 1e-9)) | (top <= bottom * (1.0 + 1e-15)))]
        if not active.size:
            break
    return x
