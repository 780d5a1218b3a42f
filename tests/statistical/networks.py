"""The invented games of the studies, all within the exact chain's scope."""

from __future__ import annotations

from typing import Any

from analysis.chain import solve
from sim.scenario import Scenario
from tests.analysis.builders import memoryless

SHORT = {"warm_up_days": 15.0, "measured_days": 60.0, "replications": 10}  # at a mean stay of a day


def thresholds() -> Scenario:
    """17 x 21 thresholds: units of 16 and 20 beds that both want .745; five pure equilibria."""
    return memoryless(
        {"name": "A", "beds": 16, "per_day": 3.0, "target_utilisation": 0.745},
        {"name": "B", "beds": 20, "per_day": 3.9, "target_utilisation": 0.745},
        stay_days=4.1,
        run={"seed": 9, "warm_up_days": 126.0, "measured_days": 728.0, "replications": 50},
        game=_game({"A": {"from": 0, "to": 16}, "B": {"from": 0, "to": 20}}),
    )  # fmt: skip


def _game(strategies: dict[str, Any]) -> dict[str, Any]:
    return {"strategies": strategies}


def small() -> Scenario:
    """4 x 5 thresholds of tiny units, so that experiments are many and independent."""
    return memoryless(
        {"name": "A", "beds": 3, "per_day": 2.0, "target_utilisation": 0.59},
        {"name": "B", "beds": 4, "per_day": 2.6, "target_utilisation": 0.55},
        stay_days=1.0, run={"seed": 12, **SHORT}, game=_game({"A": {"from": 0, "to": 3}, "B": {"from": 0, "to": 4}}),
    )  # fmt: skip


def plateau() -> Scenario:
    """Exact ties: nobody's home is B, so that A's incoming and B's own threshold never bind."""
    return memoryless(
        {"name": "A", "beds": 4, "per_day": 3.0, "target_utilisation": 0.53},
        {"name": "B", "beds": 4, "per_day": 0.0, "target_utilisation": 0.17},
        stay_days=1.0,
        run={"seed": 13, **SHORT},
        game=_game(
            {
                "A": {"closure": {"values": [1, 2, 3, 4]}, "incoming": {"values": [0, 1, 2]}},
                "B": {"closure": {"values": [2, 3, 4]}, "incoming": {"values": [1, 2]}},
            }
        ),
    )


def rare() -> Scenario:
    """Nearly ties: thresholds that seldom bind, so that most replications show no difference at all."""
    return memoryless(
        {"name": "A", "beds": 7, "per_day": 2.0, "target_utilisation": 0.28},
        {"name": "B", "beds": 6, "per_day": 1.5, "target_utilisation": 0.25},
        stay_days=1.0, run={"seed": 14, **SHORT}, game=_game({"A": {"from": 2, "to": 7}, "B": {"from": 2, "to": 6}}),
    )  # fmt: skip


def three() -> Scenario:
    """Three players of 2, 2 and 3 beds: 3 x 3 x 4 thresholds."""
    return memoryless(
        {"name": "A", "beds": 2, "per_day": 1.4, "target_utilisation": 0.51},
        {"name": "B", "beds": 2, "per_day": 1.2, "target_utilisation": 0.49},
        {"name": "C", "beds": 3, "per_day": 1.8, "target_utilisation": 0.56},
        stay_days=1.0,
        run={"seed": 15, **SHORT},
        game=_game({name: {"from": 0, "to": beds} for name, beds in {"A": 2, "B": 2, "C": 3}.items()}),
    )  # fmt: skip


def contested() -> Scenario:
    """The small game with targets half-way between two utilisations, by the exact chain: two replies are equally good
    without being the same, for each player, so that an equilibrium is easily lost."""
    scenario = small()
    halves = {
        "A": _half_way(scenario, "A", {"A": 1, "B": 0}, {"A": 2, "B": 0}),
        "B": _half_way(scenario, "B", {"A": 2, "B": 1}, {"A": 2, "B": 2}),
    }
    units = tuple(
        unit.model_copy(update={"target_utilisation": halves[unit.name]}) for unit in scenario.units
    )
    return scenario.model_copy(update={"units": units})


def _half_way(scenario: Scenario, unit: str, one: dict[str, int], other: dict[str, int]) -> float:
    """The mean of a unit's exact utilisations under two profiles."""
    solved = [solve(scenario, scenario.policy().with_thresholds(profile)) for profile in (one, other)]
    return sum(result.to_dict()["units"][unit]["utilisation"] for result in solved) / 2


def crowd() -> Scenario:
    """Six players of one bed each, alike; while all are open, to close is exactly as good for every one of them (the
    target lies half-way, by the exact chain), so that six contrasts of one equilibrium are nought without being
    ties: the hardest game to keep."""
    names = "ABCDEF"

    def game(target: float) -> Scenario:
        return memoryless(
            *({"name": name, "beds": 1, "per_day": 0.8, "target_utilisation": target} for name in names),
            stay_days=1.0, run={"seed": 16, **SHORT}, game=_game({name: {"from": 0, "to": 1} for name in names}),
        )  # fmt: skip

    unsettled = game(0.5)
    return game(_half_way(unsettled, "A", dict.fromkeys(names, 1), dict.fromkeys(names, 1) | {"A": 0}))
