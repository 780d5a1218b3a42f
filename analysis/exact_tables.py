"""Every cell of a table solved by the exact chain, here or in local worker processes."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from typing import Any

from analysis.chain import solve
from sim.errors import RunError
from sim.scenario import Policy, Scenario
from sim.workers import local_workers

CELLS_PER_TASK = 8


def solve_cells(
    scenario: Scenario, policies: Iterable[Policy], workers: int | None = None
) -> Iterator[tuple[int, list[dict[str, Any]]]]:
    """Yields (cell, measures of each unit in scenario order) as cells are solved.

    The first cell is solved here, so that a scenario out of scope is refused at once (OutOfScope). Raises
    RunError with the cell's number where a later one fails.
    """
    listed = list(policies)
    yield 0, solve_block(scenario, listed[:1])[0]
    starts = range(1, len(listed), CELLS_PER_TASK)
    tasks = ((first, (scenario, listed[first : first + CELLS_PER_TASK])) for first in starts)
    for reply in local_workers(workers or 1).run(solve_block, tasks):
        if reply.failure is not None:
            raise RunError(f"cells from {reply.key}: {reply.failure.strip().splitlines()[-1]}")
        for place, units in enumerate(reply.value):
            yield reply.key + place, units


def solve_block(scenario: Scenario, policies: list[Policy]) -> list[list[dict[str, Any]]]:
    """The units' measures under each policy."""
    trees = (solve(scenario, policy).to_dict()["units"] for policy in policies)
    return [[tree[name] for name in scenario.unit_names] for tree in trees]
