"""Rules that tie several keys together, checked on whatever of the file could be read.

Each check sees a Draft, the file's tables less everything already found at fault, so that one pass reports
every fault of a file and none is a mere consequence of another.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from functools import cached_property
from typing import Any

from sim.rules import RULES, tables
from sim.scenario import game_checks
from sim.scenario.faults import Collector
from sim.scenario.positions import Path
from sim.scenario.run import Run
from sim.tables import MOST_PATIENTS
from sim.wording import nearest, shown

_EVERYONE = ()  # the referral order of a unit that gives none


class Draft:
    """The file's tables as far as they could be read."""

    def __init__(self, collector: Collector) -> None:
        self._collector = collector
        self.fault = collector.add

    def read(self, *path: str | int, default: Any = None) -> Any:
        """The value at `path`; `default` where it is absent; None where it is at fault."""
        if not self._collector.readable(path):
            return None
        value = self._collector.value(path)
        return default if value is None else value

    def below(self, *path: str | int) -> list[Path]:
        """The paths of a table's or an array's entries, at fault or not; none where it is itself at fault."""
        held = self._collector.value(path) if self._collector.standing(path) else None
        keys = held if isinstance(held, Mapping) else range(len(held)) if isinstance(held, list) else ()
        return [(*path, key) for key in keys]

    def rows(self, table: str) -> list[int]:
        """The row numbers of an array of tables."""
        return [path[-1] for path in self.below(table) if isinstance(self._collector.value(path), Mapping)]

    def name(self, row: int) -> str | None:
        """A unit's name as the file has it, sound or not: who refers to it means this unit."""
        name = self._collector.value(("units", row, "name"))
        return name if isinstance(name, str) else None

    def whole(self, table: str) -> bool:
        """Whether no rows of an array of tables can have gone astray under a misspelt header."""
        return self.rows(table) != [] and not self._collector.misspelt(table)

    @cached_property
    def every_unit_named(self) -> bool:
        """Whether every unit bears a name, so that a name which none of them bears can only be wrong."""
        return self.whole("units") and None not in map(self.name, self.rows("units"))

    @cached_property
    def beds(self) -> dict[str, int | None]:
        """Unit name -> beds; None where the number is at fault, or where several units bear the name."""
        named = [(self.name(row), row) for row in self.rows("units")]
        counts = Counter(name for name, _ in named)
        return {
            name: self.read("units", row, "beds") if counts[name] == 1 else None
            for name, row in named
            if name is not None
        }

    @cached_property
    def run_days(self) -> float | None:
        """The length of a run, warm-up included; None where it is at fault."""
        keys = ("warm_up_days", "measured_days")
        days = [self.read("run", key, default=Run.model_fields[key].default) for key in keys]
        return None if None in days else sum(days)

    def within_beds(self, path: Path, beds: int | None) -> bool:
        """Whether the threshold at `path` is no larger than the unit's beds, as far as both are known."""
        threshold = self.read(*path)
        return None in (threshold, beds) or threshold <= beds

    def fault_above_beds(self, path: Path, beds: int | None) -> None:
        """A fault where the threshold at `path` is above the unit's beds."""
        if not self.within_beds(path, beds):
            rule, value = "must not be above the unit's beds", f"got {self.read(*path)} for {beds} beds"
            self.fault(path, rule, value, f"choose a threshold from 0 to {beds}")

    def known_unit(self, path: Path, name: str) -> None:
        """A fault where no unit bears the name at `path`.

        A unit may have lost its name: then only what is plainly a slip for a known name is at fault.
        """
        if name in self.beds:
            return
        remedy = nearest(name, self.beds)
        if self.every_unit_named or remedy.startswith("did you mean"):
            self.fault(path, "must be the name of a unit", f"got {shown(name)}", remedy)


def cross_check(collector: Collector) -> None:
    """Adds every broken rule between keys to the collector."""
    draft = Draft(collector)
    own = (
        _names, _thresholds, _referrals, _homes, _isolated_units, _policies, _sizes,
        *game_checks.CHECKS,
    )  # fmt: skip
    for check in (*own, *(rule.check for rule in RULES)):
        check(draft)


def _names(draft: Draft) -> None:
    for table, key, noun in (
        ("units", "name", "unit"),
        ("patients", "group", "group"),
        ("policies", "name", "policy"),
    ):
        seen: set[str] = set()
        for row in draft.rows(table):
            name = draft.read(table, row, key)
            if name in seen:
                rule = f"must not be the name of an earlier {noun} too"
                draft.fault((table, row, key), rule, f"got {shown(name)} again", "rename one of them")
            elif name is not None:
                seen.add(name)


