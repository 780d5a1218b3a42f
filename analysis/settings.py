"""The grid of a sweep: ranges from the command line, and the network at each of its settings."""

from __future__ import annotations

import itertools
import math
import unicodedata
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from sim.errors import Fault
from sim.scenario import Policy, Scenario
from sim.scenario.varied import follows, has_cv, with_beds, with_delay_factor, with_stay_cv
from sim.tables import MOST_BEDS, MOST_PATIENTS
from sim.wording import nearest, shown

MOST_POINTS = 1_000  # of one range
MOST_NETWORKS = 200  # the sums of all their runs are held at once
MOST_IN_ALL = 20_000
LEAST_PER_DAY = 1e-9
AS_IN_FILE = (None,)
FORM = "must be FROM:TO:POINTS, or one value"


@dataclass(frozen=True)
class Setting:
    """What makes one network of a sweep; None is as in the file.

    demand: factor on every arrival rate. beds: staffed beds by unit. delay: factor on the transfer delay. cv: of the
    stays whose family has one. soft: `admit_while_closed` of every unit.
    """

    demand: float = 1.0
    beds: tuple[tuple[str, int], ...] = ()
    delay: float | None = None
    cv: float | None = None
    soft: float | None = None

    def to_dict(self) -> dict[str, Any]:
        """What the sweep varies, plain."""
        told = {"demand": self.demand, "beds": dict(self.beds) or None}
        told |= {"delay": self.delay, "cv": self.cv, "soft": self.soft}
        return {key: value for key, value in told.items() if value is not None}

    def scenario(self, scenario: Scenario) -> Scenario:
        """The network at this setting."""
        changed = scenario if self.demand == 1 else scenario.with_demand(self.demand)
        if self.beds:
            changed = with_beds(changed, dict(self.beds))
        if self.delay is not None:
            changed = with_delay_factor(changed, self.delay)
        return changed if self.cv is None else with_stay_cv(changed, self.cv)

    def policy(self, scenario: Scenario, base: Policy) -> Policy:
        """The rules at this setting; scenario: before it, whose beds they are for."""
        changed = base
        for name, beds in self.beds:
            before, rules = scenario.unit(name).beds, changed.units[name]
            closure = follows(rules.closure_threshold, before, beds)
            changed = changed.with_rule("closure_threshold", {name: closure})
            if rules.incoming_threshold is not None:
                incoming = follows(rules.incoming_threshold, before, beds)
                changed = changed.with_rule("incoming_threshold", {name: incoming})
        if self.soft is None:
            return changed
        return changed.with_rule("admit_while_closed", dict.fromkeys(scenario.unit_names, self.soft))


@dataclass(frozen=True)
class Grid:
    """The values along each axis; None is as in the file."""

    demands: tuple[float, ...] = (1.0,)
    targets: tuple[float | None, ...] = AS_IN_FILE
    beds: tuple[tuple[str, tuple[int, ...]], ...] = ()
    delays: tuple[float | None, ...] = AS_IN_FILE
    cvs: tuple[float | None, ...] = AS_IN_FILE
    softs: tuple[float | None, ...] = AS_IN_FILE
    weights: tuple[float | None, ...] = AS_IN_FILE

    def settings(self) -> list[Setting]:
        """Every network that is simulated or solved, demand slowest."""
        beds = itertools.product(*([(name, one) for one in counts] for name, counts in self.beds))
        axes = itertools.product(self.demands, list(beds), self.delays, self.cvs, self.softs)
        return [Setting(*one) for one in axes]

    @property
    def networks(self) -> int:
        """The number of networks."""
        along = (self.demands, self.delays, self.cvs, self.softs, *(counts for _, counts in self.beds))
        return math.prod(map(len, along))

    @property
    def points(self) -> int:
        """The number of points."""
        return self.networks * len(self.targets) * len(self.weights)


# ---- from the command line ----


@dataclass(frozen=True)
class Bounds:
    """Between which the values of a range must lie, inclusive; above: the least value itself is not allowed."""

    least: float
    most: float
    above: bool = False

    @property
    def reads(self) -> str:
        """The rule in words."""
        if self.above:
            return f"must be above {self.least:.3g} and at most {self.most:.6g}"
        return f"must be from {self.least:.3g} to {self.most:.6g}"

    def holds(self, value: float) -> bool:
        """Whether a value lies between them."""
        return (value > self.least or (value == self.least and not self.above)) and value <= self.most


