"""What sweeps and alignments fill: their networks from the axes as texts, and what a document says of the filling."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import replace
from typing import Any

from analysis.alignment import MOST_COMBINATIONS, is_exponential, number_of_combinations
from analysis.settings import Grid, Texts, grid_of
from analysis.sweeping import Network, networks_of, with_target
from sim.errors import Fault
from sim.record import hash_records
from sim.scenario import Policy, Scenario

WEIGHTS = "0:1:11"  # over which the advice of an alignment may turn, where targets are common
IN_FILE, EXPONENTIAL = "as in the file", "exponential (same means, no delay, constant demand)"


def networks_of_sweep(
    texts: Texts, scenario: Scenario, policy: Policy, force: str | None
) -> tuple[Grid, list[Network]]:
    """The grid of a sweep and its networks; texts are without fault."""
    grid = grid_of(texts, scenario, [])
    aimed = with_target(scenario, grid.targets[0])  # any will do: it changes no network
    return grid, networks_of(aimed, policy, grid.settings(), force)


def networks_of_alignment(
    texts: Texts, scenario: Scenario, policy: Policy, force: str | None, *, per_unit: bool
) -> tuple[Grid, list[tuple[str, list[Network]]]]:
    """The grid, and the networks of each row: stays as in the file, and their exponential counterpart."""
    grid = grid_of(texts, scenario, [])
    aimed = with_target(scenario, grid.targets[0])  # any will do: it changes no network
    weights = texts.transfer_weight or (None if per_unit else WEIGHTS)
    grid = (
        replace(grid, weights=())
        if weights is None
        else grid_of(replace(texts, transfer_weight=weights), aimed, [])
    )
    kinds = (
        [(EXPONENTIAL, aimed)]
        if is_exponential(aimed)
        else [(IN_FILE, aimed), (EXPONENTIAL, aimed.exponential())]
    )
    return grid, [(stays, networks_of(one, policy, grid.settings(), force)) for stays, one in kinds]


def combination_faults(grid: Grid, scenario: Scenario, *, per_unit: bool) -> Iterator[Fault]:
    """A fault where the targets by unit are too many to try."""
    tries = number_of_combinations(grid.targets, len(scenario.units))
    if per_unit and tries > MOST_COMBINATIONS:
        rule, remedy = (
            f"must give at most {MOST_COMBINATIONS} combinations",
            "try fewer targets, or one for all units",
        )
        yield Fault(None, "--per-unit", rule, f"got {tries:,}", remedy)


def filling_document(
    scenario: Scenario, ran: Any | None, hashes: Sequence[str], exact: Mapping[str, int], *, interrupted: bool
) -> dict[str, Any]:
    """What a document says of how its networks were filled.

    ran: the runs as one, None where nothing was simulated. exact: counts of exact cells that a store keeps.
    """
    run = scenario.run
    told = {"confidence": run.confidence, "seed": run.seed, "replications": run.replications if ran else None}
    told |= {"record_hash": hash_records(list(hashes)) if hashes else None}
    told |= ran.to_dict() if ran else {"engine": "exact chain", "failed": []}
    return told | {"exact_cells": dict(exact) or None, "interrupted": interrupted}
