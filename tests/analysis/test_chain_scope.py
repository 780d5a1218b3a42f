"""What the chain refuses, how large it may be, what it hands back, and small cases worked by hand."""

import json
import pickle

import pytest

from analysis.chain import ChainTooLarge, Limits, OutOfScope, chain_size, refusals, solve
from sim.errors import BrimlineError
from sim.scenario import Scenario

EXPONENTIAL = {"family": "exponential", "mean_days": 1.0}
MUST_BE = "the stay must be exponential or of exponential phases"
RESORTS = ("turned_away", "home_bed", "any_bed")


def scenario(*, units=None, patients=None, diversion=None, title="", policies=()):
    """A small network; the defaults are one unit of 2 beds with one patient a day of 1 day's stay."""
    return Scenario.model_validate(
        {
            "schema": 1,
            "title": title,
            "units": units or [{"name": "A", "beds": 2}],
            "patients": patients or [group("A")],
            "diversion": diversion or {},
            "policies": policies,
        }
    )


def group(home, per_day=1.0, stay=None, **more):
    stay = EXPONENTIAL if stay is None else stay
    return {"group": f"{home} patients", "home": home, "per_day": per_day, "stay": stay, **more}


def exact(resort="turned_away", **tables):
    described = scenario(diversion={"when_all_closed": resort}, **tables)
    return solve(described, described.policy())


OTHER_NAMES_OF_THE_EXPONENTIAL = [
    {"family": "erlang", "mean_days": 2.0, "stages": 1},
    {"family": "gamma", "mean_days": 2.0, "cv": 1.0},
    {"family": "weibull", "mean_days": 2.0, "cv": 1.0},
    {"family": "hyperexponential", "mean_days": 2.0, "cv": 1.0},
    {"family": "coxian", "rates_per_day": [0.5], "goes_on": []},
    {"family": "coxian", "rates_per_day": [0.5, 7.0], "goes_on": [0.0]},
    {"family": "mixture", "parts": [{"family": "gamma", "mean_days": 2.0, "cv": 1.0, "weight": 0.3}] * 2},
    {
        "family": "mixture",
        "parts": [
            {"family": "exponential", "mean_days": 2.0, "weight": 0.1},
            {"family": "constant", "mean_days": 3.0, "weight": 0.0},
        ],
    },
]

OTHER_STAYS = [
    ({"family": "constant", "mean_days": 2.0}, "constant"),
    ({"family": "constant", "mean_days": 0.0}, "constant"),
    ({"family": "gamma", "mean_days": 2.0, "cv": 0.5}, "gamma (cv 0.5)"),
    ({"family": "weibull", "mean_days": 2.0, "cv": 1.5}, "weibull (cv 1.5)"),
    ({"family": "lognormal", "mean_days": 2.0, "cv": 1.0}, "lognormal (cv 1)"),
    (
        {
            "family": "mixture",
            "parts": [
                {"family": "exponential", "mean_days": 2.0, "weight": 0.1},
                {"family": "constant", "mean_days": 3.0, "weight": 0.2},
            ],
        },
        "mixture (2 parts)",
    ),
]


@pytest.mark.parametrize("stay", OTHER_NAMES_OF_THE_EXPONENTIAL, ids=lambda stay: stay["family"])
def test_other_names_of_the_exponential_are_in_scope(stay):
    described = scenario(patients=[group("A", 1.0, stay)])
    assert refusals(described, described.policy()) == ()
    result = solve(described, described.policy())
    assert result.units["A"].occupancy == pytest.approx([0.2, 0.4, 0.4], rel=1e-12)  # 1 : 2 : 2^2 / 2


@pytest.mark.parametrize(("stay", "described"), OTHER_STAYS)
def test_other_stays_are_refused(stay, described):
    network = scenario(patients=[group("A", 1.0, stay)])
    (reason,) = refusals(network, network.policy())
    assert reason.startswith(f"patients.A patients.stay: {MUST_BE}, got {described}; ")
    needs_a_bed = stay.get("mean_days") != 0.0
    assert ("--phase-fit N" in reason and "--exponential" in reason) is needs_a_bed
    assert ("leave the group out" in reason) is not needs_a_bed


