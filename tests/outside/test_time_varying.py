"""Demand that moves over the day and the week, in a unit that never fills: an infinite-server system.

Source: Eick, Massey & Whitt, "Mt/G/infinity queues with sinusoidal arrival rates", Management Science 39
(1993), 241-252 (abstract read, formulas from memory). The mean number occupied is the integral of the past
arrival rate times the chance of being still there. So every rhythm in the rate comes through weaker and
later, by a factor and a lag that depend on the whole law of stay: here, unlike in averages, a wrong shape is
found out.

False alarms: at most 200 facts, 1 in 10,000 for the file (see `facts.py`). Planted errors: the wrong day, the
wrong hour, no rhythm, a stay 3 % too long, a wrong shape.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np
import pytest
from scipy.special import ndtr

from sim.replicate import trace_replication
from tests.outside.facts import REPLICATIONS, differs, network, patients_of

PER_DAY, BEDS, WARM_UP, MEASURED = 4.0, 60, 126, 364
WEEK, DAY = 2 * np.pi / 7, 2 * np.pi  # angular frequencies, per day
DAY_OF_WEEK = [1 + 0.8 * np.cos(2 * np.pi * (day - 1) / 7) for day in range(7)]
HOUR_OF_DAY = [1 + 0.8 * np.cos(2 * np.pi * (hour - 14) / 24) for hour in range(24)]
BIN_HOURS = 3


@dataclass(frozen=True)
class Law:
    """A law of stay with what the theory asks of it, written apart from the program.

    time_within: mean days spent within x days of admission, E min(S, x). response: what becomes of a rhythm,
    E (1 - exp(-i g S)) / (i g) for the angular frequency g; None where no closed form is at hand.
    """

    stay: dict[str, Any]
    time_within: Callable[[np.ndarray], np.ndarray]
    response: Callable[[float], complex] | None = None


def exponential(mean):
    return Law(
        {"family": "exponential", "mean_days": mean},
        lambda x: -mean * np.expm1(-x / mean),
        lambda g: mean / (1 + 1j * g * mean),
    )


def constant(days):
    return Law(
        {"family": "constant", "mean_days": days},
        lambda x: np.minimum(x, days),
        lambda g: (1 - np.exp(-1j * g * days)) / (1j * g),
    )


def hyperexponential(mean, cv):
    """Balanced means: both phases hold half of the bed days."""
    root = np.sqrt((cv**2 - 1) / (cv**2 + 1))
    means = mean / (1 + root), mean / (1 - root)
    phases = [(mean / 2 / one, exponential(one)) for one in means]
    return Law(
        {"family": "hyperexponential", "mean_days": mean, "cv": cv},
        lambda x: sum(chance * phase.time_within(x) for chance, phase in phases),
        lambda g: sum(chance * phase.response(g) for chance, phase in phases),
    )


def lognormal(mean, cv):
    sigma = np.sqrt(np.log1p(cv**2))

    def time_within(x):
        z = (np.log(np.maximum(x, 1e-300) / mean) + sigma**2 / 2) / sigma
        return mean * ndtr(z - sigma) + x * ndtr(-z)

    return Law({"family": "lognormal", "mean_days": mean, "cv": cv}, time_within)


LAWS = {
    "exponential": exponential(3.0),
    "constant": constant(3.0),
    "hyperexponential": hyperexponential(3.0, 2.0),
    "lognormal": lognormal(3.0, 1.4),
}


def weekly_rates(day_of_week=DAY_OF_WEEK, hour_of_day=HOUR_OF_DAY):
    """Arrivals a day in each hour of the week, (168,)."""
    weights = np.outer(day_of_week, hour_of_day).ravel()
    return PER_DAY * weights / weights.mean()


def occupied_at(rates, law, weeks=200):
    """Mean occupied at the start of each piece of a week with these rates in equal pieces, exactly.

    Patients who came k pieces ago still hold, on average, as many bed days as a stay spends in that piece.
    """
    edges = 7 / len(rates) * np.arange(weeks * len(rates) + 1)
    still_there = np.diff(law.time_within(edges)).reshape(weeks, -1).sum(axis=0)
    return np.roll(np.fft.irfft(np.fft.rfft(rates) * np.fft.rfft(still_there)), 1)


def occupied_by_bins(rates, law, pieces_an_hour=12):
    """Mean occupied in each bin of the week, (bins,), by the trapezoidal rule between exact values."""
    at = occupied_at(np.repeat(rates, pieces_an_hour), law)
    return ((at + np.roll(at, -1)) / 2).reshape(-1, BIN_HOURS * pieces_an_hour).mean(axis=1)


def harmonic_of_rates(rates, frequency):
    """(2 / T) times the integral of rate(t) exp(-i g t) over the week."""
    edges = np.exp(-1j * frequency * np.arange(len(rates) + 1) * 7 / len(rates))
    return 2 / 7 * rates @ np.diff(edges) / (-1j * frequency)


class TestTheTheoryItself:
    """The judge before the judged: factor and lag as published, and the integration of a true sinusoid."""

    @pytest.mark.parametrize(
        ("law", "days", "factor", "lag"),
        [
            (exponential(3.0), 7, 0.3481313, 1.3538572),
            (exponential(4.0), 7, 0.2683086, 1.4473736),
            (exponential(3.0), 1, 0.05297715, 0.24156448),
            (exponential(4.0), 1, 0.03975728, 0.24367076),
            (constant(3.0), 7, 0.72410145, 1.5),  # the lag is half the stay
            (hyperexponential(3.0, 2.0), 7, 0.31239178, 1.1720875),
        ],
    )
    def test_factor_and_lag(self, law, days, factor, lag):
        """Computed from the published formulas; exponential: 1 / sqrt(1 + (g ES)^2) and atan(g ES) / g."""
        frequency = 2 * np.pi / days
        response = law.response(frequency)
        assert abs(response) / law.stay["mean_days"] == pytest.approx(factor, rel=2e-7)
        assert -np.angle(response) / frequency == pytest.approx(lag, rel=1e-7)

    def test_whole_days_swallow_the_rhythm_of_the_day(self):
        assert abs(constant(3.0).response(DAY)) < 1e-12

    @pytest.mark.parametrize("name", ["exponential", "constant", "hyperexponential"])
    def test_integration_of_a_sinusoid(self, name):
        law, pieces = LAWS[name], 168 * 24
        time = 7 / pieces * np.arange(pieces)
        rates = 4 + 3 * np.sin(WEEK * (time + 3.5 / pieces))
        expected = 4 * 3.0 + 3 * np.imag(law.response(WEEK) * np.exp(1j * WEEK * time))
        assert occupied_at(rates, law) == pytest.approx(expected, abs=2e-6)

    def test_mean_over_the_week_is_the_offered_load(self):
        for law in LAWS.values():
            assert occupied_by_bins(weekly_rates(), law).mean() == pytest.approx(PER_DAY * 3.0, rel=1e-6)


@dataclass(frozen=True)
class Seen:
    """What a trace tells: by_bin, (replications, bins); harmonics, frequency -> (replications,) complex."""

    by_bin: np.ndarray
    harmonics: dict[float, np.ndarray]


@cache
def simulated(name, *, factor=1.0, days_late=0, hours_late=0, flat=False):
    """The simulator's occupancy by time of the week, perhaps with an error planted in its scenario."""
    stay = LAWS[name].stay
    rhythm = {
        "day_of_week": list(np.roll(DAY_OF_WEEK, days_late)),
        "hour_of_day": list(np.roll(HOUR_OF_DAY, hours_late)),
    }
    patients = patients_of(
        "A", PER_DAY, stay | {"mean_days": stay["mean_days"] * factor}, **({} if flat else rhythm)
    )
    scenario = network([{"name": "A", "beds": BEDS}], [patients], days=(WARM_UP, MEASURED))
    traces = [trace_replication(scenario, scenario.policy(), number)[0] for number in range(REPLICATIONS)]
    changes = [occupied_changes(trace.events) for trace in traces]
    return Seen(
        np.array([mean_by_bin(*one) for one in changes]),
        {frequency: np.array([harmonic(*one, frequency) for one in changes]) for frequency in (WEEK, DAY)},
    )


