"""Studies of races: what they save on the large game, and that stopping and continuing loses no coverage."""

from __future__ import annotations

import importlib.util
from functools import partial

import numpy as np

from analysis.contrasts import Evidence, paired_distances
from tests.statistical.core import ALPHA, Bench, Figure, Study, at_least, at_most, no_less
from tests.statistical.pool import Pool

ORDERS = 20  # races on the large game
MOST_LARGE, MOST_SMALL = 640, 160  # replications of a cell
STOPPED_AT = 40
LEAST_SAVED = {1e-3: 3.0, 4e-4: 6.0}


class _Source:
    """Evidence of the first replications of an order, only of the cells asked for."""

    def __init__(self, pool: Pool, order: np.ndarray, controls: bool) -> None:
        self._pool, self._order, self._controls = pool, order, controls

    def __call__(self, size: int, needed: np.ndarray) -> Evidence:
        chosen = self._order[:size]
        targets = np.array([unit.target_utilisation for unit in self._pool.scenario.units])
        arrays = self._pool.arrays
        signed = arrays["occupied_days"][chosen] / arrays["bed_days"][chosen] - targets
        known = self._pool.controls(chosen) if self._controls else None
        adjusted = signed if known is None else known.adjust(signed)
        shape = self._pool.profiles.shape
        raw, values = (
            np.moveaxis(np.where(needed[:, None], one, np.nan), -1, -2).reshape(size, -1, *shape)
            for one in (signed, adjusted)
        )
        return paired_distances(values, raw=raw, degrees=size - 1 if known is None else known.degrees)


def savings_study(bench: Bench, *, epsilon: float) -> list[Figure]:
    """Runs saved on the large game, against the full table with as many replications as the last look."""
    from analysis.racing import race

    pool, truth = bench.pool("thresholds", bench.effort.pool), bench.truth("thresholds")
    saved, kept, wrong, undecided = [], [], [], []
    for seed in range(ORDERS):
        order = np.random.default_rng(seed).permutation(pool.size)
        found = race(
            _Source(pool, order, True),
            pool.profiles.shape,
            2,
            most=MOST_LARGE,
            epsilon=epsilon,
            level=ALPHA,
            seed=seed,
        )
        saved.append(found.saved)
        kept.append(bool(found.possible[truth.equilibria.ravel()].all()))
        wrong.append(bool((found.confirmed & (truth.regret.ravel() > epsilon)).any()))
        undecided.append(int(found.undecided.sum()))
    return [
        no_less("times fewer runs than the full table", float(np.mean(saved)), LEAST_SAVED[epsilon]),
        no_less("share that keep every equilibrium (overlapping orders)", float(np.mean(kept)), 0.95),
        Figure("share with a wrong confirmation (overlapping orders)", float(np.mean(wrong))),
        Figure("mean profiles undecided", float(np.mean(undecided))),
    ]


def continuing_study(bench: Bench, *, game: str) -> list[Figure]:
    """A race that is stopped after 40 replications, looked at, and continued to 160: whether every look kept all
    equilibria and confirmed nothing wrong, and whether it is the race that was never stopped."""
    from analysis.racing import judge, race

    pool, sample = bench.sample(game, MOST_SMALL, most=300)
    truth, shape = bench.truth(game), pool.profiles.shape
    known = {"epsilon": truth.contested, "level": ALPHA, "seed": 4}
    held, wrong, same = [], [], []
    for order in sample.chosen:
        source = _Source(pool, order, False)
        state = race(source, shape, len(shape), most=STOPPED_AT, **known)
        whole = race(source, shape, len(shape), most=MOST_SMALL, **known)
        while (size := state.next_look(MOST_SMALL)) is not None:
            state = judge(state, source(size, state.needed), **known)
        same.append(np.array_equal(state.possible, whole.possible) and state.looks == whole.looks)
        held.append(bool(state.possible[truth.equilibria.ravel()].all()))
        wrong.append(bool((state.confirmed & (truth.regret.ravel() > truth.contested)).any()))
    return [
        at_least("every equilibrium is kept at all looks", float(np.mean(held)), 1 - ALPHA, sample),
        at_most("a confirmed one is none at some look", float(np.mean(wrong)), ALPHA, sample),
        no_less("share that equal a race never stopped", float(np.mean(same)), 1.0),
    ]


STUDIES = [] if importlib.util.find_spec("analysis.racing") is None else [
    *(Study(f"racing-savings-{epsilon:g}", f"{ORDERS} orders, control variates",
            partial(savings_study, epsilon=epsilon), (("thresholds", MOST_LARGE),), reduced=False)
      for epsilon in LEAST_SAVED),
    *(Study(f"racing-continued-{game}", f"looks to {MOST_SMALL}", partial(continuing_study, game=game),
            ((game, MOST_SMALL),), reduced=False) for game in ("contested", "small")),
]  # fmt: skip
