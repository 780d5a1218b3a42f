"""`brimline align`: the lowest target at which every possible equilibrium is near the optimum."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import click

from analysis.command.controls import controls_option
from analysis.command.entry import CheckFailed, Interrupted, say
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
from analysis.command.sweep import exact_option, method_of, sets_value, simulate_option, texts_of

DEMAND, TARGET, WEIGHTS = "1", "0.5:0.95:10", "0:1:11"


@click.option("--demand", "demands", metavar="FROM:TO:POINTS", default=DEMAND, show_default=True,
              help="Factors on every arrival rate; the answer holds at all of them.")  # fmt: skip
@click.option("--target", "targets", metavar="FROM:TO:POINTS", default=TARGET, show_default=True,
              help="Target utilisations to try.")  # fmt: skip
@click.option("--per-unit", is_flag=True, help="Try every combination of targets by unit, not one for all.")
@click.option("--delta", metavar="D", default="0.5%", show_default=True,
              help="Loss that is near the optimum: patients (or welfare) a year, or a share of arrivals.")  # fmt: skip
@click.option("--transfer-weight", metavar="FROM:TO:POINTS",
              help=f"Weights over which the advice may turn [default: {WEIGHTS}; none with --per-unit].")  # fmt: skip
@exact_option
@simulate_option
@click.option("--tolerance", type=FiniteRange(0), default=1e-9, show_default=True,
              help="Exact: regret still allowed in an equilibrium, in the goal's unit.")  # fmt: skip
@controls_option
def align(request: Request, tolerance: float, controls: bool, **own: Any) -> None:
    """The lowest target, common or by unit, at which every possible equilibrium is near the optimum.

    The answer holds at every demand of the range together, with the confidence; stays as in the file and their
    exponential counterpart side by side, each exact where the chain has an answer. Targets that a unit cannot reach
    are no answer.
    """
    from analysis.alignment import Delta, Ruler, combinations, level_of, row_of
    from analysis.alignment_document import alignment_document
    from analysis.command.filling import Filling, fill, told_of
    from analysis.command.provenance import provenance, started
    from analysis.settings import read_delta

    begun = started()
    grid, planned = _planned(request, own)
    tries = combinations(grid.targets, len(request.scenario.units), per_unit=own["per_unit"])
    share, a_year = read_delta(own["delta"], [])
    run = request.scenario.run
    ruler = Ruler(Delta(share, a_year), level_of(run.confidence, len(tries)), run.confidence, tolerance)
    filling, rows = Filling(), []
    for stays, networks in planned:
        mine = fill(request, networks, label=f"align, stays {stays}", controls=controls)
        filling.add(mine)
        if len(mine.filled) < len(networks):
            break
        losses, stopped = _losses(mine.filled, tries, grid.weights, ruler)
        filling.interrupted = filling.interrupted or stopped
        if losses:
            rows.append(row_of(stays, mine.filled, losses, grid.weights))
        if filling.interrupted:
            break
    if not rows:
        _nothing(filling)
    document = request.heading | alignment_document(
        rows, grid.targets, grid.demands, ruler.delta, ruler.level, per_unit=own["per_unit"]
    )
    document |= told_of(filling, request)
    if request.as_json:
        put_json(document)
    else:
        _show(document)
    if request.out is not None:
        _write(request, document, provenance(request, "align", begun, engine=document["engine"]))
    if filling.interrupted:
        say("interrupted; only what was finished is here, over the targets that were tried by then")
        raise Interrupted
    if document["failed"]:
        raise CheckFailed


def _nothing(filling: Any) -> None:
    """Ends the command where no statement can be made."""
    if not filling.interrupted:
        say("too few replications were finished at some demand, so no statement can be made")
        raise CheckFailed
    say("interrupted before any statement could be made; with --out the same command goes on from there")
    raise Interrupted


def check(scenario: Any, own: Mapping[str, Any]) -> list[Any]:
    """Every fault of the command's own options."""
    from analysis.filling import combination_faults
    from analysis.settings import grid_of, read_delta
    from sim.errors import Fault

    faults: list[Any] = []
    grid = grid_of(texts_of(own), scenario, faults)
    read_delta(own["delta"], faults)
    if own["exact"] and own["simulated"]:
        rule, remedy = "must not be given with --simulate", "give one of the two, or neither"
        faults.append(Fault(None, "--exact", rule, "got both", remedy))
    faults += combination_faults(grid, scenario, per_unit=own["per_unit"])
    return faults


