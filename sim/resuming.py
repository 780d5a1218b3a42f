"""A job beside a store: what it asks for and is there already, what is missing, and the keeping of what arrives."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from collections.abc import Set as AbstractSet
from typing import Any

from sim.lowering import lower_network, lower_policy, plan_intake
from sim.replicate import Failure, Run, Share, Stranded
from sim.scenario import Policy, Scenario
from sim.store import Store
from sim.store_rows import Key, Measures, Row, cell_hash, exact_hash, scenario_hash

ROWS_AT_ONCE = 2_000  # of a store


class Job:
    """Policies times replications of a scenario, held against what a store has of them.

    fingerprint: of this machine, as text; a run may name another machine's. A replication that is there for every
    policy is reused whoever ran it; one begun under another fingerprint is run again whole (`restarted`), unless
    machines with it may come (`others`): then its missing cells are for them (`unsure`). Of any other only missing
    cells are run.
    asked, reused, missing: the number of runs that the job asks for, of those that were there, and of the others.
    computed: kept since.
    `cells` of a method are places among the policies (default: all), `replications` how many from 0 on.
    """

    def __init__(
        self,
        store: Store,
        scenario: Scenario,
        policies: Sequence[Policy],
        replications: int,
        *,
        fingerprint: str,
        others: bool = False,
    ) -> None:
        self._store, self._fingerprint, self._others = store, fingerprint, others
        self.scenario = scenario_hash(lower_network(scenario), plan_intake(scenario))
        self._cells = [cell_hash(lower_policy(scenario, policy)) for policy in policies]
        self._every = frozenset(range(len(policies)))
        self._failed: dict[int, set[int]] = {}
        self._command: int | None = None
        self.computed = 0
        whole = store.whole(self.scenario, self._cells)
        held = store.held(self.scenario, but=whole)
        self._begun = {one: by for one, (by, _) in held.items() if others or by == fingerprint}
        self._missing: dict[int, AbstractSet[int]] = {
            one: frozenset() if one in whole else self._cells_missing(one, held)
            for one in range(replications)
        }
        self.asked = len(self._cells) * replications
        self.missing = sum(map(len, self._missing.values()))
        self.reused = self.asked - self.missing
        self.restarted = tuple(
            one for one, missing in self._missing.items()
            if missing and one in held and held[one][0] != fingerprint and not others
        )  # fmt: skip
        self.unsure = frozenset(
            one for one, missing in self._missing.items()
            if missing and self._begun.get(one, fingerprint) != fingerprint
        )  # fmt: skip
        _describe(store, scenario, self.scenario, policies, self._cells)

    def _cells_missing(self, replication: int, held: Mapping[int, tuple[str, set[str]]]) -> AbstractSet[int]:
        """All of them are one and the same set, for there may be very many."""
        fingerprint, there = held.get(replication, (self._fingerprint, set()))
        if not there:
            return self._every
        missing = {place for place, cell in enumerate(self._cells) if cell not in there}
        foreign = fingerprint != self._fingerprint and not self._others
        return self._every if missing and foreign else missing

    def count_missing(self, cells: AbstractSet[int], replications: int) -> int:
        """The number of runs of these cells that are still missing."""
        return sum(len(self._lacking(one, cells)) for one in range(replications))

    def complete(self, cells: AbstractSet[int], replications: int) -> int:
        """The number of replications that are there for all of these cells."""
        return sum(self._missing[one].isdisjoint(cells) for one in range(replications))

    def _lacking(self, replication: int, cells: AbstractSet[int]) -> AbstractSet[int]:
        missing = self._missing[replication]
        return cells if missing is self._every else missing & cells

    def shares(self, cells: AbstractSet[int] | None = None, replications: int | None = None) -> list[Share]:
        """The missing runs, but for those that failed since: the replications that lack the same cells together.

        What has been begun names the fingerprint of whoever began it.
        """
        cells = self._every if cells is None else cells
        lacking: dict[tuple[AbstractSet[int], str | None], list[int]] = {}
        for one in range(len(self._missing) if replications is None else replications):
            wanted = frozenset(self._lacking(one, cells))
            if one in self._failed:
                wanted -= self._failed[one]
            if wanted:
                lacking.setdefault((wanted, self._begun.get(one)), []).append(one)
        return [Share(tuple(sorted(places)), tuple(some), bits) for (places, bits), some in lacking.items()]

    def begin_again(self, stranded: Mapping[int, AbstractSet[int]]) -> list[Share]:
        """Replications whose machines did not come -> their cells: these are run again with all that were there."""
        wanted: dict[AbstractSet[int], list[int]] = {}
        for one, cells in stranded.items():
            wanted.setdefault(cells | (self._every - self._missing[one]), []).append(one)
            self._missing[one] = self._every
            self._begun.pop(one, None)
        return [Share(tuple(sorted(cells)), tuple(some)) for cells, some in wanted.items()]

    def kept_runs(
        self, cells: Sequence[int] | None = None, replications: int | None = None
    ) -> Iterator[list[Run]]:
        """The runs that are there, a replication at a time; a run's cell is its place among `cells`."""
        wanted = list(range(len(self._cells)) if cells is None else cells)
        hashes = [self._cells[cell] for cell in wanted]
        step, count = max(1, ROWS_AT_ONCE // max(1, len(wanted))), replications
        for some in _pieces(len(self._missing) if count is None else count, step):
            kept = {one: self._kept_places(one, wanted) for one in some}
            if any(kept.values()):
                there = self._store.records(self.scenario, hashes, some)
                for one, places in kept.items():
                    if places:
                        yield [Run(one, place, *there[one][hashes[place]]) for place in places]

    def _kept_places(self, replication: int, wanted: Sequence[int]) -> Sequence[int]:
        missing = self._missing[replication]
        if missing is self._every:
            return ()
        return (
            [place for place, cell in enumerate(wanted) if cell not in missing]
            if missing
            else range(len(wanted))
        )

    def kept_engine(self) -> str | None:
        """The engine of a run that is there; None where there is none."""
        for replication, missing in self._missing.items():
            for cell in self._every - missing:
                row = self._store.get(Key(self.scenario, self._cells[cell], replication))
                return None if row is None else row.engine
        return None

    def begin(self, provenance: Mapping[str, Any]) -> None:
        """Notes in the store that the job starts."""
        self._command = self._store.begin(self.scenario, provenance, asked=self.asked, reused=self.reused)

    def join(self, command: int) -> None:
        """The job is part of a command that has begun."""
        self._command = command

    def keep(self, reply: list[Run] | Failure, engine: str) -> None:
        """Keeps what a task yielded; it is safe when this returns."""
        if isinstance(reply, Failure):
            keys = [Key(self.scenario, self._cells[cell], reply.replication) for cell in reply.cells]
            self._store.fail(keys, reply.traceback, command=self._command)
            self._failed.setdefault(reply.replication, set()).update(reply.cells)
            return
        rows = [
            Row(Key(self.scenario, self._cells[run.cell], run.replication), run.record, run.intake_hash,
                engine, run.fingerprint or self._fingerprint, run.seconds)
            for run in reply
        ]  # fmt: skip
        self._store.put(rows, command=self._command)
        self.computed += len(rows)
        self._settle(rows[0].fingerprint, reply)

    def _settle(self, fingerprint: str, runs: list[Run]) -> None:
        """They are no longer missing; what another fingerprint had left of the replication the store has dropped."""
        for replication in {run.replication for run in runs}:
            done = {run.cell for run in runs if run.replication == replication}
            if self._begun.get(replication, fingerprint) != fingerprint:
                self._missing[replication] = self._every
            self._begun[replication] = fingerprint
            self._missing[replication] = self._missing[replication] - done

    def end(self, at: str, *, needs_no_more: bool = False) -> None:
        """Notes in the store that the job has ended, be it interrupted, at that time.

        needs_no_more: that what is there is all that it turned out to need.
        """
        if self._command is not None:
            self._store.end(self._command, at, asked=self.reused + self.computed if needs_no_more else None)


def run_whole(
    shares: Sequence[Share],
    run: Callable[[Sequence[Share]], Iterable[list[Run] | Failure | Stranded]],
    job: Job | None,
) -> Iterator[list[Run] | Failure]:
    """The replies to `run(shares)`; what waited in vain for the machines that began it is run again whole."""
    while shares:
        stranded: dict[int, frozenset[int]] = {}
        for reply in run(shares):
            if not isinstance(reply, Stranded):
                yield reply
                continue
            for one in reply.replications:
                stranded[one] = stranded.get(one, frozenset()).union(reply.cells)
        shares = job.begin_again(stranded) if job is not None and stranded else []


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


def _pieces(count: int, step: int) -> Iterator[range]:
    return (range(first, min(first + step, count)) for first in range(0, count, step))


def _describe(
    store: Store, scenario: Scenario, hashed: str, policies: Sequence[Policy], cells: Sequence[str]
) -> None:
    names = scenario.unit_names
    closes = [[policy.units[name].closure_threshold for name in names] for policy in policies]
    store.describe(hashed, names, dict(zip(cells, closes, strict=True)))
