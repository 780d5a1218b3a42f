"""The steps of a notebook: each calls what its command calls, quietly, and hands over a result."""

from __future__ import annotations

import datetime
from collections.abc import Callable, Mapping, Sequence
from dataclasses import asdict, dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from analysis import race_job, running
from analysis.beyond_pure import Wanted, beyond, beyond_document, with_mixed
from analysis.chain import solve
from analysis.comparison import PairedRuns
from analysis.comparison import compare as compared
from analysis.comparison_document import bad_year_document, comparison_document
from analysis.controls import offered_controls
from analysis.exact_tables import solve_cells
from analysis.game_document import game_document
from analysis.game_tables import GameAxes, axes_of, table_document
from analysis.games import GameAnalysis, analyse
from analysis.named_policies import Case, cases_of
from analysis.notebook.how import How, named
from analysis.notebook.results import Agreement, Comparison, Exact, Game, Simulation
from analysis.payoffs import TableSums
from analysis.simulation import simulation_document, summarise
from analysis.simultaneous import rng_of
from analysis.verification import FALSE_ALARM_RATE, LEAST_REPLICATIONS, require_replications
from analysis.verification import verify as held_against
from analysis.worst_year import measures_a_year
from sim.errors import Fault, ScenarioError
from sim.provenance import now, provenance
from sim.record import hash_records
from sim.replicate import Run
from sim.scenario.describe import advice

if TYPE_CHECKING:
    from analysis.notebook.network import Network

LEAST_COMPARED = 2
EXACT_CHAIN = "exact chain"


class Told:
    """Progress as a callable hears it: `(label, done, total)`."""

    def __init__(self, hear: Callable[[str, int, int], Any], label: str, total: int) -> None:
        self._hear, self._label, self._total, self._done = hear, label, total, 0

    def __enter__(self) -> Told:
        self.advance(0)
        return self

    def __exit__(self, *_: object) -> None:
        pass

    def advance(self, count: int = 1) -> None:
        """`count` more are done."""
        self._done += count
        self._hear(self._label, self._done, self._total)

    def note(self, text: str) -> None:
        """Who is at work is not told."""


@dataclass
class Step:
    """One step under way. own: its own options, as its command has them. notices: what there is to say of it."""

    name: str
    network: Network
    how: How
    own: tuple[str, ...] = ()
    started: datetime.datetime = field(default_factory=now)
    notices: list[str] = field(default_factory=list)

    @property
    def heading(self) -> dict[str, Any]:
        """What every document begins with."""
        return {"scenario": self.network.title, "changes": list(self.network.changes)}

    @property
    def manner(self) -> running.Manner:
        """Quiet, and ended by an interrupt as any other cell is."""
        return running.Manner(self.how.engine, self.how.workers, say=self.notices.append, progress=self.bar)

    def bar(self, label: str, total: int, unit: str) -> Any:
        """The progress of a job."""
        return running.Silent() if self.how.progress is None else Told(self.how.progress, label, total)

    def origin(self, engine: str) -> Mapping[str, Any]:
        """Where the result comes from, with the command line that repeats it."""
        folder = () if self.how.folder is None else ("--out", str(self.how.folder))
        command = self.network.command(self.name, *self.own, *folder)
        return provenance(self.network.scenario, command=command, engine=engine, started=self.started)

    def run(self, policies: Sequence[Any], take: Any, *, keep: bool = True, of: Any = None) -> running.Ran:
        """Runs the policies on the step's network, or on `of`'s, and hands over the replies."""
        scenario, base = (
            (self.network.scenario, self.network.policy) if of is None else (of.scenario, policies[0])
        )
        asked = running.Asked(scenario, base, policies, self.name)
        folder = self.how.folder if keep else None
        return running.run_job(asked, self.manner, take=take, folder=folder, origin=self.origin)

    def collected(self, *, least: int, keep: bool) -> tuple[list[Run], running.Ran]:
        """The finished runs of the network's policy by replication, at least so many."""
        runs: list[Run] = []
        ran = self.run(
            [self.network.policy], lambda reply: runs.extend(reply if isinstance(reply, list) else []), keep=keep
        )  # fmt: skip
        if len(runs) < least:
            raise running.too_few(len(runs), least)
        return sorted(runs, key=lambda run: run.replication), ran

    def told(self, document: Mapping[str, Any], engine: str) -> dict[str, Any]:
        """What every result has."""
        return {
            "document": document, "provenance": self.origin(engine),
            "notices": (*advice(self.network.scenario), *self.notices),
        }  # fmt: skip


def simulate(network: Network, how: How, *, controls: bool) -> Simulation:
    """See `Network.simulate`."""
    step = Step("simulate", network.prepared(how), how, () if controls else ("--no-controls",))
    scenario, policy = step.network.scenario, step.network.policy
    runs, ran = step.collected(least=1, keep=True)
    known = offered_controls(scenario, [run.replication for run in runs]) if controls else None
    records = [run.record for run in runs]
    result = summarise(records, scenario, confidence=scenario.run.confidence, controls=known)
    document = step.heading | simulation_document(result, scenario, policy, runs) | ran.to_dict()
    return Simulation(**step.told(document, ran.engine.name))


