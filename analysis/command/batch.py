"""`brimline batch`: a long plan, run through the night, resumed by the same command."""

from __future__ import annotations

import json
from collections.abc import Iterator
from dataclasses import replace
from datetime import time as time_of_day
from pathlib import Path
from typing import Any

import click

from analysis.command.caution import CAUTION
from analysis.command.deadline import Deadline, deadline_of, deadline_options
from analysis.command.entry import CheckFailed, Interrupted, say
from analysis.command.options import ENGINES, request_of, require_cluster, require_folder
from analysis.command.output import put_caution, put_json, put_table, put_text
from analysis.command.progress import about
from analysis.command.usage import Checked
from sim.errors import BrimlineError


@click.command(cls=Checked, epilog=CAUTION)
@click.argument("plan", type=click.Path(path_type=Path))
@click.option(
    "--out", type=click.Path(path_type=Path, file_okay=False), help="Folder [default: results/PLAN]."
)
@deadline_options
@click.option(
    "--estimate", is_flag=True, help="Say what there is to do and how long it would take; run nothing."
)
@click.option(
    "--workers", type=click.IntRange(1, 1024), help="Worker processes [default: the cores, if worth it]."
)
@click.option(
    "--cluster",
    metavar="ADDRESS",
    help="Run on the machines of a cluster; see `brimline cluster --help`.",
)
@click.option(
    "--engine", type=click.Choice(ENGINES), help="Simulation engine [default: by the size of the job]."
)
@click.option(
    "--json", "as_json", is_flag=True, help="One JSON document on standard output, nothing else there."
)
def command(
    plan: Path,
    out: Path | None,
    until: time_of_day | None,
    hours: float | None,
    minutes: float | None,
    budget: int | None,
    estimate: bool,
    workers: int | None,
    cluster: str | None,
    engine: str | None,
    as_json: bool,
) -> None:
    """Run a PLAN of many scenarios and analyses, or the whole game of a SCENARIO; the same command again goes on.

    First a few replications of everything, then ever more: whenever it ends, every part has a result. One folder
    keeps all runs, so nothing is run twice, and `brimline results watch FOLDER` shows it from another terminal.
    """
    from analysis.command.batch_documents import folder_of
    from sim.store import Store

    deadline = deadline_of(until, hours, minutes, budget)
    title, batch = _read(plan, {"workers": workers, "engine": engine})
    folder, address = out or folder_of(plan), require_cluster(cluster, workers)
    require_folder(folder)
    with Store(folder, write=True) as store:
        state = _opened(store, batch, deadline, plan, title, others=address is not None)
        efforts = _efforts(batch, state, address)
        try:
            _tell_estimate(state)
            if estimate:
                state.close("planned", None)
                state.log("ended: an estimate only")
            else:
                _run(store, state, efforts)
        finally:
            _leave(efforts)
        document = state.document()
    if as_json:
        put_json(document)
    else:
        _show(document)
    if state.why == "interrupted":
        raise Interrupted
    without = (part["reached"] and part["result"] is None for part in document["parts"])
    if state.failures or (any(without) and not estimate):
        raise CheckFailed


# ---- before ----


def _read(file: Path, how: dict[str, Any]) -> tuple[str, Any]:
    """Title and batch of a plan, or of a scenario by itself; ScenarioError with every fault."""
    from analysis.batch import Batch
    from analysis.command.recorded import policies_of
    from analysis.plan import is_plan, plan_of_scenario, read_plan

    read = (read_plan if is_plan(file) else plan_of_scenario)(file, _request)
    batch = Batch()
    for part, request in read.parts:
        batch.add(part, replace(request, **how), policies_of(part.analysis, request))
    return read.title, batch


def _request(part: Any) -> Any:
    """What a part's own command line asks for; ScenarioError where its analysis could not be done."""
    from analysis.command.entry import brimline
    from analysis.game_tables import axes_of

    name, *arguments = part.arguments
    made = brimline.get_command(None, name).make_context(name, arguments)  # type: ignore[arg-type]
    request = request_of(made.params)
    if name == "game":
        axes_of(request.scenario, request.policy)
    return request


