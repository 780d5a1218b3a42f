"""Stays replaced by a few phases: their moments, what can be attained, the error shown, and what it does to the chain.

Moments are held against numerical integration of the simulator's own distribution functions; attainable
regions against published ones.
"""

import functools
import math
import pickle

import numpy as np
import pytest
from pydantic import TypeAdapter
from scipy import special

from analysis.chain import OutOfScope, chain_size, refusals, solve, with_phase_fits
from analysis.chain.fitting import MOST_PHASES, fit_stay, nearest_in_moments, stay_moments
from analysis.chain.phases import Moments
from analysis.verification import verify
from sim.durations import FAMILIES, Mixture, Stay
from sim.replicate import replicate
from sim.scenario import Scenario, read_scenario
from tests.analysis.conftest import written


def stay(family, **numbers):
    return TypeAdapter(Stay).validate_python({"family": family, **numbers})


def lognormal(cv, mean=2.0):
    return stay("lognormal", mean_days=mean, cv=cv)


@functools.cache
def fitted(family, mean, cv, phases):
    """A fit, made once for all tests."""
    return fit_stay(stay(family, mean_days=mean, cv=cv), phases)


def integrated(duration, order):
    """E[X^order] as the integral of order x^(order - 1) P(X > x), by Gauss and Legendre between quantiles."""
    known = duration.distribution()
    shares = np.array([1e-6, 0.01, 0.25, 0.5, 0.75, 0.9, 0.99, 0.999, 0.9999, 1 - 1e-6, 1 - 1e-9, 1 - 1e-12])
    edges = np.array([0.0, *known.quantile(shares)])
    edges = np.append(edges, edges[-1] * np.array([2.0, 4.0, 10.0, 30.0, 100.0]))
    nodes, weights = np.polynomial.legendre.leggauss(40)
    half = np.diff(edges)[:, None] / 2
    x = edges[:-1, None] + half * (nodes + 1)
    return float((half * weights * order * x ** (order - 1) * known.survival(x)).sum())


TARGETS = [
    lognormal(0.3),
    lognormal(1.4),
    stay("gamma", mean_days=2.0, cv=0.7),
    stay("gamma", mean_days=2.0, cv=1.8),
    stay("weibull", mean_days=3.0, cv=0.5),
    stay("weibull", mean_days=3.0, cv=1.6),
    stay("erlang", mean_days=2.0, stages=3),
    stay("hyperexponential", mean_days=2.0, cv=2.5),
    stay("coxian", rates_per_day=[2.0, 0.5, 0.5], goes_on=[0.6, 0.3]),
    stay(
        "mixture",
        parts=[
            {"family": "lognormal", "mean_days": 2.0, "cv": 0.8, "weight": 3},
            {"family": "exponential", "mean_days": 9.0, "weight": 1},
        ],
    ),
]


@pytest.mark.parametrize("target", TARGETS, ids=lambda target: target.family)
def test_moments_of_a_stay_by_integration(target):
    expected = [integrated(target, order) for order in (1, 2, 3)]
    assert stay_moments(target) == pytest.approx(expected, rel=1e-6)


def test_moments_of_recorded_and_of_constant_stays(tmp_path):
    days = [0.0, 0.2, 0.4, 0.8, 1.6, 3.2, 6.4, 12.8]
    written(tmp_path / "stays.csv", "\n".join(["days", *map(str, days)]))
    recorded = TypeAdapter(Stay).validate_python(
        {"family": "empirical", "file": "stays.csv", "column": "days"}, context={"folder": tmp_path}
    )
    expected = [np.mean(np.power(days, order)) for order in (1, 2, 3)]
    assert stay_moments(recorded) == pytest.approx(expected, rel=1e-13)
    assert stay_moments(stay("constant", mean_days=3.0)) == pytest.approx((3.0, 9.0, 27.0), rel=1e-13)
    fit = fit_stay(recorded, 6)
    assert stay_moments(fit.stay) == pytest.approx(expected, rel=1e-8)
    assert fit.target.skewness == pytest.approx(fit.fit.skewness, rel=1e-7)


def test_every_family_has_its_moments_here():
    covered = {target.family for target in TARGETS} | {"exponential", "constant", "empirical"}
    assert covered == {family.__name__.lower() for family in (*FAMILIES, Mixture)}


# ---- fits ----


