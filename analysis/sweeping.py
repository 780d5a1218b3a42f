"""A sweep: equilibria and what selfish rules cost over a grid of networks, targets and transfer weights.

A network (a demand, beds, a delay, a cv, a soft closure) is simulated once, or solved once by the chain; every target,
goal, welfare and transfer weight is then read from the same runs, for none of these changes what happens to a patient.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any

import numpy as np

from analysis.anarchy import Cost, TurningWeight, cost_of_selfishness
from analysis.chain import can_be_solved_together, chain_size, refusals
from analysis.chain.scope import OutOfScope
from analysis.controls import Controls
from analysis.games import GameAnalysis, Place, analyse
from analysis.goals import Welfare, goal_of, welfare_of
from analysis.payoffs import MOST_CELLS, PayoffTable, Profiles, exact_table, profiles_of, simulated_table
from analysis.prices import projected_cost, projected_turning
from analysis.settings import Grid, Setting
from sim.errors import Fault, ScenarioError
from sim.scenario import Policy, Scenario
from sim.scenario.varied import with_targets

EXACT, SIMULATED = "exact", "simulated"
MOST_PLAYERS = 60  # a table has an axis for each, and numpy takes 64
# Cells times states of a table whose cells are solved one by one: some minutes. Above it the simulation is quicker.
MOST_STATES = 20_000_000
AS_ASKED = "as asked"


@dataclass(frozen=True)
class Network:
    """One network of a sweep and how its table is filled; whys: the reasons in words."""

    setting: Setting
    scenario: Scenario
    policy: Policy
    profiles: Profiles
    method: str
    whys: tuple[str, ...]

    @property
    def why(self) -> str:
        """The reasons in one line."""
        return "; ".join(self.whys)

    @property
    def policies(self) -> list[Policy]:
        """The policy of every cell."""
        return list(self.profiles.policies(self.policy))


def networks_of(
    scenario: Scenario, policy: Policy, settings: Sequence[Setting], force: str | None = None
) -> list[Network]:
    """Every network with its method: the chain where it has an answer in good time, else simulation.

    force: EXACT or SIMULATED for all. Raises OutOfScope with every reason where EXACT is asked for in vain, and
    ScenarioError where a table would be too large.
    """
    made = [_network(scenario, policy, setting, force) for setting in settings]
    reasons = dict.fromkeys(reason for _, mine in made for reason in mine)
    if reasons:
        raise OutOfScope(reasons)
    return [network for network, _ in made]


def _network(
    scenario: Scenario, base: Policy, setting: Setting, force: str | None
) -> tuple[Network, tuple[str, ...]]:
    """The network, and why it cannot be filled as asked."""
    changed, policy = setting.scenario(scenario), setting.policy(scenario, base)
    profiles = profiles_of(changed, policy)
    _check_size(changed, profiles)
    if force == SIMULATED:
        return Network(setting, changed, policy, profiles, SIMULATED, (AS_ASKED,)), ()
    refused = _refusals(changed, policy, profiles)
    if force == EXACT:
        return Network(setting, changed, policy, profiles, EXACT, (AS_ASKED,)), refused
    slow = "" if refused else _too_slow(changed, policy, profiles)
    if refused or slow:
        return Network(setting, changed, policy, profiles, SIMULATED, refused or (slow,)), ()
    return Network(setting, changed, policy, profiles, EXACT, ("within the exact chain's scope",)), ()


def _check_size(scenario: Scenario, profiles: Profiles) -> None:
    faults = []
    if profiles.cells > MOST_CELLS:
        rule, remedy = f"must give at most {MOST_CELLS:,} cells", "list fewer thresholds for some units"
        faults.append(Fault(None, "game.strategies", rule, f"got {profiles.cells:,}", remedy))
    if len(profiles.players) > MOST_PLAYERS:
        rule, remedy = f"must be at most {MOST_PLAYERS} in a game", "describe the part that matters"
        faults.append(Fault(None, "units", rule, f"got {len(profiles.players)}", remedy))
    if faults:
        raise ScenarioError(faults, scenario.source.file)


def _refusals(scenario: Scenario, policy: Policy, profiles: Profiles) -> tuple[str, ...]:
    """Why the chain gives this game no payoffs; empty where it does."""
    policies = [policy] if profiles.is_plain else profiles.policies(policy)
    found = dict.fromkeys(reason for one in policies for reason in refusals(scenario, one))
    inexact = goal_of(scenario).without_exact_mean
    return (*found, *([] if inexact is None else [f"game.goal: {inexact} has no exact mean here"]))


def _too_slow(scenario: Scenario, policy: Policy, profiles: Profiles) -> str:
    """Why the chain would take too long; empty where it does not."""
    if can_be_solved_together(scenario, policy):
        return ""
    states = chain_size(scenario, profiles.policy(policy, [number - 1 for number in profiles.shape]))
    if states is not None and states * profiles.cells <= MOST_STATES:
        return ""
    size = "too many states" if states is None else f"{states:,} states in each of {profiles.cells:,} cells"
    return f"the exact chain would take too long ({size}; --exact forces it)"


@dataclass(frozen=True)
class Filled:
    """A network with what all its tables are made of: exact measures by cell and unit, or sums over replications."""

    network: Network
    cells: Sequence[Sequence[Mapping[str, float]]] | None = None
    sums: Mapping[str, np.ndarray] | None = None
    controls: Controls | None = None

    def table(
        self, targets: Mapping[str, float] | float | None, confidence: float, welfare: Welfare | None = None
    ) -> PayoffTable:
        """The table where units have these targets: one for all, or by unit, or as in the file."""
        scenario = with_target(self.network.scenario, targets)
        goal, profiles = goal_of(scenario), self.network.profiles
        welfare = welfare or welfare_of(scenario)
        if self.cells is not None:
            return exact_table(profiles, goal, welfare, self.cells)
        assert self.sums is not None
        return simulated_table(profiles, goal, welfare, self.sums, confidence, controls=self.controls)

    @property
    def replications(self) -> int | None:
        """The number of replications; None where the tables are exact."""
        return None if self.sums is None else len(self.sums["days"])


def with_target(scenario: Scenario, targets: Mapping[str, float] | float | None) -> Scenario:
    """The scenario with one target for all, targets by unit, or its own."""
    if targets is None:
        return scenario
    return scenario.with_target(targets) if isinstance(targets, float) else with_targets(scenario, targets)


def with_weight(table: PayoffTable, weight: float) -> PayoffTable:
    """The same table valued by patients turned away + weight x transfers."""
    welfare, shape = Welfare("loss", weight), table.profiles.shape
    away, moved = (
        rate.sum(axis=-1).reshape(shape) for rate in (table.outcomes.turned_away, table.outcomes.diverted_out)
    )
    if table.turned_away_replicates is None or table.transfers_replicates is None:
        return replace(table, welfare_goal=welfare, welfare=away + weight * moved)
    by_run = table.turned_away_replicates + weight * table.transfers_replicates
    return replace(table, welfare_goal=welfare, welfare=by_run.mean(axis=0), welfare_replicates=by_run)


@dataclass(frozen=True)
class Point:
    """One point of a sweep.

    target, weight: None where they are the file's. equilibria: profiles listed, exact or possible ones. confirmed: of
    the possible ones; None where exact. cost, turning, and what happens at the optimum and the extreme equilibria.
    """

    network: Network
    target: float | None
    weight: float | None
    table: PayoffTable
    equilibria: int
    confirmed: int | None
    cost: Cost
    turning: TurningWeight
    places: Mapping[str, Place | None]


def points_of(
    filled: Filled, grid: Grid, confidence: float, *, tolerance: float, epsilon: float | None
) -> Iterator[Point]:
    """Every point of one network, targets slowest; each interval holds at its own point."""
    seed = filled.network.scenario.run.seed
    for target in grid.targets:
        game = analyse(
            filled.table(target, confidence),
            tolerance=tolerance,
            confidence=confidence,
            epsilon=epsilon,
            seed=seed,
        )
        for weight in grid.weights:
            mine = game if weight is None else valued(game, weight, seed)
            yield _point(filled.network, target, weight, mine)


def valued(game: GameAnalysis, weight: float, seed: int) -> GameAnalysis:
    """The same game, its equilibria untouched, with the loss at a weight of transfers as welfare."""
    table = with_weight(game.table, weight)
    listed = [one.profile for one in game.equilibria]
    cost = cost_of_selfishness(
        table.welfare, "cost", listed, replicates=table.welfare_replicates, degrees=table.degrees,
        confidence=game.confidence,
    )  # fmt: skip
    turning = game.turning
    if game.sets is not None:
        known = (game.found, table, game.sets.possible.mask, 1 - game.confidence, seed)
        cost, turning = projected_cost(cost, *known), projected_turning(*known)
    return replace(game, table=table, cost=cost, turning=turning)


def _point(network: Network, target: float | None, weight: float | None, game: GameAnalysis) -> Point:
    cost = game.cost
    profiles = {
        "optimum": cost.optimum[0],
        "worst_equilibrium": cost.worst,
        "best_equilibrium": cost.best,
    }
    places = {name: None if profile is None else game.place(profile) for name, profile in profiles.items()}
    sets = game.sets
    confirmed = None if sets is None else int((sets.confirmed.mask & sets.possible.mask).sum())
    return Point(
        network, target, weight, game.table, len(game.equilibria), confirmed, cost, game.turning, places
    )


# ---- as a document ----


def point_document(point: Point) -> dict[str, Any]:
    """Plain values; an exact number has low = high = mean."""
    cost, exact = point.cost, point.table.replicates is None
    sets = (
        {"count": point.equilibria} if exact else {"possible": point.equilibria, "confirmed": point.confirmed}
    )
    return point.network.setting.to_dict() | {
        "target": point.target,
        "transfer_weight": point.weight,
        "method": point.network.method,
        "replications": point.table.replications,
        "equilibria": sets,
        "price_of_anarchy": number(cost.price_of_anarchy, exact),
        "price_of_stability": number(cost.price_of_stability, exact),
        "lost_per_year": number(cost.lost_per_year, exact),
        "turning_weight": asdict(point.turning),
        **{name: None if place is None else place_document(place) for name, place in point.places.items()},
    }  # fmt: skip


def number(estimate: Any, exact: bool) -> dict[str, Any]:
    """An estimate; where exact its ends are the number itself."""
    if exact and estimate.mean is not None:
        return {"mean": estimate.mean, "low": estimate.mean, "high": estimate.mean}
    return estimate.to_dict()


def tidy(value: Mapping[str, Any]) -> dict[str, Any]:
    """A number with its ends for a table: no minus sign before what is nought but for rounding."""
    ends = {end: value[end] for end in ("mean", "low", "high")}
    return {end: None if one is None else round(one, 9) + 0.0 for end, one in ends.items()}


def place_document(place: Place) -> dict[str, Any]:
    """What happens at a profile, with the network's rates a day added up."""
    return asdict(place) | {
        "network_turned_away_per_day": math.fsum(place.turned_away_per_day.values()),
        "network_transfers_per_day": math.fsum(place.diverted_out_per_day.values()),
    }