def exact(network: Network) -> Exact:
    """See `Network.exact`."""
    step = Step("exact", network, How())
    document = solve(network.scenario, network.policy).to_dict() | step.heading
    return Exact(**step.told(document, EXACT_CHAIN))


def verify(network: Network, how: How, *, false_alarm_rate: float | None) -> Agreement:
    """See `Network.verify`."""
    _require_rate(false_alarm_rate)
    if how.out is not None:
        raise _not_kept("runs that verify a program are not kept", "leave it out")
    own = () if false_alarm_rate is None else ("--false-alarm-rate", str(false_alarm_rate))
    step = Step("verify", network.prepared(how), how, own)
    scenario = step.network.scenario
    require_replications(scenario)
    chain = solve(scenario, step.network.policy)
    runs, ran = step.collected(least=LEAST_REPLICATIONS, keep=False)
    rate = false_alarm_rate or (FALSE_ALARM_RATE if how.confidence is None else 1 - how.confidence)
    found = held_against([run.record for run in runs], chain, scenario, false_alarm_rate=rate)
    document = step.heading | {"thresholds": step.network.policy.thresholds} | found.to_dict() | {
        "states": chain.states, "seed": scenario.run.seed,
    } | ran.to_dict()  # fmt: skip
    return Agreement(**step.told(document, ran.engine.name))


def _require_rate(rate: float | None) -> None:
    if rate is not None and not 0 < rate <= 0.5:
        rule, remedy = "must be above 0 and at most 0.5", "give a share such as 0.01"
        raise ScenarioError([Fault(None, "false_alarm_rate", rule, f"got {rate!r}", remedy)])


def _not_kept(rule: str, remedy: str) -> ScenarioError:
    return ScenarioError([Fault(None, "out", f"must not be given: {rule}", "got a folder", remedy)])


@dataclass(frozen=True)
class GameAsked:
    """What is asked of a game; see `Network.game`."""

    exact: bool
    tolerance: float
    epsilon: float | None
    controls: bool
    mixed: bool | None
    correlated: bool
    dynamics: bool
    race: bool | None = None

    @property
    def own(self) -> tuple[str, ...]:
        """The command's own options."""
        options = [("--exact",)] if self.exact else []
        options += [("--tolerance", str(self.tolerance))] if self.tolerance != 1e-9 else []
        options += [] if self.epsilon is None else [("--epsilon", str(self.epsilon))]
        options += [] if self.controls else [("--no-controls",)]
        options += [] if self.mixed is None else [("--mixed" if self.mixed else "--no-mixed",)]
        options += [("--correlated",)] if self.correlated else []
        options += [("--dynamics",)] if self.dynamics else []
        return tuple(part for option in options for part in option)

    def require(self, how: How) -> None:
        """ScenarioError with everything that does not go together, or that no game can have."""
        faults = [
            Fault(None, key, "must be 0 or more", f"got {value!r}", "give a gain in the goal's unit")
            for key, value in (("tolerance", self.tolerance), ("epsilon", self.epsilon))
            if value is not None and not 0 <= value < float("inf")
        ]
        if self.exact and self.epsilon is not None:
            rule, remedy = "must not stand beside exact=True", "give tolerance instead"
            faults.append(Fault(None, "epsilon", rule, f"got {self.epsilon!r}", remedy))
        if self.exact and self.race is not None:
            rule, remedy = "must not stand beside exact=True", "leave it out: every cell is solved"
            faults.append(Fault(None, "race", rule, f"got {self.race!r}", remedy))
        if faults:
            raise ScenarioError(faults)
        if self.exact and how.out is not None:
            raise _not_kept("a notebook keeps no exact cells", "run `brimline game --exact --out` for that")


def game(network: Network, how: How, asked: GameAsked) -> Game:
    """See `Network.game`."""
    asked.require(how)
    step = Step("game", network.prepared(how), how, asked.own)
    run, choice = step.network.scenario.run, _race_choice(step, asked)
    if choice is not None and choice.race:
        analysis, told = _raced(step, asked, choice)
    else:
        axes = axes_of(step.network.scenario, step.network.policy)
        table, told = (
            _exact_table(step, axes) if choice is None else _simulated_table(step, axes, asked.controls)
        )
        told |= {} if choice is None else {"race_choice": asdict(choice)}
        analysis = analyse(
            table, tolerance=asked.tolerance, confidence=run.confidence, epsilon=asked.epsilon, seed=run.seed
        )  # fmt: skip
    document = (
        step.heading | {"method": "exact" if asked.exact else "simulated"} | game_document(analysis) | told
    )
    if analysis.race is not None:
        race_job.tell(document, analysis)
    wanted = Wanted(asked.mixed, asked.correlated, asked.dynamics)
    found = beyond(analysis, wanted, step.network.policy, run.seed)
    document |= beyond_document(found)
    document["equilibria"] = with_mixed(document["equilibria"], found)
    return Game(**step.told(document, told["engine"]), analysis=analysis)


