"""The exact chain against published teletraffic values and formulas that need no chain.

Values said to be "computed" were obtained apart from this project with 30 to 40 digits.
"""

import math

import mpmath
import numpy as np
import pytest

from analysis.chain import solve
from sim.scenario import Scenario


def network(units, patients, resort="turned_away"):
    """A scenario of units (tables of the file) and patients (home, arrivals a day, mean stay in days)."""
    stays = [{"family": "exponential", "mean_days": float(mean)} for _, _, mean in patients]
    groups = [
        {"group": f"group {place}", "home": home, "per_day": float(per_day), "stay": stays[place]}
        for place, (home, per_day, _) in enumerate(patients)
    ]
    tables = {"units": units, "patients": groups, "diversion": {"when_all_closed": resort}}
    return Scenario.model_validate({"schema": 1, **tables})


def unit(name, beds, **rules):
    return {"name": name, "beds": beds, **rules}


def exact(*description, **more):
    scenario = network(*description, **more)
    return solve(scenario, scenario.policy())


def loss_unit(beds, offered):
    """One unit with `offered` beds' worth of patients of mean stay 2 days."""
    return exact([unit("A", beds)], [("A", offered / 2, 2)])


def erlang_b(beds, offered):
    """Erlang's loss formula by its recursion, Erlang (1917)."""
    blocked = 1.0
    for busy in range(1, beds + 1):
        blocked = offered * blocked / (busy + offered * blocked)
    return blocked


def precise_erlang_b(beds, offered):
    """Erlang's loss formula as a direct sum with 40 digits."""
    with mpmath.workdps(40):
        terms = [mpmath.mpf(offered) ** busy / mpmath.factorial(busy) for busy in range(beds + 1)]
        return terms[-1] / mpmath.fsum(terms)


# Erlang (1917); computed by the recursion and by the direct sum with 40 digits, which agree.
ERLANG_B = {
    (1, 1): 0.5,
    (2, 1): 0.2,
    (5, 3): 0.110054347826,
    (6, 4): 0.117162471396,
    (8, 6): 0.121875783666,
    (10, 5): 0.0183845703366,
    (10, 8): 0.121661064253,
    (12, 10): 0.119739188445,
    (15, 10): 0.0364969454724,
    (20, 12): 0.00979563942006,
    (20, 20): 0.158891961542,
    (32, 20): 0.00338030929178,
    (100, 84.0644): 0.0100004811776,
    (100, 100): 0.0757004527109,
}

# Offered load at a grade of service, computed to the digits shown. Standard Erlang B tables print 4.46, 12.0
# and 84.1 for 10, 20 and 100 beds at 1 % (from memory).
GRADES = {
    (5, 0.001): 0.762115,
    (10, 0.01): 4.461177,
    (15, 0.01): 8.108043,
    (20, 0.02): 13.18154,
    (30, 0.05): 24.80181,
    (50, 0.001): 32.51185,
    (100, 0.01): 84.06416,
}


@pytest.mark.parametrize(("system", "blocked"), ERLANG_B.items())
def test_a_unit_alone_is_an_erlang_loss_system(system, blocked):
    measures = loss_unit(*system).units["A"]
    assert measures.full_fraction == pytest.approx(blocked, rel=1e-11)
    # Poisson arrivals see time averages: Wolff, Operations Research 30 (1982), from memory.
    assert measures.turned_away_share == pytest.approx(blocked, rel=1e-11)


@pytest.mark.parametrize("beds", range(1, 31, 4))
def test_erlang_recursion(beds):
    measures = loss_unit(beds, 7.3).units["A"]
    blocked = erlang_b(beds, 7.3)
    assert measures.full_fraction == pytest.approx(blocked, rel=1e-12)
    assert measures.utilisation == pytest.approx(7.3 * (1 - blocked) / beds, rel=1e-12)


@pytest.mark.parametrize(("system", "offered"), GRADES.items())
def test_grade_of_service_table(system, offered):
    beds, grade = system
    assert loss_unit(beds, offered).units["A"].full_fraction == pytest.approx(grade, rel=2e-6)


def test_trauma_bays_on_diversion():
    """3 trauma bays, 2 hours a patient, one patient every 3 hours: all busy 2.55 % of the time.

    Cachon & Terwiesch, Matching Supply with Demand, ch. 7, .0255 printed (in its slides); computed .0254777.
    """
    measures = exact([unit("trauma", 3)], [("trauma", 8, 2 / 24)]).units["trauma"]
    assert measures.full_fraction == pytest.approx(0.0255, abs=5e-5)
    assert measures.full_fraction == pytest.approx(0.0254777, abs=5e-8)