@pytest.mark.parametrize(
    ("family", "cv", "phases"),
    [
        ("lognormal", 1.4, 2),
        ("lognormal", 1.4, 4),
        ("lognormal", 0.6, 4),
        ("lognormal", 3.0, 3),
        ("gamma", 0.7, 3),
        ("gamma", 0.35, 12),
        ("weibull", 1.6, 3),
        ("weibull", 0.7, 3),
    ],
)
def test_three_moments_of_a_fit_by_integration(family, cv, phases):
    fit = fitted(family, 2.0, cv, phases)
    assert fit.phases <= phases
    expected = stay_moments(stay(family, mean_days=2.0, cv=cv))
    assert [integrated(fit.stay, order) for order in (1, 2, 3)] == pytest.approx(expected, rel=1e-6)
    assert fit.fit.mean_days == pytest.approx(2.0, rel=1e-14)
    assert (fit.fit.cv, fit.fit.skewness) == pytest.approx((cv, fit.target.skewness), rel=1e-6)


@pytest.mark.parametrize("phases", range(1, 7))
def test_the_mean_is_exact_whatever_else_is_not(phases):
    for target in (
        lognormal(0.1),
        lognormal(5.0),
        stay("gamma", mean_days=3.7, cv=0.55),
        stay("weibull", mean_days=9.1, cv=0.9),
    ):
        wanted = stay_moments(target)
        for other in nearest_in_moments(wanted, phases):
            assert stay_moments(other).first == pytest.approx(wanted.first, rel=1e-14)


def met(first, second, third, phases):
    """(cv, third moment) of the nearest stays in moments, as wanted or not."""
    for other in nearest_in_moments(Moments(first, second, third), phases):
        found = stay_moments(other)
        yield (
            found.second == pytest.approx(second, rel=1e-7),
            found.third == pytest.approx(third, rel=1e-7),
        )


def all_met(square, third, phases, mean=2.0):
    """Whether moments given by the squared cv and E[X^3] / E[X]^3 are met by every fit offered."""
    return set(met(mean, mean**2 * (1 + square), mean**3 * third, phases)) == {(True, True)}


@pytest.mark.parametrize("square", [0.52, 0.6, 0.75, 0.9, 0.98])
def test_the_third_moments_of_two_phases_below_the_exponential(square):
    """Bounds of Telek & Heindl, "Matching moments for acyclic ... phase-type distributions of second order" (2002).

    From memory: 3 (3 c^2 - 1 + sqrt(2) (1 - c^2)^(3/2)) <= E[X^3] / E[X]^3 <= 6 c^2.
    """
    least = 3 * (3 * square - 1 + math.sqrt(2) * (1 - square) ** 1.5)
    most = 6 * square
    for third in (least + 0.02 * (most - least), (least + most) / 2, most - 0.02 * (most - least)):
        assert all_met(square, third, 2)
    for third in (least - 0.02 * (most - least), most + 0.02 * (most - least)):
        assert set(met(2.0, 4.0 * (1 + square), 8.0 * third, 2)) == {(True, False)}


@pytest.mark.parametrize("square", [1.1, 2.0, 9.0])
@pytest.mark.parametrize("phases", [2, 3, 5])
def test_the_least_third_moment_above_the_exponential(square, phases):
    """E[X^3] E[X] > (n + 1) / n E[X^2]^2 of n phases where E[X^2] / E[X]^2 >= (n + 4) / (n + 1).

    Bobbio, Horvath & Telek (2005); for 2 phases it is that of Telek & Heindl (2002). Both from memory.
    """
    least = (phases + 1) / phases * (1 + square) ** 2
    assert all_met(square, 1.01 * least, phases) and all_met(square, 30 * least, phases)
    assert not all_met(square, 0.99 * least, phases)


@pytest.mark.parametrize("phases", [1, 2, 3, 6, 10, MOST_PHASES])
def test_the_least_cv_is_that_of_equal_stages(phases):
    """1 / sqrt(N): Aldous & Shepp (1987). Below it the Erlang stay is taken, and its cv is shown."""
    least = 1 / math.sqrt(phases)
    fit = fitted("lognormal", 2.0, 0.9 * least, phases)
    assert (fit.stay.family, fit.stay.stages, fit.phases) == ("erlang", phases, phases)
    assert (fit.fit.cv, fit.target.cv) == pytest.approx((least, 0.9 * least))
    above = 1.02 * least
    for square_met, _ in met(2.0, 4.0 * (1 + above**2), 8.0 * (1 + above**2) ** 3, phases):
        assert square_met or phases == 1


def test_a_constant_stay_becomes_equal_stages():
    """Their distribution functions are farthest apart at the mean, by the Poisson chance of fewer than N."""
    for phases in (1, 4, 9):
        fit = fit_stay(stay("constant", mean_days=3.0), phases)
        assert (fit.stay.family, fit.stay.stages, fit.target.cv, fit.target.skewness) == (
            "erlang",
            phases,
            0,
            None,
        )
        below = special.pdtr(phases - 1, phases)
        assert fit.largest_distance == pytest.approx(max(below, 1 - below), rel=1e-9)


