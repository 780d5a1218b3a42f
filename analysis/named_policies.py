"""Policies by name: the file's own rules, the rows of the file, and some that every scenario has.

Names that every scenario has (a row of the file of the same name goes before):
`nobody closes early`: every closure threshold at the unit's beds, incoming thresholds with it.
`own patients never refused`: every closure threshold at the unit's beds, incoming thresholds as they are.
`no sharing`: empty referral orders, so that nobody is transferred.
`equilibrium (worst possible)`, `equilibrium (best possible)`, `optimum`: closure thresholds from a game's result.
"""

from __future__ import annotations

import dataclasses
import json
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from sim.errors import Fault, ScenarioError
from sim.scenario import Policy, Scenario
from sim.wording import nearest, shown

WORST, BEST, OPTIMUM = "equilibrium (worst possible)", "equilibrium (best possible)", "optimum"
OF_A_GAME = (WORST, BEST, OPTIMUM)
GAME_FILES = ("game.json", "result.json")
MOST_EXACT_CELLS = 5_000


@dataclass(frozen=True)
class Case:
    """A policy with the network that it is for: the scenario's, or the same with the policy's own beds."""

    name: str
    scenario: Scenario
    policy: Policy


def full(scenario: Scenario) -> dict[str, int]:
    """Unit name -> its beds: the closure threshold of a unit that closes only when full."""
    return {unit.name: unit.beds for unit in scenario.units}


def _nobody_closes_early(scenario: Scenario, base: Policy) -> Policy:
    return base.with_thresholds(full(scenario)).with_rule(
        "incoming_threshold", dict.fromkeys(scenario.unit_names)
    )


def _own_never_refused(scenario: Scenario, base: Policy) -> Policy:
    incoming = {name: rules.incoming for name, rules in base.units.items()}
    return base.with_thresholds(full(scenario)).with_rule("incoming_threshold", incoming)


def _no_sharing(scenario: Scenario, base: Policy) -> Policy:
    return base.with_rule("referral_order", dict.fromkeys(scenario.unit_names, ()))


BUILT: Mapping[str, Callable[[Scenario, Policy], Policy]] = {
    "nobody closes early": _nobody_closes_early,
    "own patients never refused": _own_never_refused,
    "no sharing": _no_sharing,
}


def cases_of(
    scenario: Scenario, base: Policy, names: Iterable[str], *, game_folder: Path | None = None
) -> list[Case]:
    """The base policy first, then those of the names given (all rows of the file where none is), each once.

    base: the file's own rules, perhaps changed. names: each one name, or several with commas between them.
    game_folder: where a game's result lies; else equilibria and optimum are solved exactly where they can be.
    Raises ScenarioError for every name that is not known, or that only a game's result could fill.
    """
    rows = {row.name for row in scenario.policies}
    wanted = _split(names, {base.name, *rows, *BUILT, *OF_A_GAME}) or [row.name for row in scenario.policies]
    faults = [
        _unknown(name, {*rows, *BUILT, *OF_A_GAME}) for name in wanted if not _is_known(name, rows, base)
    ]
    if faults:
        raise ScenarioError(faults, scenario.source.file)
    asked_of_game = {name for name in wanted if name in OF_A_GAME and name not in rows}
    thresholds = _of_game(scenario, base, game_folder) if asked_of_game else {}
    cases = {base.name: Case(base.name, scenario, base)}
    for name in wanted:
        if name not in cases:
            cases[name] = _case(name, scenario, base, rows, thresholds)
    return list(cases.values())


def _is_known(name: str, rows: set[str], base: Policy) -> bool:
    return name in rows or name in BUILT or name in OF_A_GAME or name == base.name


def _split(names: Iterable[str], known: set[str]) -> list[str]:
    """An entry that is a name as it stands is one, whatever commas it has."""
    listed = (
        [entry.strip()] if entry.strip() in known else [part.strip() for part in entry.split(",")]
        for entry in names
    )  # fmt: skip
    return [name for entry in listed for name in entry if name]


def _unknown(name: str, known: set[str]) -> Fault:
    rule = "must name a policy of the scenario, or one that every scenario has"
    return Fault(None, "--policies", rule, f"got {shown(name)}", nearest(name, known))


