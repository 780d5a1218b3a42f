"""`brimline simulate`: one policy's measures with intervals."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from analysis.command.entry import say
from analysis.command.options import Request, scenario_command
from analysis.command.output import (
    interval,
    prepare_folder,
    put_caution,
    put_json,
    put_table,
    put_text,
    write_result,
)


@click.option(
    "--trace", type=click.Path(path_type=Path, dir_okay=False), help="CSV of one replication's events."
)
@click.option(
    "--intake-out", type=click.Path(path_type=Path, dir_okay=False), help="CSV of that replication's intake."
)
@click.option(
    "--replication", type=click.IntRange(0, 999_999), default=0, show_default=True, help="Which one to trace."
)
@click.option("--per-replication", is_flag=True, help="Raw measures and hashes of each replication.")
def simulate(
    request: Request, trace: Path | None, intake_out: Path | None, replication: int, per_replication: bool
) -> None:
    """Simulate one policy (the file's own, or --policy) and give its measures with intervals."""
    from analysis.command.provenance import provenance, started
    from analysis.command.running import finish, require, run_replications
    from analysis.simulation import per_replication_measures, summarise
    from sim.record import hash_records
    from sim.scenario.describe import advice

    begun = started()
    for said in advice(request.scenario):
        say(f"advice: {said}")
    runs: list[Any] = []
    ran = run_replications(
        request,
        [request.policy],
        label="simulate",
        take=lambda reply: runs.extend(reply if isinstance(reply, list) else []),
    )
    require(len(runs), ran.interrupted)
    runs.sort(key=lambda run: run.replication)
    result = summarise(
        [run.record for run in runs], request.scenario, confidence=request.scenario.run.confidence
    )
    document = _heading(request) | result.to_dict() | {
        "replications": result.replications,
        "confidence": result.confidence,
        "seed": request.scenario.run.seed,
        "record_hash": hash_records([run.record.hash for run in runs]),
    } | ran.to_dict()  # fmt: skip
    if per_replication:
        document["per_replication"] = per_replication_measures(runs, request.scenario)
    if request.out is not None:
        write_result(
            prepare_folder(request.out),
            document,
            provenance(request, "simulate", begun, engine=ran.engine.name),
        )
    if trace is not None or intake_out is not None:  # perhaps into that very folder
        _write_trace(request, ran.engine.name, replication, trace, intake_out)
    if request.as_json:
        put_json(document)
    else:
        _show(document, request)
    finish(ran)


command = scenario_command(simulate)


def _heading(request: Request) -> dict[str, Any]:
    return {
        "scenario": request.scenario.title,
        "policy": request.policy.name,
        "thresholds": request.policy.thresholds,
    }


def _write_trace(
    request: Request, engine: str, replication: int, trace: Path | None, intake_out: Path | None
) -> None:
    from sim.intake import write_intake
    from sim.replicate import trace_replication

    events, intake = trace_replication(request.scenario, request.policy, replication, engine=engine)
    if trace is not None:
        events.write(trace, request.scenario.unit_names)
    if intake_out is not None:
        groups = [group.group for group in request.scenario.patients]
        write_intake(intake, intake_out, groups=groups, units=list(request.scenario.unit_names))


def _show(document: dict[str, Any], request: Request) -> None:
    from analysis.measures import NETWORK_MEASURES, UNIT_MEASURES

    put_text(
        document["scenario"] or "(no title)",
        f"Policy: {document['policy']}; closure thresholds "
        + ", ".join(f"{name} {k}" for name, k in document["thresholds"].items()),
        f"{document['replications']} replications, {100 * document['confidence']:g} % intervals, "
        f"seed {document['seed']}, engine {document['engine']}",
        "",
    )
    units = document["units"]
    put_table(
        "By unit (rates marked h count the unit's own population, wherever treated)",
        ("measure", *units),
        [
            (m.reads + (" (h)" if m.by_home else ""), *(interval(units[name][m.name]) for name in units))
            for m in UNIT_MEASURES
        ],
    )
    put_table(
        "Network", ("measure", "mean (low to high)"),
        [(m.reads, interval(document["network"][m.name])) for m in NETWORK_MEASURES],
    )  # fmt: skip
    put_caution()
