"""`brimline compare`: policies side by side on common intakes."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import click

from analysis.command.entry import say
from analysis.command.options import FiniteRange, Request, scenario_command
from analysis.command.output import prepare_folder, put_json, write_result
from sim.errors import Fault
from sim.wording import shown

LEAST = 2
MOST_REPLICATIONS = 10_000


@click.option("--policies", multiple=True, metavar="NAME[,NAME]",
              help="Policies to compare with the file's own rules [default: all of the file]; besides: equilibrium "
              "(worst possible), equilibrium (best possible), optimum, nobody closes early, own patients never "
              "refused, no sharing.")  # fmt: skip
@click.option("--game", "game_folder", type=click.Path(path_type=Path, exists=True, file_okay=False), metavar="FOLDER",
              help="Where `game --out` left the equilibria [default: solved exactly, where they can be].")  # fmt: skip
@click.option("--difference", type=FiniteRange(1e-6), metavar="D",
              help="Pick one policy: the least that matters, in patients (or welfare) a year.")  # fmt: skip
@click.option("--first-stage", type=click.IntRange(5, 10_000), default=20, show_default=True,
              help="Replications before --difference drops any policy.")  # fmt: skip
@click.option("--most", type=click.IntRange(5, 1_000_000), default=MOST_REPLICATIONS, show_default=True,
              help="Replications at which --difference gives up.")  # fmt: skip
@click.option("--years", type=click.IntRange(2, 1_000_000), metavar="N",
              help="Also run N years, for what the worst year in ten brings.")  # fmt: skip
@click.option("--input-uncertainty", type=click.IntRange(100, 100_000), metavar="B",
              help="Also resample recorded stays B times: what of the error no replication takes away.")  # fmt: skip
@click.option("--runs-each", type=click.IntRange(2, 10_000), default=5, show_default=True,
              help="Replications of each resampling.")  # fmt: skip
def compare(
    request: Request, policies: tuple[str, ...], game_folder: Path | None, difference: float | None,
    first_stage: int, most: int, years: int | None, input_uncertainty: int | None, runs_each: int,
) -> None:  # fmt: skip
    """Policies side by side: the same patients meet each of them, and every difference is paired.

    The file's own rules come first (with any --threshold or --incoming), then its policies, which may have beds of
    their own.
    """
    from analysis.command.compare_display import show
    from analysis.command.jobs import Jobs
    from analysis.command.provenance import provenance, started
    from analysis.command.running import finish, require
    from analysis.comparison import PairedRuns
    from analysis.comparison import compare as compared
    from analysis.comparison_document import comparison_document
    from analysis.simultaneous import rng_of
    from sim.record import hash_records
    from sim.scenario.describe import advice

    begun = started()
    cases = _cases(request, policies, game_folder)
    _check_observed(request, input_uncertainty)
    for said in advice(request.scenario):
        say(f"advice: {said}")
    run = request.scenario.run
    paired, jobs_done = PairedRuns(cases, run.replications, levels=True), Jobs(request)
    jobs_done.run(paired.groups, paired.taker, label="compare")
    require(len(paired.complete), jobs_done.interrupted, least=LEAST)
    sums, rng = paired.sums(), rng_of(run.seed)
    comparison = compared(cases, sums, run.confidence, rng)
    document = request.heading | comparison_document(comparison, sums, rng) | {
        "selection": _selection(jobs_done, comparison, paired.complete, difference, first_stage, most),
        "worst_year": _worst_year(jobs_done, cases, sums, years),
        "input_uncertainty": _input_share(jobs_done, comparison, input_uncertainty, runs_each),
        "replications": len(paired.complete), "confidence": run.confidence, "seed": run.seed,
        "record_hash": hash_records(paired.hashes()),
    }  # fmt: skip
    ran = jobs_done.joined()
    document |= ran.to_dict()
    if request.as_json:
        put_json(document)
    else:
        show(document)
    if request.out is not None:
        _write(request, document, provenance(request, "compare", begun, engine=ran.engine.name))
    finish(ran)


def _own_faults(scenario: Any, own: Mapping[str, Any]) -> list[Fault]:
    """An entry of --policies that names nothing; stages that end before they begin."""
    faults = []
    known = {row.name for row in scenario.policies}
    for entry in own["policies"]:
        if entry.strip() not in known and not all(part.strip() for part in entry.split(",")):
            remedy = "leave the option or the comma out"
            faults.append(Fault(None, "--policies", "must name a policy", f"got {shown(entry)}", remedy))
    if own["difference"] is not None and own["first_stage"] > own["most"]:
        got = f"got {own['first_stage']} and --most {own['most']}"
        faults.append(
            Fault(None, "--first-stage", "must not be above --most", got, "lower it, or raise --most")
        )
    return faults


command = scenario_command(compare, check=_own_faults)


def _cases(request: Request, policies: Sequence[str], game_folder: Path | None) -> list[Any]:
    from analysis.named_policies import cases_of
    from sim.scenario.policies import FILE_POLICY

    if request.policy.name != FILE_POLICY:
        raise click.BadOptionUsage("--policy", "compare takes --policies (with an s): one or more names")
    return cases_of(request.scenario, request.policy, policies, game_folder=game_folder)


def jobs(request: Request, own: Mapping[str, Any]) -> list[tuple[Any, Sequence[Any]]]:
    """Every network that the command keeps runs of, with its policies; own: the values of its own options."""
    from analysis.comparison import grouped
    from analysis.worst_year import one_year_each

    cases = _cases(request, own["policies"], own["game_folder"])
    years = [] if own["years"] is None else one_year_each(cases, own["years"])
    return [(one.scenario, one.policies) for one in [*grouped(cases), *(grouped(years) if years else [])]]


def _selection(
    jobs_done: Any,
    comparison: Any,
    replications: Sequence[int],
    difference: float | None,
    first_stage: int,
    most: int,
) -> dict[str, Any] | None:
    """Runs the policies still in until one is selected, or --most replications are reached."""
    from analysis.comparison_document import selection_document
    from analysis.selecting import Race

    if difference is None or jobs_done.interrupted:
        return None
    race = Race(comparison, replications, difference, first_stage, most)
    while (stage := race.next_stage()) is not None:
        jobs_done.run(stage.groups, stage.taker, label="select", start=stage.start)
        if jobs_done.interrupted:
            break
    return selection_document(race)


def _worst_year(
    jobs_done: Any, cases: Sequence[Any], sums: Sequence[Any], years: int | None
) -> dict[str, Any] | None:
    """Runs of a year each; without --years those of the comparison, where they are of a year."""
    from analysis.comparison import PairedRuns
    from analysis.comparison_document import bad_year_document
    from analysis.worst_year import measures_a_year, one_year_each

    if jobs_done.interrupted or (years is None and not measures_a_year(cases[0].scenario)):
        return None
    if years is not None:
        cases = one_year_each(cases, years)
        paired = PairedRuns(cases, years)
        jobs_done.run(paired.groups, paired.taker, label="years")
        if len(paired.complete) < LEAST:
            return None
        sums = paired.sums()
    return bad_year_document(cases, sums, jobs_done.request.scenario.run.confidence)


def _check_observed(request: Request, resamples: int | None) -> None:
    """A fault where there is nothing to resample."""
    from analysis.input_uncertainty import require_observed

    if resamples is not None:
        require_observed(request.scenario)


def _input_share(
    jobs_done: Any, comparison: Any, resamples: int | None, runs_each: int
) -> dict[str, Any] | None:
    """Runs on resampled records, for the share of the error that comes from the data."""
    from analysis.command.running import run_resampled
    from analysis.input_uncertainty import Resampling, input_document

    if resamples is None or jobs_done.interrupted:
        return None
    resampling = Resampling(comparison.cases, resamples, runs_each)
    jobs_done.add(run_resampled(jobs_done.request, resampling))
    return input_document(resampling, comparison)


def _write(request: Request, document: dict[str, Any], origin: dict[str, Any]) -> None:
    from analysis.figures_policies import save_comparison

    assert request.out is not None
    folder = prepare_folder(request.out)
    write_result(folder, document, origin)
    save_comparison(document, folder)
