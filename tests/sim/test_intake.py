"""The draws of a replication: their addresses, what leaves them alone, independence, the intake as CSV."""

from __future__ import annotations

import csv
import dataclasses
import hashlib
import math
import unicodedata

import numpy as np
import pytest
from scipy import stats

from sim import reference
from sim.demand import WeeklyPattern
from sim.intake import ARRIVAL, DELAY, GATE, STAY, Intake, draw_intake, uniforms, write_intake
from sim.lowering import GroupDraws, IntakePlan, lower_network, lower_policy, plan_intake, stay_factors
from sim.scenario import parse_scenario
from sim.stays import Exponential, Lognormal

PURPOSES = (ARRIVAL, STAY, DELAY, GATE)
WEEK = WeeklyPattern(hour_of_day=tuple(range(1, 25)), day_of_week=(1, 1, 1, 1, 2, 0, 3))
NORTH = GroupDraws("north", 0, 3.0, WEEK, Lognormal(4.0, 1.4))
SOUTH = GroupDraws("south", 1, 2.0, WeeklyPattern(), Exponential(2.5))
WEST = GroupDraws("west", 0, 5.0, WeeklyPattern(), Exponential(1.0))
PLAN = IntakePlan(4021, (NORTH, SOUTH), (1.0, 1.25), Lognormal(2.5, 0.5), horizon_days=200.0)

SCENARIO = """
schema = 1
run = { seed = 11, warm_up_days = 14, measured_days = 56 }
units = [
    { name = "Ashgill", beds = 4, closure_threshold = 3 },
    { name = "Norbeck", beds = 5, stay_factor = 1.1 },
]
diversion = { delay = { family = "lognormal", mean_hours = 3, cv = 0.5 }, extra_days = 0.25 }

[[patients]]
group = "Ashgill emergencies"
home = "Ashgill"
per_day = 0.9
stay = { family = "lognormal", mean_days = 4, cv = 1.4 }

[[patients]]
group = "Norbeck emergencies"
home = "Norbeck"
per_day = 1.1
stay = { family = "gamma", mean_days = 3.5, cv = 0.8 }
"""


def draws_of(intake: Intake, group: int) -> dict[str, np.ndarray]:
    """Everything drawn for the patients of one group, in their order."""
    theirs = intake.group == group
    names = ("arrival", "home", "drawn_stay", "stay", "delay", "gate")
    return {name: getattr(intake, name)[..., theirs] for name in names}


def assert_same(
    one: dict[str, np.ndarray], other: dict[str, np.ndarray], *, but: tuple[str, ...] = ()
) -> None:
    for name in one.keys() - set(but):
        np.testing.assert_array_equal(one[name], other[name], err_msg=name, strict=True)


# --- uniforms and their addresses -------------------------------------------------------------------------


def test_a_uniform_is_the_middle_of_one_of_two_to_the_52_equal_parts_of_its_own_philox_stream():
    # Another way to the same bits: the words from the hexadecimal digest, and the 52 bits from the leading
    # bits of the doubles that numpy's Generator makes of the stream.
    digest = hashlib.sha256("Äußere Gruppe".encode()).hexdigest()
    address = np.random.SeedSequence(4021, spawn_key=(17, int(digest[:8], 16), int(digest[8:16], 16), STAY))
    doubles = np.random.Generator(np.random.Philox(address)).random(1000)
    expected = (np.floor(doubles * 2.0**52) + 0.5) / 2.0**52
    np.testing.assert_array_equal(uniforms(4021, 17, "Äußere Gruppe", STAY)(1000), expected)


