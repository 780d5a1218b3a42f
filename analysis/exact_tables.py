"""Every cell of a table solved by the exact chain: together where it can be, else one by one, here or in workers."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Mapping
from pathlib import Path
from types import MappingProxyType
from typing import Any

from analysis.chain import ExactResult, can_be_solved_together, kernels, solve, solved_together
from sim.errors import RunError
from sim.kernel_cache import are_kept
from sim.scenario import Policy, Scenario
from sim.workers import local_workers

CELLS_PER_TASK = 8
# Cells times states below which a table is done cell by cell (a few seconds at most) and no kernel is loaded. The
# choice looks at nothing else, so that a table is the same to the last bit on every run.
WORTH_KERNELS = 100_000

NOTHING: Mapping[int, list[dict[str, Any]]] = MappingProxyType({})


def must_compile(scenario: Scenario, policy: Policy, cells: int) -> bool:
    """Whether a table of so many cells will have kernels compiled first, which takes some seconds."""
    return is_solved_together(scenario, policy, cells) and not are_kept(Path(kernels.__file__).parent)


def is_solved_together(scenario: Scenario, policy: Policy, cells: int) -> bool:
    """Whether a table of so many cells is solved together, in milliseconds."""
    states = math.prod(unit.beds + 1 for unit in scenario.units)
    return cells * states >= WORTH_KERNELS and can_be_solved_together(scenario, policy)


def solve_cells(
    scenario: Scenario,
    policies: Iterable[Policy],
    workers: int | None = None,
    *,
    kept: Mapping[int, list[dict[str, Any]]] = NOTHING,
) -> Iterator[tuple[int, list[dict[str, Any]]]]:
    """Yields (cell, measures of each unit in scenario order) as cells are solved; those kept, as they are, first.

    Where not all cells are solved together, the first other one is solved here, so that a scenario out of scope
    is refused at once (OutOfScope). Raises RunError with the cell's number where a later one fails.
    """
    listed = list(policies)
    states = math.prod(unit.beds + 1 for unit in scenario.units)
    together = solved_together(scenario, listed) if len(listed) * states >= WORTH_KERNELS else {}
    yield from ((cell, _units(scenario, result)) for cell, result in together.items())
    yield from ((cell, units) for cell, units in kept.items() if cell not in together)
    alone = [cell for cell in range(len(listed)) if cell not in together and cell not in kept]
    if alone:
        yield alone[0], solve_block(scenario, [listed[alone[0]]])[0]
    blocks = (tuple(alone[at : at + CELLS_PER_TASK]) for at in range(1, len(alone), CELLS_PER_TASK))
    tasks = ((cells, (scenario, [listed[cell] for cell in cells])) for cells in blocks)
    for reply in local_workers(workers or 1).run(solve_block, tasks):
        if reply.failure is not None:
            raise RunError(f"cells from {reply.key[0]}: {reply.failure.strip().splitlines()[-1]}")
        yield from zip(reply.key, reply.value, strict=True)


def solve_block(scenario: Scenario, policies: list[Policy]) -> list[list[dict[str, Any]]]:
    """The units' measures under each policy, each solved alone."""
    return [_units(scenario, solve(scenario, policy)) for policy in policies]


def _units(scenario: Scenario, result: ExactResult) -> list[dict[str, Any]]:
    return [result.units[name].to_dict() for name in scenario.unit_names]
