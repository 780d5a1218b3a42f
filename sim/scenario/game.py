"""The `[game]` table: who plays, what each unit pursues, what the network values, what may be chosen."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Discriminator, Field, Tag

from sim.scenario.goals import AnyGoal, Goal, TargetUtilisation
from sim.scenario.strategies import UnitStrategies
from sim.scenario.units import Name, Names
from sim.tables import NotNegative, Row, Table


class Throughput(Table):
    """Welfare is the number of patients treated a day."""

    kind: Literal["throughput"]


class Loss(Table):
    """Welfare is a cost: patients turned away a day, and transfers a day at a weight."""

    kind: Literal["loss"]
    transfer_weight: Annotated[NotNegative, Field(le=1_000, examples=["transfer_weight = 0.3"])] = 0.0


Welfare = Annotated[
    Annotated[Throughput, Tag("throughput")] | Annotated[Loss, Tag("loss")], Discriminator("kind")
]


class Player(Table):
    """One who decides for several units together, a trust for example."""

    name: Annotated[Name, Field(examples=['name = "North trust"'])]
    units: Annotated[Names, Field(min_length=1, examples=['units = ["Ashgill", "Norbeck"]'])]


class Game(Table):
    """The game between the players.

    goal: of every unit that `goals` does not name. goals: unit, or player (for all its units) -> goal.
    players: a unit that no row names is a player by itself. strategies: of a unit, by default all closure
    thresholds from 1 to its beds.
    """

    goal: Annotated[AnyGoal, Field(examples=['goal = { kind = "target_utilisation" }'])] = TargetUtilisation()
    goals: Annotated[
        dict[str, AnyGoal], Field(examples=['goals = { Ashgill = { kind = "turned_away" } }'])
    ] = {}
    welfare: Annotated[Welfare, Field(examples=['welfare = { kind = "throughput" }'])] = Throughput(
        kind="throughput"
    )
    players: Annotated[
        tuple[Player, ...], Row, Field(examples=['[[game.players]]` with `name = "North trust"'])
    ] = ()
    strategies: Annotated[
        dict[str, UnitStrategies], Field(examples=["strategies = { Ashgill = { from = 1, to = 12 } }"])
    ] = {}

    def goal_of(self, unit: str) -> Goal:
        """What a unit pursues: its own goal, else its player's, else that of the game."""
        runs = next((row.name for row in self.players if unit in row.units), unit)
        return self.goals.get(unit) or self.goals.get(runs) or self.goal

    @property
    def judged_over_days(self) -> float | None:
        """The length of the periods that a squared goal judges; None where no goal is squared."""
        squared = (
            one for one in (self.goal, *self.goals.values()) if getattr(one, "shape", None) == "squared"
        )
        return next((one.judged_over_days for one in squared), None)
