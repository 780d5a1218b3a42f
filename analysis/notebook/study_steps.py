"""The steps that go over several networks or rules: ledger, sweep, align; each calls what its command calls."""

from __future__ import annotations

import numbers
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

from analysis import running
from analysis.alignment import Delta, Ruler, combinations, level_of, row_of, tried
from analysis.alignment_document import alignment_document
from analysis.comparison import PairedRuns
from analysis.controls import offered_controls
from analysis.exact_tables import solve_cells
from analysis.filling import combination_faults, filling_document, networks_of_alignment, networks_of_sweep
from analysis.ledger import Tracing, cases_without, costs, ledger_document
from analysis.notebook.how import How, named
from analysis.notebook.steps import LEAST_COMPARED, Step, joined
from analysis.notebook.studies import Alignment, Ledger, Sweep
from analysis.payoffs import TableSums
from analysis.settings import Grid, Texts, grid_of, read_delta
from analysis.simultaneous import rng_of
from analysis.sweep_document import sweep_document
from analysis.sweeping import EXACT, SIMULATED, Filled, points_of
from analysis.sweeping import Network as Planned
from sim.errors import Fault
from sim.record import hash_records
from sim.wording import shown

if TYPE_CHECKING:
    from analysis.notebook.network import Network

LEAST_FOLLOWED, MOST_FOLLOWED = 1, 10_000
FORM = "must be (from, to, points), or one number"


def ledger(network: Network, how: How, traced: int) -> Ledger:
    """See `Network.ledger`."""
    step = Step("ledger", network.prepared(how), how, ("--traced", str(traced)))
    if not (isinstance(traced, int) and LEAST_FOLLOWED <= traced <= MOST_FOLLOWED):
        rule, remedy = (
            f"must be a whole number from {LEAST_FOLLOWED} to {MOST_FOLLOWED:,}",
            "leave it out for 3",
        )
        raise named([Fault(None, "traced", rule, f"got {traced!r}", remedy)], network.file)
    scenario, policy, run = step.network.scenario, step.network.policy, step.network.scenario.run
    cases = cases_without(scenario, policy)
    paired = PairedRuns(cases, run.replications)
    ran = joined(
        [step.run(group.policies, paired.taker(place), of=group) for place, group in enumerate(paired.groups)]
    )
    if len(paired.complete) < LEAST_COMPARED:
        raise running.too_few(len(paired.complete), LEAST_COMPARED)
    matrix = costs(scenario, paired.sums(), run.confidence, rng_of(run.seed))
    tracing, followed = Tracing(scenario, cases, ran.engine.name), min(traced, run.replications)
    for replication in range(followed):
        tracing.trace(replication)
    document = step.heading | ledger_document(scenario, policy, matrix, tracing.displaced(), followed) | {
        "episode": None, "replications": len(paired.complete), "confidence": run.confidence, "seed": run.seed,
        "record_hash": hash_records(paired.hashes()),
    } | ran.to_dict()  # fmt: skip
    return Ledger(**step.told(document, ran.engine.name))


# ---- axes ----


@dataclass(frozen=True)
class Axes:
    """The axes of a grid as they were given, and how its networks are filled: "exact", "simulated" or by cost."""

    ranges: Mapping[str, Any]
    beds: Mapping[str, Any]
    method: str | None

    def texts(self, faults: list[Fault]) -> Texts:
        """The axes as the command line has them."""
        ranges = {key: _range(key, value, faults) for key, value in self.ranges.items() if value is not None}
        return Texts(**ranges, beds=[f"{unit}={_span(value)}" for unit, value in self.beds.items()])

    def faults(self, network: Network) -> list[Fault]:
        """What of the network is an axis of the grid, and a method that there is not."""
        faults = [
            Fault(None, key, "must be an axis of the grid", f"got with_{key}() before", f"give {key}= here")
            for key in ("demand", "target")
            if network.overrides[key] is not None
        ]
        if self.method not in (None, EXACT, SIMULATED):
            rule, remedy = f'must be "{EXACT}" or "{SIMULATED}"', "leave it out to choose by cost"
            faults.append(Fault(None, "method", rule, f"got {shown(self.method)}", remedy))
        return faults

    def own(self, texts: Texts) -> list[str]:
        """The command's options."""
        given = {key: getattr(texts, key) for key in self.ranges}
        options = [
            part
            for key, text in given.items()
            if text is not None
            for part in (f"--{key.replace('_', '-')}", text)
        ]
        options += [part for entry in texts.beds for part in ("--beds", entry)]
        return options + {EXACT: ["--exact"], SIMULATED: ["--simulate"]}.get(self.method or "", [])


