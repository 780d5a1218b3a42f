"""The `[[patients]]` rows: one group of patients each."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import AfterValidator, Field

from sim.demand import WeeklyPattern
from sim.durations import Duration, Stay
from sim.scenario.units import Name
from sim.tables import NotNegative, Positive, Row, Table, breach


def _not_all_zero(weights: tuple[float, ...]) -> tuple[float, ...]:
    if not any(weights):
        raise breach("must hold at least one weight above 0", "only 0", "raise one, or remove the key")
    return weights


def _ever_arriving(rate: float) -> float:
    if rate < 1e-9:  # where the times of arrivals would leave double precision
        raise breach(
            "must be at least 1e-9, a patient in three million years", rate, "raise it, or remove the group"
        )
    return rate


Weights = Annotated[tuple[NotNegative, ...], Row, AfterValidator(_not_all_zero)]


class PatientGroup(Table):
    """Patients of one home unit that arrive by one rhythm and share one length of stay."""

    group: Annotated[Name, Field(examples=['group = "Ashgill emergencies"'])]
    home: Annotated[str, Field(examples=['home = "Ashgill"'])]
    kind: Annotated[Literal["emergency"], Field(examples=['kind = "emergency"'])] = "emergency"
    per_day: Annotated[Positive, AfterValidator(_ever_arriving), Field(le=10_000, examples=["per_day = 2.1"])]
    hour_of_day: Annotated[  # midnight first
        Annotated[Weights, Field(min_length=24, max_length=24)] | None,
        Field(examples=["hour_of_day = [ ... 24 weights, midnight first ... ]"]),
    ] = None
    day_of_week: Annotated[
        Annotated[Weights, Field(min_length=7, max_length=7)] | None,
        Field(examples=["day_of_week = [1, 1, 1, 1, 1, 0.8, 0.8]"]),
    ] = None
    stay: Annotated[Stay, Field(examples=['stay = { family = "lognormal", mean_days = 3.9, cv = 1.4 }'])]

    @property
    def pattern(self) -> WeeklyPattern:
        """The weekly shape of this group's arrivals."""
        return WeeklyPattern(self.hour_of_day, self.day_of_week)

    @property
    def mean_stay_days(self) -> float:
        """The mean stay in days, before any unit's `stay_factor`."""
        return self.stay.distribution().mean()

    def in_constant_exponential_form(self) -> PatientGroup:
        """The same group with exponential stays of the same mean and arrivals at its mean rate."""
        from sim.durations import exponential_stay

        plain: Duration = exponential_stay(self.mean_stay_days)
        return self.model_copy(update={"hour_of_day": None, "day_of_week": None, "stay": plain})
