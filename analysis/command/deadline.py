"""When a long job has to end: at a time of day, after some hours, or after so many runs.

A length of time is counted by a clock that nobody can set. A time of day is turned into such a length when the job
starts, so that a wall clock set back at night does not prolong it, and summer time begins or ends with the length that
it ought to have. Where the wall clock is set on, or the machine sleeps, past that time, the job ends then.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from datetime import time as time_of_day
from typing import Any

import click

from analysis.command.progress import duration

TIME, BUDGET = "time", "budget"
MOVED_SECONDS = 60.0  # a wall clock that differs by more has been set


@dataclass(frozen=True)
class Clock:
    """This machine's clocks: seconds that only grow, the moment in UTC, and the local time of a moment.

    local: gives a naive local time its offset (where a night has it twice, `fold` tells which), or moves an aware one.
    """

    seconds: Callable[[], float] = time.monotonic
    now: Callable[[], datetime] = lambda: datetime.now(UTC)
    local: Callable[[datetime], datetime] = lambda moment: moment.astimezone()


CLOCK = Clock()


def next_moment(at: time_of_day, clock: Clock = CLOCK) -> datetime:
    """The next moment at which the local clock shows that time."""
    now = clock.now()
    today = clock.local(now).date()
    moments = (
        clock.local(datetime.combine(today + timedelta(days=days), at.replace(fold=fold)))
        for days in (0, 1, 2)
        for fold in (0, 1)
    )
    return min(one for one in moments if one.astimezone(UTC) > now)


@dataclass
class Deadline:
    """When to end. Without a bound of any kind it is never over.

    until: local time of day. seconds: of work. budget: runs. used: the runs so far.
    """

    until: time_of_day | None = None
    seconds: float | None = None
    budget: int | None = None
    clock: Clock = field(default=CLOCK, repr=False)
    used: int = 0

    def __post_init__(self) -> None:
        self._began, self._began_at = self.clock.seconds(), self.clock.now()
        self.moment = None if self.until is None else next_moment(self.until, self.clock)
        lengths = [] if self.seconds is None else [self.seconds]
        if self.moment is not None:
            lengths.append((self.moment.astimezone(UTC) - self._began_at).total_seconds())
        self._length = min(lengths, default=None)

    def count(self, runs: int) -> None:
        """So many runs more are done."""
        self.used += runs

    @property
    def runs_left(self) -> int | None:
        """How many runs may still be started; None where there is no bound."""
        return None if self.budget is None else max(0, self.budget - self.used)

    @property
    def seconds_left(self) -> float | None:
        """How long the job may still run; None where there is no bound, and never below 0."""
        if self._length is None:
            return None
        left = [self._length - (self.clock.seconds() - self._began)]
        if self.moment is not None:
            left.append((self.moment.astimezone(UTC) - self.clock.now()).total_seconds())
        return max(0.0, min(left))

    @property
    def over(self) -> str | None:
        """Why the job has to end now, TIME or BUDGET; None while it may go on."""
        if self.seconds_left == 0.0:
            return TIME
        return BUDGET if self.runs_left == 0 else None

    @property
    def reads(self) -> str:
        """The bounds in words, as they are meant: with the date and the zone of a time of day."""
        said = []
        if self.moment is not None:
            said.append(f"until {self.moment:%Y-%m-%d %H:%M %Z}")
        if self.seconds is not None:
            said.append(f"for {duration(self.seconds)}")
        if self.budget is not None:
            said.append(f"for at most {self.budget:,} runs")
        return " or ".join(said) or "until it is complete"

    @property
    def clock_moved(self) -> str | None:
        """What was done about a wall clock that was set (or a machine that slept) meanwhile; None where neither was."""
        passed = self.clock.seconds() - self._began
        moved = (self.clock.now() - self._began_at).total_seconds() - passed
        if abs(moved) <= MOVED_SECONDS:
            return None
        if moved < 0:
            said = "the length fixed at the start holds, so it does not run longer for that"
            return f"the wall clock was set back by {duration(-moved)}: {said}"
        what = f"the wall clock was set on by {duration(moved)}, or the machine slept"
        if self.moment is None:
            return f"{what}: only time at work counts"
        return f"{what}: a time of day holds by the clock as it is now"


class TimeOfDayType(click.ParamType):
    """A local time of day, HH:MM."""

    name = "HH:MM"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> time_of_day:
        if isinstance(value, time_of_day):
            return value
        try:
            read = datetime.strptime(value.strip(), "%H:%M")
        except ValueError:
            self.fail(f"{value!r} is not a time of day such as 06:30", param, ctx)
        return read.time()


def deadline_options(function: Callable[..., Any]) -> Callable[..., Any]:
    """`--until`, `--hours`, `--minutes` and `--budget`; the command gets them by these names."""
    from analysis.command.options import FiniteRange

    length = FiniteRange(0, 10_000, min_open=True)
    for option in (
        click.option("--budget", type=click.IntRange(1, 10**12), help="End after so many runs."),
        click.option("--minutes", type=length, help="End after so many minutes."),
        click.option("--hours", type=length, help="End after so many hours."),
        click.option("--until", type=TimeOfDayType(), help="End at the next such local time."),
    ):
        function = option(function)
    return function


def deadline_of(
    until: time_of_day | None,
    hours: float | None,
    minutes: float | None,
    budget: int | None,
    clock: Clock = CLOCK,
) -> Deadline:
    """The deadline that the options name, counted from now."""
    lengths = [count * seconds for count, seconds in ((hours, 3600.0), (minutes, 60.0)) if count is not None]
    return Deadline(until, min(lengths, default=None), budget, clock)
