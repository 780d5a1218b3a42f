"""`brimline check`: the scenario read back as tables, and what running it would take."""

from __future__ import annotations

from typing import Any

from analysis.command.options import Request, scenario_command
from analysis.command.output import (
    count,
    prepare_folder,
    put_caution,
    put_json,
    put_table,
    put_text,
    write_result,
)
from analysis.command.progress import duration


def check(request: Request) -> None:
    """Read the scenario back as tables before anything runs: offered load, stays, rules, size, time, advice."""
    from analysis.chain import chain_size, refusals
    from analysis.command.provenance import provenance
    from analysis.command.running import expected
    from sim.scenario.describe import describe

    scenario, policy = request.scenario, request.policy
    document = describe(scenario, policy)
    document["expected"] = expected(request, document["game"]["cells"])
    reasons = list(refusals(scenario, policy))
    document["exact_chain"] = {
        "in_scope": not reasons,
        "reasons": reasons,
        "states": chain_size(scenario, policy),
    }
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


def _game_takes(expected: dict[str, Any]) -> str:
    if expected["game_seconds"] is None:
        return expected["reason"][0].upper() + expected["reason"][1:] + "."
    return (
        f"Expected: about {duration(expected['game_seconds'])} and {expected['game_bytes'] / 1e6:.0f} MB on "
        f"{expected['workers']} worker(s) with the {expected['engine']} engine."
    )


def _rhythm(group: dict[str, Any]) -> str:
    parts = [word for word in ("hour", "weekday") if group[f"varies_by_{word}"]]
    return " and ".join(parts) or "constant"


def _show_rest(document: dict[str, Any]) -> None:
    game, expected = document["game"], document["expected"]
    put_text("Rules in force:", *(f"  {name}: {reads}." for name, reads in document["rules"].items()), "")
    put_text(
        f"Game: {count(game['cells'])} cells, {count(game['runs'])} runs. {_game_takes(expected)}",
        f"One policy (`simulate`): about {duration(expected['simulate_seconds'])}.",
    )
    chain = document["exact_chain"]
    if chain["in_scope"]:
        put_text(f"The exact chain covers this scenario, with at most {chain['states']} states.")
    else:
        put_text("The exact chain does not cover this scenario: " + "; ".join(chain["reasons"]) + ".")
    if document["policies"]:
        put_text("Policies: " + "; ".join(document["policies"]) + ".")
    for said in document["advice"]:
        put_text(f"Advice: {said}.")
