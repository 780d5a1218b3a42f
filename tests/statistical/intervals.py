"""Studies of intervals: control variates, a relative precision, hours of the week, policies side by side."""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from functools import partial

import numpy as np

from analysis.comparison import banded, could_be_best
from analysis.confidence import critical_value, mean_estimate
from analysis.controls import variance_ratio
from analysis.hour_of_week import GRID, critical_of, week_grid
from analysis.paths import measure_paths, occupied_by_replication
from analysis.simultaneous import studentise
from analysis.stopping import FIRST_LOOK, Aim, next_look, precision_of
from tests.statistical.core import ALPHA, Bench, Figure, Study, at_least, no_less, within
from tests.statistical.pool import Experiments, Pool, disjoint

CONTROLLED = (0.93, 0.96)
WEEKLY = (0.94, 0.97)
PRECISE = Aim(0.03, (), most=200)
PLANTED_FIRST = 5
WEEKS = 20  # replications of an experiment with hours of the week
MOST_WEEKS = 200  # experiments: traces come from the reference engine


# ---- control variates ----


def _one_cell(bench: Bench, game: str) -> int:
    """A profile to look at by itself: the first true equilibrium."""
    return int(np.flatnonzero(bench.truth(game).equilibria.ravel())[0])


def _measured(pool: Pool, cell: int) -> np.ndarray:
    """Utilisation of each unit and the network's throughput, (replications, measures)."""
    one = {name: pool.arrays[name][:, cell] for name in ("occupied_days", "bed_days", "admitted", "days")}
    throughput = (one["admitted"] / one["days"]).sum(axis=1, keepdims=True)
    return np.hstack([one["occupied_days"] / one["bed_days"], throughput])


def _exact(bench: Bench, game: str, cell: int) -> np.ndarray:
    outcomes = bench.truth(game).table.outcomes
    return np.append(outcomes.utilisation[cell], outcomes.admitted[cell].sum())


def controls_study(bench: Bench, *, game: str, replications: int) -> list[Figure]:
    """Coverage of adjusted intervals and the variance ratio, for each measure of one profile."""
    pool, sample = bench.sample(game, replications)
    cell = _one_cell(bench, game)
    values, exact = _measured(pool, cell), _exact(bench, game, cell)
    held, plain, adjusted = [], [], []
    for chosen in sample.chosen:
        known = pool.controls(chosen)
        parts = studentise(known.adjust(values[chosen]))
        held.append(np.abs(parts.mean - exact) <= critical_value(1 - ALPHA, known.degrees) * parts.error)
        plain.append(values[chosen].mean(axis=0))
        adjusted.append(parts.mean)
    shares = np.mean(held, axis=0)
    ratios = variance_ratio(np.array(plain), np.array(adjusted))
    names = [*(f"utilisation of {name}" for name in pool.scenario.unit_names), "throughput"]
    return [
        *(
            within(f"{name}: intervals hold", float(share), CONTROLLED, sample)
            for name, share in zip(names, shares, strict=True)
        ),
        *(
            no_less(f"{name}: variance ratio", float(ratio), 1.0)
            for name, ratio in zip(names, ratios, strict=True)
        ),
    ]


# ---- relative precision ----


def stopping_study(bench: Bench, *, first: int = FIRST_LOOK) -> list[Figure]:
    """Coverage of the interval at which the rule stops, for the throughput of one profile of the small game."""
    pool, sample = bench.sample("small", PRECISE.most, most=300)
    cell, aim = _one_cell(bench, "small"), Aim(PRECISE.relative, (), most=PRECISE.most, first=first)
    values, exact = _measured(pool, cell), _exact(bench, "small", cell)
    column = 0  # the utilisation of the first unit
    held, sizes, met = [], [], []
    for chosen in sample.chosen:
        found, size = _stopped(values[chosen, column], aim)
        held.append(found.low <= exact[column] <= found.high)
        met.append(abs(found.mean / exact[column] - 1) <= aim.relative)
        sizes.append(size)
    return [
        at_least("the interval holds where the rule stops", float(np.mean(held)), 1 - ALPHA, sample),
        at_least("the relative error is within the aim", float(np.mean(met)), 1 - ALPHA, sample),
        Figure("mean replications", float(np.mean(sizes))),
    ]


def _stopped(values: np.ndarray, aim: Aim):
    size = aim.first
    while True:
        estimate = mean_estimate(values[:size], 1 - ALPHA)
        further = next_look(size, [precision_of("", "", estimate, aim.target).relative], aim)
        if further is None:
            return estimate, size
        size = further


# ---- hours of the week ----


def _weeks(bench: Bench) -> tuple[np.ndarray, float, Experiments]:
    """Occupied beds by hour of the week of unit A, (replications, 168), the exact mean, and the experiments."""
    scenario = bench.truth("small").scenario
    scenario = scenario.model_copy(
        update={"run": scenario.run.model_copy(update={"measured_days": 28.0, "warm_up_days": 14.0})}
    )
    count = min(bench.effort.experiments, MOST_WEEKS)
    grids = {GRID: week_grid(scenario)}
    paths = list(measure_paths(scenario, scenario.policy(), range(count * WEEKS), grids))
    exact = bench.truth("small").table.outcomes.utilisation[-1, 0] * scenario.units[0].beds
    return occupied_by_replication(paths, GRID)[:, 0], exact, disjoint(len(paths), WEEKS, count)


