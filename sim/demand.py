"""The weekly shape of demand, and arrival times by inversion of the cumulative rate (never by thinning).

Operational time is the time in which arrivals come at an even rate: `cumulative` turns days into operational
days and `inverse` turns them back; over a whole week the two agree.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["WeeklyPattern", "arrival_times"]

Array = NDArray[np.float64]

_DAYS, _HOURS_A_DAY, _HOURS = 7, 24, 168


def _checked(name: str, weights: tuple[float, ...] | None, length: int) -> tuple[float, ...] | None:
    if weights is None:
        return None
    weights = tuple(float(weight) for weight in weights)
    if len(weights) != length:
        raise ValueError(f"{name} needs {length} weights; got {len(weights)}")
    if not all(math.isfinite(weight) and weight >= 0.0 for weight in weights) or max(weights) == 0.0:
        raise ValueError(f"{name} needs finite weights of 0 or more, not all of them 0; got {weights!r}")
    return weights


@dataclass(frozen=True)
class WeeklyPattern:
    """How the arrival rate moves over the week around its weekly mean.

    The rate in an hour of the week is proportional to the weight of its day times that of its hour, and its
    mean over the week is 1. Times are days from Monday 00:00, 0 or more.

    `hour_of_day`: 24 weights, or None for an even day; `day_of_week`: 7 weights, Monday first, or None for an
    even week. Raises ValueError for another length, a weight below 0, or no weight above 0.
    """

    hour_of_day: tuple[float, ...] | None = None
    day_of_week: tuple[float, ...] | None = None

    def __post_init__(self) -> None:
        object.__setattr__(self, "hour_of_day", _checked("hour_of_day", self.hour_of_day, _HOURS_A_DAY))
        object.__setattr__(self, "day_of_week", _checked("day_of_week", self.day_of_week, _DAYS))

    @property
    def is_constant(self) -> bool:
        """Whether every hour of the week has the same rate."""
        return all(len(set(weights)) == 1 for weights in (self.hour_of_day, self.day_of_week) if weights)

    def rate(self, time_days: ArrayLike) -> Array:
        """The rate at `time_days` (any shape, days), 1 being the weekly mean. Returns the same shape."""
        time = np.asarray(time_days, dtype=float)
        if self.is_constant:
            return np.ones_like(time)
        return self._hourly[_hour_at(time) % _HOURS] * _HOURS_A_DAY

    def cumulative(self, time_days: ArrayLike) -> Array:
        """Operational days up to `time_days` (any shape, days): the integral of the rate. Same shape."""
        time = np.asarray(time_days, dtype=float)
        if self.is_constant:
            return time.copy()
        week, hour = np.divmod(_hour_at(time), _HOURS)
        within = (time - (_HOURS * week + hour) / _HOURS_A_DAY) * _HOURS_A_DAY
        reached = self._reached[hour] + within * self._hourly[hour]
        return _DAYS * week + np.clip(reached, self._reached[hour], self._reached[hour + 1])

    def inverse(self, operational_days: ArrayLike) -> Array:
        """The time, in days, at which the cumulative rate passes `operational_days` (any shape, days).

        Non-decreasing to the last bit, and never past the end of the hour that it falls in; hours of weight 0
        are skipped. A constant pattern returns its input unchanged. Returns the same shape.
        """
        operational = np.asarray(operational_days, dtype=float)
        if self.is_constant:
            return operational.copy()
        week, rest = np.divmod(operational, float(_DAYS))
        hour = np.searchsorted(self._reached, rest, side="right") - 1
        share = (rest - self._reached[hour]) / self._hourly[hour]
        start = _HOURS * week + hour
        end = np.nextafter((start + 1.0) / _HOURS_A_DAY, 0.0)
        return np.minimum(start / _HOURS_A_DAY + share / _HOURS_A_DAY, end)

    @cached_property
    def _reached(self) -> Array:
        """(169,) operational days at the start of each hour of the week, and at its end: exactly 7."""
        days, hours = self.day_of_week or (1.0,) * _DAYS, self.hour_of_day or (1.0,) * _HOURS_A_DAY
        # Largest weights of 1: products neither overflow nor vanish.
        weights = np.outer(np.array(days) / max(days), np.array(hours) / max(hours)).ravel()
        reached = np.append(0.0, np.cumsum(weights))
        return _DAYS * (reached / reached[-1])

    @cached_property
    def _hourly(self) -> Array:
        """(168,) operational days within each hour of the week."""
        return np.diff(self._reached)


def _hour_at(time: Array) -> NDArray[np.int64]:
    """Whole hours before `time`, where hour k starts at the double nearest to k / 24 days."""
    hour = np.floor(time * _HOURS_A_DAY).astype(np.int64)
    # Just before a boundary the product may round up to it; at a boundary it never rounds below.
    return hour - (hour / _HOURS_A_DAY > time)


def arrival_times(
    uniforms_source: Callable[[int], Array],
    per_day: float,
    pattern: WeeklyPattern,
    horizon_days: float,
    *,
    block: int | None = None,
) -> Array:
    """Times of one Poisson stream of arrivals.

    `uniforms_source`: returns the next n numbers, strictly between 0 and 1, of the stream; `per_day`: mean
    arrivals a day over the week, 0 or more; `pattern`: its shape; `horizon_days`: above 0, where the arrivals
    end; `block`: numbers asked for at a time, default enough for nearly every stream, which changes no bit of
    the result. Returns the times in days from Monday 00:00, rising, all below the horizon. The k-th depends
    on the first k numbers alone, and `per_day` only divides operational times, so that raising the demand
    leaves each patient the same numbers. Raises ValueError for other values.
    Source: Çinlar, "Introduction to Stochastic Processes", 1975 (from memory).
    """
    if not (math.isfinite(per_day) and per_day >= 0.0):
        raise ValueError(f"arrivals a day must be a finite number, 0 or more; got {per_day!r}")
    if not (math.isfinite(horizon_days) and horizon_days > 0.0):
        raise ValueError(f"the horizon must be a finite number of days, above 0; got {horizon_days!r}")
    if per_day == 0.0:
        return np.empty(0)
    expected = per_day * float(pattern.cumulative(horizon_days))
    block = block or math.ceil(expected + 6.0 * math.sqrt(expected)) + 10
    blocks = [_unit_rate_times(uniforms_source(block), 0.0)]
    while pattern.inverse(blocks[-1][-1] / per_day) < horizon_days:
        blocks.append(_unit_rate_times(uniforms_source(block), blocks[-1][-1]))
    times = pattern.inverse(np.concatenate(blocks) / per_day)
    return times[: np.searchsorted(times, horizon_days)]


def _unit_rate_times(uniforms: Array, carried: float) -> Array:
    """Arrivals at rate 1 after `carried`, which is added first: bits do not depend on where blocks end."""
    return np.cumsum(np.append(carried, -np.log(uniforms)))[1:]
