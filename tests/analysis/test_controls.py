"""Control variates: the regression by hand and against numpy's least squares, what it wins, and its coverage."""

import numpy as np
import pytest
from scipy import stats

from analysis.confidence import mean_estimate, standard_error
from analysis.controls import Controls, offered_controls, variance_ratio
from analysis.simulation import summarise
from sim.replicate import replicate
from sim.scenario import Scenario
from tests.analysis.builders import memoryless


def controls_from(values):
    return Controls(tuple(f"control {place}" for place in range(values.shape[1])), values)


def test_one_control_by_hand():
    """Controls -1, 0, 1, 2 (mean .5 where 0 is known), values 0, 1, 3, 4: slope 1.4, so 2 - 1.4 x .5 = 1.3."""
    one = controls_from(np.array([[-1.0], [0.0], [1.0], [2.0]]))
    adjusted = one.adjust(np.array([0.0, 1.0, 3.0, 4.0]))
    assert adjusted.mean() == pytest.approx(1.3)
    # residuals .1, -.3, .3, -.1: s^2 = .2 / 2; its factor 1/4 + .5^2 / 5
    assert standard_error(adjusted) == pytest.approx(np.sqrt(0.1 * (0.25 + 0.05)))
    assert one.degrees == 2 and one.weights.sum() == pytest.approx(1)


def test_mean_and_error_are_least_squares_intercept_and_its_error():
    """Against scipy's linregress."""
    rng = np.random.default_rng(1)
    x, y = rng.normal(size=20), rng.normal(size=(20, 3, 2))
    y += 2 * x[:, None, None]
    adjusted = controls_from(x[:, None]).adjust(y)
    for place in np.ndindex(3, 2):
        line = stats.linregress(x, y[(slice(None), *place)])
        mine = adjusted[(slice(None), *place)]
        assert mine.mean() == pytest.approx(line.intercept)
        assert standard_error(mine) == pytest.approx(line.intercept_stderr)


def test_what_controls_determine_has_no_error_left():
    values = np.random.default_rng(2).normal(size=(12, 2))
    controls = controls_from(values)
    adjusted = controls.adjust(np.column_stack([3 + 2 * values[:, 0], np.full(12, 5.0)]))
    assert np.ptp(adjusted, axis=0).tolist() == [0, 0]
    assert adjusted[0] == pytest.approx([3, 5])


def coverage(degrees_of, *, known=0.0, trials=2000):
    """The share of intervals, 10 replications and 3 controls, that hold the true mean 0."""
    rng, held = np.random.default_rng(3), 0
    for _ in range(trials):
        x = rng.normal(size=(10, 3))
        y = x.sum(axis=1) + rng.normal(size=10)
        controls = controls_from(x - known)
        found = mean_estimate(controls.adjust(y), 0.95, degrees=degrees_of(controls))
        held += found.low <= 0 <= found.high
    return held / trials


def test_intervals_cover_as_they_should():
    """2,000 trials at .95: beyond .935 to .965 has a probability below 3e-3."""
    assert 0.935 < coverage(lambda controls: controls.degrees) < 0.965


def test_planted_wrong_degrees_and_a_wrong_known_mean_are_caught():
    assert coverage(lambda controls: 10**6) < 0.935
    assert coverage(lambda controls: controls.degrees, known=0.5) < 0.935


UNITS = ({"name": "A", "beds": 3, "per_day": 1.0}, {"name": "B", "beds": 4, "per_day": 1.5})
SCENARIO = memoryless(*UNITS, run={"seed": 3, "warm_up_days": 20.0, "measured_days": 200.0})


def test_controls_need_five_degrees_and_drop_what_others_determine():
    assert offered_controls(SCENARIO, range(9)) is None
    found = offered_controls(SCENARIO, range(10))
    assert found.degrees == 5 and found.names[0] == "arrivals of A" and len(found.names) == 4
    plain = {  # a constant stay makes work and arrivals one control
        "schema": 1,
        "units": [{"name": "A", "beds": 3}],
        "patients": [
            {"group": "a", "home": "A", "per_day": 1.0, "stay": {"family": "constant", "mean_days": 2}}
        ],
    }
    assert offered_controls(Scenario.model_validate(plain), range(10)).names == ("arrivals of A",)


def test_the_order_of_replications_is_the_values_own():
    forth, back = (offered_controls(SCENARIO, order) for order in (range(12), range(11, -1, -1)))
    assert np.array_equal(forth.values, back.values[::-1])


def test_a_simulation_wins_variance_and_keeps_its_sums():
    """The adjusted means are weighted means, so what adds up still does."""
    runs = [run for reply in replicate(SCENARIO, [SCENARIO.policy()], range(30)) for run in reply]
    controls = offered_controls(SCENARIO, [run.replication for run in runs])
    records = [run.record for run in runs]
    plain = summarise(records, SCENARIO, confidence=0.95)
    found = summarise(records, SCENARIO, confidence=0.95, controls=controls)
    for name, rate in (("A", 1.0), ("B", 1.5)):
        arrivals = found.units[name]["arrivals_per_day"]
        assert (arrivals.mean, arrivals.low, arrivals.high) == pytest.approx((rate, rate, rate))
        wide, narrow = (one.units[name]["utilisation"] for one in (plain, found))
        assert narrow.high - narrow.low < 0.8 * (wide.high - wide.low)
        assert found.variance_ratio[name]["utilisation"] > 1.5
        levels = [level.mean for level in found.occupancy[name]]
        assert sum(levels) == pytest.approx(1)
        assert sum(k * p for k, p in enumerate(levels)) == pytest.approx(
            found.units[name]["mean_occupied"].mean
        )
    assert found.network["throughput_per_day"].mean == pytest.approx(
        sum(found.units[name]["admissions_per_day"].mean for name in "AB")
    )


def test_variance_ratio_by_hand():
    assert variance_ratio(np.array([0.0, 4.0]), np.array([1.0, 3.0])) == 4
    assert np.isnan(variance_ratio(np.array([0.0, 4.0]), np.array([2.0, 2.0])))
    assert np.isnan(variance_ratio(np.array([0.0, 4.0]), np.array([2.0, 2.0 + 4e-15])))  # rounding alone