def _opened(store: Any, batch: Any, deadline: Deadline, plan: Path, title: str, *, others: bool) -> Any:
    """The batch held against the store, with its log begun."""
    from analysis.command.batch_state import State
    from sim.provenance import fingerprint

    here = json.dumps(fingerprint(), sort_keys=True)
    for stock in batch.stocks:
        stock.open(store, here, others=others)
    arguments = ["brimline", *(click.get_current_context().obj or ("batch", str(plan)))]
    state = State(batch, store.folder, deadline, plan=str(plan), title=title, command=arguments)
    state.log(f"begun: {' '.join(arguments)}")
    if store.left_by is not None:
        _tell(state, f"the writer before ({store.left_by}) ended without closing; what it had kept is here")
    restarted = sum(len(stock.job.restarted) for stock in batch.stocks)
    if restarted:
        _tell(
            state, f"{restarted} replications were begun on a machine with other bits and are run again whole"
        )
    for part, twin in batch.twins:
        state.log(f"{part.reads} is the same game as {twin.reads}")
    if batch.twins:
        said = "games are others again, for only the closure thresholds of their policies differ"
        say(f"{len(batch.twins)} {said}; batch.log names them")
    return state


def _tell(state: Any, text: str) -> None:
    """A notice to the one who waits and to the log."""
    say(text)
    state.log(text)


