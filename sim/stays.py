"""Length-of-stay and transfer-delay families: quantile, distribution function, mean, cv and median.

A family knows no unit: whoever makes one decides between days and hours. A stay is the quantile of one
uniform number, and the value for a number never depends, not even in its last bit, on which others stand in
the same array. Constructors take `mean` and `cv`; the fields that keep them are called `average` and
`variation`, because `mean()` and `cv()` are questions that every family answers.
"""

import math
from abc import abstractmethod
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from numbers import Integral

import numpy as np
from numpy.typing import ArrayLike
from scipy import special

from sim.coxian import Coxian
from sim.distribution import Array, Curve, Discrete, Distribution, Inverted, Smooth, check_number

__all__ = [
    "Constant",
    "Coxian",
    "Distribution",
    "Empirical",
    "Erlang",
    "Exponential",
    "Gamma",
    "Hyperexponential",
    "Lognormal",
    "Mixture",
    "Weibull",
]


@dataclass(frozen=True, init=False)
class Constant(Discrete):
    """Every stay the same.

    `mean`: 0 or more, else ValueError.
    """

    average: float

    def __init__(self, mean: float) -> None:
        check_number("mean", mean, least=0.0)
        object.__setattr__(self, "average", float(mean))

    @property
    def ordered(self) -> Array:
        return np.array([self.average])

    def mean(self) -> float:
        return self.average

    def cv(self) -> float:
        return 0.0


@dataclass(frozen=True)
class Empirical(Discrete):
    """Recorded stays, each as likely as the other: the quantile is sorted[floor(n u)].

    `values`: (n,) stays, at least one, each 0 or more, else ValueError. Mean and cv divide by n, so they are
    those of what is drawn.
    """

    values: tuple[float, ...]

    def __post_init__(self) -> None:
        object.__setattr__(self, "values", tuple(self.values))
        if not self.values:
            raise ValueError("empirical stays need at least one value")
        for value in self.values:
            check_number("an empirical value", value, least=0.0)

    @cached_property
    def ordered(self) -> Array:
        return np.sort(np.array(self.values, dtype=float))

    def mean(self) -> float:
        return math.fsum(self.values) / len(self.values)

    def cv(self) -> float:
        mean = self.mean()
        variance = math.fsum((value - mean) ** 2 for value in self.values) / len(self.values)
        return math.sqrt(variance) / mean if mean > 0.0 else 0.0


@dataclass(frozen=True, init=False)
class _OfMean(Smooth):
    average: float

    def __init__(self, mean: float) -> None:
        check_number("mean", mean, above=0.0)
        object.__setattr__(self, "average", float(mean))

    def mean(self) -> float:
        return self.average


@dataclass(frozen=True, init=False)
class _OfMeanAndCv(_OfMean):
    variation: float

    def __init__(self, mean: float, cv: float) -> None:
        super().__init__(mean)
        check_number("cv", cv, least=self._least_cv, most=1e5)  # beyond, quantiles leave double precision
        object.__setattr__(self, "variation", float(cv))

    @property
    def _least_cv(self) -> float:
        return 1e-3

    def cv(self) -> float:
        return self.variation


@dataclass(frozen=True, init=False)
class Exponential(_OfMean):
    """Memoryless stays.

    `mean`: above 0, else ValueError.
    """

    def _quantile(self, u: Array) -> Array:
        return self.average * -np.log1p(-u)

    def curve(self, x: Array) -> Curve:
        left = np.exp(-x / self.average)
        return -np.expm1(-x / self.average), left, left / self.average

    def cv(self) -> float:
        return 1.0


class _GammaShaped(Smooth):
    """What Erlang and gamma stays share."""

    @property
    @abstractmethod
    def _shape(self) -> float: ...

    @property
    def _scale(self) -> float:
        return self.mean() / self._shape

    def _quantile(self, u: Array) -> Array:
        early, x = u < 0.5, np.empty_like(u)
        x[early] = special.gammaincinv(self._shape, u[early])
        x[~early] = special.gammainccinv(self._shape, 1.0 - u[~early])
        return self._scale * x

    def curve(self, x: Array) -> Curve:
        shape, z = self._shape, x / self._scale
        density = np.exp((shape - 1.0) * np.log(z) - z - special.gammaln(shape)) / self._scale
        return special.gammainc(shape, z), special.gammaincc(shape, z), density


