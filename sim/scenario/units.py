"""The `[[units]]` rows: one critical-care unit each."""

from __future__ import annotations

import unicodedata
from typing import Annotated

from pydantic import AfterValidator, Field

from sim.rules import tables
from sim.tables import LONGEST_NAME, MOST_BEDS, Positive, Row, Table, Threshold, breach
from sim.wording import shown

RESERVED_NAME = "network"


def _of_one_line(text: str) -> str:
    """Text that a terminal shows as it stands."""
    if any(unicodedata.category(character) in ("Cc", "Cs", "Zl", "Zp") for character in text):
        raise breach("must not hold control characters", shown(text), "remove them")
    return text


def _speakable(name: str) -> str:
    """A name that can stand in a table and on a command line."""
    if len(name) > LONGEST_NAME:
        raise breach(f"must have at most {LONGEST_NAME} characters", f"{len(name):,}", "shorten it")
    if not any(unicodedata.category(character)[0] in "LNPS" for character in name):
        raise breach("must hold something that can be read", shown(name), "write a name")
    if name != name.strip():
        raise breach("must not begin or end with a space", shown(name), "remove the space")
    return name


def _not_reserved(name: str) -> str:
    if name == RESERVED_NAME:
        raise breach(
            "is a reserved word (it stands for all units together)", shown(name), "choose another name"
        )
    return name


Line = Annotated[str, AfterValidator(_of_one_line)]
Name = Annotated[Line, AfterValidator(_speakable)]
Target = Annotated[float, Field(gt=0, le=1)]
Names = Annotated[tuple[str, ...], Row]
Beds = Annotated[int, Field(ge=1, le=MOST_BEDS, examples=["beds = 12"])]


class Unit(*tables("unit_keys"), Table):
    """A unit with its staffed beds, its closure threshold and its target; other rules add keys of their own.

    Thresholds count load: occupied beds and beds reserved for patients on the road.
    """

    name: Annotated[Name, AfterValidator(_not_reserved), Field(examples=['name = "Ashgill"'])]
    beds: Beds
    closure_threshold: Annotated[Threshold | None, Field(examples=["closure_threshold = 11"])] = None
    target_utilisation: Annotated[Target | None, Field(examples=["target_utilisation = 0.75"])] = None
    referral_order: Annotated[Names | None, Field(examples=['referral_order = ["Norbeck"]'])] = None
    stay_factor: Annotated[Positive, Field(ge=0.01, le=100, examples=["stay_factor = 1.0"])] = 1.0