def test_every_reason_at_once():
    lognormal = {"family": "lognormal", "mean_days": 2.0, "cv": 1.4}
    network = scenario(
        units=[{"name": "A", "beds": 2, "review_hours": 8.0}, {"name": "B", "beds": 2}],
        patients=[
            group("A", 1.0, lognormal, hour_of_day=[1.0] * 12 + [3.0] * 12),
            group("B", day_of_week=[1.0] * 6 + [0.5]),
        ],
        diversion={"delay": {"family": "exponential", "mean_hours": 2.5}, "extra_days": 0.5},
    )
    with pytest.raises(OutOfScope) as caught:
        solve(network, network.policy())
    assert caught.value.reasons == (
        f"patients.A patients.stay: {MUST_BE}, got lognormal (cv 1.4); "
        "give --phase-fit N for at most N phases in its place, or --exponential, or simulate",
        "patients.A patients.hour_of_day: arrivals must come at a constant rate, got weights from 1 to 3",
        "patients.B patients.day_of_week: arrivals must come at a constant rate, got weights from 0.5 to 1",
        "diversion.delay: transfers must take no time, got exponential with a mean of 2.5 hours",
        "diversion.extra_days: a transfer must not lengthen the stay, got 0.5 days",
        "units.A.review_hours: gates must act at once, got a review every 8 hours",
    )
    assert isinstance(caught.value, BrimlineError)
    assert pickle.loads(pickle.dumps(caught.value)).reasons == caught.value.reasons
    assert chain_size(network, network.policy()) is None
    assert refusals(network.exponential(), network.policy()) == (caught.value.reasons[-1],)


def test_no_delay_and_flat_weights_are_in_scope():
    network = scenario(
        patients=[group("A", hour_of_day=[2.0] * 24, day_of_week=[0.1] * 7)],
        diversion={"delay": {"family": "constant", "mean_hours": 0.0}},
    )
    assert refusals(network, network.policy()) == ()


def test_reviews_of_a_policy_are_refused():
    network = scenario(policies=[{"name": "twice a day", "review_hours": {"A": 12.0}}])
    assert refusals(network, network.policy()) == ()
    assert len(refusals(network, network.policy("twice a day"))) == 1


def many_units(number, beds=20):
    names = [f"U{place}" for place in range(number)]
    units = [{"name": name, "beds": beds} for name in names]
    return scenario(units=units, patients=[group(name) for name in names])


@pytest.mark.parametrize(
    ("network", "limits", "states", "words"),
    [
        (many_units(40), Limits(), 10**15, "as many as 1,000,000,000,000,000 states, the limit is 2,000,000"),
        (many_units(3, 30), Limits(relaxed=20_000), 31**3, "29,791 states, the limit is 20,000"),
        (many_units(2), Limits(states=400), 21**2, "441 states, the limit is 400"),
        (many_units(2), Limits(work=1e5), 21**2, "multiply-adds, the limit is 1.0e+05"),
        (many_units(2), Limits(bytes=2**14), 21**2, "0.0 GiB, the limit is 0.0 GiB"),
    ],
)
def test_a_chain_too_large_is_refused_with_its_size_and_a_remedy(network, limits, states, words):
    with pytest.raises(ChainTooLarge, match="or simulate") as caught:
        solve(network, network.policy(), limits=limits)
    assert caught.value.states == states
    assert words in str(caught.value)
    assert isinstance(caught.value, BrimlineError)
    assert str(pickle.loads(pickle.dumps(caught.value))) == str(caught.value)


def test_chain_size_is_the_number_of_states_where_all_can_be_reached():
    units = [{"name": "A", "beds": 5, "closure_threshold": 4, "reopening_gap": 3}, {"name": "B", "beds": 3}]
    patients = [group("A"), group("B", 1.0, {**EXPONENTIAL, "mean_days": 2.0})]
    network = scenario(units=units, patients=patients, diversion={"when_all_closed": "any_bed"})
    # A's gates share a threshold and so one position; with 2 or 3 patients it may be open or closed.
    # A load of n spreads over two rates in n + 1 ways.
    of_a, of_b = 1 + 2 + 2 * (3 + 4) + 5 + 6, 1 + 2 + 3 + 4
    assert chain_size(network, network.policy()) == of_a * of_b
    assert solve(network, network.policy()).states == of_a * of_b


def test_thresholds_that_bind_keep_the_chain_small():
    """Refusals above a threshold leave no states there: 3 units of 30 beds would have 29,791."""
    names = ["A", "B", "C"]
    units = [{"name": name, "beds": 30, "closure_threshold": 9} for name in names]
    patients = [group(name, 7.0) for name in names]
    network = scenario(units=units, patients=patients, diversion={"when_all_closed": "turned_away"})
    assert chain_size(network, network.policy()) == 1000
    assert solve(network, network.policy()).states == 1000


def test_gap_by_hand():
    """2 beds, closed when full, open again when empty; all rates 1 a day.

    States: empty, 1 on the way up, 2, 1 on the way down. Balance: 1, 1/2, 1/4, 1/2 of the empty one's time.
    """
    measures = exact(units=[{"name": "A", "beds": 2, "reopening_gap": 5}]).units["A"]
    assert measures.occupancy == pytest.approx([4 / 9, 4 / 9, 1 / 9], rel=1e-13)
    assert measures.full_fraction == pytest.approx(1 / 9, rel=1e-13)
    assert measures.closed_fraction == pytest.approx(1 / 3, rel=1e-13)
    assert measures.closed_with_free_bed_fraction == pytest.approx(2 / 9, rel=1e-13)
    assert measures.turned_away_share == pytest.approx(1 / 3, rel=1e-13)
    assert measures.admissions_per_day == pytest.approx(2 / 3, rel=1e-13)