def _range(key: str, value: Any, faults: list[Fault]) -> str:
    """FROM:TO:POINTS or one value, as a text; texts are taken as they are."""
    if isinstance(value, str):
        return value
    parts = value if isinstance(value, Sequence) else [value]
    if len(parts) not in (1, 3) or not all(isinstance(part, numbers.Real) for part in parts):
        example = f"write {key}=(0.5, 0.9, 5) or {key}=0.5"
        faults.append(Fault(None, key, FORM, f"got {shown(repr(value))}", example))
        return "1"
    return ":".join(f"{part}" for part in parts)


def _span(value: Any) -> str:
    return (
        ":".join(map(str, value))
        if isinstance(value, Sequence) and not isinstance(value, str)
        else str(value)
    )


def _grid(axes: Axes, network: Network, faults: list[Fault]) -> tuple[Texts, Grid | None]:
    """The axes as texts and their grid; None where a fault is known already."""
    faults += axes.faults(network)
    texts = axes.texts(faults)
    return texts, None if faults else grid_of(texts, network.scenario, faults)


def _require_none(faults: Sequence[Fault], network: Network) -> None:
    """ScenarioError with every fault, options of the command line under the names that they have here."""
    if faults:
        plain = [
            replace(
                fault,
                key=fault.key.removeprefix("--").replace("-", "_"),
                remedy=fault.remedy.replace("--", ""),
            )
            for fault in faults
        ]
        raise named(plain, network.file)


# ---- filling ----


@dataclass
class Filling:
    """The networks that are filled, in order, and how."""

    filled: list[Filled] = field(default_factory=list)
    runs: list[running.Ran] = field(default_factory=list)
    hashes: list[str] = field(default_factory=list)

    def fill(self, step: Step, networks: Sequence[Planned], *, controls: bool) -> list[Filled]:
        """Fills one network after the other; returns them."""
        before = len(self.filled)
        for network in networks:
            if network.method == EXACT:
                self.filled.append(Filled(network, cells=_solved(step, network)))
            else:
                self._simulate(step, network, controls, is_first=len(self.filled) == before)
        return self.filled[before:]

    def _simulate(self, step: Step, network: Planned, controls: bool, *, is_first: bool) -> None:
        sums = TableSums(network.scenario, network.profiles.cells, network.scenario.run.replications)
        self.runs.append(step.run(network.policies, sums.add, of=network))
        complete = sums.complete
        if len(complete) < LEAST_COMPARED:
            if is_first:
                raise running.too_few(len(complete), LEAST_COMPARED)
            return
        known = offered_controls(network.scenario, complete) if controls else None
        self.hashes += [sums.record_hashes[address] for address in sorted(sums.record_hashes)]
        self.filled.append(Filled(network, sums=sums.sums(), controls=known))

    def document(self, step: Step) -> dict[str, Any]:
        """What a document says of it."""
        ran = joined(self.runs) if self.runs else None
        return filling_document(step.network.scenario, ran, self.hashes, {}, interrupted=False)


