"""What a unit may pursue: each goal a weighted sum of measures of the unit, to make small or large."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Annotated, Any, Literal

from pydantic import BeforeValidator, Discriminator, Field, create_model, model_validator

from sim.tables import Table, breach

Sense = Literal["cost", "gain"]

# Every measure that a goal may weigh, and how it reads. What ends in `_per_day` is a number of patients a day,
# everything else a share.
TARGET_DISTANCE, TARGET_EXCESS, SQUARED_DISTANCE = "target_distance", "target_excess", "squared_distance"
MEASURES = {
    TARGET_DISTANCE: "distance of utilisation from the target",
    TARGET_EXCESS: "utilisation above the target",
    "utilisation": "utilisation",
    "full_fraction": "time full",
    "free_bed_fraction": "time with a free bed",
    "closed_fraction": "time closed",
    "closed_with_free_bed_fraction": "time closed with a free bed",
    "incoming_closed_fraction": "time closed to others",
    "turned_away_per_day": "own patients turned away a day",
    "diverted_out_per_day": "own patients moved a day",
    "diverted_in_per_day": "patients taken from other units a day",
    "admissions_per_day": "patients treated a day",
}
# A goal of one measure bears a name of its own, which a weight may use as well.
NAMED = {
    "turned_away": "turned_away_per_day",
    "own_moved": "diverted_out_per_day",
    "diversions_in": "diverted_in_per_day",
    "closed_time": "closed_fraction",
    "free_bed": "free_bed_fraction",
    "throughput": "admissions_per_day",
}
GAINS = ("free_bed", "throughput")
NEEDING_TARGET = {TARGET_DISTANCE, TARGET_EXCESS, SQUARED_DISTANCE}
MOST_WEIGHT = 1_000_000

AnyWeight = Annotated[float, Field(ge=-MOST_WEIGHT, le=MOST_WEIGHT, examples=["closed_fraction = 0.16"])]
NotNegativeWeight = Annotated[float, Field(ge=0, le=MOST_WEIGHT, examples=["target_distance = 1"])]

MeasureName = Literal[
    "turned_away", "own_moved", "diversions_in", "closed_time", "free_bed", "throughput", "utilisation",
    "full_fraction", "free_bed_fraction", "closed_fraction", "closed_with_free_bed_fraction",
    "incoming_closed_fraction", "turned_away_per_day", "diverted_out_per_day", "diverted_in_per_day",
    "admissions_per_day",
]  # fmt: skip


def _summed(weights: Mapping[str, float]) -> dict[str, float]:
    """Weights by measure, whichever of its names each was given under."""
    terms: dict[str, float] = {}
    for name, weight in weights.items():
        measure = NAMED.get(name, name)
        terms[measure] = terms.get(measure, 0.0) + weight
    return terms


def _in_words(terms: Mapping[str, float]) -> str:
    weighed = (
        ("" if weight == 1 else f"{weight:g} x ") + MEASURES[measure] for measure, weight in terms.items()
    )
    return " + ".join(weighed)


class Goal(Table):
    """What all goals have in common: a sense, and `terms` that are summed."""

    @property
    def sense(self) -> Sense:
        """Whether the sum is a cost to minimise or a gain to maximise."""
        return "cost"

    @property
    def terms(self) -> dict[str, float]:
        """Measure -> weight."""
        raise NotImplementedError

    @property
    def needs_target(self) -> bool:
        """Whether a unit with this goal needs a target utilisation."""
        return not NEEDING_TARGET.isdisjoint(self.terms)

    @property
    def reads(self) -> str:
        """The goal in words."""
        raise NotImplementedError


class TieBreaker(Table):
    """A measure that is added, times a small weight, to the cost: it decides where the goal itself does not."""

    measure: Annotated[MeasureName, Field(examples=['measure = "turned_away"'])]
    weight: Annotated[AnyWeight, Field(examples=["weight = 0.001"])]

    @property
    def terms(self) -> dict[str, float]:
        """Measure -> weight."""
        return _summed({self.measure: self.weight})


class TargetUtilisation(Goal):
    """Each unit wants its utilisation at its own target.

    `absolute`: the distance of mean utilisation from the target. `above`: only what is above the target counts,
    and a tie-breaker decides below it. `squared`: the mean squared distance of the utilisation over each
    `judged_over_days`, a different game.
    """

    kind: Literal["target_utilisation"] = "target_utilisation"
    shape: Annotated[Literal["absolute", "squared", "above"], Field(examples=['shape = "absolute"'])] = (
        "absolute"
    )
    judged_over_days: Annotated[float, Field(ge=1, examples=["judged_over_days = 365"])] = 365.0
    tie_breaker: Annotated[
        TieBreaker | None, Field(examples=['tie_breaker = { measure = "turned_away", weight = 0.001 }'])
    ] = None

    @model_validator(mode="after")
    def _below_the_target_all_ties(self):
        if self.shape == "above" and self.tie_breaker is None:
            rule = "is required by the shape `above`, which says nothing below the target"
            remedy = 'add for example `tie_breaker = { measure = "turned_away", weight = 0.001 }`'
            raise breach(rule, "missing", remedy, key=("tie_breaker",))
        return self

    @property
    def terms(self) -> dict[str, float]:
        """Measure -> weight."""
        of_shape = {"absolute": TARGET_DISTANCE, "above": TARGET_EXCESS, "squared": SQUARED_DISTANCE}
        return {of_shape[self.shape]: 1.0} | (self.tie_breaker.terms if self.tie_breaker else {})

    @property
    def reads(self) -> str:
        """The goal in words."""
        said = {
            "absolute": "mean utilisation at the target",
            "above": "mean utilisation not above the target",
            "squared": f"utilisation of each {self.judged_over_days:g} days at the target (squared distance)",
        }[self.shape]
        return said + (f", + {_in_words(self.tie_breaker.terms)}" if self.tie_breaker else "")


class OneMeasure(Goal):
    """One measure of the unit: a cost, but for `free_bed` and `throughput`, which are gains."""

    kind: Literal["turned_away", "own_moved", "diversions_in", "closed_time", "free_bed", "throughput"]

    @property
    def sense(self) -> Sense:
        """Whether the measure is a cost to minimise or a gain to maximise."""
        return "gain" if self.kind in GAINS else "cost"

    @property
    def terms(self) -> dict[str, float]:
        """Measure -> weight."""
        return {NAMED[self.kind]: 1.0}

    @property
    def reads(self) -> str:
        """The goal in words."""
        return f"{'most' if self.sense == 'gain' else 'least'} {MEASURES[NAMED[self.kind]]}"


class _Weights(Table):
    """A weight for each measure that counts; at least one."""

    @model_validator(mode="after")
    def _some(self):
        if not self.given:
            raise breach("must weigh at least one measure", "none", "add for example `target_distance = 1`")
        return self

    @property
    def given(self) -> dict[str, float]:
        """Name of the measure, as the file has it -> weight."""
        return {name: weight for name, weight in self.model_dump().items() if weight is not None}


def _weight_of(name: str) -> Any:
    weight = NotNegativeWeight if name in NEEDING_TARGET else AnyWeight
    return (Annotated[weight | None, Field(examples=[f"{name} = 1"])], None)


# One key for every measure, so that a misspelt one is a fault like any other unknown key.
Weights: type[_Weights] = create_model(
    "Weights",
    __base__=_Weights,
    __module__=__name__,
    **{name: _weight_of(name) for name in (*MEASURES, *NAMED)},
)


class Weighted(Goal):
    """A cost: the weighted sum of any measures of the unit. What the unit wants more of has a weight below 0."""

    kind: Literal["weighted"]
    weights: Annotated[Weights, Field(examples=["weights = { target_distance = 1, closed_fraction = 0.16 }"])]

    @property
    def terms(self) -> dict[str, float]:
        """Measure -> weight."""
        return _summed(self.weights.given)

    @property
    def reads(self) -> str:
        """The goal in words."""
        return f"least {_in_words(self.terms)}"


DEFAULT_KIND = "target_utilisation"


def _with_kind(table: Any) -> Any:
    """The default kind where the file gives none."""
    return {"kind": DEFAULT_KIND, **table} if isinstance(table, Mapping) else table


AnyGoal = Annotated[
    TargetUtilisation | OneMeasure | Weighted, Discriminator("kind"), BeforeValidator(_with_kind)
]
