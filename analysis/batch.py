"""A batch: the parts of a plan, the runs that they share, the order in which these are wanted, and how far they are.

First a coarse pass over every cell of every part, then rounds that each double the replications, the parts in order of
priority within each: whenever it is stopped, every part has about as many replications as any other.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator, Sequence
from collections.abc import Set as AbstractSet
from dataclasses import dataclass, field
from typing import Any

from analysis.plan import Part
from sim.lowering import lower_network, lower_policy, plan_intake
from sim.replicate import Pace, Share
from sim.resuming import Job
from sim.scenario import Policy, Scenario
from sim.store import Store
from sim.store_rows import cell_hash, scenario_hash

COARSE = 10  # replications of the first pass
RECENT_SECONDS = 120.0
TELLING_SECONDS = 5.0  # before that the trial's pace tells more than the replies do


@dataclass
class Stock:
    """The runs of one network that parts share: everything but targets, goals and welfares is the same.

    policies: of all its parts, each once. job: set when the store is open; pace: where something is to be run.
    """

    scenario: Scenario
    policies: list[Policy] = field(default_factory=list)
    job: Job | None = None
    pace: Pace | None = None
    _places: dict[str, int] = field(default_factory=dict)
    _wanted: dict[int, frozenset[int]] = field(default_factory=dict)

    def want(self, policies: Sequence[Policy], replications: int) -> tuple[int, ...]:
        """Adds a part's policies; gives their places."""
        places = []
        for policy in policies:
            mark = cell_hash(lower_policy(self.scenario, policy))
            if mark not in self._places:
                self._places[mark] = len(self.policies)
                self.policies.append(policy)
            places.append(self._places[mark])
        self._wanted[replications] = self._wanted.get(replications, frozenset()) | {*places}
        return tuple(places)

    @property
    def replications(self) -> int:
        """The most that any part wants."""
        return max(self._wanted)

    def open(self, store: Store, fingerprint: str, *, others: bool = False) -> None:
        """Holds what is wanted against what the store has; others: whether machines of other bits may come."""
        self.job = Job(
            store, self.scenario, self.policies, self.replications, fingerprint=fingerprint, others=others
        )

    @property
    def asked(self) -> int:
        """The number of different runs that the parts want."""
        return sum((to - start) * len(cells) for start, to, cells in self._layers())

    @property
    def missing(self) -> int:
        """How many of these are not there."""
        assert self.job is not None
        count = self.job.count_missing
        return sum(count(cells, to) - count(cells, start) for start, to, cells in self._layers())

    def _layers(self) -> Iterator[tuple[int, int, frozenset[int]]]:
        """Ranges of replications, and the cells that are wanted throughout each."""
        start = 0
        for to in sorted(self._wanted):
            yield start, to, frozenset().union(*(cells for most, cells in self._wanted.items() if most >= to))
            start = to

    def seconds(self, runs: int) -> float:
        """One worker's time for so many runs, by the trial."""
        if self.pace is None:
            return 0.0
        cells = max(1, len(self.policies))
        return runs * self.pace.seconds(1, cells) / cells


@dataclass(frozen=True)
class Piece:
    """A part with its place in a stock. cells: its policies' places, in the order of its table.

    request: how its analysis is asked for.
    """

    part: Part
    request: Any
    stock: Stock
    cells: tuple[int, ...]
    replications: int

    @property
    def asked(self) -> int:
        """The number of its runs, shared with other parts or not."""
        return len(self.cells) * self.replications

    @property
    def cell_set(self) -> AbstractSet[int]:
        """Its cells as a set."""
        return frozenset(self.cells)

    @property
    def job(self) -> Job:
        """Its stock's job."""
        assert self.stock.job is not None
        return self.stock.job

    @property
    def missing(self) -> int:
        """How many of its runs are not there."""
        return self.job.count_missing(self.cell_set, self.replications)

    @property
    def reached(self) -> int:
        """The number of replications that every cell has."""
        return self.job.complete(self.cell_set, self.replications)

    def shares(self, replications: int) -> list[Share]:
        """What is missing of its first so many replications."""
        return self.job.shares(self.cell_set, min(replications, self.replications))


