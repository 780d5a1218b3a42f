"""The closure ledger: whom a unit's early closing displaces, where to, and what it costs each home.

One unit's early closing is switched off at a time, all else as it is, and both runs meet the same patients. What the
network does with the closing less what it does without is the closing's cost. Costs of several units do not add up
to the cost of all their closings together. The reopening gap stays.
"""

from __future__ import annotations

import dataclasses
from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.anarchy import DAYS_A_YEAR
from analysis.comparison import NETWORK, NOT_TOLD_APART, banded
from analysis.confidence import Estimate
from analysis.findings import Finding
from analysis.measures import Sums
from analysis.named_policies import Case, full
from sim import engines
from sim.intake import Intake, draw_intake
from sim.lowering import NOBODY, Rules, lower_network, lower_policy, plan_intake
from sim.scenario import Policy, Scenario
from sim.trace import Trace

BASE = "with every closing"
COUNTED = {"turned_away": "turned away", "diverted_out": "moved"}
TURNED_AWAY = "turned away"
JUST_OPEN = 2.0**-60  # below every gate number that is ever drawn, which are 2**-53 at least


def cases_without(scenario: Scenario, base: Policy) -> list[Case]:
    """The base, then for each unit the same without that unit's early closing."""
    without = [
        Case(name, scenario, dataclasses.replace(without_closing(scenario, base, name), name=name))
        for name in scenario.unit_names
    ]
    return [Case(BASE, scenario, base), *without]


def without_closing(scenario: Scenario, base: Policy, unit: str) -> Policy:
    """The policy with one unit that closes, to its own patients and to others, only when full."""
    beds = {unit: full(scenario)[unit]}
    return base.with_thresholds(beds).with_rule("incoming_threshold", beds)


def closes_early(scenario: Scenario, base: Policy) -> dict[str, bool]:
    """Unit -> whether it closes to anybody before it is full."""
    return {
        unit.name: min(base.units[unit.name].closure_threshold, base.units[unit.name].incoming) < unit.beds
        for unit in scenario.units
    }


# ---- who pays for whose closure ----


@dataclass(frozen=True)
class Cost:
    """What one unit's early closing does to one home's patients (or the network's), a year; more is worse."""

    closes: str
    home: str
    counted: str
    a_year: Estimate

    @property
    def verdict(self) -> str:
        """`pays`, `gains`, or that neither can be told."""
        low, high = self.a_year.low, self.a_year.high
        if low is None or high is None or low <= 0 <= high:
            return NOT_TOLD_APART
        return "pays" if low > 0 else "gains"

    def to_dict(self) -> dict[str, Any]:
        """Plain values."""
        named = {"closes": self.closes, "home": self.home, "counted": self.counted}
        return named | {"a_year": self.a_year.to_dict(), "verdict": self.verdict}


def costs(
    scenario: Scenario, sums: Sequence[Sums], confidence: float, rng: np.random.Generator
) -> list[Cost]:
    """The matrix: every unit that closes x every home and the network, with bands that hold for all at once.

    sums: of the base and of each unit switched off, as `cases_without` orders them.
    """
    base, homes = sums[0], (*scenario.unit_names, NETWORK)
    labels = [
        (unit, home, reads) for unit in scenario.unit_names for reads in COUNTED.values() for home in homes
    ]
    paired = [
        _with_total((base[count] - own[count]) / base["days"] * DAYS_A_YEAR)
        for own in sums[1:]
        for count in COUNTED
    ]
    _, estimates = banded(np.concatenate(paired, axis=1), confidence, rng)
    return [Cost(*label, estimate) for label, estimate in zip(labels, estimates, strict=True)]


def _with_total(by_home: np.ndarray) -> np.ndarray:
    """(replications, homes) with the network's sum as a last column."""
    return np.column_stack([by_home, by_home.sum(axis=1)])


# ---- whom it displaces ----


