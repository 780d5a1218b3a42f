"""`brimline game`: the payoff table, its equilibria, the optimum and what selfish rules cost."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import asdict, replace
from typing import Any

import click

from analysis.command import racing
from analysis.command.central import beside, best_rule, show_control, write_rule
from analysis.command.controls import controls_of, controls_option, controls_sentence
from analysis.command.counterpart import (
    counterpart_option,
    counterpart_scenario,
    run_counterpart_table,
    show_counterpart,
)
from analysis.command.deadline import deadline_of, deadline_options
from analysis.command.entry import CheckFailed, Interrupted, say
from analysis.command.game_beyond import (
    beyond_options,
    look_beyond,
    require_a_table,
    show_beyond,
    write_pictures,
)
from analysis.command.options import FiniteRange, Request, scenario_command
from analysis.command.output import (
    count,
    interval,
    number,
    prepare_folder,
    put_caution,
    put_grid,
    put_heading,
    put_json,
    put_table,
    put_text,
    write_result,
)
from analysis.command.phase_fit import fitted, option, show_fits

COLUMNS_AT_ONCE = 20
MOST_LISTED = 25
LONG_YEARS = 100  # of watching, beyond which the number says nothing more


@option
@click.option("--exact", is_flag=True, help="Solve every cell by the exact chain instead of simulating it.")
@click.option("--tolerance", type=FiniteRange(0), default=1e-9, show_default=True,
              help="Regret still allowed in an equilibrium, in the goal's unit.")  # fmt: skip
@click.option("--epsilon", type=FiniteRange(0), metavar="X",
              help="Simulated: regret within which an equilibrium is confirmed, in the goal's unit [default: the gain "
                   "that takes a manager 10 years of own data to notice].")  # fmt: skip
@racing.race_option
@deadline_options
@controls_option
@counterpart_option
@click.option("--control", is_flag=True, help="With --exact: also the best rule that sees the whole network.")
@click.option("--search", type=click.Choice(["table", "best_reply"]),
              help="With --exact: full table, or best-reply search from both ends [default: by cost].")  # fmt: skip
@beyond_options
def game(
    request: Request, exact: bool, tolerance: float, epsilon: float | None, controls: bool, counterpart: bool,
    control: bool, search: str | None, phase_fit: int | None, race: bool | None, until: Any, hours: float | None,
    minutes: float | None, budget: int | None, **wanted: Any,
) -> None:  # fmt: skip
    """Payoff table, best responses, equilibria, optimum, and the prices of anarchy and stability.

    Players are the units, or whoever runs several; a strategy is a closure threshold, or any rule that the scenario
    lists values of. Every cell of the table meets the same patients.
    With --exact, --phase-fit N gives near-exact payoffs for stays that the chain cannot count.
    """
    from analysis.command import game_search
    from analysis.command.provenance import provenance, started
    from analysis.command.running import finish
    from analysis.game_document import game_document
    from analysis.games import analyse

    begun, deadline = started(), deadline_of(until, hours, minutes, budget)
    bounds = {"until": until, "hours": hours, "minutes": minutes, "budget": budget}
    if search is not None and not exact:
        raise click.BadOptionUsage("--search", "--search is for --exact only")
    if exact and epsilon is not None:
        raise click.BadOptionUsage(
            "--epsilon", "--epsilon is for simulated games; with --exact use --tolerance"
        )
    if exact and counterpart:
        raise click.BadOptionUsage(
            "--counterpart", "--counterpart is for simulated games; --exact needs none"
        )
    if control and search == game_search.BEST_REPLY:
        raise click.BadOptionUsage("--search", "--control is compared with a full table, not with a search")
    if phase_fit is not None and not exact:
        raise click.UsageError("--phase-fit is for the exact chain; add --exact, or leave it out to simulate")
    if any(change.startswith("closure threshold") for change in request.changes):
        say(
            "in a game closure thresholds are the units' to choose: --threshold has no effect where they choose one"
        )
    request, fits = fitted(request, phase_fit)
    choice = game_search.choose(request, game_search.TABLE if control else search) if exact else None
    if choice is not None and choice.method == game_search.BEST_REPLY:
        require_a_table(wanted)
        _finish_search(request, game_search.searched(request, choice, tolerance, told=fits))
        return
    best = best_rule(request, exact) if control else None
    by_race = racing.choose(request, race, bounds, exact=exact, counterpart=counterpart)
    if by_race is not None and by_race.race:
        analysis, ran, told = racing.raced(
            request, by_race, deadline, controls=controls, epsilon=epsilon, tolerance=tolerance
        )
    else:
        table, ran, told = (
            _exact_table(request) if exact else _simulated_table(request, controls, counterpart)
        )
        run = request.scenario.run
        analysis = analyse(
            table, tolerance=tolerance, confidence=run.confidence, epsilon=epsilon, seed=run.seed
        )
        told |= {} if by_race is None else {"race_choice": asdict(by_race)}
    document = request.heading | {"method": "exact" if exact else "simulated"} | game_document(analysis)
    document |= told | fits
    if analysis.race is not None:
        racing.tell(document, analysis)
    found = look_beyond(request, analysis, document, **wanted)
    if best is not None:
        document["control"] = beside(best, analysis)
    if choice is not None:
        document |= game_search.structure_of_table(analysis, choice)
    if request.as_json:
        put_json(document)
    else:
        _show(analysis, document, found)
    if request.out is not None:
        engine = "exact chain" if ran is None else ran.engine.name
        _write(request, analysis, document, provenance(request, "game", begun, engine=engine))
        write_pictures(request.out, found)
        if best is not None:
            write_rule(best, request.out)
    if ran is not None:
        finish(ran)
    if not document.get("counterpart", {"agrees": True})["agrees"]:
        raise CheckFailed


command = scenario_command(game)


def _simulated_table(request: Request, controls: bool, counterpart: bool) -> tuple[Any, Any, dict[str, Any]]:
    """The table, how it was run, and what the document says of that."""
    from analysis.command.running import require, run_replications
    from analysis.game_tables import axes_of, table_document
    from analysis.payoffs import TableSums
    from sim.scenario.describe import advice

    axes = axes_of(request.scenario, request.policy)
    profiles = axes.profiles
    for said in advice(request.scenario):
        say(f"advice: {said}")
    beside = replace(request, scenario=counterpart_scenario(request), out=None) if counterpart else None
    exact = None if beside is None else _exact_cells(beside, profiles)[0]
    run = request.scenario.run
    sums = TableSums(request.scenario, profiles.cells, run.replications)
    policies = list(profiles.policies(request.policy))
    ran = run_replications(request, policies, label="game", take=sums.add, keep=True)
    require(len(sums.complete), ran.interrupted)
    known = controls_of(request, sums.complete, controls)
    also, checked = None, {}
    if beside is not None:
        also, checked = run_counterpart_table(beside, profiles, sums, exact, known)
    table = axes.simulated(sums, run.confidence, controls=known, counterpart=also)
    told = table_document(sums, request.scenario) | ran.to_dict() | checked
    return table, ran, told


def _exact_table(request: Request) -> tuple[Any, None, dict[str, Any]]:
    from analysis.game_tables import axes_of

    axes = axes_of(request.scenario, request.policy)
    cells, kept = _exact_cells(request, axes.profiles)
    return axes.exact(cells), None, {"engine": "exact chain", "interrupted": False} | kept


def _exact_cells(request: Request, profiles: Any) -> tuple[list[Any], dict[str, int]]:
    """The units' exact measures of every cell, and what the document says of the store."""
    from analysis.command.exact_cells import solved
    from analysis.exact_tables import must_compile

    if must_compile(request.scenario, request.policy, profiles.cells):
        say("compiling the exact chain's kernels, once on this machine (some seconds)")
    return solved(request, list(profiles.policies(request.policy)))


