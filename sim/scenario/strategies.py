"""What a unit may choose in the game: closure thresholds, incoming thresholds, or any listed rule parameter."""

from __future__ import annotations

import itertools
from bisect import bisect_right
from collections.abc import Iterator, Mapping
from math import prod
from typing import Annotated, Any

from pydantic import Field, model_validator

from sim.rules.hysteresis import Gap
from sim.rules.reviews import ReviewHours
from sim.tables import Row, Share, Table, Threshold, breach

CLOSURE, INCOMING = "closure_threshold", "incoming_threshold"
Chosen = tuple[tuple[str, Any], ...]  # (field of UnitRules, value) of each parameter that the unit chooses
_Several = Annotated[tuple[Threshold, ...], Row, Field(min_length=1)]


def _refuse_repeats(values: tuple[Any, ...], noun: str) -> None:
    for place, value in enumerate(values):
        if value in values[:place]:
            raise breach(f"must not repeat a {noun}", f"{value} again", "remove it", key=("values", place))


class Thresholds(Table):
    """Thresholds that one unit may choose: `from` and `to` inclusive, or a list of `values`."""

    from_: Annotated[Threshold | None, Field(alias="from", examples=["from = 1"])] = None
    to: Annotated[Threshold | None, Field(examples=["to = 12"])] = None
    values: Annotated[_Several | None, Field(examples=["values = [6, 9, 12]"])] = None

    @model_validator(mode="after")
    def _one_way_of_saying(self):
        if self._is_said_otherwise():
            return self
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
        _refuse_repeats(self.values or (), "threshold")
        return self

    def _is_said_otherwise(self) -> bool:
        return False

    def _said(self) -> str:
        given = (
            (name, value) for name, value in (("from", self.from_), ("to", self.to), ("values", self.values))
        )
        return " and ".join(f"`{name}`" for name, value in given if value is not None) or "neither"

    def listed(self) -> tuple[int, ...]:
        """The thresholds in the order of the file."""
        return self.values if self.values is not None else tuple(range(self.from_, self.to + 1))


class _Listed(Table):
    """Values that one unit may choose, in the order of the file."""

    values: tuple[Any, ...]

    @model_validator(mode="after")
    def _no_repeats(self):
        _refuse_repeats(self.values, "value")
        return self

    def listed(self) -> tuple[Any, ...]:
        """The values in the order of the file."""
        return self.values


class Gaps(_Listed):
    """Reopening gaps to choose from."""

    values: Annotated[tuple[Gap, ...], Row, Field(min_length=1, examples=["values = [1, 3]"])]


class Shares(_Listed):
    """Shares to choose from."""

    values: Annotated[tuple[Share, ...], Row, Field(min_length=1, examples=["values = [0.0, 0.2]"])]


class Hours(_Listed):
    """Hours between reviews to choose from."""

    values: Annotated[tuple[ReviewHours, ...], Row, Field(min_length=1, examples=["values = [0.0, 12.0]"])]


# The key in a table of strategies -> the field of UnitRules, in the order in which values are named.
PARAMETERS = {
    "closure": CLOSURE,
    "incoming": INCOMING,
    "reopening_gap": "reopening_gap",
    "admit_while_closed": "admit_while_closed",
    "review_hours": "review_hours",
}


class UnitStrategies(Thresholds):
    """What one unit may choose: closure thresholds alone (`from` and `to`, or `values`), or a table for each
    parameter that it chooses. Pairs with the incoming above the closure threshold are left out: a run uses the
    lower of the two."""

    closure: Annotated[Thresholds | None, Field(examples=["closure = { from = 1, to = 12 }"])] = None
    incoming: Annotated[Thresholds | None, Field(examples=["incoming = { from = 1, to = 12 }"])] = None
    reopening_gap: Annotated[Gaps | None, Field(examples=["reopening_gap = { values = [1, 3] }"])] = None
    admit_while_closed: Annotated[
        Shares | None, Field(examples=["admit_while_closed = { values = [0.0, 0.2] }"])
    ] = None
    review_hours: Annotated[Hours | None, Field(examples=["review_hours = { values = [0.0, 12.0] }"])] = None

    def _is_said_otherwise(self) -> bool:
        named = [key for key in PARAMETERS if getattr(self, key) is not None]
        if named and self._said() != "neither":
            rule = "needs either thresholds of its own, or a table for each parameter"
            got = f"{self._said()} beside `{named[0]}`"
            raise breach(rule, got, "put the closure thresholds into `closure = { ... }`")
        return bool(named)

    def parameters(self) -> dict[str, tuple[Any, ...]]:
        """Field of UnitRules -> the values to choose from, in the order of the file."""
        if not self._is_said_otherwise():
            return {CLOSURE: self.listed()}
        tables = ((field, getattr(self, key)) for key, field in PARAMETERS.items())
        return {field: table.listed() for field, table in tables if table is not None}


def number_of_strategies(parameters: Mapping[str, tuple[Any, ...]], closure: int) -> int:
    """How many strategies a unit has, without listing them; closure: its closure threshold where it chooses none."""
    rest = prod(len(values) for field, values in parameters.items() if field not in (CLOSURE, INCOMING))
    own = parameters.get(CLOSURE, (closure,))
    if INCOMING not in parameters:
        return rest * len(own)
    incoming = sorted(parameters[INCOMING])
    return rest * sum(bisect_right(incoming, threshold) for threshold in own)


def listed_strategies(parameters: Mapping[str, tuple[Any, ...]], closure: int) -> Iterator[Chosen]:
    """Every combination, the last parameter's values fastest; pairs with incoming above closure left out."""
    for values in itertools.product(*parameters.values()):
        chosen = dict(zip(parameters, values, strict=True))
        if chosen.get(INCOMING, 0) <= chosen.get(CLOSURE, closure):
            yield tuple(chosen.items())