def week_study(bench: Bench, *, pointwise: bool = False) -> list[Figure]:
    """Whether the band of unit A holds the chain's mean in all 168 hours at once."""
    values, exact, sample = _weeks(bench)
    rng, held = np.random.default_rng(3), []
    for chosen in sample.chosen:
        parts = studentise(values[chosen])
        critical = critical_value(1 - ALPHA, WEEKS - 1)
        if not pointwise:
            critical = critical_of(values[chosen], 1 - ALPHA, rng)[0]
        held.append(bool(np.all(np.abs(parts.mean - exact) <= critical * parts.error)))
    return [within("all 168 hours are in the band", float(np.mean(held)), WEEKLY, sample)]


# ---- policies side by side ----


def compare_study(bench: Bench, *, replications: int, pointwise: bool = False) -> list[Figure]:
    """Bands of every pair of four policies in seven measures, and which could be the best by throughput."""
    pool, sample = bench.sample("small", replications)
    cells = [19, 18, 14, 13]  # (3, 4), (3, 3), (2, 4), (2, 3)
    values = np.stack([_compared(pool.arrays, cell) for cell in cells], axis=1)
    outcomes = bench.truth("small").table.outcomes
    true = np.stack([_exactly_compared(outcomes, cell) for cell in cells])
    pairs = list(itertools.combinations(range(len(cells)), 2))
    apart = np.concatenate([true[b] - true[a] for a, b in pairs])
    rng, held, best = np.random.default_rng(replications), [], []
    names = [str(cell) for cell in cells]
    for chosen in sample.chosen:
        paired = np.concatenate([values[chosen, b] - values[chosen, a] for a, b in pairs], axis=1)
        found = banded(paired, 1 - ALPHA, rng)[1]
        scale = (
            critical_value(1 - ALPHA, replications - 1) / banded(paired, 1 - ALPHA, rng)[0]
            if pointwise
            else 1.0
        )
        held.append(all(_holds(one, true_one, scale) for one, true_one in zip(found, apart, strict=True)))
        could = could_be_best(names, values[chosen, :, 0], 1 - ALPHA, rng)
        best.append(could[int(true[:, 0].argmax())].could_be_best)
    return [
        at_least("every difference is in its band", float(np.mean(held)), 1 - ALPHA, sample),
        at_least("the best policy could be the best", float(np.mean(best)), 1 - ALPHA, sample),
    ]


def apart_study(bench: Bench, *, paired: bool) -> list[Figure]:
    """How often the two extreme policies are told apart by throughput: nearly always on common intakes."""
    pool, sample = bench.sample("small", 10)
    worth, rng, told = _measured_throughput(pool.arrays), np.random.default_rng(1), []
    for number, chosen in enumerate(sample.chosen):
        others = chosen if paired else sample.chosen[number - 1]
        (band,) = banded((worth[chosen, 19] - worth[others, 13])[:, None], 1 - ALPHA, rng)[1]
        told.append(band.low is not None and not band.low <= 0 <= band.high)
    return [no_less("the two extreme policies are told apart", float(np.mean(told)), 0.95)]


def _measured_throughput(arrays: dict[str, np.ndarray]) -> np.ndarray:
    return (arrays["admitted"] / arrays["days"]).sum(axis=2)


def _holds(band, true: float, scale: float) -> bool:
    if band.low is None:
        return True
    return abs(band.mean - true) <= scale * (band.high - band.mean) + 1e-12


def _compared(arrays: dict[str, np.ndarray], cell: int) -> np.ndarray:
    """Throughput, transfers, turned away; utilisation and time closed with a free bed by unit."""
    one = {name: arrays[name][:, cell] for name in arrays if arrays[name].ndim == 3}
    network = [(one[name] / one["days"]).sum(axis=1) for name in ("admitted", "diverted_out", "turned_away")]
    return np.column_stack(
        [*network, one["occupied_days"] / one["bed_days"], one["closed_free_days"] / one["days"]]
    )


def _exactly_compared(outcomes, cell: int) -> np.ndarray:
    network = [
        values[cell].sum() for values in (outcomes.admitted, outcomes.diverted_out, outcomes.turned_away)
    ]
    return np.concatenate([network, outcomes.utilisation[cell], outcomes.closed_free[cell]])


def _studies() -> Iterator[Study]:
    for game, count in (("small", 20), ("small", 50), ("thresholds", 50)):
        yield Study(f"controls-{game}-{count}", f"R = {count}", partial(controls_study, game=game, replications=count),
                    ((game, count),), reduced=count == 20)  # fmt: skip
    for count in (10, 20, 50):
        yield Study(f"compare-{count}", f"R = {count}, small game", partial(compare_study, replications=count),
                    (("small", count),), reduced=count == 10)  # fmt: skip


STUDIES = [
    *_studies(),
    Study("compare-apart-10", "R = 10", partial(apart_study, paired=True), (("small", 10),)),
    Study("planted-unpaired", "R = 10", partial(apart_study, paired=False), (("small", 10),), planted=True),
    Study("stopping", "relative error .03, small game", stopping_study, (("small", PRECISE.most),), reduced=False),
    Study("week-20", "R = 20, small game", week_study, reduced=False),
    Study("planted-compare-pointwise", "R = 10", partial(compare_study, replications=10, pointwise=True),
          (("small", 10),), planted=True),
    Study("planted-week-pointwise", "R = 20", partial(week_study, pointwise=True), planted=True, reduced=False),
    Study("planted-stopping-at-5", "first look at 5", partial(stopping_study, first=PLANTED_FIRST),
          (("small", PRECISE.most),), planted=True, reduced=False),
]  # fmt: skip
