"""A network as a notebook holds it: a scenario with what was changed of it, and the steps that it can take."""

from __future__ import annotations

import numbers
import os
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from analysis.notebook.how import How, faults_of, named
from analysis.overrides import NOTHING, changes_of, overridden
from sim.errors import Fault, ScenarioError
from sim.scenario import Policy, Scenario, read_scenario

if TYPE_CHECKING:
    from analysis.notebook.results import Agreement, Comparison, Description, Exact, Game, Simulation
    from analysis.notebook.studies import Alignment, Ledger, Sweep

Range = float | str | Sequence[float] | None  # one number, or (from, to, points)
TARGETS = (0.5, 0.95, 10)  # that an alignment tries


def read(file: str | os.PathLike[str]) -> Network:
    """The network of a scenario file (TOML), checked whole.

    Raises ScenarioError with every fault of the file and of the data that it names.
    """
    scenario = read_scenario(os.fspath(file))
    return _network(os.fspath(file), scenario, NOTHING)


@dataclass(frozen=True, repr=False)
class Network:
    """A scenario and the policy that it is run by, after every change.

    file: as it was given. base: the scenario as the file has it. overrides: what was changed, by option. Networks are
    never changed: every `with_` gives another one, and a second call replaces what the first one said. The order of
    calls does not matter; it is that of the command line.
    """

    file: str
    base: Scenario
    scenario: Scenario
    policy: Policy
    overrides: Mapping[str, Any]

    # ---- changes ----

    def with_demand(self, factor: float) -> Network:
        """Every arrival rate of the file times `factor`; each patient keeps the other draws."""
        return self._with(demand=factor)

    def with_target(self, target: float) -> Network:
        """Every unit's target utilisation, above 0 and at most 1."""
        return self._with(target=target)

    def with_policy(self, name: str) -> Network:
        """Run by one of the file's policies, with its beds and targets if it has any."""
        return self._with(policy=name)

    def with_thresholds(self, thresholds: Mapping[str, int]) -> Network:
        """Closure thresholds by unit, in beds; an incoming threshold follows where the file gives none."""
        return self._with(threshold=self._entries("threshold", thresholds))

    def with_incoming(self, thresholds: Mapping[str, int]) -> Network:
        """Incoming thresholds by unit, in beds."""
        return self._with(incoming=self._entries("incoming", thresholds))

    def exponential(self) -> Network:
        """The exponential counterpart: stays of the same means, no delay, constant demand; for the exact chain."""
        return self._with(exponential=True)

    def _entries(self, option: str, chosen: Mapping[str, int]) -> tuple[str, ...]:
        before = dict(entry.rpartition("=")[::2] for entry in self.overrides[option])
        return tuple(f"{unit}={threshold}" for unit, threshold in (before | dict(chosen)).items())

    def _with(self, **changes: Any) -> Network:
        return _network(self.file, self.base, dict(self.overrides) | changes)

    # ---- steps ----

    def describe(self) -> Description:
        """The network read back in numbers: units, offered load, stays, rules, and advice before it runs."""
        from analysis.notebook.results import Description

        return Description.of(self)

    def simulate(self, *, controls: bool = True, **how: Any) -> Simulation:
        """Simulates the policy: every measure with its interval.

        controls: use arrivals and offered work, whose means are known, to narrow every interval. how: see `How`.
        Raises ScenarioError, RunError where no replication was finished, StoreError where `out` cannot be used.
        """
        from analysis.notebook import steps

        return steps.simulate(self, How(**how), controls=controls)

    def exact(self) -> Exact:
        """The same measures from the exact Markov chain.

        Raises OutOfScope (a BrimlineError) with every reason where it has no answer; `exponential()` has one.
        """
        from analysis.notebook import steps

        return steps.exact(self)

    def verify(self, *, false_alarm_rate: float | None = None, **how: Any) -> Agreement:
        """Holds the simulation against the exact chain, measure by measure.

        false_alarm_rate: the chance that a correct simulator is refused (default: 0.01, or 1 - confidence where that is
        given). how: see `How`; runs are not kept. Raises as `simulate` and `exact`.
        """
        from analysis.notebook import steps

        return steps.verify(self, How(**how), false_alarm_rate=false_alarm_rate)

    def game(
        self, *, exact: bool = False, tolerance: float = 1e-9, epsilon: float | None = None, controls: bool = True,
        mixed: bool | None = None, correlated: bool = False, dynamics: bool = False, race: bool | None = None,
        **how: Any,
    ) -> Game:  # fmt: skip
        """The game's table, its equilibria, the optimum and the prices of selfish rules.

        exact: by the exact chain. tolerance: regret still allowed in an exact equilibrium, epsilon: in a confirmed one,
        both in the goal's unit. controls: as in `simulate`. mixed, correlated, dynamics: also these (default: mixed for
        an exact game of two without a pure equilibrium). race: run on only what is undecided, from 10 replications on
        (default: where the whole table would take long). how: see `How`. Raises as `simulate` and `exact`.
        """
        from analysis.notebook import steps

        asked = steps.GameAsked(exact, tolerance, epsilon, controls, mixed, correlated, dynamics, race)
        return steps.game(self, How(**how), asked)

    def compare(
        self, policies: Iterable[str] = (), *, game: str | os.PathLike[str] | None = None, **how: Any
    ) -> Comparison:
        """Policies side by side on the same patients, against the file's own rules; every difference is paired.

        policies: names (default: all of the file's). game: where `brimline game --out` left the equilibria. how: see
        `How`. Raises as `simulate`.
        """
        from analysis.notebook import steps

        return steps.compare(self, How(**how), _names(policies), None if game is None else Path(game))

    def ledger(self, *, traced: int = 3, **how: Any) -> Ledger:
        """What each unit's early closing costs each home, and whom it displaces.

        traced: replications that are followed patient by patient, 1 to 10,000. how: see `How`. Raises as `simulate`.
        """
        from analysis.notebook import study_steps

        return study_steps.ledger(self, How(**how), traced)

    def sweep(
        self, *, demand: Range = None, target: Range = None, beds: Mapping[str, Any] | None = None,
        delay: Range = None, cv: Range = None, soft: Range = None, transfer_weight: Range = None,
        method: str | None = None, tolerance: float = 1e-9, epsilon: float | None = None, controls: bool = True,
        **how: Any,
    ) -> Sweep:  # fmt: skip
        """Equilibria and the price of anarchy over a grid; each network is simulated or solved once.

        An axis is `(from, to, points)`, both ends included, or one number; beds: unit -> `(from, to)` or one number.
        demand, delay: factors. target: of every unit. cv: of stays whose family has one. soft: shares that closed
        units still admit. transfer_weight: welfare is then a loss, patients turned away + weight x transfers. method:
        "exact" or "simulated" for all, else network by network by cost. tolerance, epsilon, controls: as in `game`.
        how: see `How`; exact cells are not kept. Raises as `simulate` and `exact`.
        """
        from analysis.notebook import study_steps as steps

        ranges = {"demand": demand, "target": target, "delay": delay, "cv": cv, "soft": soft}
        axes = steps.Axes(ranges | {"transfer_weight": transfer_weight}, beds or {}, method)
        return steps.sweep(self, How(**how), steps.SweepAsked(axes, tolerance, epsilon, controls))

    def align(
        self, *, demand: Range = 1, target: Range = TARGETS, per_unit: bool = False, delta: str = "0.5%",
        transfer_weight: Range = None, method: str | None = None, tolerance: float = 1e-9, controls: bool = True,
        **how: Any,
    ) -> Alignment:  # fmt: skip
        """The lowest target, common or by unit, at which every possible equilibrium is near the optimum.

        demand: the answer holds at all of these factors together. target: to try; axes as in `sweep`. per_unit: try
        every combination of targets by unit. delta: the loss that is near, patients (or welfare) a year as "25", or a
        share of arrivals as "0.5%". transfer_weight: over which the advice may turn (default: 0 to 1 by tenths, none
        with per_unit). Stays as in the file and their exponential counterpart stand side by side. The rest as in
        `sweep`.
        """
        from analysis.notebook import study_steps as steps

        ranges = {"demand": 1 if demand is None else demand, "target": TARGETS if target is None else target}
        axes = steps.Axes(ranges | {"transfer_weight": transfer_weight}, {}, method)
        asked = steps.AlignAsked(axes, per_unit, str(delta), tolerance, controls)
        return steps.align(self, How(**how), asked)

    # ---- reading ----

    @property
    def title(self) -> str:
        """The scenario's title."""
        return self.scenario.title

    @property
    def changes(self) -> tuple[str, ...]:
        """What was changed of the file, in words."""
        return changes_of(self.overrides)

    def command(self, name: str, *own: str) -> list[str]:
        """The command line that gives the same numbers; own: further options of that command."""
        given = [
            (f"--{key}", value)
            for key, value in self.overrides.items()
            if value is not None and value is not False
        ]
        options = [part for option, value in given for part in _written(option, value)]
        return ["brimline", name, self.file, *options, *own]

    def __repr__(self) -> str:
        said = [self.title or "(no title)", f"{len(self.scenario.units)} units", *self.changes]
        return f"<Network {'; '.join(said)}>"

    def _repr_html_(self) -> str:
        return self.describe()._repr_html_()

    # ---- for the steps ----

    def prepared(self, how: How) -> Network:
        """The network with the run table that `how` asks for; ScenarioError with every fault of it."""
        if faults := faults_of(how):
            raise ScenarioError(faults)
        given = {key: getattr(how, key) for key in ("seed", "replications", "confidence")}
        return self._with(**given)


def _network(file: str, base: Scenario, overrides: Mapping[str, Any]) -> Network:
    faults = [
        Fault(None, key, "must be a number", f"got {overrides[key]!r}", "give a number such as 0.8")
        for key in ("demand", "target")
        if not isinstance(overrides[key], numbers.Real | None)
    ]
    name = overrides["policy"]
    if not isinstance(name, str | None):
        faults.append(Fault(None, "policy", "must be a name", f"got {name!r}", "give it in quotes"))
    if not faults:
        scenario, policy = overridden(base, overrides, faults)
    if faults:
        raise named(faults, file)
    return Network(file, base, scenario, policy, overrides)


def _names(policies: Iterable[str]) -> tuple[str, ...]:
    return (policies,) if isinstance(policies, str) else tuple(policies)


def _written(option: str, value: Any) -> list[str]:
    if value is True:
        return [option]
    values = value if isinstance(value, tuple) else (value,)
    return [part for one in values for part in (option, str(one))]