TARGETS, WEIGHTS, FACTORS, CVS, SHARES = (
    Bounds(0, 1, above=True), Bounds(0, 1_000), Bounds(0, 100), Bounds(0.001, 20), Bounds(0, 1),
)  # fmt: skip


def demand_bounds(scenario: Scenario) -> Bounds:
    """The factors on every arrival rate that a run can bear."""
    days = max(1.0, scenario.run.warm_up_days + scenario.run.measured_days)
    rates = [group.per_day for group in scenario.patients]
    return Bounds(LEAST_PER_DAY / min(rates), MOST_PATIENTS / (days * sum(rates)))


def read_range(option: str, text: str, bounds: Bounds, faults: list[Fault]) -> tuple[float, ...]:
    """The values of FROM:TO:POINTS, both ends included, or of one value; empty where that is at fault."""
    parts = [_number(part) for part in text.split(":")]
    remedy = f"write {option} {_example(bounds)}"
    if len(parts) not in (1, 3) or None in parts:
        faults.append(Fault(None, option, FORM, f"got {shown(text)}", remedy))
        return ()
    ends = [part for part in parts[:2] if part is not None]
    outside = [end for end in dict.fromkeys(ends) if not bounds.holds(end)]
    mine = [Fault(None, option, bounds.reads, f"got {end:g}", remedy) for end in outside]
    if len(parts) == 3:
        mine += _points_faults(option, ends, float(parts[2] or 0))
    faults += mine
    if mine:
        return ()
    points = int(parts[2] or 0) if len(parts) == 3 else 1
    return tuple(float(f"{value:.12g}") for value in np.linspace(ends[0], ends[-1], points))


def _points_faults(option: str, ends: Sequence[float], points: float) -> Iterator[Fault]:
    if not (points.is_integer() and 2 <= points <= MOST_POINTS):
        rule = f"must have a whole number of points from 2 to {MOST_POINTS:,}"
        yield Fault(None, option, rule, f"got {points:g}", "give one value without colons for a single point")
    if ends[0] >= ends[1]:
        rule = "must begin below its end"
        yield Fault(
            None,
            option,
            rule,
            f"got {ends[0]:g} to {ends[1]:g}",
            "swap them, or give one value without colons",
        )


def _example(bounds: Bounds) -> str:
    low = max(bounds.least, 0.5) if bounds.most >= 0.95 else bounds.least
    return f"{low:g}:{min(bounds.most, 0.95 if bounds.most <= 1 else 1.5):g}:10"


def _number(text: str) -> float | None:
    try:
        value = float(text)
    except ValueError:
        return None
    return value if math.isfinite(value) and "_" not in text else None


def read_beds(
    entries: Sequence[str], scenario: Scenario, faults: list[Fault]
) -> tuple[tuple[str, tuple[int, ...]], ...]:
    """The beds of repeated UNIT=FROM:TO options, both ends included, or UNIT=N."""
    found: dict[str, tuple[int, ...]] = {}
    for entry in entries:
        name, sign, span = unicodedata.normalize("NFC", entry).rpartition("=")
        ends = [int(part) if part.isdecimal() and len(part) < 9 else 0 for part in span.split(":")]
        if not sign or len(ends) > 2 or not all(1 <= end <= MOST_BEDS for end in ends) or ends[0] > ends[-1]:
            rule = f"must be UNIT=FROM:TO or UNIT=N, whole numbers from 1 to {MOST_BEDS:,}, FROM at most TO"
            remedy = f'write --beds "{scenario.unit_names[0]}=8:12"'
            faults.append(Fault(None, "--beds", rule, f"got {shown(entry)}", remedy))
        elif name not in scenario.unit_names:
            rule, remedy = "must name a unit of the scenario", nearest(name, scenario.unit_names)
            faults.append(Fault(None, "--beds", rule, f"got {shown(name)}", remedy))
        elif name in found:
            rule = "must name a unit once"
            faults.append(Fault(None, "--beds", rule, f"got {shown(name)} again", "remove one of the two"))
        else:
            found[name] = tuple(range(ends[0], ends[-1] + 1))
    return tuple(found.items())


@dataclass(frozen=True)
class Texts:
    """The axes as the command line gives them."""

    demand: str | None = None
    target: str | None = None
    beds: Sequence[str] = ()
    delay: str | None = None
    cv: str | None = None
    soft: str | None = None
    transfer_weight: str | None = None