def _thresholds(draft: Draft) -> None:
    for row in draft.rows("units"):
        draft.fault_above_beds(("units", row, "closure_threshold"), draft.read("units", row, "beds"))


def _referrals(draft: Draft) -> None:
    for row in draft.rows("units"):
        _order(draft, ("units", row, "referral_order"), draft.name(row))


def _order(draft: Draft, path: Path, home: str | None) -> None:
    """A referral order names other units, each once."""
    seen = set()
    for entry in draft.below(*path):
        name = draft.read(*entry)
        if name is None:
            continue
        if name == home:
            draft.fault(entry, "must not name the unit itself", f"got {shown(name)}", "remove it")
        elif name in seen:
            draft.fault(entry, "must not name a unit twice", f"got {shown(name)} again", "remove it")
        else:
            draft.known_unit(entry, name)
        seen.add(name)


def _homes(draft: Draft) -> None:
    for row in draft.rows("patients"):
        home = draft.read("patients", row, "home")
        if home is not None:
            draft.known_unit(("patients", row, "home"), home)


def _isolated_units(draft: Draft) -> None:
    """A unit that no patient can reach is a slip; one whose thresholds admit nobody is a choice."""
    reached = _reached(draft)
    for row in draft.rows("units"):
        name = draft.read("units", row, "name")
        if None not in (reached, name) and name not in reached:
            rule = "must be some group's home or stand in some referral order"
            draft.fault(
                ("units", row), rule, "got neither", "add a group with this home, or refer patients to it"
            )


def _reached(draft: Draft) -> set[str] | None:
    """The units that patients are brought or referred to; None where a fault leaves that open."""
    homes = [draft.read("patients", row, "home") for row in draft.rows("patients")]
    orders = [draft.read("units", row, "referral_order", default=_EVERYONE) for row in draft.rows("units")]
    if not (draft.whole("patients") and draft.whole("units")) or None in homes or None in orders:
        return None
    of_policies = [
        path for row in draft.rows("policies") for path in draft.below("policies", row, "referral_order")
    ]
    named = {*homes}.union(*orders, *(draft.read(*path) or () for path in of_policies))
    asking = [
        draft.name(row) for row, order in zip(draft.rows("units"), orders, strict=True) if order is _EVERYONE
    ]
    if asking:  # one alone asks everyone but itself
        named |= draft.beds.keys() - (set(asking) if len(asking) == 1 else set())
    return named


def _policies(draft: Draft) -> None:
    of_rules = [key for keys in tables("policy_keys") for key in keys.model_fields]
    for row in draft.rows("policies"):
        for key in ("closure_threshold", *of_rules, "referral_order", "beds", "target_utilisation"):
            for path in draft.below("policies", row, key):
                draft.known_unit(path, path[-1])
                if key.endswith("threshold"):
                    beds = draft.read("policies", row, "beds", path[-1], default=draft.beds.get(path[-1]))
                    draft.fault_above_beds(path, beds)
                elif key == "referral_order":
                    _order(draft, path, path[-1])
                elif key == "beds":
                    _beds_hold_thresholds(draft, row, path)


def _beds_hold_thresholds(draft: Draft, row: int, path: Path) -> None:
    """Beds that a policy takes away must leave room for the thresholds that it keeps from the file."""
    beds = draft.read(*path)
    for unit in (one for one in draft.rows("units") if draft.name(one) == path[-1]):
        for key in ("closure_threshold", "incoming_threshold"):
            kept = draft.read("units", unit, key)
            if None not in (beds, kept) and beds < kept and not _given(draft, row, key, path[-1]):
                rule = f"must not be below the unit's own {key}, unless the policy gives one too"
                remedy = f"give the policy `{key} = {{ {shown(path[-1])} = {beds} }}` or less"
                draft.fault(path, rule, f"got {beds} below {kept}", remedy)


def _given(draft: Draft, row: int, key: str, unit: str | int) -> bool:
    return any(path[-1] == unit for path in draft.below("policies", row, key))


def _sizes(draft: Draft) -> None:
    if draft.run_days is None:
        return
    rates = [draft.read("patients", row, "per_day") for row in draft.rows("patients")]
    patients = sum(rate for rate in rates if rate is not None) * draft.run_days
    if patients > MOST_PATIENTS:
        rule = f"a replication may hold at most {MOST_PATIENTS:,} patients"
        draft.fault(
            ("run", "measured_days"), rule, f"got about {patients:,.0f}", "shorten the run or lower the rates"
        )
