"""`brimline sweep`: equilibria and what selfish rules cost, over demand, targets and other axes."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import click

from analysis.command.controls import controls_option
from analysis.command.entry import CheckFailed, Interrupted, say
from analysis.command.options import FiniteRange, Request, scenario_command
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

MOST_ROWS = 100

exact_option = click.option("--exact", is_flag=True, help="The exact chain for every network.")
simulate_option = click.option("--simulate", "simulated", is_flag=True, help="Simulation for every network.")


@click.option("--demand", "demands", metavar="FROM:TO:POINTS", help="Factors on every arrival rate.")
@click.option("--target", "targets", metavar="FROM:TO:POINTS", help="Target utilisations, of every unit.")
@click.option("--beds", multiple=True, metavar="UNIT=FROM:TO", help="Staffed beds of a unit (repeatable).")
@click.option("--delay", metavar="FROM:TO:POINTS", help="Factors on the transfer delay.")
@click.option("--cv", metavar="FROM:TO:POINTS",
              help="Coefficients of variation, of stays whose family has one.")  # fmt: skip
@click.option("--soft", metavar="FROM:TO:POINTS", help="Shares that closed units still admit.")
@click.option("--transfer-weight", metavar="FROM:TO:POINTS",
              help="Welfare is then a loss: patients turned away + weight x transfers.")  # fmt: skip
@exact_option
@simulate_option
@click.option("--tolerance", type=FiniteRange(0), default=1e-9, show_default=True,
              help="Exact: regret still allowed in an equilibrium, in the goal's unit.")  # fmt: skip
@click.option("--epsilon", type=FiniteRange(0), metavar="X",
              help="Simulated: regret within which an equilibrium is confirmed [default: the gain that takes a manager "
                   "10 years of own data to notice].")  # fmt: skip
@controls_option
def sweep(
    request: Request, tolerance: float, epsilon: float | None, controls: bool, exact: bool, simulated: bool, **axes: Any
) -> None:  # fmt: skip
    """Equilibria and the price of anarchy over a grid of demands, targets and more.

    Every range includes both ends; one value stands for itself. Each network is simulated once, or solved by the exact
    chain where that has an answer, and all targets and transfer weights are read from the same runs.
    """
    from analysis.command.filling import fill, told_of
    from analysis.command.provenance import provenance, started
    from analysis.sweep_document import sweep_document

    begun = started()
    grid, networks = planned(request, {"exact": exact, "simulated": simulated} | axes)
    filling = fill(request, networks, label="sweep", controls=controls)
    points, interrupted = _points(request, filling, grid, tolerance=tolerance, epsilon=epsilon)
    document = request.heading | sweep_document(grid, networks, points) | told_of(filling, request)
    document["interrupted"] = interrupted = interrupted or filling.interrupted
    if not points:
        say("interrupted before any point was finished; with --out the same command goes on from there")
        raise Interrupted
    if request.as_json:
        put_json(document)
    else:
        _show(document)
    if request.out is not None:
        _write(request, document, provenance(request, "sweep", begun, engine=document["engine"]))
    if interrupted:
        say(
            f"interrupted; {len(points)} of {grid.points} points are here"
            + ("" if request.out is None else "; the same command goes on from there")
        )
        raise Interrupted
    if document["failed"]:
        raise CheckFailed


def texts_of(own: Mapping[str, Any]) -> Any:
    """The axes that a command's own options name."""
    from analysis.settings import Texts

    renamed = {"demand": own.get("demands"), "target": own.get("targets"), "beds": own.get("beds", ())}
    return Texts(
        **renamed, **{key: own.get(key) for key in ("delay", "cv", "soft", "transfer_weight") if key in own}
    )


def check(scenario: Any, own: Mapping[str, Any]) -> list[Any]:
    """Every fault of the command's own options."""
    from analysis.settings import grid_of
    from sim.errors import Fault

    faults: list[Any] = []
    grid_of(texts_of(own), scenario, faults)
    if own["exact"] and own["simulated"]:
        rule, remedy = "must not be given with --simulate", "give one of the two, or neither"
        faults.append(Fault(None, "--exact", rule, "got both", remedy))
    return faults


def planned(request: Request, own: Mapping[str, Any]) -> tuple[Any, list[Any]]:
    """The grid and its networks."""
    from analysis.filling import networks_of_sweep

    return networks_of_sweep(texts_of(own), request.scenario, request.policy, method_of(own))


def method_of(own: Mapping[str, Any]) -> str | None:
    """The method that is asked for, for all networks."""
    from analysis.sweeping import EXACT, SIMULATED

    return EXACT if own["exact"] else SIMULATED if own["simulated"] else None


