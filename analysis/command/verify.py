"""`brimline verify`: the simulation against the exact chain."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import click

from analysis.command.counterpart import counterpart_scenario
from analysis.command.entry import CheckFailed, say
from analysis.command.options import FiniteRange, Request, scenario_command
from analysis.command.output import (
    prepare_folder,
    put_caution,
    put_heading,
    put_json,
    put_table,
    put_text,
    write_result,
)
from analysis.command.phase_fit import fitted, option, show_fits


@option
@click.option(
    "--false-alarm-rate", type=FiniteRange(0, 0.5, min_open=True), default=None,
    help="Chance that a correct simulator is refused [default: 0.01, or 1 - --confidence where that is given].",
)  # fmt: skip
@click.option(
    "--counterpart", is_flag=True,
    help="Verify the exponential counterpart, and show what the scenario itself gives beside it.",
)  # fmt: skip
def verify(
    request: Request, false_alarm_rate: float | None, phase_fit: int | None, counterpart: bool
) -> None:
    """Hold the simulation against the exact chain, measure by measure; status 1 if they disagree.

    With --phase-fit N both have the fitted stays, so that a difference is the program's and not the fit's.
    With --counterpart a scenario beyond the chain is simulated beside its exponential counterpart, by the same draws.
    """
    from analysis.chain import solve
    from analysis.command.provenance import provenance, started
    from analysis.command.running import collect_runs, finish
    from analysis.verification import FALSE_ALARM_RATE, LEAST_REPLICATIONS, require_replications
    from analysis.verification import verify as compare
    from sim.scenario.describe import advice

    begun = started()
    itself = request
    request, told = _counterpart_of(request, phase_fit) if counterpart else fitted(request, phase_fit)
    require_replications(request.scenario)
    too_short = [said for said in advice(request.scenario) if "warm_up" in said]
    for said in too_short:
        say(f"advice: {said}")
    exact = solve(request.scenario, request.policy)
    runs, ran = collect_runs(request, label="verify", least=LEAST_REPLICATIONS)
    rate = false_alarm_rate or (
        1 - request.confidence if request.confidence is not None else FALSE_ALARM_RATE
    )
    result = compare([run.record for run in runs], exact, request.scenario, false_alarm_rate=rate)
    told |= _beside(itself, exact) if counterpart else {}
    document = request.heading | {"thresholds": request.policy.thresholds} | result.to_dict() | {
        "states": exact.states, "seed": request.scenario.run.seed,
    } | ran.to_dict() | told  # fmt: skip
    if request.as_json:
        put_json(document)
    else:
        _show(document)
    if request.out is not None:
        from analysis.figures import save_verification

        folder = prepare_folder(request.out)
        write_result(folder, document, provenance(request, "verify", begun, engine=ran.engine.name))
        save_verification(document, folder)
    if too_short and not result.agrees:
        say("the run starts from an empty network: lengthen the warm-up before blaming the program")
    finish(ran)
    if not result.agrees:
        raise CheckFailed


command = scenario_command(verify)


def _counterpart_of(request: Request, phase_fit: int | None) -> tuple[Request, dict[str, Any]]:
    """The request for the exponential counterpart."""
    if phase_fit is not None:
        raise click.BadOptionUsage(
            "--counterpart",
            "--counterpart: cannot go with --phase-fit, which replaces stays too; leave one out",
        )
    return replace(request, scenario=counterpart_scenario(request)), {}


def _beside(request: Request, exact: Any) -> dict[str, Any]:
    """What the scenario itself gives for every measure, in the same order; it is not held against the chain."""
    from analysis.command.running import collect_runs
    from analysis.verification import LEAST_REPLICATIONS, alike

    runs, _ = collect_runs(request, label="the scenario itself", least=LEAST_REPLICATIONS)
    confidence = request.scenario.run.confidence
    found = alike([run.record for run in runs], exact, request.scenario, confidence)
    return {
        "scenario_itself": {
            "replications": len(runs), "confidence": confidence, "measures": [one.to_dict() for one in found],
        }
    }  # fmt: skip


def _show(document: dict[str, Any]) -> None:
    put_heading(document)
    put_text("")
    show_fits(document)
    beside = document.get("scenario_itself")
    itself = () if beside is None else ("scenario itself",)
    own_means = (
        [None] * len(document["measures"]) if beside is None else [one["mean"] for one in beside["measures"]]
    )
    put_table(
        f"Simulation ({document['replications']} replications) against the exact chain ({document['states']} states)",
        ("where", "measure", "exact", "simulated", "limits from", "to", "z", "verdict", *itself),
        [
            (
                one["where"],
                _reads(one["measure"]),
                one["exact"],
                one["mean"],
                one["low"],
                one["high"],
                one["z"],
                _verdict(one),
                *([] if not itself else [own]),
            )
            for one, own in zip(document["measures"], own_means, strict=True)
        ],
    )
    off = [one for one in document["measures"] if not one["agrees"]]
    rate, critical = document["false_alarm_rate"], document["critical_z"]
    said = (
        "The simulation agrees with the exact chain"
        if document["agrees"]
        else f"{len(off)} measures DISAGREE"
    )
    put_text(
        f"{said}: every |z| is compared with {critical:.2f} (Student, Bonferroni over all measures tested); a correct "
        f"simulator would be refused with a chance of at most {rate:g}.",
        "This verifies the program against the model; it says nothing of how well the model fits a real network.",
    )
    if beside is not None:
        put_text(
            "What is tested is the exponential counterpart. The scenario itself, simulated by the same draws, stands "
            "beside it and is not tested: no exact answer is known for its own stays, delays and rhythms."
        )
    put_caution()


def _reads(measure: str) -> str:
    """The measure in words; occupancy levels are named as they are."""
    from analysis.measures import NETWORK_MEASURES, UNIT_MEASURES

    known = {one.name: one.reads for one in (*NETWORK_MEASURES, *UNIT_MEASURES)}
    return known.get(measure, measure)


def _verdict(one: dict[str, Any]) -> str:
    if not one["agrees"]:
        return "DISAGREES"
    return "agrees" if one["z"] is not None else "not tested"
