"""Picking one policy by simulation: an indifference zone, run no longer than needed, and two-stage constants.

Sources, all from memory: Kim and Nelson 2001, "A fully sequential procedure for indifference-zone selection in
simulation" (valid with common random numbers, for it looks at paired differences only); Rinott 1978, "On two-stage
selection procedures and related probability-inequalities"; Dudewicz and Dalal 1975, "Allocation of observations in
ranking and selection with unequal variances". All three hold for normal observations.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq
from scipy.special import chdtri, ndtr, stdtr, stdtrit

FIRST_STAGE = 20
NODES, FARTHEST = 200, 8.0  # of the integrals; in normal standard deviations


def sequential_constants(policies: int, first_stage: int, error: float) -> tuple[float, float]:
    """Kim and Nelson's eta and h squared, with their c = 1, for a chance `error` of a wrong selection."""
    eta = 0.5 * ((2 * error / (policies - 1)) ** (-2 / (first_stage - 1)) - 1)
    return eta, 2 * eta * (first_stage - 1)


@dataclass(frozen=True)
class Selection:
    """What the sequential procedure has found so far.

    selected: a place among the policies, None while undecided. alive: those still in. used: replications
    looked at. most: replications at which it decides at the latest. dropped: place -> replications at which.
    """

    selected: int | None
    alive: tuple[int, ...]
    used: int
    most: int
    dropped: dict[int, int]


def select(
    values: np.ndarray, difference: float, error: float, *, first_stage: int = FIRST_STAGE
) -> Selection:
    """Kim and Nelson's selection of the policy of the largest mean.

    values: paired, (replications, policies), larger better; a policy dropped earlier may have NaN afterwards.
    difference: above 0, the least that matters, in the values' unit; error: the chance of a wrong selection where
    the best is ahead by that much or more. Looks once after each replication from the first stage on.
    """
    replications, policies = values.shape
    if policies == 1:
        return Selection(0, (0,), 0, 0, {})
    if replications < first_stage:
        raise ValueError(f"{replications} replications are fewer than the first stage, {first_stage}")
    _, h_squared = sequential_constants(policies, first_stage, error)
    first = values[:first_stage]
    spread = (first[:, :, None] - first[:, None, :]).var(axis=0, ddof=1)
    ratio = h_squared * spread / difference**2
    alive, dropped = list(range(policies)), {}
    for r in range(first_stage, replications + 1):
        own = ratio[np.ix_(alive, alive)]
        means, slack = values[:r, alive].mean(axis=0), np.maximum(0.0, difference / (2 * r) * (own - r))
        stays = np.all(means[:, None] >= means[None, :] - slack, axis=1)
        dropped |= {place: r for place, keep in zip(alive, stays, strict=True) if not keep}
        most = int(own[np.ix_(stays, stays)].max()) + 1  # from there on only the largest mean stays
        alive = [place for place, keep in zip(alive, stays, strict=True) if keep]
        if len(alive) == 1 or r >= most:
            best = alive[int(np.argmax(values[:r, alive].mean(axis=0)))]
            return Selection(best, tuple(alive), r, max(r, most), dropped)
    return Selection(None, tuple(alive), replications, most, dropped)


# ---- constants of two-stage procedures, by integration ----


def _nodes() -> tuple[np.ndarray, np.ndarray]:
    """Probabilities and weights of an integral over (0, 1), by Gauss and Legendre on the normal scale: smooth."""
    nodes, weights = np.polynomial.legendre.leggauss(NODES)
    at = FARTHEST * nodes
    return ndtr(at), FARTHEST * weights * np.exp(-0.5 * at**2) / math.sqrt(2 * math.pi)


def rinott(policies: int, first_stage: int, confidence: float) -> float:
    """Rinott's h: a policy then needs (h s / difference) squared replications in all, of intakes of its own."""
    degrees = first_stage - 1
    probability, weight = _nodes()
    chi = chdtri(degrees, probability)  # chi-square quantiles; the order of the tail does not matter here
    width = np.sqrt(degrees * (1 / chi[:, None] + 1 / chi[None, :]))

    def miss(h: float) -> float:
        inner = ndtr(h / width) @ weight
        return float(inner ** (policies - 1) @ weight) - confidence

    return float(brentq(miss, 0.0, 100.0, xtol=1e-10))


def dudewicz_dalal(policies: int, first_stage: int, confidence: float) -> float:
    """Dudewicz and Dalal's h, which Student's distribution alone gives."""
    degrees = first_stage - 1
    probability, weight = _nodes()
    quantile = stdtrit(degrees, probability)

    def miss(h: float) -> float:
        return float(stdtr(degrees, quantile + h) ** (policies - 1) @ weight) - confidence

    return float(brentq(miss, 0.0, 100.0, xtol=1e-10))


def two_stage_replications(
    values: np.ndarray, difference: float, error: float, *, first_stage: int = FIRST_STAGE
) -> list[int]:
    """The replications of each policy by Rinott's procedure, had every policy intakes of its own.

    values: (replications, policies), of which the first stage is used. Beside the sequential procedure's own
    number it shows what common intakes save.
    """
    if values.shape[1] == 1:
        return [0]
    h = rinott(values.shape[1], first_stage, 1 - error)
    spread = values[:first_stage].std(axis=0, ddof=1)
    return [max(first_stage, math.ceil((h * one / difference) ** 2)) for one in spread]


def next_look(selection: Selection, most_allowed: int) -> int:
    """The number of replications to have before the procedure is asked again: twice as many, no more than needed."""
    return min(2 * selection.used, selection.most, most_allowed)
