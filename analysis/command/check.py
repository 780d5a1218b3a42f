"""`brimline check`: the scenario read back as tables, and what running it would take."""

from __future__ import annotations

from typing import Any

import click

from analysis.command.options import FiniteRange, Request, scenario_command
from analysis.command.output import (
    count,
    number,
    prepare_folder,
    put_caution,
    put_json,
    put_table,
    put_text,
    write_result,
)
from analysis.command.progress import about


@click.option(
    "--half-width", metavar="H", type=FiniteRange(0, 1, min_open=True),
    help="Say how many replications each unit's utilisation needs to be known within H (a share, such as 0.005).",
)  # fmt: skip
def check(request: Request, half_width: float | None) -> None:
    """Read the scenario back as tables before anything runs: offered load, stays, rules, size, time, advice."""
    from analysis.chain import Limits, chain_size, refusals
    from analysis.command.provenance import provenance
    from analysis.command.running import expected
    from analysis.planning import expected_precision
    from sim.scenario.describe import describe

    scenario, policy = request.scenario, request.policy
    document = describe(scenario, policy)
    document["expected"] = expected(request, document["game"]["cells"])
    reasons = list(refusals(scenario, policy))
    states = chain_size(scenario, policy)
    document["exact_chain"] = {
        "in_scope": not reasons,
        "reasons": reasons,
        "states": states,
        "too_large": states is not None and states > Limits().relaxed,
    }
    document["precision"] = expected_precision(scenario, policy, half_width=half_width).to_dict()
    document["faults"] = []
    if request.out is not None:
        write_result(
            prepare_folder(request.out),
            document,
            provenance(request, "check", engine=document["expected"]["engine"]),
        )
    if request.as_json:
        put_json(document)
    else:
        _show(document)


command = scenario_command(check)


def _show(document: dict[str, Any]) -> None:
    run = document["run"]
    put_text(
        document["title"] or "(no title)",
        f"{run['replications']} replications of {run['warm_up_days']:g} days warm-up and "
        f"{run['measured_days']:g} measured days, seed {run['seed']}, {100 * run['confidence']:g} % confidence",
        "",
    )
    _show_units(document["units"])
    _show_patients(document["patients"])
    _show_rest(document)
    put_caution()


def _show_units(units: dict[str, Any]) -> None:
    put_table(
        "Units: demand of their own patients against their beds",
        ("unit", "staffed beds", "arrivals a day", "offered load (beds)", "load per bed", "target", "stay factor"),
        [
            (name, u["beds"], u["arrivals_per_day"], u["offered_load_beds"], u["offered_load_per_bed"],
             u["target_utilisation"], u["stay_factor"])
            for name, u in units.items()
        ],
    )  # fmt: skip
    put_table(
        "Closure thresholds (load: beds occupied or reserved) and referral orders",
        ("unit", "closes at", "to others at", "refers to"),
        [
            (
                name,
                u["closure_threshold"],
                u["incoming_threshold"],
                ", ".join(u["referral_order"]) or "nobody",
            )
            for name, u in units.items()
        ],
    )


def _show_patients(patients: dict[str, Any]) -> None:
    put_table(
        "Patients and their length of stay (days)",
        ("group", "home", "a day", "rhythm", "stay", "mean", "cv", "median"),
        [
            (
                name,
                g["home"],
                g["per_day"],
                _rhythm(g),
                g["family"],
                g["mean_days"],
                g["cv"],
                g["median_days"],
            )
            for name, g in patients.items()
        ],
    )


def _goals(game: dict[str, Any]) -> str:
    goals = game["goals"]
    if len(set(goals.values())) == 1:
        return f"Goal: {next(iter(goals.values()))}"
    return "Goals: " + "; ".join(f"{name}: {said}" for name, said in goals.items())


def _players(game: dict[str, Any]) -> list[str]:
    """A line on who runs several units, or a unit under another name; none where every unit plays by itself."""
    named = [f"{name} runs {', '.join(units)}" for name, units in game["players"].items() if units != [name]]
    return [f"Players: {'; '.join(named)}; every other unit plays by itself."] if named else []