def occupied_changes(events):
    """Times and sizes of every change of the number occupied."""
    step = {"admission": 1, "discharge": -1}
    assert not any(kind == "turned away" for _, kind, _, _ in events)
    return np.array([(time, step[kind]) for time, kind, _, _ in events if kind in step]).T


def mean_by_bin(times, steps):
    """Mean occupied in each bin of the week over the measured window, (bins,)."""
    edges = np.arange(WARM_UP * 24, (WARM_UP + MEASURED) * 24 + 1, BIN_HOURS) / 24
    before = np.searchsorted(times, edges)
    occupied, weighted = (np.append(0.0, np.cumsum(values))[before] for values in (steps, steps * times))
    bed_days = np.diff(occupied * edges - weighted)
    return bed_days.reshape(-1, 168 // BIN_HOURS).mean(axis=0) * 24 / BIN_HOURS


def harmonic(times, steps, frequency):
    """(2 / T) times the integral of occupied(t) exp(-i g t) over the measured window."""
    after, until = np.maximum(times, WARM_UP), WARM_UP + MEASURED
    from_then_on = np.exp(-1j * frequency * after) - np.exp(-1j * frequency * until)
    return 2 / MEASURED * steps @ from_then_on / (1j * frequency)


def wrong_bins(name, seen):
    """The bins of the week in which the simulated mean is not the exact one."""
    exact = occupied_by_bins(weekly_rates(), LAWS[name])
    return [place for place, value in enumerate(exact) if differs(seen.by_bin[:, place], value)]


def wrong_rhythm(name, seen, frequency):
    """Whether the simulated rhythm differs from the published factor and lag, as one complex number."""
    expected = LAWS[name].response(frequency)
    response = seen.harmonics[frequency] / harmonic_of_rates(weekly_rates(), frequency)
    return differs(response.real, expected.real) or differs(response.imag, expected.imag)


@pytest.mark.parametrize("name", ["constant", "hyperexponential", "lognormal"])
def test_mean_occupied_by_time_of_the_week(name):
    assert not wrong_bins(name, simulated(name))


@pytest.mark.parametrize("frequency", [WEEK, DAY])
@pytest.mark.parametrize("name", ["exponential", "constant", "hyperexponential"])
def test_factor_and_lag_of_a_rhythm(name, frequency):
    assert not wrong_rhythm(name, simulated(name), frequency)


@pytest.mark.parametrize("error", [{"days_late": 1}, {"flat": True}, {"hours_late": 1}])
def test_a_wrong_rhythm_is_refuted(error):
    seen = simulated("exponential", **error)
    assert wrong_rhythm("exponential", seen, DAY if "hours_late" in error else WEEK)


def test_the_wrong_day_is_refuted_bin_by_bin():
    assert len(wrong_bins("exponential", simulated("exponential", days_late=1))) > 10


def test_a_wrong_mean_stay_is_refuted():
    assert wrong_bins("constant", simulated("constant", factor=1.03))
    assert wrong_rhythm("constant", simulated("constant", factor=1.03), DAY)


@pytest.mark.parametrize(
    ("true", "believed"), [("exponential", "hyperexponential"), ("constant", "lognormal")]
)
def test_a_wrong_shape_of_the_same_mean_is_refuted(true, believed):
    assert wrong_bins(believed, simulated(true))


def test_a_wrong_shape_is_refuted_by_its_factor_and_lag():
    assert wrong_rhythm("hyperexponential", simulated("exponential"), WEEK)