def closed_home(resort, order):
    """A takes none of its own by choice; B has one bed and no patients of its own."""
    shut = {"name": "A", "beds": 1, "closure_threshold": 0, "referral_order": order}
    units = [shut, {"name": "B", "beds": 1}]
    return exact(resort, units=units, patients=[group("A")])


def test_last_resorts_by_hand():
    """One patient a day, of one day's stay, B first and then A: Erlang's B(1, 1) = 1/2 and B(2, 1) = 1/5."""
    away = closed_home("turned_away", ["B"])
    assert away.units["B"].occupancy == pytest.approx([1 / 2, 1 / 2])
    assert away.units["A"].occupancy == pytest.approx([1.0, 0.0])
    assert (away.units["A"].moved_share, away.units["A"].turned_away_share) == pytest.approx((1 / 2, 1 / 2))
    for resort in RESORTS[1:]:
        home = closed_home(resort, ["B"])
        assert home.units["A"].turned_away_share == pytest.approx(1 / 5)
        assert home.units["A"].moved_share == pytest.approx(1 / 2)
        assert home.units["A"].mean_occupied == pytest.approx(4 / 5 - 1 / 2)
        assert home.units["A"].closed_fraction == 1.0
        assert home.units["A"].closed_with_free_bed_fraction == pytest.approx(0.7)


def test_any_bed_opens_closed_units_by_hand():
    """B takes no transfers by choice, so that A's patients fill A's bed first and only then B's."""
    units = [{"name": "A", "beds": 1}, {"name": "B", "beds": 1, "incoming_threshold": 0}]
    homes = [exact(resort, units=units).units["A"] for resort in RESORTS]
    assert [home.turned_away_share for home in homes] == pytest.approx([1 / 2, 1 / 2, 1 / 5])
    assert [home.moved_share for home in homes] == pytest.approx([0.0, 0.0, 3 / 10])


def test_an_empty_referral_order_refers_nobody():
    result = closed_home("turned_away", [])
    assert result.states == 1
    assert result.network.turned_away_per_day == 1.0
    assert result.network.throughput_per_day == 0.0
    assert result.units["A"].turned_away_share == 1.0


def test_the_default_referral_order_is_cyclic():
    """B's patients, whose home never takes them, go to C first, not to A."""
    units = [{"name": name, "beds": 1} for name in "ABC"]
    units[1]["closure_threshold"] = 0
    result = exact(units=units, patients=[group("B")])
    assert result.units["C"].mean_occupied == pytest.approx(1 / 2)
    assert result.units["A"].mean_occupied == pytest.approx(4 / 5 - 1 / 2)


def test_a_policy_replaces_the_rules_of_the_file():
    described = scenario(policies=[{"name": "one bed", "closure_threshold": {"A": 1}}])
    result = solve(described, described.policy("one bed"))
    assert result.thresholds == {"A": 1}
    # Both beds are used, the second as a last resort: 1 : 1 : 1/2.
    assert result.units["A"].closed_fraction == pytest.approx(3 / 5)


def test_the_result_as_plain_data():
    result = exact(title="Two units", units=[{"name": "A", "beds": 2}, {"name": "B", "beds": 1}])
    tree = json.loads(json.dumps(result.to_dict(), allow_nan=False))
    assert tree == result.to_dict()
    assert list(tree) == ["scenario", "thresholds", "units", "network", "states"]
    assert (tree["scenario"], tree["thresholds"], tree["states"]) == ("Two units", {"A": 2, "B": 1}, 6)
    assert [len(unit["occupancy"]) for unit in tree["units"].values()] == [3, 2]
    assert set(tree["network"]) == {
        "throughput_per_day",
        "transfers_per_day",
        "turned_away_per_day",
        "arrivals_per_day",
    }
    assert set(tree["units"]["A"]) == {
        "utilisation",
        "mean_occupied",
        "full_fraction",
        "closed_fraction",
        "incoming_closed_fraction",
        "closed_with_free_bed_fraction",
        "occupancy",
        "admissions_per_day",
        "diverted_out_per_day",
        "diverted_in_per_day",
        "turned_away_per_day",
        "arrivals_per_day",
        "moved_share",
        "turned_away_share",
    }
    assert tree["units"]["B"]["moved_share"] is None
    assert {type(value) for value in result.to_dict()["units"]["B"].values()} == {float, list, type(None)}
