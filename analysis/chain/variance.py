"""How much time averages of a chain vary from run to run, by Poisson's equation.

The average of a reward over m days has a variance of about v / m where m is long; v is its asymptotic variance.
With pi the stationary distribution, Q the rates, f the reward less its mean and g a solution of Q g = -f with
pi g = 0, v = 2 sum pi f g for a reward that accrues with time (Glynn 1984, "Some asymptotic formulas for Markov
chains with applications to simulation", Journal of Statistical Computation and Simulation 19; Whitt 1989,
"Planning queueing simulations", Management Science 35; both from memory). For a number of events, a[i, j] the
rate of counted moves from i to j and a[i, i] that of counted events that leave the state as it is,

    v = events a day + 2 sum_ij pi_i a[i, j] g_j,

the martingale of the count and that of g taken together: the first term is the count's own Poisson part, the
second its covariance with what the state does to later rates (the count of a Markovian arrival process).
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from analysis.chain.gth import Transitions
from analysis.chain.limits import DEFAULT, Limits
from analysis.chain.network_states import NetworkChain, UnitView
from analysis.chain.settled import settled
from sim.errors import RunError
from sim.scenario import Policy, Scenario

Numbers = NDArray[np.float64]

RELATIVE = 1e-9  # of Poisson's equation
ALIKE = 1e-7  # of two variances that must be equal
DISCHARGES = "discharges_per_day"


@dataclass(frozen=True, eq=False)
class Watched:
    """What is averaged over time.

    reward: its rate a day in each state, shape (states,). counted: for a number of events, the rate a day at
    which each move counts, (moves,), the rest of `reward` counting events that move nothing; None for a reward
    that accrues with time.
    """

    reward: Numbers
    counted: Numbers | None = None


@dataclass(frozen=True)
class TimeAverage:
    """The long-run mean of a measure and the variance of its average over m days, times m, as m grows."""

    mean: float
    variance: float


@dataclass(frozen=True)
class Variances:
    """Time averages of a scenario under one policy.

    units: unit -> measure -> time average. network: measure -> time average. states: those of the chain.
    """

    units: Mapping[str, Mapping[str, TimeAverage]]
    network: Mapping[str, TimeAverage]
    states: int


def asymptotic_variances(scenario: Scenario, policy: Policy, *, limits: Limits = DEFAULT) -> Variances:
    """Means and asymptotic variances of every measure of `exact` that is a time average or a rate of events.

    scenario: the network. policy: the rules that it is run by. limits: the largest chain to attempt. Shares of
    arrivals, ratios of two such measures, are left out.
    Raises OutOfScope with every reason, ChainTooLarge, and RunError where a certificate fails.
    """
    chain, probability = settled(scenario, policy, limits)
    watched = _watched(scenario, chain)
    averages = time_averages(chain.moves, probability, list(watched.values()))
    found = dict(zip(watched, averages, strict=True))
    for view in chain.units:
        _same_in_and_out(view.layout.name, found)
    by_place: dict[str | None, dict[str, TimeAverage]] = defaultdict(dict)
    for (place, measure), average in found.items():
        by_place[place][measure] = average
    network = by_place.pop(None)
    return Variances(dict(by_place), network, chain.moves.states)


def _same_in_and_out(unit: str, found: dict[tuple[str | None, str], TimeAverage]) -> None:
    """Holds admissions against discharges, which differ by the patients present and so vary alike in the long run.

    Their rewards differ, and so do the solutions for them: an error of the solver would tell them apart.
    """
    admissions, discharges = found[unit, "admissions_per_day"], found.pop((unit, DISCHARGES))
    apart = abs(admissions.variance - discharges.variance)
    if not apart <= ALIKE * (admissions.variance + admissions.mean):
        raise RunError(
            f"the variance of time averages failed its check: admissions and discharges of {unit} vary by "
            f"{admissions.variance:.9g} and {discharges.variance:.9g} a day; "
            "please report this scenario, and simulate instead"
        )


def time_averages(moves: Transitions, probability: Numbers, watched: Sequence[Watched]) -> list[TimeAverage]:
    """The time average of each reward or number of events.

    moves: the transitions of an irreducible chain. probability: its stationary distribution, shape (states,).
    Raises RunError where Poisson's equation is not solved to rounding.
    """
    rewards = np.stack([one.reward for one in watched], axis=1)
    bias = _bias(moves, probability, rewards)
    return [
        TimeAverage(float(probability @ one.reward), _variance(moves, probability, one, bias[:, place]))
        for place, one in enumerate(watched)
    ]


def _variance(moves: Transitions, probability: Numbers, watched: Watched, bias: Numbers) -> float:
    """The asymptotic variance; never below 0, which rounding could reach where a measure hardly varies."""
    if watched.counted is None:
        return max(0.0, 2 * float((probability * watched.reward) @ bias))
    moving = np.bincount(moves.origin, weights=watched.counted, minlength=moves.states)
    later = (probability[moves.origin] * watched.counted) @ bias[moves.target]
    later += (probability * (watched.reward - moving)) @ bias
    return max(0.0, float(probability @ watched.reward + 2 * later))


def _bias(moves: Transitions, probability: Numbers, rewards: Numbers) -> Numbers:
    """Solutions g of Q g = mean - reward with pi g = 0, one a column, both of shape (states, rewards).

    One state is set to 0 and its equation left out; it follows from the others if all is well, which is checked.
    """
    from scipy.sparse import csc_array
    from scipy.sparse.linalg import splu

    centred = rewards - probability @ rewards
    states, place = moves.states, np.arange(moves.states)
    leaving = np.bincount(moves.origin, weights=moves.rate, minlength=states)
    rows, columns = np.append(moves.origin, place), np.append(moves.target, place)
    rates = csc_array((np.append(moves.rate, -leaving), (rows, columns)), shape=(states, states))
    bias, rest = np.zeros_like(centred), np.delete(place, probability.argmax())
    if len(rest):
        inside = csc_array(rates[rest][:, rest])
        bias[rest] = splu(inside, "MMD_AT_PLUS_A", diag_pivot_thresh=0.0).solve(-centred[rest])
    _check(rates @ bias + centred, np.abs(rewards).max(axis=0) + leaving.max() * np.abs(bias).max(axis=0))
    return bias - probability @ bias


def _check(residual: Numbers, scale: Numbers) -> None:
    worst = float(np.max(np.abs(residual) / np.maximum(scale, np.finfo(float).tiny), initial=0.0))
    if not worst <= RELATIVE:
        raise RunError(
            f"the variance of time averages failed its check: Poisson's equation is off by {worst:.1e} of its "
            f"size, the limit is {RELATIVE:.0e}; please report this scenario, and simulate instead"
        )


# ---- what is watched: (unit, or None for the network; measure) -> rewards and events ----


def _watched(scenario: Scenario, chain: NetworkChain) -> dict[tuple[str | None, str], Watched]:
    flows = _Flows(scenario, chain)
    found: dict[tuple[str | None, str], Watched] = {}
    for view in chain.units:
        name = view.layout.name
        parts = _shares(view) | {
            "admissions_per_day": flows.admitted(lambda _, unit, name=name: unit == name),
            "diverted_out_per_day": flows.admitted(lambda home, unit, name=name: home == name != unit),
            "diverted_in_per_day": flows.admitted(lambda home, unit, name=name: unit == name != home),
            "turned_away_per_day": flows.turned_away([name]),
            DISCHARGES: flows.discharged(view),
        }
        found |= {(name, measure): one for measure, one in parts.items()}
    found[None, "throughput_per_day"] = flows.admitted(lambda home, unit: True)
    found[None, "transfers_per_day"] = flows.admitted(lambda home, unit: home != unit)
    found[None, "turned_away_per_day"] = flows.turned_away(list(chain.homes))
    return found


def _shares(view: UnitView) -> dict[str, Watched]:
    """The measures that accrue with time."""
    load, beds, doors = view.load.astype(float), view.layout.beds, view.doors
    rewards = {
        "utilisation": load / beds,
        "mean_occupied": load,
        "full_fraction": ~doors.free,
        "closed_fraction": ~doors.own_open,
        "closed_with_free_bed_fraction": ~doors.own_open & doors.free,
        "incoming_closed_fraction": ~doors.incoming_open,
    }
    return {name: Watched(np.asarray(reward, float)) for name, reward in rewards.items()}


class _Flows:
    """The events of a network: admissions are moves of its chain, patients turned away move nothing."""

    def __init__(self, scenario: Scenario, chain: NetworkChain) -> None:
        self._chain = chain
        self._arrived = dict.fromkeys(chain.homes, 0.0)
        for group in scenario.patients:
            self._arrived[group.home] += group.per_day
        self._moves = {
            (home, view.layout.name): self._admissions(view, home)
            for view in chain.units
            for home in view.layout.arrivals
        }

    def admitted(self, counts) -> Watched:
        """The admissions for which `counts(home, unit)` holds."""
        chosen = [moves for (home, unit), moves in self._moves.items() if counts(home, unit)]
        counted = np.sum(chosen, axis=0) if chosen else np.zeros(len(self._chain.moves.rate))
        return self._moving(counted)

    def _moving(self, counted: Numbers) -> Watched:
        moves = self._chain.moves
        return Watched(np.bincount(moves.origin, weights=counted, minlength=moves.states), counted)

    def discharged(self, view: UnitView) -> Watched:
        """The patients who leave this unit."""
        moves = self._chain.moves
        leaves = view.load[moves.target] < view.load[moves.origin]
        return self._moving(np.where(leaves, moves.rate, 0.0))

    def turned_away(self, homes: Sequence[str]) -> Watched:
        """The patients of these homes whom nobody takes."""
        known = [home for home in homes if home in self._chain.homes]
        reward = sum((self._arrived[home] * self._chain.homes[home].left for home in known), 0.0)
        states, moves = self._chain.moves.states, len(self._chain.moves.rate)
        return Watched(np.broadcast_to(reward, states).astype(float), np.zeros(moves))

    def _admissions(self, view: UnitView, home: str) -> Numbers:
        """For each move of the chain, the rate a day of admissions of this home's patients to this unit, (moves,).

        Moves add up over homes; each is shared out as the arrivals of its discharge rate are in its first state.
        """
        moves = self._chain.moves
        gained = view.own.counts[view.place[moves.target]] - view.own.counts[view.place[moves.origin]]
        admits, rate = gained.sum(axis=1) > 0, gained.argmax(axis=1) if gained.shape[1] else 0
        mine = self._taken(view, home)[moves.origin, rate]
        all_homes = sum(self._taken(view, other) for other in view.layout.arrivals)[moves.origin, rate]
        part = np.divide(mine, all_homes, out=np.zeros(len(mine)), where=admits & (all_homes > 0))
        return np.where(admits, moves.rate * part, 0.0)

    def _taken(self, view: UnitView, home: str) -> Numbers:
        """Admissions a day of this home's patients to this unit, (states, rates)."""
        share = self._chain.homes[home].admitted.get(view.layout.name)
        per_day = np.array(view.layout.arrivals[home])
        return (
            np.zeros((self._chain.moves.states, len(per_day))) if share is None else np.outer(share, per_day)
        )