def grid_of(texts: Texts, scenario: Scenario, faults: list[Fault]) -> Grid:
    """The grid, with every fault of any axis."""

    def axis(option: str, text: str | None, bounds: Bounds, default: tuple[Any, ...] = AS_IN_FILE) -> Any:
        return default if text is None else read_range(option, text, bounds, faults)

    grid = Grid(
        axis("--demand", texts.demand, demand_bounds(scenario), (1.0,)),
        axis("--target", texts.target, TARGETS),
        read_beds(texts.beds, scenario, faults),
        axis("--delay", texts.delay, FACTORS),
        axis("--cv", texts.cv, CVS),
        axis("--soft", texts.soft, SHARES),
        axis("--transfer-weight", texts.transfer_weight, WEIGHTS),
    )
    faults += _misfits(grid, texts, scenario)
    if grid.networks > MOST_NETWORKS or grid.points > MOST_IN_ALL:
        rule = f"must have at most {MOST_NETWORKS:,} networks and {MOST_IN_ALL:,} points in all"
        got = f"got {grid.networks:,} networks and {grid.points:,} points"
        faults.append(Fault(None, "the grid", rule, got, "give fewer points along some axes"))
    return grid


def _misfits(grid: Grid, texts: Texts, scenario: Scenario) -> Iterator[Fault]:
    """Axes along which this scenario does not vary."""
    if texts.target is not None and not uses_targets(scenario):
        rule, remedy = (
            "needs a goal that uses a target",
            "give the game such a goal, or, for a sweep, drop --target",
        )
        yield Fault(None, "--target", rule, "no unit's goal does", remedy)
    if texts.delay is not None and scenario.diversion.delay is None:
        rule, remedy = "needs a transfer delay to multiply", "add `delay` to [diversion], or drop --delay"
        yield Fault(None, "--delay", rule, "transfers take no time here", remedy)
    if texts.cv is not None:
        yield from _cv_misfits(grid, scenario)
    if texts.soft is not None and any("admit_while_closed" in mine for mine in scenario.choices().values()):
        rule = "needs units that do not choose `admit_while_closed` themselves"
        yield Fault(None, "--soft", rule, "the game lists values of it", "drop --soft, or the listed values")
    for name, counts in grid.beds:
        listed = scenario.strategies().get(name) if name in scenario.game.strategies else None
        if listed and min(listed) > min(counts):
            rule, got = (
                "must leave a listed threshold within the beds",
                f"got {min(counts)} beds for {shown(name)}",
            )
            remedy = f"list a threshold of at most {min(counts)} in game.strategies"
            yield Fault(None, "--beds", rule, got, remedy)


def _cv_misfits(grid: Grid, scenario: Scenario) -> Iterator[Fault]:
    mine = [group.stay for group in scenario.patients if has_cv(group.stay)]
    families = {group.stay.family for group in scenario.patients}
    if not mine:
        rule = "needs stays whose family has a cv (gamma, weibull, lognormal, hyperexponential)"
        got = f"got {', '.join(sorted(families))} only"
        yield Fault(None, "--cv", rule, got, "give a group such a stay, or drop --cv")
    if "hyperexponential" in families and any(cv is not None and cv < 1 for cv in grid.cvs):
        rule, got = "must be at least 1 where a stay is hyperexponential", f"got {min(grid.cvs):g}"
        yield Fault(None, "--cv", rule, got, "begin at 1, or give those stays another family")


def uses_targets(scenario: Scenario) -> bool:
    """Whether any unit's goal uses a target utilisation."""
    return any(scenario.game.goal_of(name).needs_target for name in scenario.unit_names)


def read_delta(text: str, faults: list[Fault]) -> tuple[float | None, float | None]:
    """A loss allowed: (share, None) from `0.5%`, or (None, patients a year) from `25`; a fault where it is neither."""
    value = _number(text.strip().removesuffix("%"))
    if value is None or value < 0 or (text.strip().endswith("%") and value > 100):
        rule, remedy = (
            "must be patients a year, or a share of those who arrive",
            "write --delta 25, or --delta 0.5%",
        )
        faults.append(Fault(None, "--delta", rule, f"got {shown(text)}", remedy))
        return None, 0.0
    return (value / 100, None) if text.strip().endswith("%") else (None, value)