def _write(request: Request, analysis: Any, document: dict[str, Any], origin: dict[str, Any]) -> None:
    from analysis.figures import save_payoffs
    from analysis.game_document import game_frame

    folder = prepare_folder(request.out)
    write_result(folder, document, origin)
    game_frame(analysis).to_csv(folder / "table.csv", index=False)
    if len(analysis.table.profiles.players) == 2:
        save_payoffs(analysis, folder)
    else:
        say("payoff pictures are drawn for two players only; the table is in table.csv")


def _show(analysis: Any, document: dict[str, Any], found: Any) -> None:
    from analysis.findings import ONE_NETWORK, POINT_ESTIMATE_WARNING, SETS_NOTE

    put_heading(document)
    put_text(f"Goal: {document['goal']}. Welfare: {document['welfare']['reads']}.")
    show_fits(document)
    if not analysis.is_exact:
        at_most = "" if analysis.race is None else "At most "
        put_text(
            f"{at_most}{document['replications']} paired replications, {100 * document['confidence']:g} % intervals.",
            *document.get("racing", {}).get("reads", ()),
        )
        put_text(*controls_sentence(document))
        show_counterpart(document)
    put_text("")
    if len(document["players"]) == 2:
        for player in (0, 1):
            _show_payoffs(analysis, player)
    _show_equilibria(document)
    if len(document["players"]) != 2:
        _show_payoffs_at(analysis, document)
    _show_outcomes(document)
    for finding in document["findings"]:
        put_text(finding["statement"] + ".")
    show_beyond(document, found)
    if "control" in document:
        show_control(document)
    if "structure" in document:
        put_text("", *document["structure"]["reads"], document["search"]["reads"] + ".")
    put_text("", ONE_NETWORK)
    if not analysis.is_exact:
        put_text("", POINT_ESTIMATE_WARNING if analysis.sets is None else SETS_NOTE)
    put_caution()