@pytest.mark.parametrize(
    ("beds", "offered", "mean", "variance"),
    [
        (1, 1, 0.5, 7 / 12),
        (5, 3, 0.3301630435, 0.5185850288),
        (10, 8, 0.973288514, 1.985661391),
        (20, 20, 3.177839231, 8.292013428),
    ],
)
def test_overflow_moments(beds, offered, mean, variance):
    """Kosten (1937), in Wilkinson, Bell System Technical Journal (1956), from memory; values computed."""
    units = [unit("A", beds, referral_order=["wide"]), unit("wide", 60, referral_order=[])]
    occupancy = exact(units, [("A", offered, 1)]).units["wide"].occupancy
    occupied = np.arange(61)
    found = occupied @ occupancy
    assert found == pytest.approx(mean, rel=1e-9)
    assert occupied**2 @ occupancy - found**2 == pytest.approx(variance, rel=1e-9)
    assert found == pytest.approx(offered * erlang_b(beds, offered), rel=1e-9)


def test_two_overflows_into_shared_beds():
    """Units of 6 and 8 beds overflow into 5 shared ones; computed as a three-dimensional chain elsewhere.

    The equivalent random method of Wilkinson (1956) with Rapp's approximation (1964), which Litvak, van
    Rijsbergen, Boucherie & van Houdenhoven, EJOR 185 (2008), use for regional beds, gives .0809797.
    """
    units = [
        unit("A", 6, referral_order=["shared"]),
        unit("B", 8, referral_order=["shared"]),
        unit("shared", 5, referral_order=[]),
    ]
    result = exact(units, [("A", 4, 1), ("B", 6, 1)])
    lost = result.network.turned_away_per_day
    assert lost == pytest.approx(0.0814688413, abs=5e-11)
    assert abs(lost / 0.0809797 - 1) < 0.0061
    assert result.units["shared"].moved_share is None
    assert result.units["shared"].turned_away_share is None


def test_ordered_overflow():
    """One stream, 5 beds and then 3: Erlang and Brockmeyer (1954); values computed."""
    units = [unit("first", 5, referral_order=["second"]), unit("second", 3, referral_order=[])]
    result = exact(units, [("first", 4, 1)])
    assert result.units["first"].mean_occupied == pytest.approx(3.20373250389, rel=1e-11)
    assert result.units["second"].mean_occupied == pytest.approx(0.674587263208, rel=1e-11)
    assert result.network.turned_away_per_day == pytest.approx(0.121680232904, rel=1e-11)
    assert result.network.transfers_per_day == pytest.approx(0.674587263208, rel=1e-11)


@pytest.mark.parametrize("resort", ["turned_away", "home_bed", "any_bed"])
def test_units_that_help_each_other_freely_are_one_pool(resort):
    """Equal stays and no early closure: 10 B(14, 10) turned away; computed by formula and as a chain."""
    result = exact([unit("A", 8), unit("B", 6)], [("A", 6, 1), ("B", 4, 1)], resort=resort)
    assert result.network.turned_away_per_day == pytest.approx(0.5681914338652, rel=1e-12)


def test_three_units_in_the_default_referral_order_are_one_pool():
    result = exact([unit("A", 3), unit("B", 4), unit("C", 2)], [("A", 2, 1.5), ("B", 1, 1.5), ("C", 3, 1.5)])
    assert result.network.turned_away_per_day == pytest.approx(6 * erlang_b(9, 9), rel=1e-12)


def test_early_closure_between_two_units():
    """A regression anchor: a two-dimensional chain computed apart from this project, no published value."""
    units = [unit("A", 8, closure_threshold=7), unit("B", 6, closure_threshold=5)]
    result = exact(units, [("A", 6, 1), ("B", 4, 1)], resort="home_bed")
    assert result.network.turned_away_per_day == pytest.approx(0.7048603368110, rel=1e-12)
    assert result.units["A"].mean_occupied == pytest.approx(5.482579503399, rel=1e-12)
    assert result.units["B"].mean_occupied == pytest.approx(3.812560159790, rel=1e-12)


