"""`brimline simulate`: one policy's measures with intervals."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import click

from analysis.command.controls import controls_of, controls_option, controls_sentence
from analysis.command.counterpart import (
    counterpart_document,
    counterpart_option,
    exact_counterpart,
    run_counterpart,
    show_counterpart,
)
from analysis.command.entry import CheckFailed, say
from analysis.command.options import Request, require_file_can_be_written, scenario_command
from analysis.command.output import (
    interval,
    prepare_folder,
    put_caution,
    put_heading,
    put_json,
    put_table,
    put_text,
    write_result,
)
from analysis.command.paths import (
    check_path_options,
    draw_paths,
    path_document,
    path_options,
    show_paths,
    tell,
)
from analysis.command.precise import aim_of, collect_until_precise, precision_options, show_precision
from sim.errors import Fault, ScenarioError


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
@precision_options
@path_options
@controls_option
@counterpart_option
def simulate(
    request: Request,
    trace: Path | None,
    intake_out: Path | None,
    replication: int,
    per_replication: bool,
    precision: float | None,
    precise: tuple[str, ...],
    warm_up_advice: bool,
    hour_of_week: bool,
    controls: bool,
    counterpart: bool,
) -> None:
    """Simulate one policy (the file's own, or --policy) and give its measures with intervals."""
    from analysis.command.provenance import provenance, started
    from analysis.command.running import collect_runs, finish
    from analysis.simulation import per_replication_measures, simulation_document, summarise
    from sim.scenario.describe import advice

    begun = started()
    _check_files(request, trace, intake_out)
    check_path_options(request, hour_of_week)
    aim = aim_of(request, precision, precise)
    for said in advice(request.scenario):
        say(f"advice: {said}")
    beside = exact_counterpart(request) if counterpart else None
    if aim is None:
        (runs, ran), reached = collect_runs(request, label="simulate", keep=True), None
    else:
        runs, ran, reached = collect_until_precise(request, aim, label="simulate")
    replications = [run.replication for run in runs]
    known = controls_of(request, replications, controls)
    also, checked = (None, None) if beside is None else run_counterpart(beside, request, replications)
    result = summarise(
        [run.record for run in runs],
        request.scenario,
        confidence=request.scenario.run.confidence,
        controls=known,
        counterpart=also,
    )
    document = (
        request.heading | simulation_document(result, request.scenario, request.policy, runs) | ran.to_dict()
    )
    if checked is not None:
        document["counterpart"] = counterpart_document(checked, used=also is not None)
    if per_replication:
        document["per_replication"] = per_replication_measures(runs, request.scenario)
    if reached is not None:
        document["precision"] = reached
    ran = _add_paths(document, request, runs, ran, warm_up=warm_up_advice, week=hour_of_week)
    if request.as_json:
        put_json(document)
    else:
        _show(document, request)
    if request.out is not None:
        origin = provenance(request, "simulate", begun, engine=ran.engine.name)
        write_result(prepare_folder(request.out), document, origin)
        draw_paths(document, {unit.name: unit.beds for unit in request.scenario.units}, request.out)
    if trace is not None or intake_out is not None:  # perhaps into that very folder
        _write_trace(request, ran.engine.name, replication, trace, intake_out)
    finish(ran)
    if checked is not None and not checked.agrees:
        raise CheckFailed


command = scenario_command(simulate)


def _add_paths(
    document: dict[str, Any], request: Request, runs: list[Any], ran: Any, *, warm_up: bool, week: bool
) -> Any:
    """Adds what is asked of the runs over time; gives how all was run. An interrupted run is not traced."""
    if ran.interrupted:
        return ran
    replications = [run.replication for run in runs]
    found, traced = path_document(request, replications, warm_up=warm_up, week=week)
    ran = replace(ran, interrupted=traced.interrupted, failures=[*ran.failures, *traced.failures])
    document |= found | ran.to_dict()
    tell(document)
    return ran


def _check_files(request: Request, trace: Path | None, intake_out: Path | None) -> None:
    """Faults of the files to be written, before anything runs."""
    if trace is not None and intake_out is not None and trace.resolve() == intake_out.resolve():
        rule, remedy = "must differ from --trace", "choose another file"
        raise ScenarioError([Fault(None, "--intake-out", rule, f"got {str(intake_out)!r} twice", remedy)])
    for option, path in (("--trace", trace), ("--intake-out", intake_out)):
        if path is not None and (request.out is None or path.parent.resolve() != request.out.resolve()):
            require_file_can_be_written(option, path, request)


def _write_trace(
    request: Request, engine: str, replication: int, trace: Path | None, intake_out: Path | None
) -> None:
    from sim.intake import write_intake, write_staffing
    from sim.replicate import trace_replication

    events, intake = trace_replication(request.scenario, request.policy, replication, engine=engine)
    if trace is not None:
        events.write(trace, request.scenario.unit_names)
    if intake_out is not None:
        groups = [group.group for group in request.scenario.patients]
        write_intake(intake, intake_out, groups=groups, units=list(request.scenario.unit_names))
        if intake.staffing is not None:
            write_staffing(
                intake.staffing, intake_out.with_suffix(".staffing.csv"), request.scenario.unit_names
            )


def _show(document: dict[str, Any], request: Request) -> None:
    from analysis.measures import NETWORK_MEASURES, UNIT_MEASURES

    put_heading(document)
    put_text(
        f"Policy: {document['policy']}; closure thresholds "
        + ", ".join(f"{name} {k}" for name, k in document["thresholds"].items()),
        f"{document['replications']} replications, {100 * document['confidence']:g} % intervals, "
        f"seed {document['seed']}, engine {document['engine']}",
        *controls_sentence(document),
        "",
    )
    show_counterpart(document)
    units = document["units"]
    put_table(
        "By unit (utilisation, times: shares, 0 to 1; marked h: the unit's own population, wherever treated)",
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
    if "precision" in document:
        show_precision(document["precision"])
    show_paths(document)
    put_caution()