def _finish_search(request: Request, document: dict[str, Any]) -> None:
    """Hands over what a search found, also one that Ctrl-C ended early."""
    if request.as_json:
        put_json(document)
    else:
        _show_search(document)
    if document["interrupted"]:
        raise Interrupted


def _show_search(document: dict[str, Any]) -> None:
    from analysis.findings import ONE_NETWORK

    put_heading(document)
    show_fits(document)
    put_text(
        f"Goal: {document['goal']}. Welfare: {document['welfare']['reads']}.",
        document["search"]["reads"] + ".",
        "",
    )
    _show_equilibria(document)
    _show_outcomes(document)
    for finding in document["findings"]:
        put_text(finding["statement"] + ".")
    put_text(f"The optimum is {document['optimum']['is']}.")
    put_text("", *document["structure"]["reads"], "", ONE_NETWORK)
    put_caution()


def _show_payoffs(analysis: Any, player: int) -> None:
    """One player's payoffs; `*` marks the player's best responses, `[ ]` an equilibrium."""
    from analysis.equilibria import regrets

    table = analysis.table
    names, labels = table.profiles.players, table.profiles.labels
    best = regrets(table.payoffs, table.goal.sense)[player] <= analysis.tolerance
    equilibria = {one.profile for one in analysis.equilibria}
    scale, scale_reads = table.goal.display_scale

    def cell(row: int, column: int) -> str:
        text = number(float(table.payoffs[player][row, column]) * scale, 1) + (
            "*" if best[row, column] else ""
        )
        return f"[{text}]" if (row, column) in equilibria else text

    listed = "equilibrium" if analysis.sets is None else "possible equilibrium"
    aim = "smaller is better" if table.goal.sense == "cost" else "larger is better"
    down, across = table.profiles.reads(0), table.profiles.reads(1).removeprefix("closure threshold ")
    for first in range(0, len(labels[1]), COLUMNS_AT_ONCE):
        columns = range(first, min(first + COLUMNS_AT_ONCE, len(labels[1])))
        put_grid(
            f"Payoff of {names[player]} in {scale_reads} ({aim}; * best response, [ ] {listed})\n"
            f"down: {down}; across: {across}",
            ["", *(labels[1][column] for column in columns)],
            [[own, *(cell(row, column) for column in columns)] for row, own in enumerate(labels[0])],
        )


def _show_payoffs_at(analysis: Any, document: dict[str, Any]) -> None:
    """Payoffs and best responses at the listed equilibria and the optimum, where no grid can show them all."""
    from analysis.equilibria import regrets

    table, players = analysis.table, document["players"]
    scale, scale_reads = table.goal.display_scale
    best = regrets(table.payoffs, table.goal.sense) <= analysis.tolerance
    listed = [one.profile for one in analysis.equilibria[:MOST_LISTED]]
    noun = "equilibrium" if analysis.sets is None else "possible equilibrium"
    rows = [(noun, profile) for profile in listed] + [("optimum", analysis.cost.optimum[0])]

    def cell(player: int, profile: tuple[int, ...]) -> str:
        own = table.profiles.labels[player][profile[player]]
        paid = number(float(table.payoffs[(player, *profile)]) * scale, 1)
        return f"{own}: {paid}" + ("*" if best[(player, *profile)] else "")

    put_table(
        f"Strategy and payoff in {scale_reads} (* best response to the others); all {count(table.profiles.cells)} "
        "cells are in --json and --out",
        ("profile", *players),
        [(name, *(cell(player, profile) for player in range(len(players)))) for name, profile in rows],
    )