def _strategies(game: dict[str, Any]) -> str:
    closures = {name: mine for name, mine in game["strategies"].items() if isinstance(mine, list)}
    parts = []
    if closures:
        spans = "; ".join(f"{name} {_span(mine)}" for name, mine in closures.items())
        parts.append(f"Closure thresholds to choose from: {spans}")
    for name, mine in game["strategies"].items():
        if name not in closures:
            spans = ", ".join(f"{field.replace('_', ' ')} {_span(values)}" for field, values in mine.items())
            parts.append(f"{name} chooses {spans}")
    return ". ".join(parts)


def _welfare(welfare: dict[str, Any]) -> str:
    if welfare["kind"] == "throughput":
        return "patients treated"
    return f"patients turned away + {welfare['transfer_weight']:g} x transfers (a loss)"


def _span(thresholds: list[Any]) -> str:
    first, last = thresholds[0], thresholds[-1]
    whole = all(isinstance(one, int) for one in thresholds)
    if whole and thresholds == list(range(first, last + 1)) and last > first:
        return f"{first} to {last}"
    return ", ".join(map(str, thresholds))


def _game_takes(expected: dict[str, Any]) -> str:
    if expected["game_seconds"] is None:
        return expected["reason"][0].upper() + expected["reason"][1:] + "."
    return (
        f"Expected: {about(expected['game_seconds'])} and {expected['game_bytes'] / 1e6:.0f} MB on "
        f"{expected['workers']} worker(s) with the {expected['engine']} engine{_whose(expected)}."
    )


def _whose(expected: dict[str, Any]) -> str:
    """Said where the estimate is not for this machine."""
    here = expected["estimated_for"] == "this machine"
    return "" if here else f" (estimated for {expected['estimated_for']})"


def _rhythm(group: dict[str, Any]) -> str:
    parts = [word for word in ("hour", "weekday") if group[f"varies_by_{word}"]]
    return " and ".join(parts) or "constant"


def _show_rest(document: dict[str, Any]) -> None:
    game, expected = document["game"], document["expected"]
    put_text("Rules in force:", *(f"  {name}: {reads}." for name, reads in document["rules"].items()), "")
    put_text(
        *_players(game),
        f"{_goals(game)}. Welfare: {_welfare(game['welfare'])}. {_strategies(game)}.",
        f"Game: {count(game['cells'])} cells, {count(game['runs'])} runs. {_game_takes(expected)}",
        f"One policy (`simulate`): {about(expected['simulate_seconds'])}.",
    )
    chain = document["exact_chain"]
    if chain["in_scope"] and not chain["too_large"]:
        put_text(f"The exact chain covers this scenario, with at most {chain['states']:,} states.")
    elif chain["in_scope"]:
        put_text(
            f"The exact chain models this scenario, but is too large: up to 10^{len(str(chain['states']))} states."
        )
    else:
        put_text("The exact chain does not cover this scenario: " + "; ".join(chain["reasons"]) + ".")
    _show_precision(document["precision"], document["run"])
    if document["policies"]:
        put_text("Policies: " + "; ".join(document["policies"]) + ".")
    for said in document["advice"]:
        put_text(f"Advice: {said}.")


def _show_precision(precision: dict[str, Any], run: dict[str, Any]) -> None:
    """Intervals to expect, or why the chain does not tell them."""
    if not precision["units"]:
        put_text(f"The intervals to expect are not known beforehand: {precision['reason']}.")
        return
    wanted = precision["half_width"]
    put_table(
        f"Intervals to expect from {run['replications']} replications (the exponential counterpart's)",
        ("unit", "utilisation", "+/-", "time full", "+/-", "time closed", "+/-",
         *(() if wanted is None else (f"replications for utilisation +/- {wanted:g}",))),
        [(name, *_expected(unit), *(() if wanted is None else (_needed(unit["utilisation"]),)))
         for name, unit in precision["units"].items()],
    )  # fmt: skip
    if not precision["memoryless"]:
        put_text(
            "These are the exact chain's for exponential stays, constant demand and no delay. Stays that vary more "
            "widen the intervals: by the factor sqrt((1 + cv^2) / 2) in a unit that never closes."
        )


def _expected(unit: dict[str, Any]) -> list[str]:
    shown = [unit[measure] for measure in ("utilisation", "full_fraction", "closed_fraction")]
    return [number(one[key], 4) for one in shown for key in ("mean", "half_width")]


def _needed(utilisation: dict[str, Any]) -> str:
    needed = utilisation["replications_needed"]
    return "more than a million" if needed is None else count(needed)
