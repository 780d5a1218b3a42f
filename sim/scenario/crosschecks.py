"""Rules that tie several keys together, checked on whatever of the file could be read.

Each check sees a Draft, the file's tables less everything already found at fault, so that one pass reports
every fault of a file and none is a mere consequence of another.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Iterator, Mapping
from typing import Any

from sim.scenario.faults import Collector, nearest, shown
from sim.scenario.game import TargetUtilisation
from sim.scenario.positions import Path
from sim.scenario.run import Run
from sim.scenario.tables import MOST_PATIENTS

_MISSING: Any = object()


class Draft:
    """The file's tables as far as they could be read."""

    def __init__(self, collector: Collector) -> None:
        self._collector = collector
        self.fault = collector.add

    def read(self, *path: str | int, default: Any = None) -> Any:
        """The value at `path`; `default` where it is absent; None where it is at fault."""
        if not self._collector.readable(path):
            return None
        level: Any = self._collector.data
        for part in path:
            level = level.get(part, _MISSING) if isinstance(level, Mapping) else level[part]
            if level is _MISSING:
                return default
        return level

    def rows(self, table: str) -> range:
        """The row numbers of an array of tables."""
        rows = self._collector.data.get(table)
        return range(len(rows)) if isinstance(rows, list) and all(isinstance(row, dict) for row in rows) else range(0)

    def items(self, *path: str | int) -> Iterator[tuple[Path, Any]]:
        """The readable entries of a table."""
        table: Any = self._collector.data
        for part in path:
            table = table.get(part) if isinstance(table, Mapping) else table[part]
        if not isinstance(table, Mapping):
            return
        for key in table:
            value = self.read(*path, key)
            if value is not None:
                yield (*path, key), value

    def beds(self) -> dict[str, int | None]:
        """Unit name -> beds, None where the number is at fault."""
        names = {row: self.read("units", row, "name") for row in self.rows("units")}
        return {name: self.read("units", row, "beds") for row, name in names.items() if name is not None}


def cross_check(collector: Collector) -> None:
    """Adds every broken rule between keys to the collector."""
    draft = Draft(collector)
    for check in (_names, _thresholds, _referrals, _homes, _isolated_units, _strategies, _policies, _periods, _sizes):
        check(draft)


def _names(draft: Draft) -> None:
    for table, key in (("units", "name"), ("patients", "group"), ("policies", "name")):
        names = [(row, draft.read(table, row, key)) for row in draft.rows(table)]
        counts = Counter(name for _, name in names)
        seen: set[str] = set()
        for row, name in names:
            if name is not None and counts[name] > 1 and name in seen:
                draft.fault((table, row, key), "must differ from every other one", f"got {shown(name)} again", "rename one")
            seen.add(name)


def _thresholds(draft: Draft) -> None:
    for row in draft.rows("units"):
        beds = draft.read("units", row, "beds")
        own = draft.read("units", row, "closure_threshold", default=beds)
        incoming = draft.read("units", row, "incoming_threshold", default=own)
        if None in (beds, own):
            continue
        if own > beds:
            _above_beds(draft, ("units", row, "closure_threshold"), own, beds)
        if incoming is not None and incoming > own:
            rule = "must not be above the closure threshold (units close to others first)"
            remedy = f"lower it to {own} or less, or raise the closure threshold"
            draft.fault(("units", row, "incoming_threshold"), rule, f"got {incoming} above {own}", remedy)


def _above_beds(draft: Draft, path: Path, threshold: int, beds: int) -> None:
    remedy = f"choose a threshold from 0 to {beds}"
    draft.fault(path, "must not be above the unit's beds", f"got {threshold} for {beds} beds", remedy)


def _referrals(draft: Draft) -> None:
    for row in draft.rows("units"):
        order = draft.read("units", row, "referral_order")
        if order is not None:
            _order(draft, ("units", row, "referral_order"), order, draft.read("units", row, "name"))