def _race_choice(step: Step, asked: GameAsked) -> race_job.Choice | None:
    """As the command chooses; the result's command line says which it was. None where the table is exact."""
    if asked.exact:
        return None
    scenario = step.network.scenario
    if asked.race:
        race_job.require_a_look(scenario, "race")
    if asked.race is None:
        choice = race_job.by_cost(scenario, step.network.policy, step.manner)
    else:
        choice = race_job.as_asked(asked.race, "--race" if asked.race else "--no-race")
    step.own += ("--race" if choice.race else "--no-race",)
    return choice


def _raced(step: Step, asked: GameAsked, choice: race_job.Choice) -> tuple[GameAnalysis, dict[str, Any]]:
    scenario, policy = step.network.scenario, step.network.policy
    racing = race_job.start(
        scenario, policy, controls=asked.controls, epsilon=asked.epsilon, say=step.notices.append
    )
    job = running.Asked(scenario, policy, list(racing.tables.profiles.policies(policy)), step.name)
    ran = race_job.run_race(racing, job, step.manner, folder=step.how.folder, origin=step.origin)
    if not racing.state.looks and not len(racing.tables.sums.complete):
        raise running.too_few(0, 1)
    analysis = race_job.analysed(racing, asked.tolerance)
    told = race_job.race_document(racing, analysis, ran, choice, scenario)
    return analysis, told | {"stopped_by": race_job.stopped(racing, None)}


def _simulated_table(step: Step, axes: GameAxes, controls: bool) -> tuple[Any, dict[str, Any]]:
    scenario = step.network.scenario
    sums = TableSums(scenario, axes.profiles.cells, scenario.run.replications)
    ran = step.run(list(axes.profiles.policies(step.network.policy)), sums.add)
    if not len(sums.complete):
        raise running.too_few(0, 1)
    known = offered_controls(scenario, sums.complete) if controls else None
    table = axes.simulated(sums, scenario.run.confidence, controls=known)
    return table, table_document(sums, scenario) | ran.to_dict()


def _exact_table(step: Step, axes: GameAxes) -> tuple[Any, dict[str, Any]]:
    policies = list(axes.profiles.policies(step.network.policy))
    cells: list[Any] = [None] * len(policies)
    with step.bar("game --exact", len(policies), "cells") as bar:
        for cell, units in solve_cells(step.network.scenario, policies, step.how.workers):
            cells[cell] = units
            bar.advance()
    return axes.exact(cells), {"engine": EXACT_CHAIN, "interrupted": False}


def compare(network: Network, how: How, policies: Sequence[str], game: Path | None) -> Comparison:
    """See `Network.compare`."""
    own = [part for name in policies for part in ("--policies", name)]
    own += [] if game is None else ["--game", str(game)]
    step = Step("compare", network.prepared(how), how, tuple(own))
    if network.overrides["policy"] is not None:
        rule, remedy = "must be the file's own rules in a comparison", "name the policy in compare([...])"
        raise ScenarioError([Fault(None, "policy", rule, f"got {network.policy.name!r}", remedy)])
    run = step.network.scenario.run
    cases = _cases(step.network, policies, game)
    paired = PairedRuns(cases, run.replications, levels=True)
    ran = [
        step.run(group.policies, paired.taker(place), of=group) for place, group in enumerate(paired.groups)
    ]
    if len(paired.complete) < LEAST_COMPARED:
        raise running.too_few(len(paired.complete), LEAST_COMPARED)
    sums, rng = paired.sums(), rng_of(run.seed)
    found = compared(cases, sums, run.confidence, rng)
    document = step.heading | comparison_document(found, sums, rng) | {
        "selection": None, "input_uncertainty": None,
        "worst_year": bad_year_document(cases, sums, run.confidence) if measures_a_year(cases[0].scenario) else None,
        "replications": len(paired.complete), "confidence": run.confidence, "seed": run.seed,
        "record_hash": hash_records(paired.hashes()),
    } | joined(ran).to_dict()  # fmt: skip
    return Comparison(**step.told(document, ran[0].engine.name))


def _cases(network: Network, policies: Sequence[str], game: Path | None) -> list[Case]:
    try:
        return cases_of(network.scenario, network.policy, policies, game_folder=game)
    except ScenarioError as error:
        raise named(error.faults, error.file) from None


def joined(ran: Sequence[running.Ran]) -> running.Ran:
    """Several jobs told of as one."""
    kept = ran[0].reused is not None
    return replace(
        ran[0],
        failures=[failure for one in ran for failure in one.failures],
        computed=sum(one.computed or 0 for one in ran) if kept else None,
        reused=sum(one.reused or 0 for one in ran) if kept else None,
    )
