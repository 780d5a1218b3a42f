"""Deadlines on clocks that are set back, set on, or that pass through the end of summer time."""

from datetime import UTC, datetime, time, timedelta
from zoneinfo import ZoneInfo

import pytest

from analysis.command.deadline import BUDGET, TIME, Clock, Deadline, deadline_of, next_moment
from analysis.command.entry import run

PARIS = ZoneInfo("Europe/Paris")


class Watch:
    """Clocks that a test moves: time that passes, and a wall clock that is set."""

    def __init__(self, wall, zone=UTC):
        self.passed, self.wall, self.zone = 0.0, wall.astimezone(UTC), zone
        self.clock = Clock(lambda: self.passed, lambda: self.wall, self.local)

    def local(self, moment):
        return moment.replace(tzinfo=self.zone) if moment.tzinfo is None else moment.astimezone(self.zone)

    def wait(self, hours):
        self.passed += hours * 3600
        self.wall += timedelta(hours=hours)

    def set(self, hours):
        self.wall += timedelta(hours=hours)


def evening(zone=UTC, day=(2026, 12, 1), hour=22):
    return datetime(*day, hour, tzinfo=zone)


def test_until_is_the_next_such_local_time():
    clock = Watch(evening()).clock
    assert next_moment(time(6, 30), clock) == datetime(2026, 12, 2, 6, 30, tzinfo=UTC)
    assert next_moment(time(22, 1), clock) == datetime(2026, 12, 1, 22, 1, tzinfo=UTC)
    assert next_moment(time(22, 0), clock) == datetime(2026, 12, 2, 22, 0, tzinfo=UTC)


@pytest.mark.parametrize(
    ("day", "hours"), [((2026, 10, 24), 9.5), ((2026, 3, 28), 7.5), ((2026, 12, 1), 8.5)]
)
def test_the_night_in_which_summer_time_ends_or_begins_has_its_own_length(day, hours):
    """In 2026 summer time in Paris begins on 29 March and ends on 25 October (the zone's own data say so)."""
    watch = Watch(evening(PARIS, day), PARIS)
    deadline = Deadline(time(6, 30), clock=watch.clock)
    assert deadline.seconds_left == hours * 3600
    assert f"{deadline.moment:%H:%M}" == "06:30"
    watch.wait(hours - 0.01)
    assert deadline.over is None
    watch.wait(0.02)
    assert (deadline.over, deadline.clock_moved) == (TIME, None)


def test_a_time_that_the_night_has_twice_is_its_next_one():
    watch = Watch(datetime(2026, 10, 25, 0, 45, tzinfo=UTC), PARIS)  # 02:45 in Paris, for the first time
    assert next_moment(time(2, 30), watch.clock).astimezone(UTC) == datetime(2026, 10, 25, 1, 30, tzinfo=UTC)


def test_a_clock_set_back_neither_prolongs_it_nor_is_kept_quiet():
    watch = Watch(evening())
    deadline = Deadline(time(6, 30), clock=watch.clock)
    watch.wait(4)
    watch.set(-2)
    assert deadline.seconds_left == 4.5 * 3600 and deadline.over is None
    assert "set back by 2.0 h: the length fixed at the start holds" in deadline.clock_moved
    watch.wait(4.5)
    assert deadline.over == TIME, "the wall clock says 04:30, but 8.5 hours have passed"


def test_a_clock_set_on_or_a_machine_that_slept_ends_at_the_time_of_day():
    watch = Watch(evening())
    deadline = Deadline(time(6, 30), clock=watch.clock)
    watch.wait(1)
    watch.set(7)
    assert deadline.seconds_left == 1800 and "set on by 7.0 h" in deadline.clock_moved
    watch.wait(0.5)
    assert deadline.over == TIME


def test_hours_are_hours_whatever_the_wall_clock_does():
    for hours in (-5, 5):
        watch = Watch(evening())
        deadline = Deadline(seconds=7200, clock=watch.clock)
        watch.set(hours)
        assert deadline.over is None and deadline.seconds_left == 7200
        watch.wait(2)
        assert deadline.over == TIME


def test_a_small_correction_of_the_clock_is_not_worth_a_word():
    watch = Watch(evening())
    deadline = Deadline(time(6, 30), clock=watch.clock)
    watch.set(-1 / 3600)
    assert deadline.clock_moved is None


def test_a_budget_is_used_up_run_by_run():
    deadline = Deadline(budget=10)
    deadline.count(9)
    assert (deadline.over, deadline.runs_left) == (None, 1)
    deadline.count(3)
    assert (deadline.over, deadline.runs_left) == (BUDGET, 0)


def test_the_first_bound_that_is_reached_holds_and_without_any_it_never_ends():
    watch = Watch(evening())
    deadline = deadline_of(time(6, 30), 3, 90, 10, watch.clock)
    assert deadline.seconds_left == 5400
    assert deadline.reads == "until 2026-12-02 06:30 UTC or for 1.5 h or for at most 10 runs"
    free = deadline_of(None, None, None, None, watch.clock)
    watch.wait(10_000)
    assert (free.over, free.seconds_left, free.runs_left) == (None, None, None)
    assert free.reads == "until it is complete"


@pytest.mark.parametrize(
    "option", [("--until", "25:00"), ("--until", "soon"), ("--hours", "0"), ("--hours", "nan"), ("--budget", "0")]
)  # fmt: skip
def test_a_bound_that_is_none_is_a_fault(two, capsys, option):
    assert run(["batch", two, *option]) == 2
    assert option[0] in capsys.readouterr().err
