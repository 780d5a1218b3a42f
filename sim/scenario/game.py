"""The `[game]` table: what each unit pursues, what the network values, which thresholds may be chosen."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Discriminator, Field, Tag, model_validator

from sim.scenario.tables import NotNegative, Positive, Row, Table, breach
from sim.scenario.units import Threshold


class TargetUtilisation(Table):
    """Each unit wants its utilisation at its own target.

    `absolute`: the distance of mean utilisation from the target. `squared`: the mean squared distance of the
    utilisation over each `judged_over_days`, a different game.
    """

    kind: Literal["target_utilisation"] = "target_utilisation"
    shape: Annotated[Literal["absolute", "squared"], Field(examples=['shape = "absolute"'])] = "absolute"
    judged_over_days: Annotated[Positive, Field(examples=["judged_over_days = 365"])] = 365.0


class Throughput(Table):
    """Welfare is the number of patients treated a day."""

    kind: Literal["throughput"]


class Loss(Table):
    """Welfare is a cost: patients turned away a day, and transfers a day at a weight."""

    kind: Literal["loss"]
    transfer_weight: Annotated[NotNegative, Field(le=1_000, examples=["transfer_weight = 0.3"])] = 0.0


Welfare = Annotated[Annotated[Throughput, Tag("throughput")] | Annotated[Loss, Tag("loss")], Discriminator("kind")]


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
            raise breach("needs either both `from` and `to`, or `values`", self._said(), "give one of the two")
        if all(ends) and self.from_ > self.to:
            raise breach("must not be above `to`", self.from_, f"`to` is {self.to}", key=("from",))
        if self.values is not None and len(set(self.values)) < len(self.values):
            raise breach("must not repeat a threshold", list(self.values), "remove the repeats", key=("values",))
        return self

    def _said(self) -> str:
        return ", ".join(key.rstrip("_") for key, value in self if value is not None) or "neither"

    def listed(self) -> tuple[int, ...]:
        """The thresholds in the order of the file."""
        return self.values if self.values is not None else tuple(range(self.from_, self.to + 1))


class Game(Table):
    """The game between the units; `strategies` defaults to every closure threshold from 1 to the unit's beds."""

    goal: Annotated[TargetUtilisation, Field(examples=['goal = { kind = "target_utilisation" }'])] = TargetUtilisation()
    welfare: Annotated[Welfare, Field(examples=['welfare = { kind = "throughput" }'])] = Throughput(kind="throughput")
    strategies: dict[str, Thresholds] = {}