def test_one_unit_that_closes_to_transfers_early():
    """10 beds, closed to transfers at 8: the generalised Erlang model, Oakes, Annals of Probability 4 (1976).

    p(n) is proportional to the product of (arrival rate at i) / (i + 1); values computed from that formula.
    """
    units = [unit("A", 10, incoming_threshold=8), unit("shut", 1, closure_threshold=0)]
    measures = exact(units, [("A", 5, 1), ("shut", 3, 1)]).units["A"]
    assert measures.full_fraction == pytest.approx(0.0546984167205, rel=1e-11)
    assert measures.incoming_closed_fraction == pytest.approx(0.361009550356, rel=1e-11)
    assert measures.mean_occupied == pytest.approx(6.64347926533, rel=1e-11)
    weights = np.cumprod([1.0] + [(8 if busy < 8 else 5) / (busy + 1) for busy in range(10)])
    np.testing.assert_allclose(measures.occupancy, weights / weights.sum(), rtol=1e-12)


@pytest.mark.parametrize("admitted", [0.0, 0.3, 1.0])
def test_soft_closure_of_the_last_bed(admitted):
    """Birth and death rates give p(n); the refusals lie between those of all beds and of one fewer.

    The bracket is that of van Dijk & Kortbeek, Queueing Systems 63 (2009), here for a simpler system.
    """
    rules = {"closure_threshold": 5, "admit_while_closed": admitted}
    measures = exact([unit("A", 6, **rules)], [("A", 4, 1)]).units["A"]
    births = [4.0] * 5 + [4.0 * admitted]
    weights = np.cumprod([1.0] + [rate / (busy + 1) for busy, rate in enumerate(births)])
    expected = weights / weights.sum()
    np.testing.assert_allclose(measures.occupancy, expected, rtol=1e-13, atol=0)
    lost = expected[6] + (1 - admitted) * expected[5]
    assert measures.turned_away_share == pytest.approx(lost, rel=1e-13)
    assert measures.closed_with_free_bed_fraction == pytest.approx(expected[5], rel=1e-13)
    assert erlang_b(6, 4) * (1 - 1e-13) <= measures.turned_away_share <= erlang_b(5, 4) * (1 + 1e-13)


@pytest.mark.parametrize("stays", [(1, 1), (0.25, 3), (0.1, 2, 9)])
def test_stays_of_several_means_in_one_unit(stays):
    """A loss system depends on the total offered load alone: Sevastyanov (1957), from memory."""
    patients = [("A", 1.5 / len(stays) + place, mean) for place, mean in enumerate(stays)]
    offered = sum(per_day * mean for _, per_day, mean in patients)
    measures = exact([unit("A", 9)], patients).units["A"]
    assert measures.full_fraction == pytest.approx(erlang_b(9, offered), rel=1e-12)
    assert measures.mean_occupied == pytest.approx(offered * (1 - erlang_b(9, offered)), rel=1e-12)


def test_a_stay_factor_multiplies_the_stay():
    """Erlang B of 5 beds and an offered load of 2 x 1.5."""
    measures = exact([unit("A", 5, stay_factor=1.5)], [("A", 2, 1)]).units["A"]
    assert measures.full_fraction == pytest.approx(0.110054347826, rel=1e-11)


@pytest.mark.parametrize(("beds", "offered"), [(20, 0.5), (60, 2.0), (120, 10.0)])
def test_rare_events_are_right_in_their_leading_digits(beds, offered):
    """The least is about 1e-79; every level must hold relative to its own size."""
    occupancy = loss_unit(beds, offered).units["A"].occupancy
    with mpmath.workdps(40):
        terms = [mpmath.mpf(offered) ** busy / mpmath.factorial(busy) for busy in range(beds + 1)]
        expected = [float(term / mpmath.fsum(terms)) for term in terms]
    np.testing.assert_allclose(occupancy, expected, rtol=1e-12, atol=0)


def test_rare_refusals_of_a_pool():
    result = exact([unit("A", 20), unit("B", 15)], [("A", 1, 0.5), ("B", 0.7, 0.5)])
    expected = float(precise_erlang_b(35, mpmath.mpf(1.7) / 2)) * 1.7
    assert expected < 1e-40
    assert result.network.turned_away_per_day == pytest.approx(expected, rel=1e-12)


def test_levels_beyond_the_range_of_a_float():
    """An offered load of 3.65e8 in 60 beds: the weight of the last level over the first is above 1e400."""
    occupancy = exact([unit("A", 60)], [("A", 10_000, 36_500)]).units["A"].occupancy
    assert math.isclose(occupancy[60], float(precise_erlang_b(60, 3.65e8)), rel_tol=1e-12)
    assert math.isclose(occupancy[30], occupancy[60] * math.prod(range(31, 61)) / 3.65e8**30, rel_tol=1e-11)
    assert occupancy[0] == 0.0
