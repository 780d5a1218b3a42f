"""Studies of the prices of anarchy and stability, the bootstrap beside them, and a plug-in planted."""

from __future__ import annotations

from collections.abc import Iterator
from functools import partial

import numpy as np

from analysis.anarchy import Cost, cost_of_selfishness
from analysis.confidence import Estimate
from analysis.equilibria import pure_equilibria
from analysis.games import analyse
from analysis.payoffs import PayoffTable
from analysis.price_bands import bootstrap_prices, resampled_means, resampling_weights
from analysis.prices import resampled_costs
from tests.statistical.core import ALPHA, Bench, Figure, Study, at_least
from tests.statistical.sets import tables

RESAMPLES = 300
Held = dict[str, list[bool]]


def true_cost(bench: Bench, game: str) -> Cost:
    """The prices of the exact table."""
    table = bench.truth(game).table
    found = pure_equilibria(table.payoffs, "cost")
    return cost_of_selfishness(table.welfare, table.welfare_goal.sense, found)


def holds(band: Estimate, true: Estimate) -> bool:
    """Whether a band holds the true price; one that is not given claims nothing."""
    if band.low is None or band.high is None or true.mean is None:
        return True
    return bool(band.low - 1e-12 <= true.mean <= band.high + 1e-12)


def prices_study(bench: Bench, *, game: str, replications: int) -> list[Figure]:
    """Coverage and width of the projected prices as `game` gives them, with control variates."""
    true, anarchy, stability, lost, widths, boot = true_cost(bench, game), [], [], [], [], []
    rng = np.random.default_rng(replications)
    for number, table in enumerate(tables(bench, game, replications, True)):
        cost = analyse(table, seed=number).cost
        anarchy.append(holds(cost.price_of_anarchy, true.price_of_anarchy))
        stability.append(holds(cost.price_of_stability, true.price_of_stability))
        lost.append(holds(cost.lost_per_year, true.lost_per_year))
        widths.append(_width(cost.price_of_anarchy))
        boot.append(holds(_bootstrap(table, rng), true.price_of_anarchy))
    sample = bench.sample(game, replications)[1]
    width = float(np.nanmean(widths))
    what = f"mean width of the price of anarchy ({true.price_of_anarchy.mean:.4f})"
    return [
        at_least("the price of anarchy is in its band", float(np.mean(anarchy)), 1 - ALPHA, sample),
        at_least("the price of stability is in its band", float(np.mean(stability)), 1 - ALPHA, sample),
        at_least("patients lost a year are in their band", float(np.mean(lost)), 1 - ALPHA, sample),
        Figure(what, width),
        Figure("the bootstrap's interval holds the price of anarchy", float(np.mean(boot))),
    ]


def _width(band: Estimate) -> float:
    return np.nan if band.low is None or band.high is None else band.high - band.low


def _bootstrap(table: PayoffTable, rng: np.random.Generator) -> Estimate:
    weights = resampling_weights(rng, RESAMPLES, len(table.welfare_replicates))
    worths = resampled_means(table.welfare_replicates, weights)
    costs, sense = resampled_costs(table, weights), table.welfare_goal.sense
    return bootstrap_prices(costs, worths, sense, 1 - ALPHA, tolerance=1e-9).price_of_anarchy


def plug_in(bench: Bench) -> list[Figure]:
    """The paired interval of the profiles that the estimate selects, as if they were the equilibria."""
    true, held = true_cost(bench, "contested"), []
    for table in tables(bench, "contested", 10, False):
        found = pure_equilibria(table.payoffs, "cost")
        cost = cost_of_selfishness(
            table.welfare, table.welfare_goal.sense, found,
            replicates=table.welfare_replicates, degrees=table.degrees,
        )  # fmt: skip
        held.append(holds(cost.price_of_anarchy, true.price_of_anarchy))
    sample = bench.sample("contested", 10)[1]
    return [at_least("the price of anarchy is in its interval", float(np.mean(held)), 1 - ALPHA, sample)]


def _studies() -> Iterator[Study]:
    for game, count in (("small", 20), ("contested", 20), ("rare", 50), ("three", 20), ("thresholds", 50)):
        yield Study(
            f"prices-{game}-{count}", f"R = {count}, control variates",
            partial(prices_study, game=game, replications=count), ((game, count),),
            reduced=game == "contested",
        )  # fmt: skip


STUDIES = [
    *_studies(),
    Study("planted-price-plug-in", "R = 10", plug_in, (("contested", 10),), planted=True),
]
