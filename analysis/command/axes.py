"""What a game is about: who chooses what, towards which goal, and what the network is worth by."""

from __future__ import annotations

from typing import Any

from analysis.command.options import Request
from analysis.command.output import count

MOST_PLAYERS = 60  # a table has an axis for each, and numpy takes 64


def axes(request: Request) -> tuple[Any, Any, Any]:
    """Profiles, goal and welfare; ScenarioError where the game is too large or a target is missing."""
    from analysis.goals import goal_of, welfare_of
    from analysis.payoffs import MOST_CELLS, profiles_of
    from sim.errors import Fault, ScenarioError

    goal, profiles = goal_of(request.scenario), profiles_of(request.scenario, request.policy)
    if profiles.cells > MOST_CELLS:
        rule, got = f"must give at most {MOST_CELLS:,} cells", f"got {count(profiles.cells)}"
        remedy = "list fewer thresholds for some units"
        raise ScenarioError([Fault(None, "game.strategies", rule, got, remedy)], request.scenario.source.file)
    if len(profiles.players) > MOST_PLAYERS:
        rule, got = f"a game may have at most {MOST_PLAYERS} units", f"got {len(profiles.players)}"
        remedy = "describe the part of the region that matters"
        raise ScenarioError([Fault(None, "units", rule, got, remedy)], request.scenario.source.file)
    return profiles, goal, welfare_of(request.scenario)
