"""What `simulate` shows of runs over time: the warm-up they need, the hours of the week, batches of a single run."""

from __future__ import annotations

import time
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import click

from analysis.command.entry import say
from analysis.command.options import Request
from analysis.command.output import interval, number, put_table, put_text
from sim.errors import Fault, ScenarioError

MOST_TRACED = 200  # replications: their bands are narrow, and traces take time
TRACED_BY = "reference"  # an event costs as much in either engine once it is told, and this one loads at once
DAYS = ("Monday", "Tuesday", "Wednesday", "Thursday", "Friday", "Saturday", "Sunday")


@dataclass
class Traced:
    """The paths as far as they came, what failed, and whether Ctrl-C ended it."""

    paths: list[Any] = field(default_factory=list)
    failures: list[Any] = field(default_factory=list)
    interrupted: bool = False


def path_options(function: Any) -> Any:
    """Adds --warm-up-advice and --hour-of-week."""
    warm_up = click.option(
        "--warm-up-advice", is_flag=True, help="How long the warm-up should be, from the runs' own start."
    )
    week = click.option(
        "--hour-of-week", is_flag=True, help="Mean occupied beds in each of the week's 168 hours, with bands."
    )
    return warm_up(week(function))


def check_path_options(request: Request, hour_of_week: bool) -> None:
    """Faults of what the options ask for, before anything runs."""
    days = request.scenario.run.measured_days
    if hour_of_week and days < 7:
        rule, remedy = "must be at least 7 for --hour-of-week", "raise it, to whole weeks at best"
        source = str(request.scenario.source.file)
        raise ScenarioError([Fault(None, "run.measured_days", rule, f"got {days:g}", remedy)], source)


def path_document(
    request: Request, replications: list[int], *, warm_up: bool, week: bool
) -> tuple[dict[str, Any], Traced]:
    """What the options ask for, of these replications traced again, and how that went.

    One replication alone gets batch means. The document is empty where nothing is asked for.
    """
    grids = _grids(request.scenario, warm_up, week, single=len(replications) == 1)
    if not grids and not warm_up:
        return _no_batches(request, replications), Traced()
    traced = _trace(request, replications[:MOST_TRACED], grids) if grids else Traced()
    if grids and not traced.paths:
        return {"paths_missing": "interrupted, or failed, before any replication was traced"}, traced
    document = _documents(request.scenario, traced.paths, grids, warm_up)
    return document | _no_batches(request, replications), traced


def _grids(scenario: Any, warm_up: bool, week: bool, *, single: bool) -> dict[str, Any]:
    """The grids of time that the documents need, by name."""
    from analysis import batch_means, hour_of_week
    from analysis import warm_up as start

    asked = {
        start.GRID: start.start_grid(scenario) if warm_up else None,
        hour_of_week.GRID: hour_of_week.week_grid(scenario) if week else None,
        batch_means.GRID: batch_means.batch_grid(scenario) if single else None,
    }
    return {name: grid for name, grid in asked.items() if grid is not None}


def _no_batches(request: Request, replications: list[int]) -> dict[str, Any]:
    from analysis.batch_means import batch_grid, too_short

    if len(replications) != 1 or batch_grid(request.scenario) is not None:
        return {}
    return {"batch_means": {"batches": None, "reason": too_short(request.scenario)}}


def _documents(scenario: Any, paths: list[Any], grids: dict[str, Any], warm_up: bool) -> dict[str, Any]:
    from analysis import batch_means, hour_of_week
    from analysis.warm_up import advise_warm_up

    document: dict[str, Any] = {}
    if warm_up:
        document["warm_up_advice"] = advise_warm_up(paths, scenario).to_dict()
    if hour_of_week.GRID in grids:
        document |= hour_of_week.week_of(paths, scenario).to_dict()
    if batch_means.GRID in grids:
        grid = grids[batch_means.GRID]
        document["batch_means"] = batch_means.batch_document(paths[0], scenario, grid)
    return document


