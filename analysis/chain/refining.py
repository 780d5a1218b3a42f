"""Phases moved about so that the distribution function comes nearer, while three moments stay met.

Every acyclic phase-type stay can be written as a Coxian one (Cumani, "On the canonical representation of
homogeneous Markov processes modelling failure-time distributions", Microelectronics and Reliability 22, 1982,
from memory). All phases but the last two are free; these two then take up the moments that are left. So the
moments hold at every step of the search, which is for the least squares, a phase more at a time.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

from analysis.chain.candidates import two_phases_in_a_row
from analysis.chain.phases import Moments
from sim.durations import Coxian, Duration

POINTS = 48  # in time, at which distribution functions are compared
STEPS = 50  # of the search, for each number that is free
LENGTHS, SHARES = (0.005, 0.02, 0.06, 0.15, 0.4, 1.0), (0.99, 0.9, 0.6, 0.3)  # a further phase to begin with
JUMPS = 16  # of which more than are counted come within one tick with a chance below 1e-13
IMPOSSIBLE = 1e3
STIFFEST = 1e5  # the most that rates may differ by

Front = tuple[tuple[float, float], ...]  # of each phase: mean over that of the stay, share that goes on


def refined(stay: Duration, target: Moments, most_phases: int) -> Iterator[Duration]:
    """Coxian stays of 3, 4, ... `most_phases` phases with the moments `target`, each near `stay`.

    None where no phase can be put before two others without losing a moment.
    """
    goal = _Goal(stay, target)
    fronts: list[Front] = [()]
    for _ in range(3, most_phases + 1):
        fronts = [goal.moved(front) for front in _starts(fronts, goal)]
        if not fronts:
            return
        yield min(goal.whole(min(fronts, key=goal)), key=goal.off)


def _starts(fronts: Sequence[Front], goal: _Goal) -> Iterator[Front]:
    """The best way to make any of the fronts a phase longer, for each share that goes on from the new phase."""
    for share in SHARES:
        longer = ((*front[:at], (mean, share), *front[at:])
                  for front in fronts for mean in LENGTHS for at in {0, len(front)})  # fmt: skip
        best = min(longer, key=goal)
        if goal(best) < IMPOSSIBLE:
            yield best


class _Goal:
    """What to make small: the squared distance, averaged over the stay, at the best choice of the last phases."""

    def __init__(self, stay: Duration, target: Moments) -> None:
        known = stay.distribution()
        first, last = np.maximum(known.quantile([0.005, 0.999]), 1e-3 * target.first)
        self.target, self.octaves = target, max(math.ceil(math.log2(last / first)), 1)
        parts = math.ceil(POINTS / self.octaves)
        self.base = first * 2.0 ** (np.arange(parts) / parts)
        reached = known.cdf(self.base * 2.0 ** np.arange(self.octaves)[:, None])
        self.reached, self.weight = reached, np.gradient(reached.ravel()).reshape(reached.shape)

    def __call__(self, front: Front) -> float:
        return min(map(self.off, self.whole(front)), default=IMPOSSIBLE)

    def off(self, other: Duration) -> float:
        """The distance of one Coxian stay."""
        return 100 * float(np.sum(self.weight * (self._left(other) + self.reached - 1) ** 2))

    def _left(self, other: Duration) -> NDArray[np.float64]:
        """The chance of a longer stay at each time, (octaves, parts): times double from row to row.

        By uniformisation within the first tick, then by squaring. Sums of positive terms, and no call of
        LAPACK, whose threads take a thousand times longer than so small a matrix where the machine is busy.
        """
        rates = np.array(other.rates)
        jumps = np.diag(1 - rates / rates.max()) + np.diag(rates[:-1] / rates.max() * other.goes_on, k=1)
        early = max(math.ceil(math.log2(rates.max() * self.base[-1])), 0)
        ticks = (rates.max() * self.base / 2.0**early)[:, None, None]
        term = np.exp(-ticks) * np.eye(len(rates))
        moved = term
        for jump in range(1, JUMPS):
            term = term @ jumps * (ticks / jump)
            moved = moved + term
        left = []
        for _ in range(early + self.octaves):
            left.append(moved[:, 0].sum(axis=-1))
            moved = moved @ moved
        return np.array(left[early:])

    def whole(self, front: Front) -> Iterator[Duration]:
        """The front with every pair of last phases that gives the moments.

        After a phase of mean m that a share s survives, E[X^n] has (E[X^n] - n m E[X^(n - 1)]) / s left.
        """
        first, second, third = self.target
        for phase, share in front:
            mean = phase * self.target.first
            left = first - mean, second - 2 * mean * first, third - 3 * mean * second
            first, second, third = (moment / share for moment in left)
            if min(first, second, third) <= 0:
                return
        for pair in two_phases_in_a_row(Moments(first, second, third)):
            rates = tuple(1 / (mean * self.target.first) for mean, _ in front) + pair.rates
            goes_on = tuple(share for _, share in front) + pair.goes_on
            if max(rates) < STIFFEST * min(rates):
                yield Coxian.model_construct(family="coxian", rates=rates, goes_on=goes_on)

    def moved(self, front: Front) -> Front:
        """The front after the search from it (Nelder & Mead, Computer Journal 7, 1965)."""
        from scipy.optimize import minimize

        start = np.array([(math.log(mean), math.log(share / (1 - share))) for mean, share in front]).ravel()
        found = minimize(
            lambda values: self(_front(values)), start, method="Nelder-Mead",
            options={"maxfev": STEPS * len(start), "xatol": 1e-3, "fatol": 1e-7, "adaptive": True},
        )  # fmt: skip
        return _front(found.x)


def _front(values: Sequence[float]) -> Front:
    """Phases from logarithms of their means and log odds of their shares."""
    shares = 1 / (1 + np.exp(-np.clip(values[1::2], -16, 16)))
    return tuple(zip(np.exp(np.clip(values[::2], -16, 16)).tolist(), shares.tolist(), strict=True))