class Batch:
    """The pieces in order of priority, and the stocks behind them. `twins`: parts that are another one's again."""

    def __init__(self) -> None:
        self.pieces: list[Piece] = []
        self.twins: list[tuple[Part, Part]] = []
        self._stocks: dict[str, Stock] = {}

    @property
    def stocks(self) -> list[Stock]:
        """Each once, in order of first use."""
        return list(self._stocks.values())

    def add(self, part: Part, request: Any, policies: Sequence[Policy]) -> None:
        """A part, asked for by `request`, that runs these policies."""
        scenario = request.scenario
        mark = scenario_hash(lower_network(scenario), plan_intake(scenario))
        stock = self._stocks.setdefault(mark, Stock(scenario))
        replications = scenario.run.replications
        piece = Piece(part, request, stock, stock.want(policies, replications), replications)
        twin = next((one.part for one in self.pieces if _same(one, piece)), None)
        if twin is None:
            self.pieces.append(piece)
        else:
            self.twins.append((part, twin))

    @property
    def asked(self) -> int:
        """The number of runs, each once however many parts share it."""
        return sum(stock.asked for stock in self.stocks)

    @property
    def missing(self) -> int:
        """How many of them are not there."""
        return sum(stock.missing for stock in self.stocks)

    @property
    def seconds(self) -> float:
        """One worker's time for what is missing, by the trials."""
        return sum(stock.seconds(stock.missing) for stock in self.stocks)

    def rounds(self) -> Iterator[tuple[int, Piece]]:
        """(replications, piece): the coarse pass, then ever finer ones; ask a piece for its shares only then."""
        for replications in levels(max((piece.replications for piece in self.pieces), default=0)):
            for piece in self.pieces:
                if replications == COARSE or piece.replications > replications // 2:
                    yield replications, piece


def levels(most: int) -> Iterator[int]:
    """COARSE, and twice the last until `most` is reached."""
    level = COARSE
    while True:
        yield level
        if level >= most:
            return
        level *= 2


def _same(one: Piece, other: Piece) -> bool:
    """Games of policies that differ in closure thresholds only are one game, for these are the players' to choose."""
    if one.part.analysis != "game" or other.part.analysis != "game" or one.stock is not other.stock:
        return False
    a, b = one.request.scenario, other.request.scenario
    return (one.cells, one.replications, a.game, _targets(a)) == (
        other.cells,
        other.replications,
        b.game,
        _targets(b),
    )


def _targets(scenario: Scenario) -> list[float | None]:
    return [unit.target_utilisation for unit in scenario.units]


class Speed:
    """How fast replies have come lately, in runs and in seconds of the trial's work; times from any steady clock.

    Counted from the first reply on, for workers take their time to start.
    """

    def __init__(self) -> None:
        self._began: float | None = None
        self._recent: deque[tuple[float, int, float]] = deque()

    def add(self, now: float, runs: int, work: float) -> None:
        """A reply: its runs, and the seconds that the trial would have them take one worker."""
        if self._began is None:
            self._began = now
            return
        self._recent.append((now, runs, work))
        self._forget(now)

    def _forget(self, now: float) -> None:
        while self._recent and self._recent[0][0] < now - RECENT_SECONDS:
            self._recent.popleft()

    def _span(self, now: float) -> float:
        """The seconds that count; 0 before anything can be told."""
        self._forget(now)
        span = 0.0 if self._began is None else min(now - self._began, RECENT_SECONDS)
        return span if span >= TELLING_SECONDS else 0.0

    def runs_per_second(self, now: float) -> float | None:
        """None before anything can be told."""
        span = self._span(now)
        return sum(runs for _, runs, _ in self._recent) / span if span else None

    def seconds_for(self, work: float, now: float, workers: int) -> float | None:
        """The time for so much more work, as late replies say (at first, as the trial says); None where none came."""
        span = self._span(now)
        if not span:
            return work / workers
        done = sum(part for _, _, part in self._recent)
        return work * span / done if done > 0 else (None if work > 0 else 0.0)
