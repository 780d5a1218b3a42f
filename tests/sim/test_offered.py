"""What an intake offers: by hand from its own patients, and its mean against many intakes."""

import numpy as np
import pytest

from sim.intake import draw_intake
from sim.lowering import plan_intake
from sim.offered import drawn_offer, expected_offer
from sim.scenario import Scenario

HOURS = [1.0] * 8 + [3.0] * 8 + [0.0] * 8
SCENARIO = Scenario.model_validate(
    {
        "schema": 1,
        "run": {"warm_up_days": 2.5, "measured_days": 3.25},
        "units": [{"name": "A", "beds": 3, "stay_factor": 2.0}, {"name": "B", "beds": 4}],
        "patients": [
            {"group": "a", "home": "A", "per_day": 2.0, "hour_of_day": HOURS,
             "stay": {"family": "lognormal", "mean_days": 3.0, "cv": 1.2}},
            {"group": "b", "home": "B", "per_day": 1.0, "day_of_week": [1, 1, 1, 1, 5, 5, 0],
             "stay": {"family": "constant", "mean_days": 2.0}},
            {"group": "c", "home": "B", "per_day": 4.0, "stay": {"family": "exponential", "mean_days": 0.5}},
        ],
    }
)  # fmt: skip


def test_the_offer_counts_the_patients_of_the_window_by_home():
    intake, offer = draw_intake(plan_intake(SCENARIO), 7), drawn_offer(SCENARIO, 7)
    inside = [place for place, at in enumerate(intake.arrival) if 2.5 <= at < 5.75]
    for unit in (0, 1):
        mine = [place for place in inside if intake.home[place] == unit]
        assert offer.arrivals[unit] == len(mine) > 0
        assert offer.work[unit] == pytest.approx(sum(intake.drawn_stay[place] for place in mine))


def test_the_mean_by_hand():
    """Group a: 2 a day; the window, Wednesday noon to Saturday 18:00, holds 3 whole days and the hours 12 to 18, which
    have 4 of 32 hour weights of 3 each: 12/32 of a day. Group b: weights 1 1 1 1 5 5 0 of 14; half of Wednesday,
    Thursday, Friday (5), and three quarters of Saturday (5): .5 + 1 + 5 + 3.75 = 10.25 of 14 weeks' weights.
    """
    mean = expected_offer(SCENARIO)
    a, b, c = 2 * (3 + 12 / 32), 7 * 10.25 / 14, 4 * 3.25
    assert mean.arrivals == pytest.approx([a, b + c])
    assert mean.work == pytest.approx([3 * a, 2 * b + c / 2])


def test_the_mean_is_the_mean_of_many_intakes():
    """2,000 intakes, four means: a false alarm beyond 4.5 standard errors has a probability below 1e-4."""
    drawn = [drawn_offer(SCENARIO, replication) for replication in range(2000)]
    mean = expected_offer(SCENARIO)
    for name in ("arrivals", "work"):
        values = np.array([getattr(one, name) for one in drawn])
        z = (values.mean(axis=0) - getattr(mean, name)) / values.std(axis=0, ddof=1) * np.sqrt(2000)
        assert np.all(np.abs(z) < 4.5)
        wrong = (values.mean(axis=0) - 1.1 * getattr(mean, name)) / values.std(axis=0, ddof=1) * np.sqrt(2000)
        assert np.all(np.abs(wrong) > 4.5)  # planted: a tenth more patients
