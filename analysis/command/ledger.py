"""`brimline ledger`: who pays for whose closure."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import click

from analysis.command.options import Request, scenario_command
from analysis.command.output import (
    interval,
    number,
    prepare_folder,
    put_caution,
    put_heading,
    put_json,
    put_table,
    put_text,
    write_result,
)

LEAST = 2
MOST_SHOWN = 30


@click.option("--traced", type=click.IntRange(1, 10_000), default=3, show_default=True,
              help="Replications that are followed patient by patient.")  # fmt: skip
@click.option("--episode", type=click.IntRange(1), metavar="N",
              help="One closing alone: the N-th of --unit, its gate held open to its own patients.")  # fmt: skip
@click.option("--unit", metavar="UNIT", help="Whose episode.")
@click.option("--replication", type=click.IntRange(0, 999_999), default=0, show_default=True,
              help="Which replication the episode is of.")  # fmt: skip
def ledger(request: Request, traced: int, episode: int | None, unit: str | None, replication: int) -> None:
    """What each unit's early closing costs each home, and whom it displaces.

    One unit at a time closes, to anybody, only when full; all else stays, and both runs meet the same patients.
    """
    from analysis.command.jobs import Jobs
    from analysis.command.provenance import provenance, started
    from analysis.command.running import finish, require
    from analysis.comparison import PairedRuns
    from analysis.ledger import cases_without, costs, ledger_document
    from analysis.simultaneous import rng_of
    from sim.record import hash_records

    begun = started()
    _check_episode(request, episode, unit)
    scenario, run = request.scenario, request.scenario.run
    cases = cases_without(scenario, request.policy)
    paired, done = PairedRuns(cases, run.replications), Jobs(request)
    done.run(paired.groups, paired.taker, label="ledger")
    require(len(paired.complete), done.interrupted, least=LEAST)
    matrix = costs(scenario, paired.sums(), run.confidence, rng_of(run.seed))
    tracing, followed = _traced(done, cases, min(traced, run.replications))
    document = request.heading | ledger_document(
        scenario, request.policy, matrix, tracing.displaced() if followed else [], followed
    ) | {
        "episode": _episode(tracing, episode, unit, replication),
        "replications": len(paired.complete), "confidence": run.confidence, "seed": run.seed,
        "record_hash": hash_records(paired.hashes()),
    }  # fmt: skip
    ran = done.joined()
    document |= ran.to_dict()
    if request.as_json:
        put_json(document)
    else:
        _show(document)
    if request.out is not None:
        _write(request, document, provenance(request, "ledger", begun, engine=ran.engine.name))
    finish(ran)


command = scenario_command(ledger)


def jobs(request: Request, own: Mapping[str, Any]) -> list[tuple[Any, Sequence[Any]]]:
    """The network that the command keeps runs of, with its policies."""
    from analysis.ledger import cases_without

    cases = cases_without(request.scenario, request.policy)
    return [(request.scenario, [case.policy for case in cases])]


def _check_episode(request: Request, episode: int | None, unit: str | None) -> None:
    from sim.errors import Fault, ScenarioError
    from sim.wording import nearest, shown

    if (episode is None) != (unit is None):
        missing = "--unit" if unit is None else "--episode"
        raise click.BadOptionUsage(missing, "--episode N needs --unit UNIT, and --unit needs --episode")
    if unit is not None and unit not in request.scenario.unit_names:
        fault = Fault(None, "--unit", "must name a unit of the scenario", f"got {shown(unit)}",
                      nearest(unit, request.scenario.unit_names))  # fmt: skip
        raise ScenarioError([fault], request.scenario.source.file)


def _traced(done: Any, cases: Sequence[Any], traced: int) -> tuple[Any, int]:
    """The tracing, and how many replications it has followed."""
    from analysis.command.progress import progress, until_interrupted
    from analysis.ledger import Tracing

    tracing = Tracing(done.request.scenario, cases, done.joined().engine.name)
    if done.interrupted:
        return tracing, 0
    followed = 0
    replies = until_interrupted(one for one in range(traced))
    with replies, progress("following patients", traced, "replications") as bar:
        for replication in replies:
            tracing.trace(replication)
            followed += 1
            bar.advance()
    if replies.interrupted:
        done.interrupt()
    return tracing, followed


def _episode(tracing: Any, episode: int | None, unit: str | None, replication: int) -> dict[str, Any] | None:
    """One closing alone; a fault where there are not so many."""
    from sim.errors import Fault, ScenarioError

    if episode is None:
        return None
    spans = tracing.episodes(unit, replication)
    if episode > len(spans):
        rule, got = (
            f"must be one of the {len(spans)} closings of {unit} in replication {replication}",
            f"got {episode}",
        )
        remedy = "choose an earlier one" if spans else "choose a unit, a policy or a replication that closes"
        raise ScenarioError([Fault(None, "--episode", rule, got, remedy)], tracing.scenario.source.file)
    start, end = spans[episode - 1]
    return {
        "unit": unit, "replication": replication, "number": episode, "of": len(spans), "from_day": start,
        "until_day": end, "displaced": tracing.episode(unit, spans[episode - 1], replication),
    }  # fmt: skip


def _write(request: Request, document: dict[str, Any], origin: dict[str, Any]) -> None:
    from analysis.figures_policies import save_ledger

    assert request.out is not None
    folder = prepare_folder(request.out)
    write_result(folder, document, origin)
    save_ledger(document, folder)


def _show(document: dict[str, Any]) -> None:
    put_heading(document)
    put_text(
        f"Policy: {document['policy']}; {document['replications']} paired replications, "
        f"{100 * document['confidence']:g} % bands that hold for all at once",
        "",
    )
    _show_matrix(document, "turned away")
    _show_matrix(document, "moved")
    for finding in document["findings"]:
        put_text(finding["statement"] + ".")
    put_text("")
    _show_displaced(document)
    _show_episode(document["episode"])
    put_text(
        "Later patients are displaced too, because beds are taken or free otherwise than they would have been."
    )
    put_caution()


def _show_matrix(document: dict[str, Any], counted: str) -> None:
    homes = [*document["units"], "network"]
    cells = {(one["closes"], one["home"]): one for one in document["matrix"] if one["counted"] == counted}

    def cell(unit: str, home: str) -> str:
        one = cells[unit, home]
        return interval(one["a_year"], 1) + ("" if one["verdict"] == "cannot be told apart" else " *")

    put_table(
        f"More patients {counted} a year because a unit closes early (columns: whose patients; * told apart from 0)",
        ("unit that closes", *homes),
        [
            (unit + ("" if document["closes_early"][unit] else " (does not)"), *(cell(unit, home) for home in homes))
            for unit in document["units"]
        ],
    )  # fmt: skip


def _show_displaced(document: dict[str, Any]) -> None:
    rows = document["displaced"]
    put_table(
        f"Whom it displaces (replications followed patient by patient: {document['traced_replications']})",
        ("unit that closes", "group", "home", "without the closing", "with it", "patients a year"),
        [
            (one["closes"], one["group"], one["home"], one["without"], one["now"], number(one["a_year"], 1))
            for one in rows[:MOST_SHOWN]
        ],
    )
    if len(rows) > MOST_SHOWN:
        put_text(f"... and {len(rows) - MOST_SHOWN} more (all are in --json and --out).")


def _show_episode(found: dict[str, Any] | None) -> None:
    if found is None:
        return
    put_table(
        f"Closing {found['number']} of {found['of']} of {found['unit']} in replication {found['replication']}, day "
        f"{found['from_day']:.2f} to {found['until_day']:.2f}: whom it displaced",
        ("patient", "arrives on day", "group", "home", "without it", "with it"),
        [
            (
                one["patient"],
                number(one["arrival_days"], 2),
                one["group"],
                one["home"],
                one["without"],
                one["now"],
            )
            for one in found["displaced"][:MOST_SHOWN]
        ],
    )
    if not found["displaced"]:
        put_text("Nobody.")
    if len(found["displaced"]) > MOST_SHOWN:
        put_text(f"... and {len(found['displaced']) - MOST_SHOWN} more (all are in --json and --out).")