def _planned(request: Request, own: Mapping[str, Any]) -> tuple[Any, list[tuple[str, list[Any]]]]:
    """The grid, and the networks of each row: stays as in the file, and their exponential counterpart."""
    from analysis.filling import networks_of_alignment

    return networks_of_alignment(
        texts_of(own), request.scenario, request.policy, method_of(own), per_unit=own["per_unit"]
    )


def jobs(request: Request, own: Mapping[str, Any]) -> list[tuple[Any, Sequence[Any]]]:
    """Every network that the command keeps runs of, with its policies."""
    return _made_of(request, own, "simulated")


def exact_jobs(request: Request, own: Mapping[str, Any]) -> list[tuple[Any, Sequence[Any]]]:
    """Every network that the command keeps exact cells of, with its policies."""
    return _made_of(request, own, "exact")


def _made_of(request: Request, own: Mapping[str, Any], method: str) -> list[tuple[Any, Sequence[Any]]]:
    networks = [one for _, mine in _planned(request, own)[1] for one in mine]
    return [(one.scenario, one.policies) for one in networks if one.method == method]


command = scenario_command(align, own_axes=("demand", "target"), check=check)


def _losses(
    filled: Sequence[Any], tries: Sequence[Any], weights: Sequence[float], ruler: Any
) -> tuple[list[Any], bool]:
    """The losses of whole sets of targets; Ctrl-C keeps those finished."""
    from analysis.alignment import tried, whole
    from analysis.command.progress import progress, until_interrupted

    losses: list[Any] = []
    total = len(filled) * len(tries)
    with (
        until_interrupted(tried(filled, tries, weights, ruler)) as found,
        progress("targets", total, "targets and demands") as bar,
    ):
        for one in found:
            losses.append(one)
            bar.advance()
    return whole(losses, len(filled)), found.interrupted


def _write(request: Request, document: dict[str, Any], origin: dict[str, Any]) -> None:
    from analysis.figures_align import save_alignment

    assert request.out is not None
    folder = prepare_folder(request.out)
    write_result(folder, document, origin)
    if not save_alignment(document, folder):
        say("the picture is drawn for common targets only; all points are in result.json")


def _show(document: dict[str, Any]) -> None:
    put_heading(document)
    put_text(
        f"Welfare: {document['welfare']}. Near the optimum: a loss of at most {document['delta']['reads']}.",
        "",
    )
    for row in document["rows"]:
        put_table(
            f"Stays {row['stays']}: {row['methods']}; the demand named stands most in the way",
            ("target", "demand x", "lost a year", "allowed", "verdict", "occupied %", "moved a day", "refused a day"),
            [_overview(one) for one in row["overview"]],
        )  # fmt: skip
    put_text(*document["statements"], "", *document["notes"])
    put_caution()


def _overview(one: Mapping[str, Any]) -> list[str]:
    targets = list(one["targets"].values())
    named = [f"{target:g}" for target in targets]
    beside = one["comes_with"]
    return [
        named[0] if len(set(named)) == 1 else ", ".join(named),
        f"{one['worst_demand']:g}",
        sets_value(one["lost_per_year"], 1),
        f"{one['allowed_per_year']:.1f}",
        one["verdict"],
        *(beside[key] for key in ("occupied_percent", "moved_per_day", "turned_away_per_day")),
    ]
