"""What a study is: a name, a size, and figures held against a bar whose false-alarm rate is known."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import asdict, dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
from scipy import stats

from analysis.equilibria import pure_equilibria, regrets
from analysis.exact_tables import solve_cells
from analysis.goals import goal_of, welfare_of
from analysis.payoffs import PayoffTable, exact_table, profiles_of
from sim.scenario import Scenario
from tests.statistical import networks
from tests.statistical.pool import Experiments, Pool, experiments_of, pool_of

ALPHA = 0.05
ERRORS = 3.0  # standard errors between a promise and its bar


@dataclass(frozen=True)
class Figure:
    """One figure of a study. bar: in words; passed: None where it is reported only. false_alarm: the chance that a
    procedure which keeps its promise exactly misses the bar (binomial, of the effective number of experiments)."""

    what: str
    value: float
    bar: str = "reported"
    passed: bool | None = None
    false_alarm: float | None = None


def at_least(what: str, share: float, promised: float, sample: Experiments) -> Figure:
    """A share of experiments that is promised to be at least so much."""
    bar = promised - ERRORS * sample.error(promised)
    alarm = _chance_below(bar, promised, sample.effective)
    return Figure(what, share, f">= {promised:g} - 3 se = {bar:.3f}", bool(share >= bar), alarm)


def at_most(what: str, share: float, promised: float, sample: Experiments) -> Figure:
    """A share of experiments that is promised to be at most so much."""
    bar = promised + ERRORS * sample.error(promised)
    alarm = _chance_below(1 - bar, 1 - promised, sample.effective)
    return Figure(what, share, f"<= {promised:g} + 3 se = {bar:.3f}", bool(share <= bar), alarm)


def within(what: str, share: float, ends: tuple[float, float], sample: Experiments) -> Figure:
    """A share of experiments that should lie between two ends, give or take 3 standard errors."""
    low, high = (end + side * ERRORS * sample.error(end) for end, side in zip(ends, (-1, 1), strict=True))
    alarm = _chance_below(low, ends[0], sample.effective) + _chance_below(
        1 - high, 1 - ends[1], sample.effective
    )
    bar = f"{ends[0]:g} to {ends[1]:g}, 3 se: {low:.3f} to {min(high, 1):.3f}"
    return Figure(what, share, bar, bool(low <= share <= high), alarm)


def no_more(what: str, value: float, most: float) -> Figure:
    """A figure that is not a share and has a bar of its own."""
    return Figure(what, value, f"<= {most:g}", bool(value <= most))


def no_less(what: str, value: float, least: float) -> Figure:
    """A figure that is not a share and has a bar of its own."""
    return Figure(what, value, f">= {least:g}", bool(value >= least))


def _chance_below(bar: float, share: float, experiments: float) -> float:
    """The chance that fewer than `bar` of the experiments hold at a true `share`."""
    count = max(1, int(experiments))
    return float(stats.binom.cdf(np.ceil(bar * count) - 1, count, share))


@dataclass(frozen=True)
class Effort:
    """How much is done. experiments: of each study at most. pool: replications of the large game, at most."""

    experiments: int
    pool: int


REDUCED = Effort(60, 0)
FULL = Effort(1000, 3000)


@dataclass(frozen=True)
class Truth:
    """What the exact chain says of a game."""

    scenario: Scenario

    @cached_property
    def table(self) -> PayoffTable:
        """The exact table."""
        profiles = profiles_of(self.scenario)
        cells: list[Any] = [None] * profiles.cells
        for cell, units in solve_cells(self.scenario, profiles.policies(self.scenario.policy()), 1):
            cells[cell] = units
        return exact_table(profiles, goal_of(self.scenario), welfare_of(self.scenario), cells)

    @cached_property
    def regret(self) -> np.ndarray:
        """The largest gain of any player from deviating alone, (*shape)."""
        return regrets(self.table.payoffs, "cost").max(axis=0)

    @cached_property
    def equilibria(self) -> np.ndarray:
        """Which profiles are pure equilibria, bool (*shape)."""
        mask = np.zeros(self.regret.shape, bool)
        for profile in pure_equilibria(self.table.payoffs, "cost"):
            mask[profile] = True
        return mask

    @cached_property
    def contested(self) -> float:
        """A regret just below the smallest that is not 0: the profile that has it is the hardest not to confirm."""
        return 0.98 * float(self.regret[self.regret > 1e-6].min())


@dataclass
class Bench:
    """Where studies run: pools and truths, made once. told: of replications simulated."""

    folder: Path
    effort: Effort
    workers: int = 1
    told: Callable[[int], None] = lambda _: None
    _pools: dict[tuple[str, int], Pool] = field(default_factory=dict)
    _truths: dict[str, Truth] = field(default_factory=dict)

    def truth(self, game: str) -> Truth:
        """The exact chain's word on a game, by its name in `networks`."""
        if game not in self._truths:
            self._truths[game] = Truth(getattr(networks, game)())
        return self._truths[game]

    def size(self, game: str, replications: int) -> int:
        """The size of the pool from which experiments of so many replications are drawn."""
        return self.effort.pool if game in LARGE else replications * self.effort.experiments

    def pool(self, game: str, size: int) -> Pool:
        """The first so many replications of a game."""
        if (game, size) not in self._pools:
            scenario = self.truth(game).scenario
            self._pools = {
                (game, size): pool_of(scenario, size, self.folder, workers=self.workers, told=self.told)
            }
        return self._pools[game, size]

    def sample(self, game: str, replications: int, most: int | None = None) -> tuple[Pool, Experiments]:
        """A pool and its experiments: disjoint for the small games, overlapping for the large one."""
        pool = self.pool(game, self.size(game, replications))
        limit = min(
            self.effort.experiments, most or self.effort.experiments, MOST_LARGE if game in LARGE else 10**9
        )
        return pool, experiments_of(pool.size, replications, limit, seed=replications)


LARGE = ("thresholds",)
MOST_LARGE = 100  # experiments with the large game: they overlap, and more would add little


@dataclass(frozen=True)
class Study:
    """One study. needs: (game, replications an experiment), the pool it draws from. planted: a broken procedure, which
    must miss a bar. reduced: whether the suite runs it too."""

    name: str
    what: str
    run: Callable[[Bench], list[Figure]]
    needs: tuple[tuple[str, int], ...] = ()
    planted: bool = False
    reduced: bool = True


@dataclass(frozen=True)
class Outcome:
    """What a study found, and in what time. passed: a planted error passes where some bar is missed."""

    name: str
    what: str
    planted: bool
    figures: tuple[Figure, ...]
    seconds: float

    @property
    def passed(self) -> bool:
        """Whether every bar is met; of a planted error, whether one is missed."""
        met = all(one.passed is not False for one in self.figures)
        return not met if self.planted else met

    def to_dict(self) -> dict[str, Any]:
        """Plain values."""
        return asdict(self) | {"passed": self.passed}

    @staticmethod
    def of(plain: Mapping[str, Any]) -> Outcome:
        """From plain values."""
        figures = tuple(Figure(**one) for one in plain["figures"])
        return Outcome(plain["name"], plain["what"], plain["planted"], figures, plain["seconds"])