def _trace(request: Request, replications: list[int], grids: dict[str, Any]) -> Traced:
    """The paths as far as they came; the first one here, to see what the others will take."""
    engine = request.engine or TRACED_BY
    from analysis.command.progress import progress, until_interrupted
    from analysis.command.running import WORTH_PROCESSES_SECONDS
    from analysis.paths import measure_paths
    from sim.replicate import Failure
    from sim.workers import available_cores, local_workers

    def replies() -> Any:
        started = time.perf_counter()
        yield from measure_paths(request.scenario, request.policy, replications[:1], grids, engine=engine)
        left = (time.perf_counter() - started) * (len(replications) - 1)
        count = request.workers or (available_cores() if left > WORTH_PROCESSES_SECONDS else 1)
        yield from measure_paths(
            request.scenario,
            request.policy,
            replications[1:],
            grids,
            engine=engine,
            workers=local_workers(count),
        )

    traced, found = Traced(), until_interrupted(replies())
    with found, progress("paths", len(replications), "replications") as bar:
        for reply in found:
            if isinstance(reply, Failure):
                say(f"failed: {reply}")
                traced.failures.append(reply)
            else:
                traced.paths.append(reply)
            bar.advance()
    traced.interrupted = found.interrupted
    if found.interrupted and traced.paths:
        say(f"interrupted; {len(traced.paths)} traced replications are kept")
    return traced


def tell(document: dict[str, Any]) -> None:
    """Notices on standard error."""
    if "paths_missing" in document:
        say(f"nothing is known of the runs over time: {document['paths_missing']}")
    if (notice := document.get("warm_up_advice", {}).get("notice")) is not None:
        say(f"advice: {notice}")
    for doubtful in document.get("batch_means", {}).get("doubtful", []):
        say(
            f"batch means of {doubtful} depend on each other: the interval is too narrow; run longer, or more often"
        )


def show_paths(document: dict[str, Any]) -> None:
    """The same as tables and sentences."""
    if "warm_up_advice" in document:
        _show_warm_up(document["warm_up_advice"])
    if "hour_of_week" in document:
        _show_week(document["hour_of_week"], document["hour_of_week_basis"])
    if "batch_means" in document:
        _show_batches(document["batch_means"])


def _show_warm_up(advice: dict[str, Any]) -> None:
    cuts = "; ".join(
        f"{name} {'not settled' if cut is None else f'{cut:g} days'}"
        for name, cut in advice["cut_days"].items()
    )
    put_text(
        f"Warm-up: {advice['present_days']:g} days in the scenario; "
        + (f"advised {advice['days']:g} days." if advice["days"] is not None else "no advice."),
        f"  Cut by MSER-5 on the average of {advice['replications']} runs: {cuts or 'none'}; five mean stays are "
        f"{advice['mean_stays_days']:.1f} days.",
        *([f"  {advice['notice'][0].upper()}{advice['notice'][1:]}."] if advice["notice"] else []),
        "",
    )


def _show_week(week: dict[str, Any], basis: dict[str, Any]) -> None:
    """Every sixth hour as a table, for all 168 are in the document and the picture."""
    for unit, hours in week.items():
        put_table(
            f"Mean occupied beds of {unit} by hour of the week ({basis['method'][unit] or 'no band'}: all 168 hours at "
            "once; every sixth is shown)",
            ("day", *(f"{hour:02d}:00" for hour in range(0, 24, 6))),
            [
                (day, *(interval(hours[24 * place + hour], 2) for hour in range(0, 24, 6)))
                for place, day in enumerate(DAYS)
            ],
        )


def _show_batches(found: dict[str, Any]) -> None:
    if found["batches"] is None:
        put_text(f"No intervals: {found['reason']}.")
        return
    rows = [
        (where, measure.replace("_", " "), interval(one), number(one["lag1_correlation"], 2))
        for where, each in {**found["units"], "network": found["network"]}.items()
        for measure, one in each.items()
    ]
    put_table(
        f"Batch means of the one run: {found['batches']} batches of {found['batch_days']:.4g} days",
        ("where", "measure", "mean (low to high)", "correlation of neighbours"), rows,
    )  # fmt: skip


def draw_paths(document: dict[str, Any], beds: dict[str, int], folder: Path) -> None:
    """The pictures of what the document holds."""
    from analysis import figures_paths

    if document.get("warm_up_advice", {}).get("path"):
        figures_paths.save_warm_up(document["warm_up_advice"], beds, folder)
    if "hour_of_week" in document:
        figures_paths.save_hour_of_week(document["hour_of_week"], document["hour_of_week_basis"], folder)