NUMBERS = ("price_of_anarchy", "price_of_stability", "lost_per_year")
AXES = ("demand", "target", "delay", "cv", "soft", "transfer_weight")


def point_rows(points: Sequence[Mapping[str, Any]]) -> Iterator[dict[str, Any]]:
    """The points of a document as flat rows for a spreadsheet, all with the same columns."""
    for one in points:
        row = {axis: one.get(axis) for axis in AXES}
        row |= {f"beds {unit}": beds for unit, beds in one.get("beds", {}).items()}
        row |= {"method": one["method"], "equilibria": one["equilibria"].get("count")}
        row |= {f"{name} equilibria": one["equilibria"].get(name) for name in ("possible", "confirmed")}
        row |= {f"{name} {end}": one[name][end] for name in NUMBERS for end in ("mean", "low", "high")}
        row |= {f"turning weight {end}": one["turning_weight"][end] for end in ("weight", "low", "high")}
        for name in ("optimum", "worst_equilibrium", "best_equilibrium"):
            row |= _place_row(name.replace("_", " "), one[name], one["optimum"])
        yield row


def _place_row(name: str, place: Mapping[str, Any] | None, like: Mapping[str, Any]) -> dict[str, Any]:
    """A place's columns; empty where there is no such profile."""
    row: dict[str, Any] = {}
    for key in ("throughput_per_day", "network_turned_away_per_day", "network_transfers_per_day"):
        row[f"{name} {key.removeprefix('network_').replace('_', ' ')}"] = (
            None if place is None else place[key]
        )
    for key in ("thresholds", "utilisation", "closed_with_free_bed_fraction"):
        for unit in like[key]:
            row[f"{name} {key.replace('_', ' ')} {unit}"] = None if place is None else place[key][unit]
    return row
