"""Stays of other families replaced by a few exponential phases, and the error of doing so.

The mean is kept exactly; cv and third moment are met where so many phases can meet them, else the cv comes as
near as they allow. Among fits that are equally good in this, and what a search from there finds, the one nearest
to the distribution function is taken, and of those that tie to three decimals the one of fewest phases.

That no stay of N phases has a cv below 1 / sqrt(N): Aldous & Shepp, "The least variable phase type distribution
is Erlang", Stochastic Models 3 (1987), from memory.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.chain.candidates import candidates
from analysis.chain.phases import Moments, PhaseBook, is_phase_type
from analysis.chain.refining import refined
from sim.durations import Duration
from sim.scenario import Scenario

MOST_PHASES = 20
MOST_REFINED = 5  # phases of a search for the nearest distribution function; more take long and add little
NEAR = 0.002  # a largest distance that no search is needed for
MET = 1e-8  # relative; what differs by less is the same moment
ROUGH, GRID = 200, 2000  # points at which distribution functions are compared, to choose and to tell


@dataclass(frozen=True)
class Shape:
    """A stay in three numbers. mean_days, cv, skewness; skewness None where the stay never varies."""

    mean_days: float
    cv: float
    skewness: float | None


@dataclass(frozen=True)
class PhaseFit:
    """One group's stay made of phases. stay: the phases as the scenario file would state them.

    phases: how many there are. target, fit: the stay replaced, and this one.
    largest_distance: the most that their distribution functions differ anywhere (found to within 0.0005).
    """

    stay: Duration
    phases: int
    target: Shape
    fit: Shape
    largest_distance: float

    def to_dict(self) -> dict[str, Any]:
        """The fit in plain numbers, lists and dicts."""
        return {
            "phases": self.phases,
            "target": vars(self.target),
            "fit": vars(self.fit),
            "largest_distance": self.largest_distance,
            "stay": self.stay.model_dump(mode="json", by_alias=True),
        }


def with_phase_fits(scenario: Scenario, most_phases: int) -> tuple[Scenario, dict[str, PhaseFit]]:
    """The scenario with every stay that is not made of phases replaced by at most `most_phases` of them.

    Groups that stay no time at all, delays and rhythms are left as they are. Returns the scenario and, by
    group, what was replaced. Raises ValueError unless `most_phases` is from 1 to MOST_PHASES.
    """
    known: dict[str, PhaseFit] = {}  # by stay: groups often share one
    fits: dict[str, PhaseFit] = {}
    for group in scenario.patients:
        if not is_phase_type(group.stay) and group.mean_stay_days > 0:
            key = group.stay.model_dump_json()
            known[key] = known.get(key) or fit_stay(group.stay, most_phases)
            fits[group.group] = known[key]
    groups = (
        group.model_copy(update={"stay": fits[group.group].stay}) if group.group in fits else group
        for group in scenario.patients
    )
    return scenario.model_copy(update={"patients": tuple(groups)}), fits


def fit_stay(stay: Duration, most_phases: int) -> PhaseFit:
    """The best replacement of one stay (of a mean above 0 days) by at most `most_phases` phases.

    Raises ValueError unless `most_phases` is from 1 to MOST_PHASES.
    """
    if not 1 <= most_phases <= MOST_PHASES:
        raise ValueError(f"a fit takes from 1 to {MOST_PHASES} phases; got {most_phases}")
    target = stay_moments(stay)
    nearest = nearest_in_moments(target, most_phases)
    best = _best(stay, nearest)
    met = _missed(target, stay_moments(best.stay)) == (0.0, False)
    if best.largest_distance <= NEAR or not met:
        return best
    others = refined(stay, target, min(most_phases, MOST_REFINED))
    good = [other for other in others if _missed(target, stay_moments(other)) == (0.0, False)]
    return _best(stay, [best.stay, *good])


def _best(stay: Duration, others: Sequence[Duration]) -> PhaseFit:
    """The one nearest in distribution, looked at roughly where there are several to choose from."""
    return _compared(
        stay, min(others, key=lambda other: (round(_largest_distance(stay, other, ROUGH), 3), _phases(other)))
    )


def _phases(stay: Duration) -> int:
    book = PhaseBook()
    return len(book.reached(book.starts(stay)))


def nearest_in_moments(target: Moments, most_phases: int) -> list[Duration]:
    """Stays of the target's mean and at most `most_phases` phases that come nearest to its other moments.

    Nearest in cv first; among those that meet it, the ones that meet the third moment too, if there are any.
    """
    found = [(_missed(target, stay_moments(other)), other) for other in candidates(target, most_phases)]
    least = min(missed for missed, _ in found)
    return [other for missed, other in found if missed == least]


def stay_moments(stay: Duration) -> Moments:
    """The first three moments of a stay of any family, in days and their powers."""
    if is_phase_type(stay):
        book = PhaseBook()
        return book.moments(book.starts(stay))
    if stay.family == "mixture":
        total = sum(part.weight for part in stay.parts)
        parts = [(part.weight / total, stay_moments(part)) for part in stay.parts]
        return Moments(*(sum(weight * part[order] for weight, part in parts) for order in range(3)))
    known = stay.distribution()
    mean, square = known.mean(), 1 + known.cv() ** 2
    return Moments(mean, mean**2 * square, mean**3 * _third(stay, square))


def _third(stay: Duration, square: float) -> float:
    """E[X^3] / E[X]^3, given E[X^2] / E[X]^2."""
    match stay.family:
        case "gamma":
            return square * (2 * square - 1)
        case "lognormal":
            return square**3
        case "weibull":
            order = _weibull_order(stay)
            return math.exp(math.lgamma(1 + 3 / order) - 3 * math.lgamma(1 + 1 / order))
        case "empirical":
            values, mean = stay.distribution().values, stay.distribution().mean()
            return math.fsum((value / mean) ** 3 for value in values) / len(values) if mean else 0.0
        case "constant":
            return 1.0
    raise TypeError(f"the third moment of a stay of family {stay.family!r} is not known here")


def _weibull_order(stay: Duration) -> float:
    """The power of time that the cumulative hazard of a Weibull stay is, from its values at two times."""
    known, factor = stay.distribution(), 1 + stay.cv
    early, late = -np.log(known.survival(np.array([1.0, factor]) * known.mean()))
    return math.log(late / early) / math.log(factor)


def _missed(target: Moments, found: Moments) -> tuple[float, bool]:
    """By how much the cv is missed, and whether the third moment is; nothing where they agree to rounding."""
    off = abs(_shape(found).cv - _shape(target).cv)
    return (off if off > MET else 0.0), abs(found.third / target.third - 1) > MET


def _shape(moments: Moments) -> Shape:
    mean = moments.first
    square, cube = moments.second / mean**2, moments.third / mean**3
    variance = max(square - 1, 0.0)
    if variance < 1e-14:  # rounding of a stay that never varies
        return Shape(mean, 0.0, None)
    return Shape(mean, math.sqrt(variance), (cube - 3 * square + 2) / variance**1.5)


def _compared(stay: Duration, other: Duration) -> PhaseFit:
    target, fit = _shape(stay_moments(stay)), _shape(stay_moments(other))
    return PhaseFit(other, _phases(other), target, fit, _largest_distance(stay, other, GRID))


def _largest_distance(stay: Duration, other: Duration, points: int) -> float:
    """The largest distance of two distribution functions, the second one continuous; right to 1 / points.

    Looked for at and just below quantiles of the first, which has all its steps there.
    """
    first, second = stay.distribution(), other.distribution()
    at = first.quantile((np.arange(points) + 0.5) / points)
    reached = second.cdf(at)
    off = [first.cdf(at) - reached, first.cdf(np.nextafter(at, -np.inf)) - reached]
    return float(np.abs(off).max())
