"""The best long-run gain of a controlled network, between bounds that hold whatever the iteration did.

For any relative values h of the states, the largest one-step gain T h - h over the states bounds the gain of
every rule from above, and the smallest one under a rule bounds that rule's from below (Odoni, "On finding the
maximal gain for Markov decision processes", Operations Research 1969; Puterman, "Markov Decision Processes",
1994, chapter 8; both from memory). So only the bounds are trusted, and the values may come from anywhere:
here from policy iteration (Howard 1960), with many states in its modified form (Puterman & Shin 1978), a few
sweeps under the best rule so far between two improvements of it (both from memory). Discharges always lead
to the empty network in the end, so every rule has one gain for all states.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.sparse import coo_array, csr_array, diags_array, eye_array, hstack
from scipy.sparse.linalg import splu

from analysis.control.states import ControlProblem, Numbers, Places
from sim.errors import RunError

RELATIVE = 1e-9  # the bounds lie within this of each other, per unit of worth that arrives a day
TIE = RELATIVE / 2  # choices that differ by less than this much worth are one: the earlier is taken
CLOSE = RELATIVE / 1000  # what the iteration aims at, so that ties are told from differences
DIRECT = 3_000  # up to so many states a rule's values come from elimination, beyond from sweeps
SWEEPS = 100
MOST_ROUNDS = 2_000


@dataclass(frozen=True)
class Bounds:
    """A number known to lie from `low` to `high`."""

    low: float
    high: float

    @property
    def middle(self) -> float:
        """The point halfway."""
        return (self.low + self.high) / 2

    def to_dict(self) -> dict[str, float]:
        """Plain values."""
        return {"low": self.low, "high": self.high}


@dataclass(frozen=True, eq=False)
class Optimum:
    """The best gain a day, and a rule that has it.

    gain: bounds of both, for the rule's own gain lies between them too. rule: number of the choice, by stream
    and state, shape (streams, states); of tied choices the first.
    """

    gain: Bounds
    rule: Places


def optimum(problem: ControlProblem, worth: Sequence[Numbers]) -> Optimum:
    """The rule of the largest long-run worth a day.

    problem: the states and choices. worth: for each stream the worth of each choice, (choices,).
    Raises RunError where the bounds do not meet within RELATIVE of the worth that arrives a day.
    """
    most = max(float(np.abs(mine).max()) for mine in worth)
    scale, values = problem.arrivals_per_day * most, np.zeros(problem.states)
    for _ in range(MOST_ROUNDS):
        rule, best, _ = _improved(problem, worth, values)
        slack = _rounding(problem, values, scale)
        if np.ptp(best) <= CLOSE * scale + slack:
            break
        moves = _Moves.of(problem, rule)
        values = moves.evaluated(_a_day(problem, rule, worth)[:, None], values[:, None])[:, 0]
    rule, best, own = _improved(problem, worth, values, tie=TIE * most)
    gain = Bounds(float(own.min() - slack), float(best.max() + slack))
    _check(np.array(gain.high - gain.low), scale)
    return Optimum(gain, rule)


def long_run(problem: ControlProblem, rule: Places, a_day: Numbers) -> list[Bounds]:
    """The long-run means of whatever is counted under one rule.

    rule: number of the choice, (streams, states). a_day: what each state counts, a day, (states, columns).
    Returns bounds for each column. Raises RunError where they do not meet within RELATIVE of the largest count.
    """
    moves, values = _Moves.of(problem, rule), np.zeros(a_day.shape)
    scale = np.abs(a_day).max(axis=0)
    for _ in range(MOST_ROUNDS):
        drift = a_day + moves.rates @ values
        slack = _rounding(problem, values, scale)
        if (np.ptp(drift, axis=0) <= RELATIVE / 2 * scale + slack).all():
            break
        values = moves.evaluated(a_day, values)
    low, high = drift.min(axis=0) - slack, drift.max(axis=0) + slack
    _check(high - low, scale)
    return [Bounds(float(a), float(b)) for a, b in zip(low, high, strict=True)]


def gain_of(problem: ControlProblem, rule: Places, worth: Sequence[Numbers]) -> Bounds:
    """The long-run worth a day of one rule; arguments as in `optimum` and `long_run`."""
    return long_run(problem, rule, _a_day(problem, rule, worth)[:, None])[0]


def _check(gap: Numbers, scale: Numbers | float) -> None:
    if not (gap <= RELATIVE * np.asarray(scale)).all():
        raise RunError(
            f"the bounds of the best rule of control stay {gap.max():.1e} a day apart, more than {RELATIVE:.0e} "
            "of what arrives; stays of very different lengths do this: take groups with stays nearer each other"
        )


def _improved(
    problem: ControlProblem, worth: Sequence[Numbers], values: Numbers, tie: float = 0.0
) -> tuple[Places, Numbers, Numbers]:
    """The rule that is best for the values, and the one-step gains a day: the largest, and the rule's own."""
    best = _by_discharges(problem, values)
    own, rule = best.copy(), np.empty((len(problem.streams), problem.states), dtype=np.int64)
    every = np.arange(problem.states)
    for row, (stream, mine) in enumerate(zip(problem.streams, worth, strict=True)):
        gains = np.where(stream.after >= 0, mine[:, None] + values[stream.after] - values, -np.inf)
        most = gains.max(axis=0)
        rule[row] = (gains >= most - tie).argmax(axis=0)
        best += stream.per_day * most
        own += stream.per_day * gains[rule[row], every]
    return rule, best, own


