"""Rules that tie the `[game]` table to the rest of the file: its players, goals, strategies and periods."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

from sim.scenario.goals import TargetUtilisation
from sim.scenario.positions import Path
from sim.scenario.run import Run
from sim.scenario.units import RESERVED_NAME
from sim.wording import nearest, shown

if TYPE_CHECKING:
    from sim.scenario.crosschecks import Draft

SQUARED_NEEDS = "must be the same for every squared goal"


def _players(draft: Draft) -> None:
    """Names are unique and no unit's but the only one that the player runs; a unit has one player."""
    seen: set[str] = set()
    runs: dict[str, str] = {}
    for row in draft.below("game", "players"):
        name = draft.read(*row, "name")
        _player_name(draft, (*row, "name"), name, draft.read(*row, "units"), seen)
        for path in draft.below(*row, "units"):
            unit = draft.read(*path)
            if unit is None:
                continue
            draft.known_unit(path, unit)
            if unit in runs:
                draft.fault(
                    path, "must not be a unit that a player runs already", f"got {shown(unit)}, run by {runs[unit]}",
                    "name it once",
                )  # fmt: skip
            runs.setdefault(unit, shown(name) if name else "a row above")


def _player_name(
    draft: Draft, path: Path, name: str | None, units: tuple[str, ...] | None, seen: set[str]
) -> None:
    if name is None:
        return
    if name == RESERVED_NAME:
        rule = "is a reserved word (it stands for all units together)"
        draft.fault(path, rule, f"got {shown(name)}", "choose another name")
    elif name in seen:
        draft.fault(
            path, "must not be the name of an earlier player too", f"got {shown(name)} again", "rename one"
        )
    elif name in draft.beds and units is not None and list(units) != [name]:
        rule = "must not be the name of a unit, but where the player runs that unit alone"
        draft.fault(path, rule, f"got {shown(name)}", "choose another name")
    seen.add(name)


def _goals(draft: Draft) -> None:
    """Goals are those of units or players."""
    players = [draft.read(*row, "name") for row in draft.below("game", "players")]
    known = {*draft.beds, *(name for name in players if name)}
    for path in draft.below("game", "goals"):
        remedy = nearest(path[-1], known)
        sure = draft.every_unit_named and None not in players
        if path[-1] not in known and (sure or remedy.startswith("did you mean")):
            draft.fault(path, "must be the name of a unit or a player", f"got {shown(path[-1])}", remedy)


def _strategies(draft: Draft) -> None:
    """Strategies are those of units; thresholds lie within the beds; some pair is left."""
    for path in draft.below("game", "strategies"):
        draft.known_unit(path, path[-1])
        beds = draft.beds.get(path[-1])
        for table in (path, (*path, "closure"), (*path, "incoming")):
            for threshold in ((*table, "from"), (*table, "to"), *draft.below(*table, "values")):
                draft.fault_above_beds(threshold, beds)
        _some_pair(draft, path)


def _some_pair(draft: Draft, path: Path) -> None:
    """Incoming thresholds that are all above every closure threshold leave nothing to choose."""
    closure, incoming = (
        [draft.read(*path, key, end) for end in ("from", "to")]
        + [draft.read(*one) for one in draft.below(*path, key, "values")]
        for key in ("closure", "incoming")
    )
    most = [one for one in closure if one is not None] or [_closure_of(draft, path[-1])]
    least = [one for one in incoming if one is not None]
    if least and None not in most and min(least) > max(most):
        rule = "must not all be above every closure threshold (such pairs are left out)"
        draft.fault(
            (*path, "incoming"), rule, f"got {min(least)} or more above {max(most)}", "list lower ones"
        )


def _closure_of(draft: Draft, unit: str) -> int | None:
    """A unit's own closure threshold."""
    rows = [row for row in draft.rows("units") if draft.name(row) == unit]
    return (
        draft.read("units", rows[0], "closure_threshold", default=draft.beds.get(unit))
        if len(rows) == 1
        else None
    )


def _periods(draft: Draft) -> None:
    """Periods of squared goals lie within the measured days and are of one length."""
    squared = [
        path
        for path in (("game", "goal"), *draft.below("game", "goals"))
        if draft.read(*path, "shape") == "squared"
    ]
    for path in squared:
        _within_measured(draft, (*path, "judged_over_days"))
    lengths = [(path, _judged(draft, (*path, "judged_over_days"))) for path in squared]
    for path, length in lengths:
        first = lengths[0][1]
        if None not in (first, length) and length != first:
            remedy = f"give {first:,.12g} days everywhere"
            draft.fault(
                (*path, "judged_over_days"), SQUARED_NEEDS, f"got {length:,.12g} beside {first:,.12g}", remedy
            )


def _judged(draft: Draft, path: Path) -> float | None:
    return draft.read(*path, default=TargetUtilisation.model_fields["judged_over_days"].default)


def _within_measured(draft: Draft, path: Path) -> None:
    judged = _judged(draft, path)
    measured = draft.read("run", "measured_days", default=Run.model_fields["measured_days"].default)
    if None not in (judged, measured) and judged > measured:
        by_default = "" if draft.read(*path) else " (the default)"
        value = f"got {judged:,.12g}{by_default} over {measured:,.12g}"
        remedy = f"give {measured:,.12g} or less, or raise `run.measured_days`"
        draft.fault(path, "must not be longer than the measured days", value, remedy)


CHECKS: tuple[Callable[[Draft], None], ...] = (_players, _goals, _strategies, _periods)