def _solved(step: Step, network: Planned) -> list[Any]:
    policies = network.policies
    cells: list[Any] = [None] * len(policies)
    with step.bar(step.name, len(policies), "cells") as bar:
        for cell, units in solve_cells(network.scenario, policies, step.how.workers):
            cells[cell] = units
            bar.advance()
    return cells


# ---- sweep, align ----


@dataclass(frozen=True)
class SweepAsked:
    """What is asked of a sweep; see `Network.sweep`."""

    axes: Axes
    tolerance: float
    epsilon: float | None
    controls: bool


def sweep(network: Network, how: How, asked: SweepAsked) -> Sweep:
    """See `Network.sweep`."""
    network = network.prepared(how)
    faults: list[Fault] = []
    for key, value in (("tolerance", asked.tolerance), ("epsilon", asked.epsilon)):
        faults += _gain_faults(key, value)
    texts, _ = _grid(asked.axes, network, faults)
    _require_none(faults, network)
    step = Step("sweep", network, how, (*asked.axes.own(texts), *_own(asked.tolerance, asked.controls)))
    step.own += () if asked.epsilon is None else ("--epsilon", str(asked.epsilon))
    grid, networks = networks_of_sweep(texts, network.scenario, network.policy, asked.axes.method)
    filling, confidence = Filling(), network.scenario.run.confidence
    filled = filling.fill(step, networks, controls=asked.controls)
    points = [
        point for one in filled
        for point in points_of(one, grid, confidence, tolerance=asked.tolerance, epsilon=asked.epsilon)
    ]  # fmt: skip
    document = step.heading | sweep_document(grid, networks, points) | filling.document(step)
    return Sweep(**step.told(document, document["engine"]))


@dataclass(frozen=True)
class AlignAsked:
    """What is asked of an alignment; see `Network.align`."""

    axes: Axes
    per_unit: bool
    delta: str
    tolerance: float
    controls: bool


def align(network: Network, how: How, asked: AlignAsked) -> Alignment:
    """See `Network.align`."""
    network = network.prepared(how)
    faults: list[Fault] = []
    faults += _gain_faults("tolerance", asked.tolerance)
    texts, grid = _grid(asked.axes, network, faults)
    share, a_year = read_delta(asked.delta, faults)
    if grid is not None:
        faults += combination_faults(grid, network.scenario, per_unit=asked.per_unit)
    _require_none(faults, network)
    own = [*asked.axes.own(texts), *(["--per-unit"] if asked.per_unit else []), "--delta", asked.delta]
    step = Step("align", network, how, (*own, *_own(asked.tolerance, asked.controls)))
    grid, planned = networks_of_alignment(
        texts, network.scenario, network.policy, asked.axes.method, per_unit=asked.per_unit
    )
    confidence = network.scenario.run.confidence
    tries = combinations(grid.targets, len(network.scenario.units), per_unit=asked.per_unit)
    ruler = Ruler(Delta(share, a_year), level_of(confidence, len(tries)), confidence, asked.tolerance)
    filling, rows = Filling(), []
    for stays, networks in planned:
        filled = filling.fill(step, networks, controls=asked.controls)
        if len(filled) < len(networks):
            break
        rows.append(row_of(stays, filled, list(tried(filled, tries, grid.weights, ruler)), grid.weights))
    if not rows:
        raise running.too_few(0, LEAST_COMPARED)
    document = step.heading | alignment_document(
        rows, grid.targets, grid.demands, ruler.delta, ruler.level, per_unit=asked.per_unit
    ) | filling.document(step)  # fmt: skip
    return Alignment(**step.told(document, document["engine"]))


def _own(tolerance: float, controls: bool) -> list[str]:
    options = [] if tolerance == 1e-9 else ["--tolerance", str(tolerance)]
    return options + ([] if controls else ["--no-controls"])


def _gain_faults(key: str, value: float | None) -> list[Fault]:
    if value is None or 0 <= value < float("inf"):
        return []
    return [Fault(None, key, "must be 0 or more", f"got {value!r}", "give a gain in the goal's unit")]