def _show_equilibria(document: dict[str, Any]) -> None:
    from analysis.profiles import text_of

    players, pure = document["players"], [one for one in document["equilibria"] if one["kind"] == "pure"]
    listed = pure[:MOST_LISTED]
    put_table(
        f"{_heading(document)} ({_chosen(document)}; regret, in the goal's unit: the most a player gains by deviating "
        "alone; welfare a day)",
        ("verdict", *players, *(f"regret {player}" for player in players), *_years_heading(listed), "welfare"),
        [
            (one["verdict"], *(text_of(_told(one)[p]) for p in players), *(_regret(one["regret"][p]) for p in players),
             *_soonest(one), _value(one["welfare"]))
            for one in listed
        ],
    )  # fmt: skip
    if len(pure) > MOST_LISTED:
        put_text(f"... and {len(pure) - MOST_LISTED} more (all are in --json and --out).")


def _heading(document: dict[str, Any]) -> str:
    return "Equilibria" if document.get("possible") is None else "Possible equilibria"


def _chosen(document: dict[str, Any]) -> str:
    """What the strategies listed are, in words."""
    return document.get("chooses", "closure thresholds")


def _told(one: dict[str, Any]) -> dict[str, Any]:
    """What tells an equilibrium from others: its strategies, or the thresholds where these are enough."""
    return one.get("strategies", one["thresholds"])


def _years_heading(listed: list[dict[str, Any]]) -> list[str]:
    return ["years before a gain shows"] if any("years_to_notice" in one for one in listed) else []


def _soonest(one: dict[str, Any]) -> list[str]:
    """The fewest years of own data after which any unit could notice a gain, from the regrets' upper ends."""
    from analysis.sets_document import NO_GAIN

    if "years_to_notice" not in one:
        return []
    years_of = one["years_to_notice"].values()
    soon = [years["low"] for years in years_of if years["low"] is not None]
    if not soon and any(years["reason"] != NO_GAIN for years in years_of):
        return ["-"]
    if not soon:
        return ["never"]
    return [f"at least {min(soon):.0f}" if min(soon) < LONG_YEARS else f"more than {LONG_YEARS}"]


def _regret(value: Any) -> str:
    if not isinstance(value, dict):
        return f"{value:.2g}"
    return f"{value['mean']:.2g}" + (
        " (no bound)" if value["high"] is None else f" (at most {value['high']:.2g})"
    )


def _value(value: Any) -> str:
    return interval(value) if isinstance(value, dict) else number(value)


def _show_outcomes(document: dict[str, Any]) -> None:
    """Refusals, transfers and closed-with-a-free-bed time at the optimum and at the extreme equilibria, by home."""
    put_table(
        "What comes with it (turned away, moved: patients a day by home; closed with a free bed: share of time; "
        f"treated: patients a day{'' if document.get('method') == 'exact' else '; means, without intervals'})",
        (
            "profile",
            "home or unit",
            "threshold",
            "turned away",
            "moved",
            "closed with a free bed",
            "utilisation",
            "treated",
        ),
        [row for name, outcome in _named_outcomes(document) for row in _outcome_rows(name, outcome)],
    )


def _named_outcomes(document: dict[str, Any]) -> Iterator[tuple[str, dict[str, Any]]]:
    ties = len(document["optimum"]["thresholds"])
    yield "optimum" + (f" (1 of {ties} ties)" if ties > 1 else ""), document["optimum"]["outcome"]
    extremes = {
        name: document.get(f"{name}_equilibrium_strategies", document[f"{name}_equilibrium"])
        for name in ("worst", "best")
    }
    if extremes["worst"] is None:
        return
    noun = "equilibrium" if document.get("possible") is None else "possible equilibrium"
    if extremes["worst"] == extremes["best"]:
        yield noun, _outcome_of(document, extremes["worst"])
        return
    for name, told in extremes.items():
        yield f"{name} {noun}", _outcome_of(document, told)


def _outcome_of(document: dict[str, Any], told: dict[str, Any]) -> dict[str, Any]:
    return next(one["outcome"] for one in document["equilibria"] if _told(one) == told)


def _outcome_rows(name: str, outcome: dict[str, Any]) -> Iterator[tuple[Any, ...]]:
    parts = ("turned_away_per_day", "diverted_out_per_day", "closed_with_free_bed_fraction", "utilisation")
    for unit, threshold in outcome["thresholds"].items():
        yield (name, unit, threshold, *(outcome[part][unit] for part in parts), None)
    away, moved = (sum(outcome[part].values()) for part in parts[:2])
    yield (name, "network", None, away, moved, None, None, outcome["throughput_per_day"])