def test_what_is_made_of_phases_under_another_name_is_found():
    """Gamma of cv 1/2 is Erlang of 4 stages."""
    for phases in (4, 7):
        fit = fitted("gamma", 2.0, 0.5, phases)
        assert fit.phases == 4 and fit.largest_distance < 1e-9
    assert fitted("gamma", 2.0, 0.5, 3).largest_distance > 0.04


@pytest.mark.parametrize(
    ("family", "cv", "phases"), [("lognormal", 1.4, 1), ("lognormal", 1.4, 3), ("weibull", 0.3, 2)]
)
def test_the_largest_distance_on_a_grid_of_its_own(family, cv, phases):
    fit = fitted(family, 2.0, cv, phases)
    times = np.linspace(0.0, 60.0, 60_001)
    off = stay(family, mean_days=2.0, cv=cv).distribution().cdf(times) - fit.stay.distribution().cdf(times)
    assert fit.largest_distance == pytest.approx(np.abs(off).max(), abs=5e-4)


def test_more_phases_come_nearer():
    """Lognormal of cv 1.4, as stays in intensive care often are: .070, .060, .035 and .008 (computed here)."""
    distances = [fitted("lognormal", 2.0, 1.4, phases).largest_distance for phases in (1, 2, 3, 4)]
    assert distances == pytest.approx([0.0699, 0.0596, 0.0348, 0.0076], abs=5e-4)


@pytest.mark.parametrize("phases", [0, MOST_PHASES + 1])
def test_numbers_of_phases_out_of_range(phases):
    with pytest.raises(ValueError, match="from 1 to 20 phases; got"):
        fit_stay(lognormal(1.4), phases)


# ---- scenarios ----


def two_units(of, **tables):
    """Two units that reopen only when empty: the one rule under which the stay's shape matters much."""
    groups = [
        {"group": f"{home} patients", "home": home, "per_day": per_day, "stay": of}
        for home, per_day in (("A", 1.5), ("B", 0.7))
    ]
    units = [{"name": name, "beds": 3, "reopening_gap": 3} for name in "AB"]
    described = {"units": units, "patients": groups, "diversion": {"when_all_closed": "turned_away"}}
    return Scenario.model_validate({"schema": 1, **described, **tables})


LOGNORMAL = {"family": "lognormal", "mean_days": 2.0, "cv": 1.4}


def test_only_what_is_not_made_of_phases_is_replaced():
    plain = two_units({"family": "erlang", "mean_days": 2.0, "stages": 2})
    assert with_phase_fits(plain, 3) == (plain, {})
    scenario, fits = with_phase_fits(two_units(LOGNORMAL), 2)
    assert list(fits) == ["A patients", "B patients"]
    assert refusals(scenario, scenario.policy()) == ()
    # One stay, so one fit: both groups share its two phases. A load of n spreads over 2 phases in n + 1 ways,
    # and 1 or 2 patients are there with the gates open or closed.
    assert chain_size(scenario, scenario.policy()) == (1 + 2 * 2 + 2 * 3 + 4) ** 2


def test_stays_of_no_length_delays_and_rhythms_remain_refused():
    groups = [
        {"group": "none", "home": "A", "per_day": 1.0, "stay": {"family": "constant", "mean_days": 0.0}},
        {"group": "some", "home": "A", "per_day": 1.0, "stay": LOGNORMAL, "hour_of_day": [1.0] * 23 + [2.0]},
    ]
    delay = {"family": "exponential", "mean_hours": 2.0}
    described = {"units": [{"name": "A", "beds": 2}], "patients": groups, "diversion": {"delay": delay}}
    scenario, fits = with_phase_fits(Scenario.model_validate({"schema": 1, **described}), 2)
    assert list(fits) == ["some"]
    with pytest.raises(OutOfScope) as caught:
        solve(scenario, scenario.policy())
    keys = [reason.split(":")[0] for reason in caught.value.reasons]
    assert keys == ["patients.none.stay", "patients.some.hour_of_day", "diversion.delay"]


def test_a_fitted_scenario_goes_to_a_worker_and_keeps_its_file(tmp_path):
    path = written(tmp_path / "one.toml", ONE)
    scenario, _ = with_phase_fits(read_scenario(path), 2)
    assert scenario.source == read_scenario(path).source
    copy = pickle.loads(pickle.dumps(scenario))
    assert solve(copy, copy.policy()).to_dict() == solve(scenario, scenario.policy()).to_dict()


REPLICATIONS = 40