def jobs(request: Request, own: Mapping[str, Any]) -> list[tuple[Any, Sequence[Any]]]:
    """Every network that the command keeps runs of, with its policies."""
    return _made_of(request, own, "simulated")


def exact_jobs(request: Request, own: Mapping[str, Any]) -> list[tuple[Any, Sequence[Any]]]:
    """Every network that the command keeps exact cells of, with its policies."""
    return _made_of(request, own, "exact")


def _made_of(request: Request, own: Mapping[str, Any], method: str) -> list[tuple[Any, Sequence[Any]]]:
    _, networks = planned(request, own)
    return [(one.scenario, one.policies) for one in networks if one.method == method]


command = scenario_command(sweep, own_axes=("demand", "target"), check=check)


def _points(request: Request, filling: Any, grid: Any, **wanted: Any) -> tuple[list[Any], bool]:
    """The points of all networks that are filled; Ctrl-C keeps those finished."""
    from analysis.command.progress import progress, until_interrupted
    from analysis.sweeping import points_of

    confidence = request.scenario.run.confidence
    every = (point for one in filling.filled for point in points_of(one, grid, confidence, **wanted))
    points: list[Any] = []
    total = len(filling.filled) * len(grid.targets) * len(grid.weights)
    with until_interrupted(every) as found, progress("points", total, "points") as bar:
        for point in found:
            points.append(point)
            bar.advance()
    return points, found.interrupted


def _write(request: Request, document: dict[str, Any], origin: dict[str, Any]) -> None:
    from analysis.figures_sweep import save_sweep
    from analysis.sweep_document import write_rows
    from analysis.sweeping import point_rows

    assert request.out is not None
    folder = prepare_folder(request.out)
    write_result(folder, document, origin)
    write_rows(folder / "points.csv", list(point_rows(document["points"])))
    save_sweep(document, folder)


def _show(document: dict[str, Any]) -> None:
    from analysis.findings import ONE_NETWORK

    put_heading(document)
    put_text(f"Goal: {document['goal']}. Welfare: {document['welfare']}.", *document["methods"], "")
    varied = document["varied"]
    rows = document["points"][:MOST_ROWS]
    put_table(
        "Price of anarchy and what comes with it (a day, network; refused and moved at the worst listed equilibrium "
        "and, after the slash, at the optimum)",
        (
            "point",
            *varied,
            _heading(document["points"]),
            "price of anarchy",
            "lost a year",
            "refused",
            "moved",
        ),
        [(str(place + 1), *_row(one, varied)) for place, one in enumerate(rows)],
    )
    if len(document["points"]) > MOST_ROWS:
        left = len(document["points"]) - MOST_ROWS
        put_text(f"... and {left} more (all are in --json and --out).")
    put_text(*(finding + "." for finding in document["findings"]))
    put_text("", ONE_NETWORK, *document["notes"])
    put_caution()


def _heading(points: Sequence[Mapping[str, Any]]) -> str:
    exact = all("count" in one["equilibria"] for one in points)
    return "equilibria" if exact else "equilibria (possible / confirmed)"


def _row(one: Mapping[str, Any], varied: Sequence[str]) -> list[str]:
    return [
        *(_axis(one, name) for name in varied),
        _sets(one["equilibria"]),
        sets_value(one["price_of_anarchy"], 4),
        sets_value(one["lost_per_year"], 1),
        *(_beside(one, key) for key in ("network_turned_away_per_day", "network_transfers_per_day")),
    ]


def _axis(one: Mapping[str, Any], name: str) -> str:
    value = one["beds"].get(name.removeprefix("beds of ")) if name.startswith("beds of ") else one[name]
    return "-" if value is None else f"{value:g}"


def _sets(sets: Mapping[str, Any]) -> str:
    if "count" in sets:
        return str(sets["count"])
    return f"{sets['possible']} / {number(sets['confirmed'])}"


def sets_value(value: Mapping[str, Any], digits: int) -> str:
    """An exact number bare; an interval without a point as its two ends."""
    from analysis.sweeping import tidy

    value = tidy(value)
    if value["low"] == value["high"]:
        return number(value["mean"], digits)
    if value["mean"] is None and value["low"] is not None:
        return f"{number(value['low'], digits)} to {number(value['high'], digits)}"
    return interval(value, digits)


def _beside(one: Mapping[str, Any], key: str) -> str:
    worst = one["worst_equilibrium"]
    return f"{'-' if worst is None else number(worst[key])} / {number(one['optimum'][key])}"
