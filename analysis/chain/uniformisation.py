"""The distribution of a chain at given times, by uniformisation and with a bound of its error.

Jensen, "Markoff chains as an aid in the study of Markoff processes", Skandinavisk Aktuarietidskrift 36 (1953):
the chain moves at the events of a Poisson process, so its distribution is a Poisson mixture of powers of one
matrix. Poisson weights as in Fox & Glynn, "Computing Poisson probabilities", Communications of the ACM 31
(1988): from the mode outwards, then scaled to 1. Both from memory. Nothing is subtracted but the rate of
leaving a state, so rounding adds up no faster than linearly in the steps.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from analysis.chain.gth import Transitions

Numbers = NDArray[np.float64]

TAIL = 1e-14  # Poisson probability left out at each time
SETTLED = (
    1e-13  # a distribution so near the long-run one is taken for it, or nearer than rounding may have led it
)
LOOK_EVERY = 8  # steps between two looks at how near it is
UNIT_ROUNDOFF = 2.0**-53


@dataclass(frozen=True, eq=False)
class Distributions:
    """The distribution of a chain at several times.

    probability: shape (times, states). error_bound: (times,), at most so much is the sum, over all states, of
    the distances from the exact probabilities; so no share or probability is off by more. steps: matrix
    products done.
    """

    probability: Numbers
    error_bound: Numbers
    steps: int


@dataclass(frozen=True)
class PoissonWindow:
    """The chances of `first` and more events of a Poisson number, scaled to add up to 1."""

    first: int
    weight: Numbers

    @property
    def last(self) -> int:
        """The largest number of events in the window."""
        return self.first + len(self.weight) - 1

    def beyond(self, step: int) -> float:
        """The chance of `step` events or more."""
        return float(self.weight[max(step - self.first, 0) :].sum())

    @property
    def error(self) -> float:
        """Bound of the sum of the distances of the weights from the chances, and of a sum with these weights.

        What is cut off counts twice, for it is spread over the rest; each weight takes two roundings more than
        its neighbour nearer the mode, and each term of the sum one. The mean may have been rounded too, and two
        Poisson numbers are no further apart than twice the distance of their means.
        """
        return 2 * TAIL + (4 * len(self.weight) + 2 * self.last) * UNIT_ROUNDOFF


def poisson_window(mean: float) -> PoissonWindow:
    """The window outside which a Poisson number of that mean falls with a chance of at most TAIL.

    By Chernoff's bound a number exceeds the mean by x with a chance of at most exp(-x^2 / (2 mean + 2x/3)), and
    falls short of it by x with at most exp(-x^2 / (2 mean)).
    """
    chance = math.log(2 / TAIL)
    below, above = math.sqrt(2 * mean * chance), chance / 3 + math.sqrt(chance**2 / 9 + 2 * mean * chance)
    first, mode, last = max(0, math.floor(mean - below)), math.floor(mean), math.ceil(mean + above)
    up = np.cumprod(mean / np.arange(mode + 1, last + 1))
    down = np.cumprod(np.arange(mode, first, -1) / mean)[::-1] if mean > 0 else np.empty(0)
    weight = np.concatenate([down, [1.0], up])
    return PoissonWindow(first, weight / weight.sum())


class Steps:
    """The chain watched at the events of a Poisson process fast enough for every state.

    per_day: events a day. rounding: bound of what one step adds to the error of a distribution.
    """

    def __init__(self, moves: Transitions) -> None:
        from scipy.sparse import csr_array

        leaving = np.bincount(moves.origin, weights=moves.rate, minlength=moves.states)
        self.per_day = float(leaving.max()) or 1.0
        place = np.arange(moves.states)
        rows, columns = np.concatenate([moves.target, place]), np.concatenate([moves.origin, place])
        entries = np.concatenate([moves.rate / self.per_day, 1 - leaving / self.per_day])
        self._into = csr_array((entries, (rows, columns)), shape=(moves.states, moves.states))
        # An entry is a sum and a division, a stay a sum over the row; a step is a sum over a row of `_into`.
        widest = max(int(np.bincount(rows).max()), int(np.bincount(columns).max()))
        self.rounding = (2 * widest + 6) * UNIT_ROUNDOFF

    def after(self, probability: Numbers) -> Numbers:
        """The distribution one event later, (states,)."""
        return self._into @ probability


def distributions(
    moves: Transitions, start: Numbers, days: Sequence[float], *, long_run: Numbers | None = None
) -> Distributions:
    """Where the chain is at each time.

    moves: its transitions. start: the distribution at time 0, shape (states,). days: the times, each 0 or more.
    long_run: what should be its stationary distribution, (states,); it saves steps once the chain is there, and
    where it is wrong only widens the bound. Returns the distributions with their error bounds.
    """
    steps = Steps(moves)
    windows = [poisson_window(steps.per_day * time) for time in days]
    total = np.zeros((len(windows), moves.states))
    done, near = _mix(steps, start, windows, total, long_run)
    drift = 0.0 if near is None else _distance(steps.after(long_run), long_run) + steps.rounding
    bound = [_bound(window, done, steps.rounding, near, drift) for window in windows]
    return Distributions(total, np.array(bound), done)


def _mix(
    steps: Steps, start: Numbers, windows: Sequence[PoissonWindow], total: Numbers, long_run: Numbers | None
) -> tuple[int, float | None]:
    """Adds up the mixtures in `total`; returns the steps done and, where it settled, how near it came."""
    now, last = start, max((window.last for window in windows), default=0)
    for step in range(last + 1):
        if long_run is not None and step % LOOK_EVERY == 0:
            near = _distance(now, long_run)
            if near <= max(SETTLED, step * steps.rounding):
                total += np.outer([window.beyond(step) for window in windows], long_run)
                return step, near
        for place, window in enumerate(windows):
            if window.first <= step <= window.last:
                total[place] += window.weight[step - window.first] * now
        if step < last:
            now = steps.after(now)
    return last, None


def _bound(window: PoissonWindow, done: int, rounding: float, near: float | None, drift: float) -> float:
    """A step never moves two distributions apart, so errors only add up.

    After settling, each further event may take the true distribution `drift` away from the long-run one, no more.
    """
    error = window.error + min(done, window.last) * rounding
    if near is not None and window.last >= done:
        error += near + (window.last - done) * drift
    return error


def _distance(one: Numbers, other: Numbers) -> float:
    return float(np.abs(one - other).sum())