def _order(draft: Draft, path: Path, order: Iterable[str], home: str | None) -> None:
    """A referral order names other units, each once."""
    for place, name in enumerate(order):
        if name == home:
            draft.fault((*path, place), "must not name the unit itself", f"got {shown(name)}", "remove it")
        elif name in order[:place]:
            draft.fault((*path, place), "must not name a unit twice", f"got {shown(name)} again", "remove it")
        else:
            _known_unit(draft, (*path, place), name)


def _known_unit(draft: Draft, path: Path, name: str) -> bool:
    units = draft.beds()
    if name not in units:
        draft.fault(path, "must be the name of a unit", f"got {shown(name)}", nearest(name, units))
    return name in units


def _homes(draft: Draft) -> None:
    for row in draft.rows("patients"):
        home = draft.read("patients", row, "home")
        if home is not None:
            _known_unit(draft, ("patients", row, "home"), home)


def _isolated_units(draft: Draft) -> None:
    """A unit that no patient can reach is a slip; one whose thresholds admit nobody is a choice."""
    units, homes = draft.rows("units"), [draft.read("patients", row, "home") for row in draft.rows("patients")]
    orders = {row: draft.read("units", row, "referral_order", default="everyone") for row in units}
    for row in units:
        name = draft.read("units", row, "name")
        asked = any(order in (None, "everyone") or name in order for other, order in orders.items() if other != row)
        if name is not None and not asked and name not in homes and None not in homes:
            rule = "must be some group's home or stand in some referral order"
            draft.fault(("units", row), rule, "got neither", "add a group with this home, or refer patients to it")


def _strategies(draft: Draft) -> None:
    beds = draft.beds()
    for path, _ in draft.items("game", "strategies"):
        name = path[-1]
        if not _known_unit(draft, path, name) or beds[name] is None:
            continue
        for key in ("from", "to"):
            value = draft.read(*path, key)
            if value is not None and value > beds[name]:
                _above_beds(draft, (*path, key), value, beds[name])
        for place, value in enumerate(draft.read(*path, "values") or ()):
            if value > beds[name]:
                _above_beds(draft, (*path, "values", place), value, beds[name])


def _policies(draft: Draft) -> None:
    beds = draft.beds()
    per_unit = ("closure_threshold", "incoming_threshold", "reopening_gap", "admit_while_closed", "review_hours")
    for row in draft.rows("policies"):
        for key in (*per_unit, "referral_order"):
            for path, value in draft.items("policies", row, key):
                if not _known_unit(draft, path, path[-1]):
                    continue
                if key.endswith("threshold") and beds[path[-1]] is not None and value > beds[path[-1]]:
                    _above_beds(draft, path, value, beds[path[-1]])
                if key == "referral_order":
                    _order(draft, path, value, path[-1])


def _periods(draft: Draft) -> None:
    goal = TargetUtilisation.model_fields["judged_over_days"].default
    judged = draft.read("game", "goal", "judged_over_days", default=goal)
    measured = draft.read("run", "measured_days", default=Run.model_fields["measured_days"].default)
    squared = draft.read("game", "goal", "shape") == "squared"
    if squared and None not in (judged, measured) and judged > measured:
        path = ("game", "goal", "judged_over_days")
        remedy = f"lower it to {measured:g} or less, or raise `run.measured_days`"
        draft.fault(path, "must not be longer than the measured days", f"got {judged:g} over {measured:g}", remedy)


def _sizes(draft: Draft) -> None:
    days = [draft.read("run", key, default=Run.model_fields[key].default) for key in ("warm_up_days", "measured_days")]
    rates = [draft.read("patients", row, "per_day") for row in draft.rows("patients")]
    if None in days or None in rates:
        return
    patients = sum(rates) * sum(days)
    if patients > MOST_PATIENTS:
        rule = f"a replication may hold at most {MOST_PATIENTS:,} patients"
        draft.fault(("run", "measured_days"), rule, f"got about {patients:,.0f}", "shorten the run or lower the rates")