def test_the_chain_of_fitted_stays_against_the_simulation_of_the_real_ones():
    """Lognormal stays of cv 1.4, no delay, constant demand; simulated are the lognormal stays themselves.

    With 5 phases every measure of the chain lies within the simultaneous limits (a perfect fit would be refused
    with a chance of at most 1 %, over all measures). What must be caught: exponential stays of the same mean,
    and 2 phases. Utilisation of A, computed here: .4282 simulated (+- .0022), .4292 with 5 phases, .4298 with
    4, .4352 with 2, .4527 with exponential stays.
    """
    scenario = two_units(LOGNORMAL, run={"warm_up_days": 150.0, "measured_days": 4000.0, "seed": 4021})
    replies = replicate(scenario, [scenario.policy()], range(REPLICATIONS), engine="compiled")
    records = [reply[0].record for reply in replies]

    def exact(other):
        return solve(other, other.policy())

    others = [with_phase_fits(scenario, 5)[0], with_phase_fits(scenario, 2)[0], scenario.exponential()]
    near, rough, plain = map(exact, others)
    assert verify(records, near, scenario).agrees
    assert not verify(records, rough, scenario).agrees
    assert not verify(records, plain, scenario).agrees
    found = [result.units["A"].utilisation for result in (near, rough, plain)]
    assert found == pytest.approx([0.4292, 0.4352, 0.4527], abs=2e-4)


# ---- commands ----

ONE = """
schema = 1
title = "One tiny unit (invented)"

[run]
warm_up_days = 28
measured_days = 364
replications = 6

[[units]]
name = "A"
beds = 3
target_utilisation = 0.5

[[patients]]
group = "A emergencies"
home = "A"
per_day = 0.9
stay = { family = "lognormal", mean_days = 2.0, cv = 1.4 }
"""


@pytest.fixture
def one(tmp_path):
    """A scenario file within the chain's scope but for its lognormal stays."""
    return written(tmp_path / "one.toml", ONE)


def test_exact_shows_the_error_of_the_fit(call, one):
    status, refused = call("exact", one)
    assert status == 2 and "--phase-fit N" in refused["reasons"][0]
    status, document = call("exact", one, "--phase-fit", 2)
    assert status == 0
    fit = document["phase_fit"]["A emergencies"]
    assert set(fit) == {"phases", "target", "fit", "largest_distance", "stay"}
    assert fit["phases"] == 2 and fit["largest_distance"] == pytest.approx(0.0596, abs=5e-4)
    assert fit["target"] == pytest.approx({"mean_days": 2.0, "cv": 1.4, "skewness": 1.4 * (3 + 1.4**2)})
    assert fit["fit"] == pytest.approx(fit["target"])
    # The unit alone is insensitive: Erlang B of 3 beds and an offered load of 1.8.
    weights = np.cumprod([1.0] + [1.8 / busy for busy in (1, 2, 3)])
    assert document["units"]["A"]["occupancy"] == pytest.approx(weights / weights.sum(), rel=1e-10)
    assert document["states"] == math.comb(3 + 2, 2)


def test_the_stay_shown_can_be_put_into_a_file(call, one, tmp_path):
    document = call("exact", one, "--phase-fit", 2)[1]
    stated = document["phase_fit"]["A emergencies"]["stay"]
    line = ", ".join(f"{key} = {value!r}" for key, value in stated.items()).replace("'", '"')
    start = ONE.index("stay = {")
    phased = written(tmp_path / "phased.toml", ONE[:start] + f"stay = {{ {line} }}\n")
    status, again = call("exact", phased)
    assert status == 0 and again["units"] == document["units"] and "phase_fit" not in again


def test_nothing_to_fit_is_said(call, show, two):
    assert call("exact", two, "--phase-fit", 3)[1]["phase_fit"] == {}
    assert "none was replaced" in show("exact", two, "--phase-fit", 3)[1]


def test_the_fit_is_shown_to_a_person(show, one):
    status, out, _ = show("exact", one, "--phase-fit", 2)
    assert status == 0 and "Stays replaced by exponential phases" in out and "6.944" in out and "0.060" in out


def test_verify_simulates_the_fitted_stays(call, one):
    """False-alarm rate at most 1 %; the seed is fixed."""
    status, document = call("verify", one, "--phase-fit", 2, "--engine", "reference", "--workers", 1)
    assert status == 0 and document["agrees"] is True
    assert document["phase_fit"]["A emergencies"]["phases"] == 2 and document["states"] == 10


def test_game_takes_it_with_exact_only(call, show, one):
    status, document = call("game", one, "--exact", "--phase-fit", 2)
    assert status == 0 and document["method"] == "exact" and list(document["phase_fit"]) == ["A emergencies"]
    assert document["equilibria"]
    status, document = call("game", one, "--phase-fit", 2)
    assert status == 2 and "add --exact" in document["faults"][0]["value"]


@pytest.mark.parametrize("phases", [0, 21, "many"])
def test_phases_out_of_range_on_the_command_line(call, one, phases):
    status, document = call("exact", one, "--phase-fit", phases)
    assert status == 2 and document["faults"][0]["key"] == "--phase-fit"


@pytest.mark.parametrize("command", ["check", "simulate"])
def test_other_commands_do_not_take_it(call, one, command):
    assert call(command, one, "--phase-fit", 2)[0] == 2
