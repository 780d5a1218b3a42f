"""A sweep against what the exact chain tells about the game, and one filling serving every reading."""

from __future__ import annotations

import numpy as np
import pytest

from analysis.chain import OutOfScope
from analysis.exact_tables import solve_cells
from analysis.settings import Grid
from analysis.sweeping import EXACT, SIMULATED, Filled, networks_of, point_document, point_rows, points_of
from tests.analysis.builders import memoryless
from tests.analysis.test_settings import realistic

DEMANDS = (0.4, 0.8, 1.2, 1.8, 2.6)


def pair(last_resort, **tables):
    """Two units with equal stays; at demand 1 they are offered 0.7 of their beds."""
    units = (
        {"name": "A", "beds": 4, "per_day": 1.4, "target_utilisation": 0.5},
        {"name": "B", "beds": 6, "per_day": 2.1, "target_utilisation": 0.5},
    )
    return memoryless(*units, diversion={"when_all_closed": last_resort}, **tables)


def filled(scenario, grid, force=None):
    for network in networks_of(scenario, scenario.policy(), grid.settings(), force):
        cells = dict(solve_cells(network.scenario, network.policies))
        yield Filled(network, cells=[cells[place] for place in range(network.profiles.cells)])


def prices(scenario, grid):
    """(networks, targets)."""
    points = [
        [one.cost.price_of_anarchy.mean for one in points_of(mine, grid, 0.95, tolerance=1e-9, epsilon=None)]
        for mine in filled(scenario, grid)
    ]
    return np.array(points)


def test_under_home_bed_the_price_is_one_then_rises_then_falls():
    """Expected shape from the exact chain of a 17 x 21 threshold game, in the project's own study of procedures."""
    price = prices(pair("home_bed"), Grid((*DEMANDS, 6.0), (0.5,)))[:, 0]
    assert price[0] == pytest.approx(1, abs=1e-3)
    assert price.max() > 1.02 and price[-1] < price.max() - 1e-3
    assert 0 < price.argmax() < len(price) - 1


def test_the_price_falls_to_one_as_the_target_rises():
    for last_resort in ("home_bed", "turned_away"):
        price = prices(pair(last_resort), Grid((1.2,), (0.3, 0.5, 0.7, 0.95)))[0]
        assert price[0] > 1.02 and price[-1] == pytest.approx(1, abs=1e-9), last_resort
        assert (np.diff(price) <= 1e-9).all(), last_resort


def test_under_any_bed_with_equal_stays_nothing_is_lost():
    price = prices(pair("any_bed"), Grid(DEMANDS, (0.3, 0.5, 0.7)))
    assert price == pytest.approx(1, abs=1e-9)
    assert prices(pair("home_bed"), Grid(DEMANDS, (0.3, 0.5, 0.7))).max() > 1.02, "the check can fail"


def test_one_filling_is_read_at_every_target_and_weight():
    grid = Grid((1.2,), (0.4, 0.6), weights=(0.0, 0.5))
    [mine] = filled(pair("home_bed"), grid)
    points = [point_document(one) for one in points_of(mine, grid, 0.95, tolerance=1e-9, epsilon=None)]
    assert [(one["target"], one["transfer_weight"]) for one in points] == [
        (0.4, 0.0), (0.4, 0.5), (0.6, 0.0), (0.6, 0.5)
    ]  # fmt: skip
    for one in points:
        worst, best, weight = one["worst_equilibrium"], one["optimum"], one["transfer_weight"]
        loss = [
            place["network_turned_away_per_day"] + weight * place["network_transfers_per_day"]
            for place in (worst, best)
        ]
        assert one["price_of_anarchy"]["mean"] == pytest.approx(loss[0] / loss[1])
        assert one["lost_per_year"]["mean"] == pytest.approx(365 * (loss[0] - loss[1]))
        assert one["price_of_anarchy"]["low"] == one["price_of_anarchy"]["high"], "exact"
    rows = list(point_rows(points))
    assert len({tuple(row) for row in rows}) == 1 and rows[0]["worst equilibrium utilisation A"] > 0


def test_the_method_is_chosen_network_by_network():
    grid = Grid(delays=(0.0, 1.0))
    network = realistic(
        units=[{"name": name, "beds": 3, "target_utilisation": 0.5} for name in ("A", "B")],
        patients=[
            {
                "group": name,
                "home": name,
                "per_day": 1.0,
                "stay": {"family": "exponential", "mean_days": 2.0},
            }
            for name in ("A", "B")
        ],
    )
    without, delayed = networks_of(network, network.policy(), grid.settings())
    assert without.method == EXACT and "scope" in without.why
    assert delayed.method == SIMULATED and "transfers must take no time" in delayed.why
    assert all(
        one.method == SIMULATED for one in networks_of(network, network.policy(), grid.settings(), SIMULATED)
    )
    with pytest.raises(OutOfScope, match="transfers must take no time"):
        networks_of(network, network.policy(), grid.settings(), EXACT)


def test_a_goal_without_an_exact_mean_is_simulated():
    network = pair("home_bed", game={"goal": {"kind": "target_utilisation", "shape": "squared"}})
    [one] = networks_of(network, network.policy(), Grid().settings())
    assert one.method == SIMULATED and "no exact mean" in one.why
