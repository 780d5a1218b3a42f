"""A job beside a store: what it asks for and is there already, what is missing, and the keeping of what arrives."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from sim.lowering import lower_network, lower_policy, plan_intake
from sim.replicate import Failure, Run, Share
from sim.scenario import Policy, Scenario
from sim.store import Store
from sim.store_rows import Key, Measures, Row, cell_hash, exact_hash, scenario_hash


class Job:
    """Policies times replications of a scenario, held against what a store has of them.

    fingerprint: of this machine, as text; a run may name another machine's. A replication that is there for every
    policy is reused whoever ran it; one begun under another fingerprint is run again whole (`restarted`); of any other
    only missing cells are run.
    computed: the number of runs kept since.
    """

    def __init__(
        self,
        store: Store,
        scenario: Scenario,
        policies: Sequence[Policy],
        replications: int,
        *,
        fingerprint: str,
    ) -> None:
        self._store, self._fingerprint = store, fingerprint
        self.scenario = scenario_hash(lower_network(scenario), plan_intake(scenario))
        self._cells = [cell_hash(lower_policy(scenario, policy)) for policy in policies]
        self._command: int | None = None
        self.computed = 0
        whole = store.whole(self.scenario, self._cells)
        held = store.held(self.scenario, but=whole)
        self._begun = {one for one, (by, _) in held.items() if by == fingerprint}
        self._missing = {
            one: () if one in whole else self._cells_missing(one, held) for one in range(replications)
        }
        self.restarted = tuple(
            one for one, missing in self._missing.items()
            if missing and one in held and held[one][0] != fingerprint
        )  # fmt: skip
        _describe(store, scenario, self.scenario, policies, self._cells)

    def _cells_missing(self, replication: int, held: Mapping[int, tuple[str, set[str]]]) -> tuple[int, ...]:
        fingerprint, there = held.get(replication, (self._fingerprint, set()))
        missing = tuple(place for place, cell in enumerate(self._cells) if cell not in there)
        return tuple(range(len(self._cells))) if missing and fingerprint != self._fingerprint else missing

    @property
    def asked(self) -> int:
        """The number of runs that the job asks for."""
        return len(self._cells) * len(self._missing)

    @property
    def missing(self) -> int:
        """The number of runs to be computed."""
        return sum(map(len, self._missing.values()))

    @property
    def reused(self) -> int:
        """The number of runs that are there already."""
        return self.asked - self.missing

    def shares(self) -> list[Share]:
        """The missing runs: the replications that lack the same cells together; what was begun here says so."""
        lacking: dict[tuple[tuple[int, ...], str | None], list[int]] = {}
        for replication, cells in self._missing.items():
            if cells:
                bits = self._fingerprint if replication in self._begun else None
                lacking.setdefault((cells, bits), []).append(replication)
        return [Share(cells, tuple(some), bits) for (cells, bits), some in lacking.items()]

    def kept_runs(self) -> Iterator[list[Run]]:
        """The runs that are there, a replication at a time."""
        for replication, missing in self._missing.items():
            kept = sorted(set(range(len(self._cells))) - {*missing})
            if kept:
                rows = self._store.of_replication(self.scenario, replication)
                yield [self._kept(rows[self._cells[cell]], cell) for cell in kept]

    def _kept(self, row: Row, cell: int) -> Run:
        return Run(row.key.replication, cell, row.record, row.intake_hash)

    def begin(self, provenance: Mapping[str, Any]) -> None:
        """Notes in the store that the job starts."""
        self._command = self._store.begin(self.scenario, provenance, asked=self.asked, reused=self.reused)

    def keep(self, reply: list[Run] | Failure, engine: str) -> None:
        """Keeps what a task yielded; it is safe when this returns."""
        if isinstance(reply, Failure):
            keys = [Key(self.scenario, self._cells[cell], reply.replication) for cell in reply.cells]
            self._store.fail(keys, reply.traceback, command=self._command)
            return
        rows = [
            Row(Key(self.scenario, self._cells[run.cell], run.replication), run.record, run.intake_hash,
                engine, run.fingerprint or self._fingerprint, run.seconds)
            for run in reply
        ]  # fmt: skip
        self._store.put(rows, command=self._command)
        self.computed += len(rows)

    def end(self, at: str) -> None:
        """Notes in the store that the job has ended, be it interrupted, at that time."""
        if self._command is not None:
            self._store.end(self._command, at)


class ExactJob:
    """Exact cells of a scenario, held against what a store has of them from this machine.

    kept: place among the policies -> measures by unit, of those that are there. computed: cells kept since.
    """

    def __init__(
        self, store: Store, scenario: Scenario, policies: Sequence[Policy], *, fingerprint: str
    ) -> None:
        self._store, self._fingerprint = store, fingerprint
        self.scenario = exact_hash(lower_network(scenario), plan_intake(scenario))
        self._cells = [cell_hash(lower_policy(scenario, policy)) for policy in policies]
        self._command: int | None = None
        self.computed = 0
        there = dict(store.exact(self.scenario, fingerprint))
        self.kept: dict[int, list[Measures]] = {
            place: there[cell] for place, cell in enumerate(self._cells) if cell in there
        }
        _describe(store, scenario, self.scenario, policies, self._cells)

    def begin(self, provenance: Mapping[str, Any]) -> None:
        """Notes in the store that the job starts."""
        asked, reused = len(self._cells), len(self.kept)
        self._command = self._store.begin(self.scenario, provenance, asked=asked, reused=reused)

    def keep(self, place: int, units: Sequence[Measures]) -> None:
        """Keeps a cell that was solved; it is safe when this returns."""
        if place not in self.kept:
            self._store.put_exact(
                self.scenario, self._cells[place], units, self._fingerprint, command=self._command
            )
            self.computed += 1

    def end(self, at: str) -> None:
        """Notes in the store that the job has ended, be it interrupted, at that time."""
        if self._command is not None:
            self._store.end(self._command, at)


def _describe(
    store: Store, scenario: Scenario, hashed: str, policies: Sequence[Policy], cells: Sequence[str]
) -> None:
    names = scenario.unit_names
    closes = [[policy.units[name].closure_threshold for name in names] for policy in policies]
    store.describe(hashed, names, dict(zip(cells, closes, strict=True)))