@dataclass(frozen=True)
class Displaced:
    """Patients whose unit, or whose being turned away, the closing changed, over the traced replications.

    without, now: the treating unit, or "turned away", without the closing and with it.
    """

    closes: str
    group: str
    home: str
    without: str
    now: str
    patients: int
    a_year: float


def outcomes(trace: Trace, intake: Intake) -> np.ndarray:
    """The unit that each patient was given at the arrival, NOBODY where turned away, (patients,).

    What had not arrived when the run ended counts as turned away in both runs of a pair.
    """
    given = np.full(len(intake), NOBODY, np.int64)
    settled = np.zeros(len(intake), bool)
    for _, kind, patient, unit in trace.events:
        if (
            kind in ("admission", "transfer") and not settled[patient]
        ):  # the transfer comes before its admission
            given[patient], settled[patient] = unit, True
    return given


class Tracing:
    """Traces replications under the base and with each unit's closing switched off, and compares them."""

    def __init__(self, scenario: Scenario, cases: Sequence[Case], engine: str) -> None:
        self.scenario, self._cases = scenario, cases
        self._network, self._plan = lower_network(scenario), plan_intake(scenario)
        self._rules = [lower_policy(scenario, case.policy) for case in cases]
        self._engine = engines.load(engine)
        self._found: Counter[tuple[str, int, int, int]] = Counter()
        self._traced = 0

    def trace(self, replication: int) -> None:
        """Traces one replication under every case and adds what it displaces."""
        intake = draw_intake(self._plan, replication)
        base = outcomes(self._events(self._rules[0], intake), intake)
        for case, rules in zip(self._cases[1:], self._rules[1:], strict=True):
            without = outcomes(self._events(rules, intake), intake)
            for patient in self._changed(base, without, intake):
                key = case.name, int(intake.group[patient]), int(without[patient]), int(base[patient])
                self._found[key] += 1
        self._traced += 1

    def _events(self, rules: Rules, intake: Intake) -> Trace:
        trace = Trace()
        self._engine.run(self._network, rules, intake, trace=trace)
        return trace

    def _changed(self, now: np.ndarray, without: np.ndarray, intake: Intake) -> np.ndarray:
        """Patients of the measured window whose outcome differs."""
        start, end = self._network.edges[0], self._network.edges[-1]
        return np.flatnonzero((now != without) & (intake.arrival >= start) & (intake.arrival < end))

    def displaced(self) -> list[Displaced]:
        """All that was found, most patients first."""
        years = self._traced * self._network.measured_days / DAYS_A_YEAR
        rows = [
            Displaced(
                closes, *self._group(group), self._place(without), self._place(now), count, count / years
            )
            for (closes, group, without, now), count in self._found.items()
        ]
        order = self.scenario.unit_names
        return sorted(
            rows, key=lambda one: (order.index(one.closes), -one.patients, one.group, one.without, one.now)
        )

    def _group(self, group: int) -> tuple[str, str]:
        row = self.scenario.patients[group]
        return row.group, row.home

    def _place(self, unit: int) -> str:
        return TURNED_AWAY if unit == NOBODY else self.scenario.unit_names[unit]

    # ---- one episode ----

    def episodes(self, unit: str, replication: int) -> list[tuple[float, float]]:
        """When the unit's own gate was closed in the measured window, (from, until) in days, in order of time."""
        intake = draw_intake(self._plan, replication)
        trace = self._events(self._rules[0], intake)
        return list(closed_spans(trace, self.scenario.place_of(unit), *self._network.edges[[0, -1]].tolist()))

    def episode(self, unit: str, span: tuple[float, float], replication: int) -> list[dict[str, Any]]:
        """Every patient whom one closing displaced: the run again with the gate held open to the unit's own patients.

        Nothing else is changed: those who arrive at home in the span pass the gate while a bed is free.
        """
        intake, place = draw_intake(self._plan, replication), self.scenario.place_of(unit)
        now = outcomes(self._events(self._rules[0], intake), intake)
        rules, held = held_open(self._rules[0], intake, place, span)
        without = outcomes(self._events(rules, held), intake)
        return [
            self._patient(patient, intake, without, now) for patient in self._changed(now, without, intake)
        ]

    def _patient(self, patient: int, intake: Intake, without: np.ndarray, now: np.ndarray) -> dict[str, Any]:
        group, home = self._group(int(intake.group[patient]))
        return {
            "patient": int(patient), "arrival_days": float(intake.arrival[patient]), "group": group, "home": home,
            "without": self._place(int(without[patient])), "now": self._place(int(now[patient])),
        }  # fmt: skip