def _case(
    name: str, scenario: Scenario, base: Policy, rows: set[str], thresholds: Mapping[str, Mapping[str, int]]
) -> Case:
    if name in rows:
        return Case(name, scenario.under(name), scenario.policy(name))
    policy = BUILT[name](scenario, base) if name in BUILT else base.with_thresholds(thresholds[name])
    return Case(name, scenario, dataclasses.replace(policy, name=name))


# ---- equilibria and optimum ----


def _of_game(scenario: Scenario, base: Policy, folder: Path | None) -> dict[str, dict[str, int]]:
    """Name -> closure thresholds; the worst and the best by welfare of all equilibria listed, and the optimum."""
    document = _solved(scenario, base) if folder is None else _read(scenario, folder)
    listed = [one for one in document["equilibria"] if one["kind"] == "pure"]
    if not listed:
        raise _no_game(scenario, "the game must have a pure equilibrium", "none is listed", "choose others")
    sign = 1 if document["welfare"]["sense"] == "gain" else -1
    listed.sort(key=lambda one: sign * _mean(one["welfare"]))
    return {
        WORST: listed[0]["thresholds"], BEST: listed[-1]["thresholds"],
        OPTIMUM: document["optimum"]["thresholds"][0],
    }  # fmt: skip


def _mean(number: Any) -> float:
    return number["mean"] if isinstance(number, dict) else number


def _no_game(scenario: Scenario, rule: str, value: str, remedy: str) -> ScenarioError:
    return ScenarioError([Fault(None, "--game", rule, value, remedy)], scenario.source.file)


def _read(scenario: Scenario, folder: Path) -> dict[str, Any]:
    """A game's document for these units, whose thresholds they can have."""
    paths = [folder / name for name in GAME_FILES if (folder / name).is_file()]
    remedy = "give the folder of `brimline game SCENARIO --out FOLDER`"
    if not paths:
        raise _no_game(scenario, "must hold a game's result", f"got {str(folder)!r}", remedy)
    try:
        document = json.loads(paths[0].read_text(encoding="utf-8"))
        profiles = [one["thresholds"] for one in document["equilibria"] if one["kind"] == "pure"]
        _check_profiles(scenario, [*profiles, *document["optimum"]["thresholds"]])
        return document
    except (ValueError, LookupError, TypeError, RecursionError) as error:
        raise _no_game(
            scenario,
            "must hold the game of this scenario's units",
            f"got {str(paths[0])!r} ({error})",
            remedy,
        ) from None


def _check_profiles(scenario: Scenario, profiles: Sequence[Mapping[str, Any]]) -> None:
    beds = full(scenario)
    for profile in profiles:
        if set(profile) != set(beds):
            raise ValueError(f"its players are {', '.join(map(str, profile))}")
        for name, threshold in profile.items():
            if not isinstance(threshold, int) or not 0 <= threshold <= beds[name]:
                raise ValueError(f"{name} has no threshold {threshold!r}")


def _solved(scenario: Scenario, base: Policy) -> dict[str, Any]:
    """The game solved by the exact chain, as a document; a fault where the chain has no answer for it."""
    from analysis.chain import refusals
    from analysis.exact_tables import solve_cells
    from analysis.game_document import game_document
    from analysis.games import analyse
    from analysis.goals import goal_of, welfare_of
    from analysis.payoffs import exact_table, profiles_of

    goal, profiles = goal_of(scenario), profiles_of(scenario)
    remedy = "run `brimline game SCENARIO --out FOLDER` and give --game FOLDER"
    if reasons := refusals(scenario, base):
        rule = "is needed: the exact chain cannot solve this game"
        raise _no_game(scenario, rule, reasons[0].partition(";")[0], remedy)
    if profiles.cells > MOST_EXACT_CELLS:
        rule = f"is needed: a table of more than {MOST_EXACT_CELLS:,} cells is not solved in passing"
        raise _no_game(scenario, rule, f"got {profiles.cells:,}", remedy)
    cells = dict(solve_cells(scenario, profiles.policies(base)))
    table = exact_table(profiles, goal, welfare_of(scenario), [cells[cell] for cell in range(profiles.cells)])
    return game_document(analyse(table))
