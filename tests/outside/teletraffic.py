"""Published formulas of loss systems, written apart from the program that they judge.

`test_loss_systems.py` first holds them against printed tables. Offered loads are in beds: arrivals a day
times mean stay in days.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy.optimize import brentq
from scipy.special import gammaincc, gammaln


def erlang_b(beds: float, offered: float) -> float:
    """Share of patients refused by a loss unit; `beds` need not be whole.

    Source: Erlang 1917; for a real number of beds the incomplete gamma function (Jagerman, "Some properties
    of the Erlang loss function", Bell System Technical Journal 53, 1974; from memory).
    """
    logarithm = beds * np.log(offered) - offered - gammaln(beds + 1)
    return float(np.exp(logarithm) / gammaincc(beds + 1, offered))


def occupancy_of_loss_unit(beds: int, offered: float) -> np.ndarray:
    """Distribution of occupied beds, (beds + 1,): a Poisson distribution cut off at the beds. Erlang 1917."""
    levels = np.arange(beds + 1)
    weights = np.exp(levels * np.log(offered) - gammaln(levels + 1))
    return weights / weights.sum()


def occupancy_of_closing_unit(
    beds: int, closes_to_transfers_at: int, own: float, transfers: float
) -> np.ndarray:
    """Distribution of occupied beds, (beds + 1,), of a unit that takes transfers only below a threshold.

    own, transfers: offered loads. Any law of stay, the same for both kinds of patients. Source: Oakes,
    "Random overlapping intervals - a generalization of Erlang's loss formula", Annals of Probability 4, 1976,
    940-946 (abstract read; title from memory): p(n+1) / p(n) = load offered at n / (n + 1).
    """
    loads = own + transfers * (np.arange(beds) < closes_to_transfers_at)
    weights = np.cumprod(np.append(1.0, loads / np.arange(1, beds + 1)))
    return weights / weights.sum()


def overflow_moments(beds: int, offered: float) -> tuple[float, float]:
    """Mean and variance of the patients of an overflow in a unit that never fills; exponential stays.

    Source: Kosten 1937 and Riordan, in Wilkinson, "Theories for toll traffic engineering in the USA", Bell
    System Technical Journal 35, 1956 (from memory).
    """
    mean = offered * erlang_b(beds, offered)
    return mean, mean * (1 - mean + offered / (beds + 1 - offered + mean))


def equivalent_random_loss(streams: Sequence[tuple[int, float]], shared_beds: int) -> float:
    """Load lost by shared beds that take the overflow of several units, (beds, offered) each; approximate.

    One unit is sought whose overflow has the same mean and variance. Source: Wilkinson 1956, with Rapp's
    formulas for that unit ("Planning of junction network in a multi-exchange area", 1964; from memory).
    """
    mean, variance = np.sum([overflow_moments(*stream) for stream in streams], axis=0)
    peakedness = variance / mean
    offered = variance + 3 * peakedness * (peakedness - 1)
    beds = offered * (mean + peakedness) / (mean + peakedness - 1) - mean - 1
    return offered * erlang_b(beds + shared_beds, offered)


def hayward_loss(streams: Sequence[tuple[int, float]], shared_beds: int) -> float:
    """The same load lost by Hayward's rougher approximation (Fredericks 1980; from memory)."""
    mean, variance = np.sum([overflow_moments(*stream) for stream in streams], axis=0)
    return mean * erlang_b(shared_beds * mean / variance, mean * mean / variance)


def offered_at_utilisation(beds: int, utilisation: float) -> float:
    """The offered load at which a loss unit reaches this utilisation."""
    return brentq(lambda load: load * (1 - erlang_b(beds, load)) - utilisation * beds, 1e-3, 10.0 * beds)


def offered_at_refusal(beds: int, refused: float) -> float:
    """The offered load at which a loss unit refuses this share."""
    return brentq(lambda load: erlang_b(beds, load) - refused, 1e-6, 10.0 * beds, xtol=1e-12)
