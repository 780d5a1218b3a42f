"""Correlated equilibria: the best and the worst welfare of any, as bounds that need no selection of an equilibrium.

A mediator draws a profile and tells every player only the player's own part; it is a correlated equilibrium if
nobody gains by disobeying (Aumann 1974, "Subjectivity and correlation in randomized strategies", from memory). Every
pure and mixed equilibrium is one, so the worst of them is at most as good as the worst equilibrium of any kind. They
form a polytope: two linear programs give both ends.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from analysis.equilibria import Profile, as_costs
from analysis.goals import Sense

MOST_ENTRIES = 2_000_000  # of the constraints' matrix
MOST_SHOWN = 10
TIGHT = 1e-9
NO_SIZE = "the table is too large for the linear programs of correlated equilibria"


@dataclass(frozen=True)
class Correlated:
    """One correlated equilibrium.

    probabilities: (*shape). welfare: its mean a day. gain: the most that a player gains by disobeying a
    recommendation, weighed with its probability, in the goal's unit (0 but for rounding).
    """

    probabilities: np.ndarray
    welfare: float
    gain: float

    def likeliest(self, most: int = MOST_SHOWN) -> list[tuple[Profile, float]]:
        """The profiles drawn most often, with their probabilities."""
        order = np.argsort(-self.probabilities, axis=None, kind="stable")[:most]
        places = zip(*np.unravel_index(order, self.probabilities.shape), strict=True)
        pairs = [(tuple(map(int, profile)), float(self.probabilities[profile])) for profile in places]
        return [(profile, share) for profile, share in pairs if share > TIGHT]


@dataclass(frozen=True)
class CorrelatedBounds:
    """The best and the worst of all correlated equilibria; None with a reason where they were not worked out.

    price_of_anarchy, price_of_stability: of the best profile's welfare against theirs; None where a ratio says
    nothing.
    """

    best: Correlated | None
    worst: Correlated | None
    price_of_anarchy: float | None
    price_of_stability: float | None
    reason: str | None = None


def correlated_bounds(
    payoffs: np.ndarray, sense: Sense, welfare: np.ndarray, welfare_sense: Sense
) -> CorrelatedBounds:
    """The correlated equilibria with the best and with the worst welfare.

    payoffs: (players, *shape). welfare: (*shape), a day.
    """
    shape = welfare.shape
    if welfare.size * sum(n - 1 for n in shape) > MOST_ENTRIES:
        return CorrelatedBounds(None, None, None, None, NO_SIZE)
    costs = as_costs(np.asarray(payoffs, float), sense)
    loss = as_costs(np.asarray(welfare, float), welfare_sense)
    constraints = obedience(costs)
    found = [_extreme(sign * loss, constraints) for sign in (1, -1)]
    if any(one is None for one in found):
        return CorrelatedBounds(None, None, None, None, "the linear program was not solved")
    best, worst = (
        Correlated(one, float((one * welfare).sum()), disobedience(costs, one))
        for one in found
        if one is not None
    )
    optimum = float(welfare.max() if welfare_sense == "gain" else welfare.min())
    prices = [_price(optimum, one.welfare, welfare_sense) for one in (worst, best)]
    reason = None if prices[0] is not None else "a welfare is not above 0, so a ratio says nothing"
    return CorrelatedBounds(best, worst, *prices, reason)


def _price(optimum: float, reached: float, sense: Sense) -> float | None:
    if min(optimum, reached) <= 0:
        return None
    return max(1.0, optimum / reached if sense == "gain" else reached / optimum)


def obedience(costs: np.ndarray):  # -> scipy.sparse.csr_array, imported within
    """The matrix whose product with the probabilities is, for every recommendation and deviation, what obeying costs.

    One row for each (player, recommended, instead); obeyed where no entry of the product is above 0. Rows are scaled to
    entries of at most 1.
    """
    from scipy.sparse import csr_array

    cells = np.arange(costs[0].size).reshape(costs[0].shape)
    values, columns, starts = [], [], [0]
    for player, cost in enumerate(costs):
        own, places = (np.moveaxis(one, player, 0).reshape(one.shape[player], -1) for one in (cost, cells))
        for told in range(len(own)):
            for instead in range(len(own)):
                if instead != told:
                    extra = own[told] - own[instead]
                    values.append(extra / (np.abs(extra).max() or 1.0))
                    columns.append(places[told])
                    starts.append(starts[-1] + len(extra))
    if not values:
        return csr_array((0, costs[0].size))
    return csr_array(
        (np.concatenate(values), np.concatenate(columns), starts), shape=(len(values), costs[0].size)
    )


def disobedience(costs: np.ndarray, probabilities: np.ndarray) -> float:
    """The most that any player gains by disobeying one recommendation, weighed with its probability; at least 0."""
    most = 0.0
    for player, cost in enumerate(costs):
        own, drawn = (
            np.moveaxis(one, player, 0).reshape(one.shape[player], -1) for one in (cost, probabilities)
        )
        paid = (own * drawn).sum(axis=1)
        instead = drawn @ own.T  # (told, instead)
        most = max(most, float((paid - instead.min(axis=1)).max()))
    return most


def _extreme(loss: np.ndarray, constraints) -> np.ndarray | None:
    """The probabilities with the least mean loss under the constraints, by HiGHS."""
    from scipy.optimize import linprog

    scale = float(np.ptp(loss)) or 1.0
    solved = linprog(
        (loss.ravel() - loss.min()) / scale,
        A_ub=constraints if constraints.shape[0] else None,
        b_ub=np.zeros(constraints.shape[0]) if constraints.shape[0] else None,
        A_eq=np.ones((1, loss.size)), b_eq=[1.0], bounds=(0, None), method="highs",
        options={"primal_feasibility_tolerance": TIGHT, "dual_feasibility_tolerance": TIGHT},
    )  # fmt: skip
    if solved.x is None or solved.status != 0:
        return None
    positive = np.maximum(solved.x, 0)
    return (positive / positive.sum()).reshape(loss.shape)
