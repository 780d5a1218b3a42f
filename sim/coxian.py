"""Coxian stays: exponential phases in a row, after each of which the stay may end."""

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from sim.distribution import Array, Curve, Inverted, check_number

__all__ = ["Coxian"]

_EMPTIED = 800.0  # mean longest phases after which exp(-x) is 0 in double precision


@dataclass(frozen=True)
class Coxian(Inverted):
    """Exponential phases in a row, after each of which the stay may end.

    `rates`: (phases,) ends per unit of time, above 0, equal ones allowed; `goes_on`: (phases - 1,)
    probability of going on to the next phase, 0 to 1. Raises ValueError for other values, and where rates
    differ by a factor above 1e15. The probabilities of the phases are sums of positive terms only, so nothing
    cancels between nearly equal rates: uniformisation (Jensen, "Markoff chains as an aid in the study of
    Markoff processes", Skandinavisk Aktuarietidskrift 36, 1953; from memory) within one tick, which is at
    most the mean of the shortest phase, then one matrix for each binary digit of the number of ticks.
    """

    rates: tuple[float, ...]
    goes_on: tuple[float, ...]

    def __post_init__(self) -> None:
        object.__setattr__(self, "rates", tuple(self.rates))
        object.__setattr__(self, "goes_on", tuple(self.goes_on))
        if not self.rates or len(self.goes_on) != len(self.rates) - 1:
            raise ValueError(
                "Coxian stays need at least one rate, and one probability of going on fewer than rates; "
                f"got {len(self.rates)} and {len(self.goes_on)}"
            )
        for rate in self.rates:
            check_number("a Coxian rate", rate, above=0.0)
        for share in self.goes_on:
            check_number("a probability of going on", share, least=0.0, most=1.0)
        if max(self.rates) > 1e15 * min(self.rates):
            raise ValueError(f"Coxian rates may differ by a factor of 1e15 at most; got {self.rates!r}")

    def mean(self) -> float:
        return self._moments[0]

    def cv(self) -> float:
        mean, variance = self._moments
        return math.sqrt(variance) / mean

    def curve(self, x: Array) -> Curve:
        *phases, gone = self._states(x)
        ends = (rate * (1.0 - share) for rate, share in self._phases)
        return gone, sum(phases), sum(end * phase for end, phase in zip(ends, phases, strict=True))

    @property
    def _phases(self) -> list[tuple[float, float]]:
        """(rate, probability of going on) of each phase."""
        return list(zip(self.rates, (*self.goes_on, 0.0), strict=True))

    @cached_property
    def _moments(self) -> tuple[float, float]:
        mean = variance = 0.0
        for rate, share in reversed(self._phases):
            variance = 1.0 / rate**2 + share * variance + share * (1.0 - share) * mean**2
            mean = 1.0 / rate + share * mean
        return mean, variance

    @property
    def _tick(self) -> float:
        # A power of two, so that a time splits into ticks and rest without rounding.
        return 2.0 ** -math.ceil(math.log2(max(self.rates)))

    @cached_property
    def _jumps(self) -> Array:
        """(phases + 1, phases + 1) transition matrix at the fastest rate, the last state being discharge."""
        jumps = np.eye(len(self.rates) + 1)
        for phase, (rate, share) in enumerate(self._phases):
            tempo = rate / max(self.rates)
            jumps[phase, phase] -= tempo
            jumps[phase, phase + 1] += tempo * share
            jumps[phase, -1] += tempo * (1.0 - share)
        return jumps

    @cached_property
    def _series(self) -> list[Array]:
        """(phases + 1, phases + 1) matrices: the n-th power of the jumps over n factorial, n = 0, 1, ..."""
        series = [np.eye(len(self.rates) + 1)]
        for n in range(1, len(self.rates) + 22):
            series.append(series[-1] @ self._jumps / n)
        return series

    @cached_property
    def _digits(self) -> list[Array]:
        """Transition matrices over 1, 2, 4, ... ticks, up to where no patient is left."""
        jumps_a_tick = max(self.rates) * self._tick
        matrix = sum(term * math.exp(-jumps_a_tick) * jumps_a_tick**n for n, term in enumerate(self._series))
        leaving = np.append(self.rates, 0.0) * self._tick
        digits: list[Array] = []
        for level in range(math.ceil(math.log2(_EMPTIED / leaving[:-1].min()))):
            matrix = digits[-1] @ digits[-1] if digits else matrix
            # The diagonal is known; set afresh, it keeps rounding from doubling with every squaring.
            np.fill_diagonal(matrix, np.exp(-leaving * 2.0**level))
            digits.append(matrix)
        return digits

    def _states(self, x: Array) -> list[Array]:
        """Probability of each phase, and of discharge, at times `x` (n,)."""
        x = np.minimum(x, self._tick * np.nextafter(2.0 ** len(self._digits), 0.0))
        ticks = np.floor(x / self._tick)
        jumps = max(self.rates) * (x - ticks * self._tick)
        columns = np.array([term[0] for term in self._series]).T
        states = [np.exp(-jumps) * np.polynomial.polynomial.polyval(jumps, column) for column in columns]
        for level, matrix in enumerate(self._digits):
            _move(states, matrix, np.flatnonzero(ticks.astype(np.int64) >> level & 1))
        return states


def _move(states: list[Array], matrix: Array, chosen: Array) -> None:
    """Carry the chosen times on by one upper triangular matrix, added up in a fixed order."""
    before = [state[chosen] for state in states]
    for to, state in enumerate(states):
        state[chosen] = sum(before[of] * matrix[of, to] for of in range(to + 1))
