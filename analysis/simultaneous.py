"""Simultaneous inference over many paired means: the largest t of all, by Gaussian multipliers.

Every statement about several means at once (bands, sets, comparisons) takes its critical value here. Sources:
Romano and Wolf 2005, "Stepwise multiple testing as formalized data snooping"; Chernozhukov, Chetverikov and Kato
2013, "Gaussian approximations and multiplier bootstrap" (both from memory).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from scipy.special import ndtr, stdtr

from analysis.confidence import t_quantile

DRAWS = 1000
PURPOSE = 7  # beside the seed, so that multipliers share no stream with anything else
CELLS_AT_ONCE = 4_000_000  # numbers held by one block of draws x contrasts


@dataclass(frozen=True)
class Studentised:
    """Means over replications with their joint error.

    mean, error: (contrasts,). scores: (replications, contrasts), each column of length 1, so that normal
    multipliers times scores are standard normal with the contrasts' own correlation; 0 where the error is 0.
    """

    mean: np.ndarray
    error: np.ndarray
    scores: np.ndarray

    @property
    def degrees(self) -> int:
        """Degrees of freedom of each error."""
        return len(self.scores) - 1


def rng_of(seed: int) -> np.random.Generator:
    """The generator of a result's multipliers: of the scenario's seed, so that a result repeats."""
    return np.random.default_rng([seed, PURPOSE])


def studentise(values: np.ndarray) -> Studentised:
    """Means and joint errors of paired values, (replications, contrasts), of at least 2 replications."""
    values = np.asarray(values, float)
    n, mean = len(values), values.mean(axis=0)
    centred = values - mean
    length = np.sqrt(np.square(centred).sum(axis=0))
    scores = np.divide(centred, length, out=np.zeros_like(centred), where=length > 0)
    return Studentised(mean, length / np.sqrt(n * (n - 1)), scores)


def multipliers(rng: np.random.Generator, draws: int, replications: int) -> np.ndarray:
    """Standard normal multipliers, (draws, replications); that they need no centring is the scores' doing."""
    return rng.standard_normal((draws, replications))


def sign_flips(rng: np.random.Generator, draws: int, replications: int) -> np.ndarray:
    """Signs, (draws, replications), for `flip_scores`."""
    return rng.choice([-1.0, 1.0], size=(draws, replications))


def flip_scores(parts: Studentised) -> np.ndarray:
    """The values themselves, not centred, each column of length 1, (replications, contrasts).

    Signs times these are a joint null that is exact where values are symmetric about 0, however few the replications
    and however many the contrasts; `flip_to_student` turns the result into Student's t, for each flip leaves the sum of
    squares as it is. (Randomisation by signs: Fisher 1935, "The design of experiments"; from memory.)
    """
    n = len(parts.scores)
    length = parts.error * np.sqrt(n * (n - 1))
    values = parts.mean + length * parts.scores
    whole = np.sqrt(np.square(values).sum(axis=0))
    return np.divide(values, whole, out=np.zeros_like(values), where=whole > 0)


def flip_to_student(flipped: float, replications: int, degrees: int) -> float:
    """Student's t, on the scale of `degrees`, of a sum of flipped scores; infinite where all values have one sign."""
    share = min(flipped / np.sqrt(replications), 1.0)
    if share >= 1 - 1e-12:
        return np.inf
    t = share * np.sqrt((replications - 1) / (1 - share * share))
    return (
        float(t) if degrees == replications - 1 else float(-t_quantile(stdtr(replications - 1, -t), degrees))
    )


def draws_of(scores: np.ndarray, rows: np.ndarray) -> Iterator[tuple[slice, np.ndarray]]:
    """The joint null of the contrasts, (draws, contrasts), a block of contrasts at a time, so memory is bounded."""
    width = max(1, CELLS_AT_ONCE // max(1, len(rows)))
    for first in range(0, scores.shape[1], width):
        block = slice(first, min(first + width, scores.shape[1]))
        yield block, rows @ scores[:, block]


def largest(scores: np.ndarray, rows: np.ndarray, *, two_sided: bool) -> np.ndarray:
    """The largest statistic of each draw, (draws,); -inf where there are no contrasts."""
    most = np.full(len(rows), -np.inf)
    for _, null in draws_of(scores, rows):
        np.maximum(most, (np.abs(null) if two_sided else null).max(axis=1), out=most)
    return most


def to_student(critical: np.ndarray | float, degrees: int) -> np.ndarray | float:
    """A critical value on the normal scale as one on Student's scale of the same tail: t⁻¹(Φ(c))."""
    return -t_quantile(ndtr(-np.asarray(critical, float)), degrees)  # by the upper tail: no loss far out


def critical_max_t(
    scores: np.ndarray, level: float, rng: np.random.Generator, *, two_sided: bool = True, draws: int = DRAWS,
    degrees: int | None = None,
) -> float:  # fmt: skip
    """The value that the largest studentised contrast passes with probability `level` where all means are 0.

    scores: (replications, contrasts), as `studentise` gives them. degrees: of the errors (default: replications - 1).
    """
    most = largest(scores, multipliers(rng, draws, len(scores)), two_sided=two_sided)
    quantile = np.quantile(most, 1 - level, method="higher")
    return float(to_student(quantile, len(scores) - 1 if degrees is None else degrees))


def simultaneous_bands(
    values: np.ndarray, confidence: float, rng: np.random.Generator, *, draws: int = DRAWS
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Mean, low and high of paired values, (replications, contrasts): all true means lie within, at `confidence`."""
    parts = studentise(values)
    half = critical_max_t(parts.scores, 1 - confidence, rng, draws=draws) * parts.error
    return parts.mean, parts.mean - half, parts.mean + half
