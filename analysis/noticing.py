"""How long a manager would have to watch before a gain shows: the size of regret that matters.

A gain shows at 95 % once it is 1.96 standard errors of the mean of that many years of the player's own data; the
spread of a year comes from the replications, scaled by the length of their window.
"""

from __future__ import annotations

import numpy as np

from analysis.confidence import t_quantile

DAYS_A_YEAR = 365.0
YEARS = 10.0
CONFIDENCE = 0.95


def yearly_spread(values: np.ndarray, measured_days: float) -> np.ndarray:
    """Standard deviation of a player's own measure over a year, (...), from values (replications, ...)."""
    return values.std(axis=0, ddof=1) * np.sqrt(measured_days / DAYS_A_YEAR)


def years_to_notice(gain: float, spread: float) -> float | None:
    """Years of own data until a gain shows at 95 %; None where there is no gain to notice."""
    if gain <= 0:
        return None
    return float((_critical() * spread / gain) ** 2)


def noticeable_gain(spread: np.ndarray, years: float = YEARS) -> float:
    """The gain that takes `years` to notice, in the payoff's unit.

    spread: (players, *shape), of a year. Each player's is the median over the profiles, and the smallest player's
    gain holds, so that nobody would notice sooner.
    """
    typical = np.median(spread.reshape(len(spread), -1), axis=1)
    return float(_critical() * typical.min() / np.sqrt(years))


def _critical() -> float:
    return float(t_quantile((1 + CONFIDENCE) / 2, np.inf))
