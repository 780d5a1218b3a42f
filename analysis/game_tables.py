"""A scenario's game made ready and filled: its axes with their limits, and the table of its runs or exact cells."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from analysis import payoffs
from analysis.controls import Controls
from analysis.counterpart import TableCounterpart
from analysis.goals import Goal, Welfare, goal_of, welfare_of
from analysis.payoffs import PayoffTable, TableSums, exact_table, simulated_table
from analysis.profiles import Profiles, profiles_of
from sim.errors import Fault, ScenarioError
from sim.record import hash_records
from sim.scenario import Policy, Scenario
from sim.wording import count

MOST_PLAYERS = 60  # a table has an axis for each, and numpy takes 64


@dataclass(frozen=True)
class GameAxes:
    """What a table is filled along: profiles, and what players and the network make of a cell."""

    profiles: Profiles
    goal: Goal
    welfare: Welfare

    def simulated(
        self, sums: TableSums, confidence: float, *, controls: Controls | None = None,
        counterpart: TableCounterpart | None = None,
    ) -> PayoffTable:  # fmt: skip
        """The table of the complete replications; see `simulated_table`."""
        return simulated_table(
            self.profiles, self.goal, self.welfare, sums.sums(), confidence, controls=controls, counterpart=counterpart
        )  # fmt: skip

    def exact(self, cells: Sequence[Any]) -> PayoffTable:
        """The table of exact cells, each the measures of the units."""
        return exact_table(self.profiles, self.goal, self.welfare, cells)


def axes_of(scenario: Scenario, policy: Policy) -> GameAxes:
    """The axes of a scenario's game; ScenarioError where it is too large or a target is missing."""
    goal, profiles = goal_of(scenario), profiles_of(scenario, policy)
    if profiles.cells > payoffs.MOST_CELLS:
        rule, got = f"must give at most {payoffs.MOST_CELLS:,} cells", f"got {count(profiles.cells)}"
        remedy = "list fewer thresholds for some units"
        raise ScenarioError([Fault(None, "game.strategies", rule, got, remedy)], scenario.source.file)
    if len(profiles.players) > MOST_PLAYERS:
        rule, got = f"a game may have at most {MOST_PLAYERS} units", f"got {len(profiles.players)}"
        remedy = "describe the part of the region that matters"
        raise ScenarioError([Fault(None, "units", rule, got, remedy)], scenario.source.file)
    return GameAxes(profiles, goal, welfare_of(scenario))


def table_document(sums: TableSums, scenario: Scenario) -> dict[str, Any]:
    """What a document says of a table's runs: how many, and what repeats them."""
    hashes = [sums.record_hashes[address] for address in sorted(sums.record_hashes)]
    return {
        "replications": len(sums.complete), "confidence": scenario.run.confidence, "seed": scenario.run.seed,
        "record_hash": hash_records(hashes),
    }  # fmt: skip
