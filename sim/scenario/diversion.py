"""The `[diversion]` table: what happens to a patient whose home does not take them."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from sim.scenario.durations import Delay
from sim.scenario.tables import NotNegative, Table

LastResort = Literal["turned_away", "home_bed", "any_bed"]
_DELAY = 'delay = { family = "lognormal", mean_hours = 2.5, cv = 0.5 }'


class Diversion(Table):
    """The last resort when every unit asked is closed or full, and what a transfer costs in time.

    `delay`: hours on the road, none if absent. `extra_days`: added to a transferred patient's stay.
    """

    when_all_closed: Annotated[LastResort, Field(examples=['when_all_closed = "home_bed"'])] = "home_bed"
    delay: Annotated[Delay | None, Field(examples=[_DELAY])] = None
    extra_days: Annotated[NotNegative, Field(le=365, examples=["extra_days = 0.5"])] = 0.0
