"""The result documents of a batch: each part's command, answered from the runs that are there."""

from __future__ import annotations

import io
from contextlib import redirect_stderr, redirect_stdout
from dataclasses import replace
from pathlib import Path
from typing import Any

from analysis.batch import Piece
from analysis.command.batch_state import State
from analysis.command.entry import CheckFailed, Interrupted
from analysis.command.options import call_with
from analysis.command.running import Ran
from sim.engines import Choice
from sim.errors import BrimlineError
from sim.replicate import Failure


def write_document(piece: Piece, state: State) -> dict[str, Any]:
    """Writes what the part's own command would, into its own folder; tells where, or why there is nothing."""
    folder = state.folder / piece.part.name
    if piece.reached == 0:
        return {"result": None, "reason": "no replication is there for every cell"}
    request = replace(piece.request, out=folder, as_json=True, kept=_kept(piece, state))
    name, *arguments = [*piece.part.arguments, "--out", str(folder)]
    try:
        with redirect_stdout(io.StringIO()), redirect_stderr(io.StringIO()):
            call_with(request, name, arguments)
    except (Interrupted, CheckFailed):
        pass  # it has handed over its result first
    except BrimlineError as error:
        return {"result": None, "reason": str(error)}
    except Exception as error:  # one document must not cost the others
        return {"result": None, "reason": f"{type(error).__name__}: {error}"}
    return {"result": f"{piece.part.name}/result.json"}


def _kept(piece: Piece, state: State) -> Any:
    """What stands in the place of running the part's policies."""

    def hand_over(policies: Any, take: Any) -> Ran:
        assert len(policies) == len(piece.cells)
        runs = 0
        for kept in piece.job.kept_runs(piece.cells, piece.replications):
            take(kept)
            runs += len(kept)
        failures = _failures(piece, state)
        for failure in failures:
            take(failure)
        engine = Choice(piece.job.kept_engine() or "none", "as the batch chose it")
        return Ran(engine, failures, runs < piece.asked, computed=0, reused=runs)

    return hand_over


def _failures(piece: Piece, state: State) -> list[Failure]:
    """The part's runs that failed, cells numbered as in its own table."""
    places = {cell: place for place, cell in enumerate(piece.cells)}
    found = []
    for stock, failure in state.failures:
        cells = tuple(places[cell] for cell in failure.cells if cell in places)
        if stock is piece.stock and cells:
            found.append(replace(failure, cells=cells))
    return found


def folder_of(plan: Path) -> Path:
    """Where results go unless --out says otherwise."""
    return Path("results") / plan.stem