@dataclass(frozen=True, init=False)
class Erlang(_GammaShaped, _OfMean):
    """Stays of several equal exponential stages in a row.

    `mean`: above 0; `stages`: a whole number, 1 or more; else ValueError.
    """

    stages: int

    def __init__(self, mean: float, stages: int) -> None:
        super().__init__(mean)
        check_number("stages", stages, least=1)
        if not isinstance(stages, Integral):
            raise ValueError(f"stages must be a whole number; got {stages!r}")
        object.__setattr__(self, "stages", int(stages))

    @property
    def _shape(self) -> float:
        return float(self.stages)

    def cv(self) -> float:
        return 1.0 / math.sqrt(self.stages)


@dataclass(frozen=True, init=False)
class Gamma(_GammaShaped, _OfMeanAndCv):
    """Gamma stays.

    `mean`: above 0; `cv`: 0.001 to 100,000; else ValueError.
    """

    @property
    def _shape(self) -> float:
        return 1.0 / self.variation**2


@dataclass(frozen=True, init=False)
class Weibull(_OfMeanAndCv):
    """Weibull stays.

    `mean`: above 0; `cv`: 0.001 to 100,000; else ValueError.
    """

    @cached_property
    def _shape(self) -> float:
        from scipy.optimize import brentq

        def excess(shape: float) -> float:  # of log(second moment / mean^2)
            ratio = special.gammaln(1.0 + 2.0 / shape) - 2.0 * special.gammaln(1.0 + 1.0 / shape)
            return float(ratio) - math.log1p(self.variation**2)

        return float(brentq(excess, 0.05, 2000.0, xtol=1e-15, rtol=1e-15))

    @cached_property
    def _scale(self) -> float:
        return self.average / math.gamma(1.0 + 1.0 / self._shape)

    def _quantile(self, u: Array) -> Array:
        return self._scale * np.power(-np.log1p(-u), 1.0 / self._shape)

    def curve(self, x: Array) -> Curve:
        hazard = np.power(x / self._scale, self._shape)
        left = np.exp(-hazard)
        return -np.expm1(-hazard), left, left * hazard * self._shape / x


@dataclass(frozen=True, init=False)
class Lognormal(_OfMeanAndCv):
    """Lognormal stays; the variance of their logarithm is log(1 + cv^2).

    `mean`: above 0; `cv`: 0.001 to 100,000; else ValueError.
    """

    @property
    def _sigma(self) -> float:
        return math.sqrt(math.log1p(self.variation**2))

    def _quantile(self, u: Array) -> Array:
        return self.average * np.exp(self._sigma * special.ndtri(u) - self._sigma**2 / 2.0)

    def curve(self, x: Array) -> Curve:
        z = np.log(x / self.average) / self._sigma + self._sigma / 2.0
        density = np.exp(-0.5 * z * z) / (math.sqrt(2.0 * math.pi) * self._sigma * x)
        return special.ndtr(z), special.ndtr(-z), density


@dataclass(frozen=True, init=False)
class Hyperexponential(Inverted, _OfMeanAndCv):
    """Two exponential phases, one of them taken, with balanced means (p1 m1 = p2 m2).

    `mean`: above 0; `cv`: 1 (the exponential) to 100,000; else ValueError. Source of the
    phases: Whitt, "Approximating a point process by a renewal process, I: two basic methods", Operations
    Research 30, 1982 (from memory).
    """

    @property
    def _least_cv(self) -> float:
        return 1.0

    @cached_property
    def phases(self) -> tuple[tuple[float, float], tuple[float, float]]:
        """(probability, mean) of either phase, the likelier and shorter one first."""
        square = self.variation**2
        root = math.sqrt((square - 1.0) / (square + 1.0))
        likely = (1.0 + root) / 2.0
        rare = 1.0 / ((square + 1.0) * (1.0 + root))  # (1 - root) / 2 without cancellation
        return (likely, self.average / (2.0 * likely)), (rare, self.average / (2.0 * rare))

    def curve(self, x: Array) -> Curve:
        (p, short), (q, long) = self.phases
        fast, slow = p * np.exp(-x / short), q * np.exp(-x / long)
        return -p * np.expm1(-x / short) - q * np.expm1(-x / long), fast + slow, fast / short + slow / long


Part = tuple[float, Distribution]


def _average(parts: tuple[Part, ...], of: Callable[[Distribution], ArrayLike]) -> Array:
    """Sum of weight times `of(part)`, in the order of the parts."""
    return sum((weight * np.asarray(of(part)) for weight, part in parts), start=np.float64(0.0))


