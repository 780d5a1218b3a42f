"""The `[game]` table: what each unit pursues, what the network values, which thresholds may be chosen."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Discriminator, Field, Tag, model_validator

from sim.scenario.units import Threshold
from sim.tables import NotNegative, Row, Table, breach


class TargetUtilisation(Table):
    """Each unit wants its utilisation at its own target.

    `absolute`: the distance of mean utilisation from the target. `squared`: the mean squared distance of the
    utilisation over each `judged_over_days`, a different game.
    """

    kind: Literal["target_utilisation"] = "target_utilisation"
    shape: Annotated[Literal["absolute", "squared"], Field(examples=['shape = "absolute"'])] = "absolute"
    judged_over_days: Annotated[float, Field(ge=1, examples=["judged_over_days = 365"])] = 365.0


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


_Several = Annotated[tuple[Threshold, ...], Row, Field(min_length=1)]


class Thresholds(Table):
    """The closure thresholds that one unit may choose: `from` and `to` inclusive, or a list of `values`."""

    from_: Annotated[Threshold | None, Field(alias="from", examples=["from = 1"])] = None
    to: Annotated[Threshold | None, Field(examples=["to = 12"])] = None
    values: Annotated[_Several | None, Field(examples=["values = [6, 9, 12]"])] = None

    @model_validator(mode="after")
    def _one_way_of_saying(self):
        ends = self.from_ is not None, self.to is not None
        if (self.values is not None) == any(ends) or any(ends) != all(ends):
            raise breach(
                "needs either both `from` and `to`, or `values`", self._said(), "give one of the two"
            )
        if all(ends) and self.from_ > self.to:
            raise breach(
                "must not be above `to`",
                f"{self.from_} above {self.to}",
                "swap or correct them",
                key=("from",),
            )
        for place, value in enumerate(self.values or ()):
            if value in self.values[:place]:
                raise breach(
                    "must not repeat a threshold", f"{value} again", "remove it", key=("values", place)
                )
        return self

    def _said(self) -> str:
        given = (
            (name, value) for name, value in (("from", self.from_), ("to", self.to), ("values", self.values))
        )
        return " and ".join(f"`{name}`" for name, value in given if value is not None) or "neither"

    def listed(self) -> tuple[int, ...]:
        """The thresholds in the order of the file."""
        return self.values if self.values is not None else tuple(range(self.from_, self.to + 1))


class Game(Table):
    """The game between the units; `strategies` defaults to all closure thresholds from 1 to the beds."""

    goal: Annotated[TargetUtilisation, Field(examples=['goal = { kind = "target_utilisation" }'])] = (
        TargetUtilisation()
    )
    welfare: Annotated[Welfare, Field(examples=['welfare = { kind = "throughput" }'])] = Throughput(
        kind="throughput"
    )
    strategies: Annotated[
        dict[str, Thresholds], Field(examples=["strategies = { Ashgill = { from = 1, to = 12 } }"])
    ] = {}
