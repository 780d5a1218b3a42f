"""Commands that a store recorded, made again from their provenance: their requests, their jobs, and their rows."""

from __future__ import annotations

import hashlib
import importlib
from collections.abc import Iterator, Mapping, Sequence
from contextlib import chdir, suppress
from dataclasses import dataclass
from typing import Any

from analysis.command.entry import brimline
from analysis.command.options import Request, request_of
from analysis.command.phase_fit import fitted
from sim.errors import BrimlineError, ScenarioError, StoreError
from sim.lowering import IntakePlan, Network, Rules, lower_network, lower_policy, plan_intake
from sim.replicate import Failure, run_batch
from sim.store import Store
from sim.store_rows import Key, Row, cell_hash, exact_hash, pack_measures, scenario_hash


def arguments_of(origin: Mapping[str, Any]) -> list[str]:
    """The command line that a provenance names, without the program's name."""
    return list(origin["command"][1:])


def request_again(origin: Mapping[str, Any]) -> tuple[str, Request]:
    """A recorded command's name and request; StoreError where its scenario or data are not what they were."""
    name, request, _ = _made_again(origin)
    return name, request


def _made_again(origin: Mapping[str, Any]) -> tuple[str, Request, Mapping[str, Any]]:
    """As `request_again`, with the values of all the command's options."""
    name = arguments_of(origin)[0]
    try:
        with chdir(origin["cwd"]):
            values = _options(origin)
            request = request_of(values)
    except (BrimlineError, OSError) as error:
        raise StoreError(f"the recorded command cannot be run again: {error}") from error
    source, then = request.scenario.source, origin["scenario"]
    if (
        hashlib.sha256(source.text.encode()).hexdigest() != then["sha256"]
        or source.data != then["data_sha256"]
    ):
        raise StoreError(
            f"{then['file']} or its data have changed since; its text then is in `results show --json`"
        )
    return name, request, values


def _options(origin: Mapping[str, Any]) -> dict[str, Any]:
    """A recorded command's options by name."""
    name, *arguments = arguments_of(origin)
    command = brimline.get_command(None, name)  # type: ignore[arg-type]
    return command.make_context(name, arguments).params


def parts_of(origin: Mapping[str, Any]) -> list[Mapping[str, Any]]:
    """The provenances of a batch's parts; any other command is its own one part."""
    return list(origin.get("parts", [origin]))


def policies_of(name: str, request: Request) -> Sequence[Any]:
    """The policies that `simulate` or `game` runs."""
    from analysis.payoffs import profiles_of

    if name == "game":
        return list(profiles_of(request.scenario, request.policy).policies(request.policy))
    return [request.policy]


def jobs_of(name: str, request: Request, values: Mapping[str, Any]) -> Sequence[tuple[Any, Sequence[Any]]]:
    """The networks that a command keeps runs of, each with its policies."""
    if name in ("compare", "ledger", "sweep", "align"):
        return importlib.import_module(f"analysis.command.{name}").jobs(request, values)
    return [(request.scenario, policies_of(name, request))]


@dataclass(frozen=True)
class Recipe:
    """What runs of one scenario hash are made of; rules by cell hash."""

    network: Network
    plan: IntakePlan
    rules: dict[str, Rules]


def recipes(store: Store) -> tuple[dict[str, Recipe], list[str]]:
    """Scenario hash -> recipe, from every recorded command, and why others cannot be made again."""
    found: dict[str, Recipe] = {}
    reasons: dict[str, None] = {}
    for origin in _distinct(store):
        try:
            made = _made_again(origin)
            with chdir(origin["cwd"]):
                jobs = jobs_of(*made)
        except (StoreError, ScenarioError) as error:
            reasons[str(error)] = None
            continue
        for scenario, policies in jobs:
            network, plan = lower_network(scenario), plan_intake(scenario)
            recipe = found.setdefault(scenario_hash(network, plan), Recipe(network, plan, {}))
            for policy in policies:
                rules = lower_policy(scenario, policy)
                recipe.rules[cell_hash(rules)] = rules
    return found, list(reasons)


def _distinct(store: Store) -> Iterator[Mapping[str, Any]]:
    """The provenances of different command lines or scenario texts."""
    seen = set()
    for origin in (one for command in store.commands() for one in parts_of(command["provenance"])):
        mark = (*origin["command"], origin["cwd"], origin["scenario"]["sha256"])
        if mark not in seen:
            seen.add(mark)
            yield origin


def differs(store: Store, key: Key, recipe: Recipe) -> str | None:
    """In words, how a row differs from the same run made again; None where every bit agrees."""
    try:
        row = store.get(key)
    except StoreError as error:
        return str(error)
    assert row is not None
    [again] = run_batch(
        recipe.network, recipe.plan, [key.replication], [0], [recipe.rules[key.cell]], row.engine
    )
    if isinstance(again, Failure):
        return f"cannot be run again: {again}"
    return _difference(row, again[0])


def _difference(row: Row, again: Any) -> str | None:
    if again.intake_hash != row.intake_hash:
        return "other patients"
    return None if again.record.hash == row.record.hash else "another record"


def differing_exact_cells(store: Store, sample: int) -> tuple[int, dict[Key, str]]:
    """Solves a random sample of exact cells again: how many could be, and in words how those differ that do.

    Raises StoreError where any exact cell does not have its hash.
    """
    from analysis.exact_tables import solve_block

    wanted, checked, different = set(store.sample_exact(sample)), 0, {}
    for scenario, hashed, policies in _exact_recipes(store) if wanted else ():
        for cell, units in store.exact(hashed):
            key = Key(hashed, cell, 0)
            if key not in wanted or cell not in policies:
                continue
            wanted.discard(key)
            checked += 1
            if pack_measures(solve_block(scenario, [policies[cell]])[0]) != pack_measures(units):
                different[key] = "other measures"
    return checked, different


def _exact_recipes(store: Store) -> Iterator[tuple[Any, str, dict[str, Any]]]:
    """Scenario, its hash, and policies by cell hash, of every recorded exact game that can be made again."""
    for origin in _distinct(store):
        options, swept = _options(origin), arguments_of(origin)[0] in ("sweep", "align")
        if not (options.get("exact") or swept):
            continue
        with suppress(StoreError):
            name, request = request_again(origin)
            if swept:
                jobs = importlib.import_module(f"analysis.command.{name}").exact_jobs(request, options)
                yield from (_exact_recipe(*job) for job in jobs)
                continue
            scenario = fitted(request, options["phase_fit"])[0].scenario
            yield _exact_recipe(scenario, policies_of(name, request))


def _exact_recipe(scenario: Any, policies: Sequence[Any]) -> tuple[Any, str, dict[str, Any]]:
    hashed = exact_hash(lower_network(scenario), plan_intake(scenario))
    return scenario, hashed, {cell_hash(lower_policy(scenario, policy)): policy for policy in policies}