class _Mixed(Distribution):
    """Moments of weighted parts, the weights adding up to 1."""

    parts: tuple[Part, ...]

    def mean(self) -> float:
        return float(_average(self.parts, lambda part: part.mean()))

    def cv(self) -> float:
        mean = self.mean()
        within = _average(self.parts, lambda part: (part.cv() * part.mean()) ** 2)
        between = _average(self.parts, lambda part: (part.mean() - mean) ** 2)
        return math.sqrt(within + between) / mean if mean > 0.0 else 0.0


@dataclass(frozen=True)
class _SmoothMixture(_Mixed, Inverted):
    parts: tuple[tuple[float, Smooth], ...]

    def curve(self, x: Array) -> Curve:
        curves = [(weight, part.curve(x)) for weight, part in self.parts]
        below, above, density = (sum(weight * curve[of] for weight, curve in curves) for of in range(3))
        return below, above, density


@dataclass(frozen=True)
class Mixture(_Mixed):
    """Stays that are of one family with some probability, else of another.

    `parts`: pairs (weight, family); weights 0 or more with a positive sum, stored so that they add up to 1;
    a part may be a mixture itself; else ValueError. The quantile is the smallest time at which the
    distribution function reaches u, through steps (constant and empirical parts) as well.
    """

    parts: tuple[Part, ...]

    def __post_init__(self) -> None:
        for weight, part in self.parts:
            check_number("a weight", weight, least=0.0)
            if not isinstance(part, Smooth | Discrete | Mixture):
                raise ValueError(f"a part of a mixture must be a family of stays; got {part!r}")
        total = math.fsum(weight for weight, _ in self.parts)
        check_number("the sum of the weights", total, above=0.0)
        object.__setattr__(self, "parts", tuple((weight / total, part) for weight, part in self.parts))

    def cdf(self, x: ArrayLike) -> Array:
        return np.minimum(_average(self.parts, lambda part: part.cdf(x)), 1.0)

    def survival(self, x: ArrayLike) -> Array:
        return np.minimum(_average(self.parts, lambda part: part.survival(x)), 1.0)

    def _quantile(self, u: Array) -> Array:
        times, reached, left, before, after = self._steps
        step = np.where(u < 0.5, np.searchsorted(reached, u), np.searchsorted(-left, u - 1.0))
        if self._smooth is None:
            return times[np.minimum(step, times.size - 1)]
        # What the smooth parts must have reached, and have left, if the answer lies before the next step.
        share, smooth = self._smooth
        below = np.clip((u - before[step]) / share, 0.0, 1.0)
        above = np.clip((1.0 - u - after[step]) / share, 1e-300, 1.0)
        early = below < 0.5
        time = smooth.invert(np.where(early, -np.log1p(-np.where(early, below, 0.0)), -np.log(above)))
        # Where that points past the next step, the step itself reaches u.
        return np.clip(time, np.append(0.0, times)[step], np.append(times, np.inf)[step])

    def _leaves(self, kind: type[Distribution]) -> tuple[Part, ...]:
        leaves: list[Part] = []
        for weight, part in self.parts:
            inner = part._leaves(kind) if isinstance(part, Mixture) else ((1.0, part),)
            leaves.extend((weight * share, leaf) for share, leaf in inner if isinstance(leaf, kind))
        return tuple((weight, leaf) for weight, leaf in leaves if weight > 0.0)

    @cached_property
    def _smooth(self) -> tuple[float, _SmoothMixture] | None:
        """Total weight of the smooth parts, and their own mixture."""
        parts = self._leaves(Smooth)
        if not parts:
            return None
        share = math.fsum(weight for weight, _ in parts)
        return share, _SmoothMixture(tuple((weight / share, part) for weight, part in parts))

    @cached_property
    def _steps(self) -> tuple[Array, Array, Array, Array, Array]:
        """Times of the steps; F, survival there; stepwise weight before, and from, each step and the end."""
        parts = self._leaves(Discrete)
        times = np.unique(np.concatenate([np.empty(0), *(part.ordered for _, part in parts)]))
        before = _average(parts, lambda part: part.cdf(np.append(-1.0, times)))
        after = _average(parts, lambda part: part.survival(np.append(-1.0, times)))
        zero = np.zeros(times.size + 1)
        return times, self.cdf(times), self.survival(times), before + zero, after + zero