def _efforts(batch: Any, state: Any, address: str | None) -> dict[int, Any]:
    """How each stock that lacks runs is run, each chosen as if the whole batch were of its kind; one set of workers.

    address: of the cluster whose workers these are.
    """
    from analysis.command.running import effort, size_of

    whole, found = batch.missing, {}
    for place, stock in enumerate(batch.stocks):
        if stock.missing:
            cells = size_of(stock.job.shares())[1]
            request = next(piece.request for piece in batch.pieces if piece.stock is stock)
            found[place] = effort(request, -(-whole // cells), cells)
            stock.pace = found[place].pace
    most = max(found.values(), key=lambda one: one.count, default=None)
    if most is None:
        return {}
    workers = most.workers if address is None else _cluster(state, address)
    state.workers = count = most.count if address is None else workers.count
    return {
        id(batch.stocks[place]): replace(one, workers=workers, count=count) for place, one in found.items()
    }


def _cluster(state: Any, address: str) -> Any:
    """The cluster's workers, kept from one round to the next; the first is not waited for beyond the deadline."""
    from analysis.command.running import cluster_workers
    from sim.cluster import FIRST_SECONDS

    left = state.deadline.seconds_left
    return cluster_workers(
        address, notice=lambda text: _tell(state, text), watch=state.note, stays=True,
        first_seconds=FIRST_SECONDS if left is None else min(left, FIRST_SECONDS),
    )  # fmt: skip


def _tell_estimate(state: Any) -> None:
    batch, document = state.batch, state.document()
    parts = sum(piece.asked for piece in batch.pieces)
    shared = f" (its parts ask for {parts:,}; they share the others)" if parts > batch.asked else ""
    runs = document["runs"]
    _tell(
        state,
        f"{len(batch.pieces)} parts, {batch.asked:,} different runs{shared}; {runs['reused']:,} are in {state.folder} "
        f"already, {runs['missing']:,} to run: {about(document['seconds_left'] or 0.0)} with {state.workers} workers",
    )
    _tell(state, f"running {state.deadline.reads}")


def _leave(efforts: dict[int, Any]) -> None:
    """The cluster, if there is one."""
    for workers in {id(one.workers): one.workers for one in efforts.values()}.values():
        if hasattr(workers, "close"):
            workers.close()


# ---- while it runs ----


def _run(store: Any, state: Any, efforts: dict[int, Any]) -> None:
    """Runs what is missing, then writes every part's document and the summary."""
    from analysis.command.rounds import run_rounds
    from analysis.command.watching import Screen
    from sim.provenance import now

    number = _begin(store, state, efforts)
    state.start_work(state.workers)
    with Screen() as screen:

        def take(current: Any, reply: Any) -> None:
            failure = None if isinstance(reply, list) else reply
            count = len(reply) if failure is None else len(failure.cells)
            state.settle(current.mark, count, failure)
            screen.show(state.document)

        try:
            ended = run_rounds(_rounds(state, efforts), take=take, deadline=state.deadline)
        except BrimlineError as error:  # the store fails it, or the engine
            state.close("failed", str(error))
            state.log(f"failed: {error}")
            state.end()
            raise
        _close(state, ended.why)
        _write_documents(state, screen)
        store.end(number, now().isoformat(timespec="seconds"))
        state.end()


def _rounds(state: Any, efforts: dict[int, Any]) -> Iterator[Any]:
    """Each part's missing runs, in the batch's order; what is missing is looked up when a round's turn comes."""
    from analysis.command.rounds import Round

    for replications, piece in state.batch.rounds():
        shares = piece.shares(replications)
        if shares:
            stock = piece.stock
            state.enter(replications, piece)
            yield Round(stock.scenario, stock.policies, shares, efforts[id(stock)], stock.job, stock)


def _begin(store: Any, state: Any, efforts: dict[int, Any]) -> int:
    """Notes the batch in the store as one command with its parts."""
    from sim.provenance import now, provenance

    of_file: dict[str, dict[str, Any]] = {}
    parts = []
    for piece in state.batch.pieces:
        scenario, effort = piece.request.scenario, efforts.get(id(piece.stock))
        engine = piece.job.kept_engine() if effort is None else effort.engine.name
        if scenario.source.file not in of_file:
            base = provenance(scenario, command=[], engine=engine, started=now())
            of_file[scenario.source.file] = base | {"cwd": str(Path.cwd())}
        line = ["brimline", *piece.part.arguments]
        parts.append(of_file[scenario.source.file] | {"command": line, "engine": engine})
    origin = parts[0] | {"command": state.document()["command"], "parts": parts}
    number = store.begin(state.batch.stocks[0].job.scenario, origin, asked=state.asked, reused=state.reused)
    for stock in state.batch.stocks:
        stock.job.join(number)
    return number


def _close(state: Any, why: str | None) -> None:
    """Says how running ended, and what the clock did meanwhile."""
    from analysis.command.batch_state import WHY

    missing = state.document()["runs"]["missing"]
    if missing == 0:
        state.close("writing", None)
    else:
        state.close("writing", why or "failed")
    if state.deadline.clock_moved:
        _tell(state, state.deadline.clock_moved)
    said = (
        "every run is there"
        if missing == 0
        else f"{WHY.get(why or '', 'some runs failed')}; {missing:,} runs are missing"
    )
    _tell(state, said)


def _write_documents(state: Any, screen: Any) -> None:
    """Every part's document; a second Ctrl-C leaves the rest unwritten."""
    from analysis.command.batch_documents import write_document
    from analysis.command.progress import until_interrupted

    _tell(
        state,
        f"writing the results of {len(state.batch.pieces)} parts (Ctrl-C leaves them; nothing computed is lost)",
    )
    state.save()
    written = ((piece.part.name, write_document(piece, state)) for piece in state.batch.pieces)
    with until_interrupted(written) as results:
        for name, told in results:
            state.results[name] = told
            state.save()
            screen.show(state.document)
    why = "interrupted" if results.interrupted else state.why
    state.close("complete" if why is None else "failed" if why == "failed" else "stopped", why)
    for reason, names in _without_result(state.document()).items():
        state.log(f"no result yet for {', '.join(names)}: {reason}")
    state.log(f"ended: {state.state}")


# ---- after ----


def _show(document: dict[str, Any]) -> None:
    from analysis.command.watching import line, part_row

    put_text(document["title"] or "(no title)", line(document))
    put_table(
        "Parts", ("part", "priority", "replications", "runs missing", "time for them"),
        [part_row(part) for part in document["parts"]],
    )  # fmt: skip
    for reason, names in _without_result(document).items():
        put_text(f"No result yet for {names[0] if len(names) == 1 else f'{len(names)} parts'}: {reason}.")
    put_caution()


def _without_result(document: dict[str, Any]) -> dict[str, list[str]]:
    """Why parts have no result -> their names."""
    reasons: dict[str, list[str]] = {}
    for part in document["parts"]:
        if part["result"] is None:
            reasons.setdefault(part["reason"], []).append(part["name"])
    return reasons