def closed_spans(trace: Trace, unit: int, start: float, end: float) -> Iterator[tuple[float, float]]:
    """(from, until) of each time that the unit's own gate closed within [start, end); the last may end with the run."""
    since = None
    for time, kind, _, place in trace.events:
        if place == unit and kind == "own gate closes":
            since = time
        elif place == unit and kind == "own gate opens" and since is not None:
            if since >= start:
                yield since, time
            since = None
    if since is not None and since >= start:
        yield since, end


def held_open(rules: Rules, intake: Intake, unit: int, span: tuple[float, float]) -> tuple[Rules, Intake]:
    """Rules and an intake by which the unit's own patients who arrive in the span pass its gate.

    A soft closure does it: a chance of admission at the closed gate below every drawn gate number, and gate number 0
    for those patients alone. So either engine holds a gate open without knowing of it.
    """
    soft = (
        np.zeros(len(rules.own_closes))
        if rules.admit_while_closed is None
        else rules.admit_while_closed.copy()
    )
    soft[unit] = max(soft[unit], JUST_OPEN)
    own = (intake.home == unit) & (intake.arrival >= span[0]) & (intake.arrival < span[1])
    return (
        dataclasses.replace(rules, admit_while_closed=soft),
        dataclasses.replace(intake, gate=np.where(own, 0.0, intake.gate)),
    )


# ---- the document ----


def ledger_document(
    scenario: Scenario, base: Policy, matrix: Sequence[Cost], displaced: Sequence[Displaced], traced: int
) -> dict[str, Any]:
    """Plain values."""
    early = closes_early(scenario, base)
    return {
        "policy": base.name,
        "units": list(scenario.unit_names),
        "closes_early": early,
        "thresholds": base.thresholds,
        "incoming_thresholds": {name: rules.incoming for name, rules in base.units.items()},
        "matrix": [one.to_dict() for one in matrix],
        "simultaneous": True,
        "displaced": [dataclasses.asdict(one) for one in displaced],
        "traced_replications": traced,
        "findings": [
            Finding(said, None, "patients a year", "paired replications, all bands at once").to_dict()
            for said in _reads(matrix, early)
        ],
    }


def _reads(matrix: Sequence[Cost], early: Mapping[str, bool]) -> Iterator[str]:
    if not any(early.values()):
        yield "No unit closes early under these rules, so there is nothing to reckon"
    for unit in (name for name, does in early.items() if does):
        rows = [one for one in matrix if one.closes == unit]
        said = [_says(one) for one in rows if one.verdict != NOT_TOLD_APART and one.home != NETWORK]
        rest = "; ".join(said) or "what it costs whom cannot be told apart from nothing"
        yield f"{unit}'s early closing: {rest}"


def _says(one: Cost) -> str:
    """`11.2 (9.0 to 13.5) more of Norbeck's patients moved`."""
    numbers = sorted(abs(n) for n in (one.a_year.low, one.a_year.high) if n is not None)
    word = "more" if one.verdict == "pays" else "fewer"
    mean = abs(one.a_year.mean or 0.0)
    return f"{mean:.1f} ({numbers[0]:.1f} to {numbers[1]:.1f}) {word} of {one.home}'s patients {one.counted} a year"
