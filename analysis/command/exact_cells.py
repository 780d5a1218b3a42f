"""The cells of an exact table for a command: with --out they are kept as they are solved, and Ctrl-C loses none."""

from __future__ import annotations

import json
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

from analysis.command.entry import Interrupted, say
from analysis.command.options import Request
from analysis.command.progress import progress, until_interrupted
from analysis.command.provenance import provenance
from analysis.exact_tables import NOTHING, is_solved_together, solve_cells
from sim.provenance import fingerprint, now
from sim.resuming import ExactJob
from sim.store import Store

Take = Callable[[int, Any], None]


def solved(
    request: Request, policies: Sequence[Any], *, label: str = "game --exact"
) -> tuple[list[Any], dict[str, int]]:
    """The units' measures of every cell, and what the document says of the store. label: of the progress.

    A table that is solved together takes milliseconds and is not kept.
    """
    at_once = is_solved_together(request.scenario, request.policy, len(policies))
    if request.out is None or at_once:
        return _solved(request, policies, NOTHING, lambda cell, units: None, label), {}
    with Store(request.out, write=True) as store:
        return _beside(store, request, policies, label)


def _beside(
    store: Store, request: Request, policies: Sequence[Any], label: str
) -> tuple[list[Any], dict[str, int]]:
    """Takes what the store has, then solves and keeps what is missing."""
    job = ExactJob(store, request.scenario, policies, fingerprint=json.dumps(fingerprint(), sort_keys=True))
    if job.kept:
        say(f"{len(job.kept):,} of {len(policies):,} exact cells are in {store.folder} already")
    job.begin(provenance(request, "game", engine="exact chain") | {"cwd": str(Path.cwd())})
    try:
        cells = _solved(request, policies, job.kept, job.keep, label)
    finally:
        job.end(now().isoformat(timespec="seconds"))
    return cells, {"computed": job.computed, "reused": len(job.kept)}


def _solved(request: Request, policies: Sequence[Any], kept: Any, take: Take, label: str) -> list[Any]:
    cells: list[Any] = [None] * len(policies)
    left = set(range(len(policies)))
    answers = until_interrupted(solve_cells(request.scenario, policies, request.workers, kept=kept))
    with answers, progress(label, len(policies), "cells") as bar:
        for cell, units in answers:
            take(cell, units)
            cells[cell] = units
            left.discard(cell)
            bar.advance()
    if left:
        told = (
            "kept: the same command goes on from there"
            if request.out is not None
            else "lost: --out keeps them"
        )
        say(f"interrupted; {len(policies) - len(left):,} of {len(policies):,} solved cells are {told}")
        raise Interrupted
    return cells