def _by_discharges(problem: ControlProblem, values: Numbers) -> Numbers:
    """What discharges change in the values a day, (states,)."""
    flows = problem.discharges
    return flows @ values - flows.sum(axis=1) * values


def _a_day(problem: ControlProblem, rule: Places, worth: Sequence[Numbers]) -> Numbers:
    """Worth a day of what the rule does in each state, (states,)."""
    rows = zip(problem.streams, worth, rule, strict=True)
    return sum((stream.per_day * mine[chosen] for stream, mine, chosen in rows), np.zeros(problem.states))


@dataclass(frozen=True, eq=False)
class _Moves:
    """The moves under one rule. rates: a day from state to state, less those out of it, (states, states)."""

    rates: csr_array

    @classmethod
    def of(cls, problem: ControlProblem, rule: Places) -> _Moves:
        every, shape = np.arange(problem.states), (problem.states, problem.states)
        rates = problem.discharges
        for stream, chosen in zip(problem.streams, rule, strict=True):
            flow = np.full(problem.states, stream.per_day)
            rates = rates + coo_array((flow, (every, stream.after[chosen, every])), shape=shape).tocsr()
        return cls((rates - diags_array(rates.sum(axis=1))).tocsr())

    def evaluated(self, a_day: Numbers, values: Numbers) -> Numbers:
        """Values nearer to the rule's own, those of the empty network 0; a_day, values: (states, columns)."""
        found = (self._eliminated if len(values) <= DIRECT else self._swept)(a_day, values)
        return found - found[0]

    def _eliminated(self, a_day: Numbers, values: Numbers) -> Numbers:
        """By one correction that makes every one-step gain the same; the first unknown is that gain."""
        same = coo_array((-np.ones(len(values)), (np.arange(len(values)), np.zeros(len(values), dtype=int))))
        equations = hstack([same, self.rates[:, 1:]], format="csc")
        change = splu(equations).solve(-(a_day + self.rates @ values))
        change[0] = 0.0
        return values + change

    def _swept(self, a_day: Numbers, values: Numbers) -> Numbers:
        """By steps of the uniformised chain."""
        pace = float(-self.rates.diagonal().min())
        step, gain = (eye_array(len(values)) + self.rates / pace).tocsr(), a_day / pace
        for _ in range(SWEEPS):
            values = step @ values + gain
        return values


def _rounding(problem: ControlProblem, values: Numbers, scale: Numbers | float) -> Numbers | float:
    """What rounding can have done to a one-step gain: some units in the last place of all that was added up.

    values: (states, ...); scale: the most that is counted in a state, a day, (...).
    """
    flow = problem.arrivals_per_day + float(problem.discharges.sum(axis=1).max())
    terms = 4 * (len(problem.streams) + len(problem.kinds) + 2)
    return terms * np.finfo(float).eps * (scale + 2 * flow * np.abs(values).max(axis=0))
