"""`brimline game --exact`: full table or best-reply search, chosen by cost; the search, and the structure found."""

from __future__ import annotations

import sys
import time
from dataclasses import asdict, dataclass
from typing import Any

from analysis.command.options import Request
from analysis.command.output import count, prepare_folder, write_result
from analysis.command.progress import SECONDS_BETWEEN_LINES, about, duration

TABLE, BEST_REPLY = "table", "best_reply"
QUICK = 1_000_000  # states in all the cells of a table that needs no timing
TABLE_SECONDS = 600.0  # a table that takes longer is too dear


@dataclass(frozen=True)
class Choice:
    """Full table or best-reply search.

    chosen_by: `cost` or `--search`. cells: of the table. states_per_cell: at most, None out of scope.
    seconds_per_cell: timed at all-highest, None where the choice needed no timing.
    """

    method: str
    chosen_by: str
    cells: int
    states_per_cell: int | None
    seconds_per_cell: float | None
    reads: str


def choose(request: Request, wanted: str | None) -> Choice:
    """The choice for a scenario, `wanted` where that is given; ScenarioError where the chain has no payoffs for it."""
    from analysis.chain import can_be_solved_together, chain_size
    from analysis.payoffs import MOST_CELLS, profiles_of

    _require_exact_means(request)
    profiles = profiles_of(request.scenario, request.policy)
    highest = [number - 1 for number in profiles.shape]
    states = chain_size(request.scenario, profiles.policy(request.policy, highest))
    size = f"{count(profiles.cells)} cells" + (
        "" if states is None else f" of at most {count(states)} states"
    )
    if not profiles.is_ordered:
        _refuse_search(request, wanted)
        reads = f"{_named(TABLE)}, for a search climbs one threshold a player: {size}"
        return Choice(TABLE, "cost" if wanted is None else "--search", profiles.cells, states, None, reads)
    if wanted is not None:
        return Choice(wanted, "--search", profiles.cells, states, None, f"{_named(wanted)} as asked: {size}")
    if profiles.cells > MOST_CELLS:
        reads = f"{_named(BEST_REPLY)}, for a table may have {MOST_CELLS:,} cells: {size}"
        return Choice(BEST_REPLY, "cost", profiles.cells, states, None, reads)
    if states is None or profiles.cells * states <= QUICK:
        return Choice(
            TABLE, "cost", profiles.cells, states, None, f"{_named(TABLE)}, for it is small: {size}"
        )
    if can_be_solved_together(request.scenario, request.policy):
        reads = f"{_named(TABLE)}, for its cells are solved together: {size}"
        return Choice(TABLE, "cost", profiles.cells, states, None, reads)
    seconds = _seconds_per_cell(request, profiles)
    table_seconds = seconds * profiles.cells / (request.workers or 1)
    method = TABLE if table_seconds <= TABLE_SECONDS else BEST_REPLY
    reads = (
        f"{_named(method)}: {size} take {about(table_seconds)}, the limit of a table is "
        f"{duration(TABLE_SECONDS)} (--search overrides)"
    )
    return Choice(method, "cost", profiles.cells, states, float(f"{seconds:.1g}"), reads)


def _named(method: str) -> str:
    return "Full table" if method == TABLE else "Best-reply search"


def _require_exact_means(request: Request) -> None:
    from analysis.goals import goal_of
    from sim.errors import Fault, ScenarioError

    if goal_of(request.scenario).without_exact_mean is None:
        return
    rule, remedy = "must not be `squared` with --exact", "drop --exact, or use another goal"
    got = "got 'squared': the chain has no finite-period variance here"
    of_all = getattr(request.scenario.game.goal, "shape", None) == "squared"
    fault = Fault(None, "game.goal.shape" if of_all else "game.goals", rule, got, remedy)
    raise ScenarioError([fault], request.scenario.source.file)


def _refuse_search(request: Request, wanted: str | None) -> None:
    from sim.errors import Fault, ScenarioError

    if wanted != BEST_REPLY:
        return
    rule = "needs players who choose one threshold each"
    got = "got players with several units, or several rule parameters to choose"
    remedy = "drop --search for the full table, or list one threshold a player"
    raise ScenarioError([Fault(None, "--search", rule, got, remedy)], request.scenario.source.file)


def _seconds_per_cell(request: Request, profiles: Any) -> float:
    """Seconds that the cell with the most states takes; another one before it pays for what is done once only."""
    from analysis.chain import solve

    for profile in ([0] * len(profiles.shape), [number - 1 for number in profiles.shape]):
        began = time.perf_counter()
        solve(request.scenario, profiles.policy(request.policy, profile))
    return time.perf_counter() - began


def structure_of_table(analysis: Any, choice: Choice) -> dict[str, Any]:
    """What a full table's document says besides: how it was chosen, and its structure."""
    from analysis.search_document import structure_document, structure_unknown
    from analysis.structure import cells_of, structure_of

    if not analysis.table.profiles.is_ordered:
        return {"search": asdict(choice), "structure": structure_unknown(analysis.table.profiles)}
    structure = structure_of(cells_of(analysis.table), tolerance=analysis.tolerance)
    return {
        "search": asdict(choice),
        "structure": structure_document(structure, analysis.table.profiles),
    }


def searched(request: Request, choice: Choice, tolerance: float, *, told: dict[str, Any]) -> dict[str, Any]:
    """Searches, writes what `--out` asks for, and returns the document; `told` is what it says besides."""
    from analysis.command.provenance import provenance, started
    from analysis.goals import goal_of, welfare_of
    from analysis.payoffs import profiles_of
    from analysis.search import best_reply_search, chain_solver
    from analysis.search_document import search_document, search_frame

    begun, profiles = started(), profiles_of(request.scenario, request.policy)
    found = best_reply_search(
        profiles,
        goal_of(request.scenario),
        welfare_of(request.scenario),
        chain_solver(request.scenario, request.policy, profiles),
        tolerance=tolerance,
        on_solved=_Told(profiles.cells),
    )
    document = request.heading | {"method": "exact", "engine": "exact chain"}
    document |= search_document(found) | {"search": asdict(choice)} | told
    if request.out is not None:
        folder = prepare_folder(request.out)
        write_result(folder, document, provenance(request, "game", begun, engine="exact chain"))
        search_frame(found).to_csv(folder / "table.csv", index=False)
    return document


class _Told:
    """A plain line every few seconds; how many cells a search will visit is not known beforehand."""

    def __init__(self, of_cells: int) -> None:
        self._done, self._of_cells, self._last = 0, of_cells, time.monotonic()

    def __call__(self) -> None:
        self._done += 1
        now = time.monotonic()
        if now - self._last >= SECONDS_BETWEEN_LINES:
            self._last = now
            told = (
                f"game --exact: {self._done:,} cells solved by search, of a table of {count(self._of_cells)}"
            )
            print(told, file=sys.stderr, flush=True)
