"""Large boxes of states, by relaxation: methods that say whether they converged, tried one after another.

No distribution leaves this room without its certificate, and a method's own word is not enough: small changes
from sweep to sweep may hide a large error where convergence is slow.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from analysis.chain.box import Box
from analysis.chain.certificate import certify_observed
from analysis.chain.occupancy_measures import Observed
from sim.errors import RunError

Numbers = NDArray[np.float64]

BATCH = 10  # sweeps between two looks at the convergence
MOST_SWEEPS = 4000
MOST_UPDATES = 1e10  # states times sweeps
FIRST_WEIGHT, GREATEST_WEIGHT = 1.5, 1.9
SETTLING = 4  # batches at the first weight before a better one is chosen
WILD = 0.1  # changes of this size after all those sweeps tell of too large a weight
STIFF = 10.0  # the ratio of discharge rates above which aggregation is tried first
ERROR = 1e-11  # of the distribution, the sum of absolute errors as estimated
STEADY = 1e-12  # the change of any probability relative to itself, in a sweep
FLOOR = 2e-15  # where rounding ends the fall of the changes


@dataclass(frozen=True)
class Attempt:
    """A distribution over the box that a method ended with, and whether it converged, by its own measure."""

    method: str
    probability: Numbers
    converged: bool


@dataclass
class Progress:
    """The changes of one method, batch after batch, and the error that they let expect.

    moved: the sum of the changes in a sweep, relative to the whole. paces: the factors by which it fell a sweep,
    in this batch and the one before; slow errors may hide behind fast ones in one batch, hardly in two.
    """

    moved: float = 1.0
    paces: tuple[float, float] = (1.0, 1.0)

    def note(self, moved: float) -> None:
        """Takes in a batch's last sweep; at the floor of rounding the pace is no longer measured."""
        if self.moved > FLOOR:
            pace = (max(moved, FLOOR) / self.moved) ** (1 / BATCH)
            self.paces = (self.paces[1] if self.paces[1] < 1 else pace, pace)
        self.moved = moved

    @property
    def pace(self) -> float:
        """The slower of the two."""
        return max(self.paces)

    @property
    def error(self) -> float:
        """All further changes together, if they go on to fall at this pace."""
        return self.moved / (1 - self.pace) if self.pace < 1 else np.inf


def relaxed(box: Box, reached: NDArray[np.bool_]) -> Observed:
    """What the stationary distribution of a box tells, certified. reached: `box.reached()`.

    Raises RunError, with what became of each method, where none gives a certified answer.
    """
    failures = []
    for method in _methods(box):
        attempt = method(box, reached)
        observed = box.observe(attempt.probability, int(reached.sum()))
        try:
            _demand_convergence(attempt)
            certify_observed(observed)
        except RunError as failure:
            failures.append(f"{attempt.method}: {failure}")
        else:
            return observed
    raise RunError("the chain could not be solved to its accuracy; " + "; ".join(failures))


def _methods(box: Box) -> list[Callable[[Box, NDArray[np.bool_]], Attempt]]:
    stiff = box.leaving.max() > STIFF * box.leaving.min()
    return [aggregated, over_relaxed] if stiff else [over_relaxed, aggregated]


def _demand_convergence(attempt: Attempt) -> None:
    if not attempt.converged:
        raise RunError("not converged within its sweeps")


def over_relaxed(box: Box, reached: NDArray[np.bool_]) -> Attempt:
    """Successive over-relaxation until the whole is settled, then Gauss-Seidel until each state is.

    The weight is Young's (1950, from memory) for the pace that the first sweeps show. Over-relaxed states of
    small probability never settle relative to themselves, hence the second part.
    """
    probability, progress, weight = box.guess() * reached, Progress(), FIRST_WEIGHT
    for batch in _batches(box):
        _, moved = _sweeps(box, probability, reached, weight)
        progress.note(moved)
        if progress.error <= ERROR / 100 or not np.isfinite(moved) or moved <= FLOOR:
            break
        if batch == SETTLING:
            weight = best_weight(progress.paces[1], weight)
        elif batch > 2 * SETTLING and moved > WILD:
            weight = 1 + (weight - 1) / 2
    steady = _settle(box, probability, reached)
    return Attempt("over-relaxation", probability / probability.sum(), steady and progress.error <= ERROR)


def best_weight(pace: float, weight: float) -> float:
    """Young's best weight, from the pace (factor a sweep) seen at a smaller one; that weight where it is best."""
    if not weight - 1 < pace < 1:
        return weight
    jacobi = (pace + weight - 1) ** 2 / (pace * weight**2)  # the square of the Jacobi method's pace
    return min(2 / (1 + np.sqrt(max(1 - jacobi, 0.0))), GREATEST_WEIGHT)


def _settle(box: Box, probability: Numbers, reached: NDArray[np.bool_]) -> bool:
    """Gauss-Seidel in place until every state is steady relative to itself; False where that does not come.

    Forwards and backwards in turn, since rare states follow the likely ones, on whatever side these are.
    """
    for _ in _batches(box):
        change, moved = _sweeps(box, probability, reached, 1.0, both_ways=True)
        if change <= STEADY or not np.isfinite(moved):
            return bool(change <= STEADY and np.isfinite(moved))
    return False


def aggregated(box: Box, reached: NDArray[np.bool_]) -> Attempt:
    """Gauss-Seidel with aggregation by the load of each unit before each sweep, for stiff rates.

    It ends in sweeps without, since aggregation itself can go round in circles.
    """
    probability, progress = box.guess() * reached, Progress()
    for _ in _batches(box):
        change, moved = _sweeps(box, probability, reached, 1.0, aggregate=True)
        progress.note(moved)
        if (change <= STEADY and progress.error <= ERROR / 10) or not np.isfinite(moved):
            break
    steady = _settle(box, probability, reached)
    return Attempt("aggregation", probability / probability.sum(), steady and progress.error <= ERROR)


def _batches(box: Box) -> Iterator[int]:
    sweeps = min(MOST_SWEEPS, MOST_UPDATES / box.sizes.prod())
    return iter(range(1, max(int(sweeps // BATCH), 1) + 1))


def _sweeps(
    box: Box,
    probability: Numbers,
    reached: NDArray[np.bool_],
    weight: float,
    *,
    aggregate: bool = False,
    both_ways: bool = False,
) -> tuple[float, float]:
    """A batch of sweeps in place; the last one's greatest relative change, and its changes over the sum."""
    from analysis.chain.kernels import relaxation

    change = moved = np.inf
    for turn in range(BATCH):
        if aggregate:
            for unit in np.flatnonzero(box.sizes > 1):
                relaxation.aggregate(probability, *box.transitions, unit)
        change, moved = relaxation.sweep(
            probability, reached, *box.transitions, weight, both_ways and turn % 2 == 0
        )
    return change, moved / np.abs(probability).sum()
