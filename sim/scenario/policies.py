"""The `[[policies]]` rows, and `Policy`: one full set of rules, the file's own or a changed one."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Annotated

from pydantic import Field

from sim.rules import tables
from sim.scenario.units import Beds, Name, Names, Target, Unit
from sim.tables import Table, Threshold


class PolicyRow(*tables("policy_keys"), Table):
    """A named change of the file's own rules; what a row does not name stays as the units have it.

    beds, target_utilisation: of a network that is otherwise the same and meets the same patients.
    """

    name: Annotated[Name, Field(examples=['name = "close only when full"'])]
    closure_threshold: dict[str, Threshold] = {}
    referral_order: dict[str, Names] = {}
    beds: dict[str, Beds] = {}
    target_utilisation: dict[str, Target] = {}


@dataclass(frozen=True)
class UnitRules(*tables("parameters")):
    """The rules of one unit: its thresholds, its referral order, and what each optional rule adds.

    referral_order: the units asked, in order, for a patient whose home this is.
    """

    closure_threshold: int
    referral_order: tuple[str, ...]

    @property
    def incoming(self) -> int:
        """The incoming threshold that a run uses: never above the closure threshold."""
        if self.incoming_threshold is None:
            return self.closure_threshold
        return min(self.incoming_threshold, self.closure_threshold)


@dataclass(frozen=True)
class Policy:
    """One full set of rules. `units`: unit name -> its rules, in scenario order."""

    name: str
    units: Mapping[str, UnitRules]
    when_all_closed: str

    def with_rule(self, rule: str, values: Mapping[str, object]) -> Policy:
        """The same policy with `rule` (a field of UnitRules) changed for the units in `values`."""
        changed = {
            name: dataclasses.replace(rules, **{rule: values[name]}) if name in values else rules
            for name, rules in self.units.items()
        }
        return dataclasses.replace(self, units=changed)

    def with_thresholds(self, thresholds: Mapping[str, int]) -> Policy:
        """The same policy with other closure thresholds; incoming ones follow where they do in the file."""
        return self.with_rule("closure_threshold", thresholds)

    @property
    def thresholds(self) -> dict[str, int]:
        """Unit name -> closure threshold."""
        return {name: rules.closure_threshold for name, rules in self.units.items()}

    def after(self, row: PolicyRow) -> Policy:
        """This policy changed by a row of the file."""
        changed = dataclasses.replace(
            self, name=row.name, when_all_closed=row.when_all_closed or self.when_all_closed
        )
        for field in dataclasses.fields(UnitRules):
            changed = changed.with_rule(field.name, getattr(row, field.name))
        return changed


FILE_POLICY = "as in the file"


def policy_of_file(units: tuple[Unit, ...], when_all_closed: str) -> Policy:
    """The rules that the units of the file bear themselves, defaults filled in."""
    names = [unit.name for unit in units]
    rules = {unit.name: _rules(unit, names[place + 1 :] + names[:place]) for place, unit in enumerate(units)}
    return Policy(FILE_POLICY, rules, when_all_closed)


def _rules(unit: Unit, others: list[str]) -> UnitRules:
    return UnitRules(
        closure_threshold=unit.beds if unit.closure_threshold is None else unit.closure_threshold,
        referral_order=tuple(others) if unit.referral_order is None else unit.referral_order,
        **{
            field.name: getattr(unit, field.name)
            for rule in tables("parameters")
            for field in dataclasses.fields(rule)
        },
    )
