"""What every table of a scenario file has in common."""

from __future__ import annotations

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field
from pydantic_core import PydanticCustomError

MOST_BEDS = 5_000
MOST_DAYS = 1_000_000.0
MOST_PATIENTS = 50_000_000
MOST_REVIEWS = 1_000_000
LONGEST_NAME = 200


class Table(BaseModel):
    """A frozen table of the scenario file: unknown keys, wrong types and infinities are faults."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, allow_inf_nan=False)


def breach(rule: str, value: object, remedy: str, *, key: tuple[str | int, ...] = ()) -> PydanticCustomError:
    """A broken rule in the form that a validator raises; `key` is the path below the checked value."""
    return PydanticCustomError(
        "breach", "{rule}", {"rule": rule, "value": str(value), "remedy": remedy, "key": key}
    )


Whole = Annotated[int, Field(ge=0)]
Threshold = Annotated[Whole, Field(le=MOST_BEDS)]
Share = Annotated[float, Field(ge=0, le=1)]
Positive = Annotated[float, Field(gt=0)]
NotNegative = Annotated[float, Field(ge=0)]
# Arrays of a TOML file arrive as lists; everything inside stays strict.
Row = Field(strict=False)