def test_a_uniform_is_never_0_or_1(monkeypatch):
    class Extremes:
        """A bit generator at both ends of its range."""

        def __init__(self, _):
            pass

        def random_raw(self, n):
            return np.array([0, 2**64 - 1] * (n // 2), np.uint64)

    monkeypatch.setattr(np.random, "Philox", Extremes)
    lowest, highest = uniforms(1, 0, "north", STAY)(2)
    assert (lowest, highest) == (2.0**-53, 1 - 2.0**-53)


def test_a_stream_goes_on_where_it_stopped():
    whole, source = uniforms(1, 2, "north", GATE)(100), uniforms(1, 2, "north", GATE)
    np.testing.assert_array_equal(np.concatenate([source(1), source(0), source(60), source(39)]), whole)


def test_a_group_name_means_the_same_in_every_unicode_form():
    composed, apart = (unicodedata.normalize(form, "Höhe") for form in ("NFC", "NFD"))
    assert composed != apart
    np.testing.assert_array_equal(uniforms(1, 0, composed, STAY)(5), uniforms(1, 0, apart, STAY)(5))


def test_purposes_keep_their_numbers():
    # Numbered once for all: another number would change every draw of every scenario.
    assert (ARRIVAL, STAY, DELAY, GATE) == (1, 2, 3, 4)


def test_no_two_addresses_share_a_stream():
    addresses = [
        (seed, replication, group, purpose)
        for seed in range(3)
        for replication in range(4)
        for group in ("north", "south", "North", "")
        for purpose in PURPOSES
    ]
    starts = {tuple(uniforms(*address)(4)) for address in addresses}
    assert len(starts) == len(addresses)


# --- what leaves a draw as it was -------------------------------------------------------------------------


def test_another_group_leaves_every_other_draw_as_it_was():
    before = draw_intake(PLAN, 3)
    after = draw_intake(dataclasses.replace(PLAN, groups=(WEST, NORTH, SOUTH)), 3)
    assert len(after) > len(before)
    for place in (0, 1):
        assert_same(draws_of(before, place), draws_of(after, place + 1))


def test_another_unit_leaves_every_other_draw_as_it_was():
    wider = SCENARIO.replace("units = [", 'units = [{ name = "Crag", beds = 2, stay_factor = 2.0 },')
    before, after = (draw_intake(plan_intake(parse_scenario(text)), 0) for text in (SCENARIO, wider))
    assert after.stay.shape[0] == before.stay.shape[0] + 1  # a stay class more, the first one
    np.testing.assert_array_equal(after.stay[1:], before.stay)
    np.testing.assert_array_equal(after.home, before.home + 1)
    for name in ("arrival", "group", "drawn_stay", "delay", "gate"):
        np.testing.assert_array_equal(getattr(after, name), getattr(before, name), err_msg=name)


def test_a_delay_and_a_stay_family_change_nothing_but_themselves():
    plain = draw_intake(PLAN, 0)
    at_once = draw_intake(dataclasses.replace(PLAN, delay_hours=None), 0)
    assert not at_once.delay.any()
    other = dataclasses.replace(PLAN, groups=(dataclasses.replace(NORTH, stay=Exponential(4.0)), SOUTH))
    exponential = draw_intake(other, 0)
    for place in (0, 1):
        assert_same(draws_of(plain, place), draws_of(at_once, place), but=("delay",))
    assert_same(draws_of(plain, 0), draws_of(exponential, 0), but=("stay", "drawn_stay"))
    # The same uniforms behind both: longer stays stay longer.
    order = np.argsort(draws_of(plain, 0)["drawn_stay"])
    assert np.all(np.diff(draws_of(exponential, 0)["drawn_stay"][order]) >= 0)


def test_a_new_purpose_leaves_the_others_as_they_were():
    source = uniforms(4021, 0, "north", max(PURPOSES) + 1)
    before = [uniforms(4021, 0, "north", purpose)(10) for purpose in PURPOSES]
    source(1_000)
    for purpose, draws in zip(PURPOSES, before, strict=True):
        np.testing.assert_array_equal(uniforms(4021, 0, "north", purpose)(10), draws)


def test_a_longer_run_only_adds_patients():
    short, long = draw_intake(PLAN, 0), draw_intake(dataclasses.replace(PLAN, horizon_days=300.0), 0)
    before = long.arrival < 200.0
    assert np.count_nonzero(before) == len(short)
    for name in ("arrival", "group", "home", "drawn_stay", "stay", "delay", "gate"):
        np.testing.assert_array_equal(getattr(long, name)[..., before], getattr(short, name))


def test_any_replication_can_be_had_alone():
    in_a_row = [draw_intake(PLAN, replication).hash for replication in range(5)]
    assert draw_intake(PLAN, 3).hash == in_a_row[3]
    assert len(set(in_a_row)) == 5


def test_the_exponential_counterpart_meets_the_same_uniforms():
    scenario = parse_scenario(SCENARIO)
    real, plain = (draw_intake(plan_intake(one), 0) for one in (scenario, scenario.exponential()))
    for place, mean in enumerate((4.0, 3.5)):
        one, other = draws_of(real, place), draws_of(plain, place)
        assert_same(one, other, but=("drawn_stay", "stay", "delay"))
        u = uniforms(11, 0, scenario.patients[place].group, STAY)(len(one["arrival"]))
        np.testing.assert_allclose(other["drawn_stay"], -mean * np.log(1 - u), rtol=1e-12)


# --- demand -----------------------------------------------------------------------------------------------


def test_more_demand_divides_operational_time_and_keeps_every_other_draw():
    scenario = parse_scenario(
        SCENARIO.replace("per_day = 0.9", f"per_day = 0.9\nday_of_week = {[*WEEK.day_of_week]}")
    )
    plain, busier = (draw_intake(plan_intake(one), 0) for one in (scenario, scenario.with_demand(1.25)))
    for place in (0, 1):
        one, other = draws_of(plain, place), draws_of(busier, place)
        n = len(one["arrival"])
        assert len(other["arrival"]) > n
        assert_same(one, {name: values[..., :n] for name, values in other.items()}, but=("arrival",))
        operational = scenario.patients[place].pattern.cumulative
        np.testing.assert_allclose(
            operational(other["arrival"][:n]) * 1.25, operational(one["arrival"]), rtol=1e-12
        )


def test_patients_come_by_time_then_group_then_draw_number():
    class EveryDay(WeeklyPattern):
        """Arrivals at noon of the day that they would fall on: ties without end."""

        is_constant = False

        def inverse(self, operational_days):
            return np.floor(np.asarray(operational_days)) + 0.5

    groups = tuple(dataclasses.replace(group, pattern=EveryDay()) for group in (SOUTH, NORTH, WEST))
    drawn = draw_intake(dataclasses.replace(PLAN, groups=groups), 0)
    assert len(np.unique(drawn.arrival)) < len(drawn) / 5
    assert np.all(np.diff(drawn.arrival) >= 0)
    same_time = np.diff(drawn.arrival) == 0
    assert np.all(np.diff(drawn.group)[same_time] >= 0)
    for place, group in enumerate(groups):  # within a group, the draws in the order of its streams
        theirs = draws_of(drawn, place)
        np.testing.assert_array_equal(
            theirs["gate"], uniforms(4021, 0, group.name, GATE)(len(theirs["gate"]))
        )


# --- in distribution --------------------------------------------------------------------------------------
# Seeds are fixed. A bound of 5 standard errors raises a false alarm with probability 6e-7 a comparison.

BOUND = 5.0


def z_of_arrivals(per_day: float) -> float:
    """How many standard errors the arrivals of 20 replications of `NORTH` lie from a rate."""
    count = sum(np.count_nonzero(draw_intake(PLAN, replication).group == 0) for replication in range(20))
    weeks, rest = divmod(PLAN.horizon_days, 7)
    expected = 20 * per_day * (7 * weeks + float(WEEK.cumulative(rest)))
    return (count - expected) / math.sqrt(expected)


def test_mean_arrivals_are_the_rate():
    assert abs(z_of_arrivals(3.0)) < BOUND
    assert abs(z_of_arrivals(3.0 * 1.06)) > BOUND  # planted: 6 % more


def test_arrivals_follow_the_weights_of_the_week():
    def p_value(pattern: WeeklyPattern) -> float:
        days = [draw_intake(PLAN, k) for k in range(10)]
        arrivals = np.concatenate(
            [drawn.arrival[(drawn.group == 0) & (drawn.arrival < 196)] for drawn in days]
        )
        hours = np.bincount((arrivals * 24).astype(int) % 168, minlength=168)
        share = pattern.rate((np.arange(168) + 0.5) / 24) / 168
        assert not hours[share == 0].any()
        return stats.chisquare(hours[share > 0], share[share > 0] * hours.sum()).pvalue

    assert p_value(WEEK) > 1e-6  # the false-alarm rate
    assert p_value(dataclasses.replace(WEEK, hour_of_day=(1,) * 24)) < 1e-6  # planted: even hours


def test_mean_stays_and_delays_are_those_of_their_families():
    drawn = [draw_intake(PLAN, replication) for replication in range(20)]
    stay = np.concatenate([one.drawn_stay[one.group == 0] for one in drawn])
    delay = np.concatenate([one.delay for one in drawn])

    def z(values: np.ndarray, mean: float, cv: float) -> float:
        return (values.mean() - mean) / (cv * mean / math.sqrt(len(values)))

    assert abs(z(stay, 4.0, 1.4)) < BOUND
    assert abs(z(delay, 2.5 / 24, 0.5)) < BOUND
    assert abs(z(stay, 4.0 * 1.15, 1.4)) > BOUND  # planted: 15 % longer
    assert abs(z(delay, 2.5, 0.5)) > BOUND  # planted: hours taken as days


def test_stays_of_a_class_are_the_drawn_ones_times_its_factor():
    drawn = draw_intake(PLAN, 0)
    assert drawn.stay.shape == (2, len(drawn))
    np.testing.assert_array_equal(drawn.stay[0], drawn.drawn_stay)
    np.testing.assert_array_equal(drawn.stay[1], drawn.drawn_stay * 1.25)


def largest_correlation(streams: list[np.ndarray]) -> float:
    """The largest correlation of any two streams, at any shift up to 3, in standard errors."""
    n, largest = len(streams[0]) - 3, 0.0
    for i, one in enumerate(streams):
        for other in streams[i + 1 :]:
            for shift in range(4):
                for a, b in ((one, other), (other, one)):
                    r = np.corrcoef(a[:n], b[shift : shift + n])[0, 1]
                    largest = max(largest, abs(r) * math.sqrt(n))
    return largest


def test_replications_groups_and_purposes_are_independent():
    streams = [
        uniforms(s, r, g, p)(20_000) for s in (1, 2) for r in (0, 1) for g in ("a", "b") for p in (1, 2)
    ]
    # 120 pairs at 8 shifts: a bound of 6 keeps the false-alarm rate below 960 x 2e-9 = 2e-6.
    assert largest_correlation(streams) < 6.0


def test_seed_plus_replication_would_be_caught():
    def wrong(seed: int, replication: int) -> np.ndarray:  # planted: the replication added to the seed
        return np.random.Generator(np.random.Philox(np.random.SeedSequence(seed + replication))).random(
            20_000
        )

    # Replication 1 of seed 1 would be replication 0 of seed 2.
    assert largest_correlation([wrong(1, 0), wrong(1, 1), wrong(2, 0)]) > 6.0
    right = [uniforms(seed, replication, "a", 1)(20_000) for seed, replication in ((1, 0), (1, 1), (2, 0))]
    assert not np.array_equal(right[1], right[2])
    assert largest_correlation(right) < 6.0


# --- the intake as CSV ------------------------------------------------------------------------------------


def read_intake(path, *, groups: list[str], units: list[str], factors: tuple[float, ...]) -> Intake:
    """An outsider's reading of the CSV."""
    with path.open(newline="", encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert [int(row["patient"]) for row in rows] == list(range(len(rows)))
    assert {row["kind"] for row in rows} == {"emergency"}

    def column(name: str) -> np.ndarray:
        return np.array([float(row[name]) for row in rows])

    return Intake(
        arrival=column("arrival_days"),
        group=np.array([groups.index(row["group"]) for row in rows], np.int64),
        home=np.array([units.index(row["home"]) for row in rows], np.int64),
        drawn_stay=column("stay_days"),
        stay=np.array([column("stay_days") * factor for factor in factors]),
        delay=column("delay_days"),
        gate=column("gate"),
    )


def test_an_intake_written_as_csv_gives_the_same_record(tmp_path):
    scenario = parse_scenario(SCENARIO.replace("Ashgill emergencies", 'Ash \\"gill\\", é'))
    drawn = draw_intake(plan_intake(scenario), 0)
    groups, units = [group.group for group in scenario.patients], list(scenario.unit_names)
    write_intake(drawn, tmp_path / "intake.csv", groups=groups, units=units)
    read = read_intake(tmp_path / "intake.csv", groups=groups, units=units, factors=stay_factors(scenario))
    assert read.hash == drawn.hash
    network, rules = lower_network(scenario), lower_policy(scenario, scenario.policy())
    record = reference.run(network, rules, drawn)
    assert record.diverted.sum() > 10
    assert reference.run(network, rules, read).hash == record.hash


@pytest.mark.parametrize("name", ["arrival", "home", "stay", "delay", "gate"])
def test_the_hash_sees_every_change(name):
    drawn = draw_intake(PLAN, 0)
    changed = getattr(drawn, name).copy()
    changed.flat[7] = (
        np.nextafter(changed.flat[7], np.inf) if changed.dtype.kind == "f" else 1 - changed.flat[7]
    )
    assert dataclasses.replace(drawn, **{name: changed}).hash != drawn.hash
