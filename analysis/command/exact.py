"""`brimline exact`: the measures of one policy from the exact Markov chain, in the long run or day by day."""

from __future__ import annotations

import unicodedata
from typing import Any

import click

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

OWN_RULES = "file"
LONGEST_DAYS, MOST_TIMES = 36_500, 400
BY_DAY = (
    "utilisation", "mean_occupied", "full_fraction", "closed_fraction", "admissions_per_day",
    "diverted_out_per_day", "turned_away_per_day",
)  # fmt: skip


def _days(context: click.Context, option: click.Parameter, text: str | None) -> list[float] | None:
    """`1,3,7.5` as numbers."""
    if text is None:
        return None
    try:
        days = [float(part) for part in text.split(",")]
    except ValueError:
        raise click.BadParameter(f"got {text!r}; write days with commas between, such as 1,3,7,30") from None
    if not all(0 <= day <= LONGEST_DAYS for day in days) or len(days) > MOST_TIMES:
        raise click.BadParameter(
            f"give at most {MOST_TIMES} times from 0 to {LONGEST_DAYS} days, got {text!r}"
        )
    return days


@click.option(
    "--after-days", metavar="D,D,...", callback=_days,
    help="So many days after a start: from the empty network, or as the next two options say.",
)  # fmt: skip
@click.option(
    "--policy-before", metavar="NAME",
    help=f"Start from the long run under this policy ({OWN_RULES}: the file's own rules).",
)  # fmt: skip
@click.option(
    "--demand-before", metavar="X", type=FiniteRange(0, 1_000, min_open=True),
    help="Start from the long run with every arrival rate of the file times X.",
)  # fmt: skip
@option
def exact(
    request: Request,
    after_days: list[float] | None,
    policy_before: str | None,
    demand_before: float | None,
    phase_fit: int | None,
) -> None:
    """Measures from the exact Markov chain, where the scenario is within its scope (--exponential brings it there).

    With --phase-fit N they are exact for the fitted stays, and near for the scenario's own.
    """
    from analysis.chain import solve
    from analysis.chain.transient import transient
    from analysis.command.provenance import provenance, started

    begun = started()
    if after_days is None and (policy_before, demand_before) != (None, None):
        raise click.UsageError(
            "--policy-before and --demand-before say where --after-days starts; give that too"
        )
    request, told = fitted(request, phase_fit)
    if after_days is None:
        document = solve(request.scenario, request.policy).to_dict()
    else:
        before = _before(request, policy_before, demand_before)
        document = transient(request.scenario, request.policy, after_days, before=before).to_dict()
    document |= request.heading | told
    if request.as_json:
        put_json(document)
    elif after_days is None:
        _show(document)
    else:
        _show_days(document)
    if request.out is not None:
        origin = provenance(request, "exact", begun, engine="exact chain")
        write_result(prepare_folder(request.out), document, origin)


command = scenario_command(exact)


def _before(request: Request, name: str | None, demand: float | None) -> Any:
    """How the network was run until day 0; None where it starts empty. What no option names is as it is now."""
    from analysis.chain.transient import Before

    if name is None and demand is None:
        return None
    policy = request.policy if name is None else _policy(request.scenario, name)
    now = click.get_current_context().params["demand"] or 1.0
    scenario = request.scenario if demand is None else request.scenario.with_demand(demand / now)
    return Before(scenario, policy)


def _policy(scenario: Any, name: str) -> Any:
    from sim.errors import Fault, ScenarioError
    from sim.wording import nearest, shown

    known = [row.name for row in scenario.policies]
    name = unicodedata.normalize("NFC", name)
    if name == OWN_RULES and name not in known:
        return scenario.policy()
    if name not in known:
        rule, remedy = "must name a policy of the scenario", nearest(name, [*known, OWN_RULES])
        raise ScenarioError([Fault(None, "--policy-before", rule, f"got {shown(name)}", remedy)])
    return scenario.policy(name)


def _show(document: dict[str, Any]) -> None:
    from analysis.measures import NETWORK_MEASURES, UNIT_MEASURES

    put_heading(document)
    put_text(f"Exact Markov chain, {document['states']} states", "")
    show_fits(document)
    units = document["units"]
    put_table(
        "By unit (utilisation, times: shares, 0 to 1; marked h: the unit's own population, wherever treated)",
        ("measure", *units),
        [
            (m.reads + (" (h)" if m.by_home else ""), *(_digits(units[name].get(m.name)) for name in units))
            for m in UNIT_MEASURES
        ],
    )
    put_table(
        "Network",
        ("measure", "value"),
        [(m.reads, _digits(document["network"][m.name])) for m in NETWORK_MEASURES],
    )
    put_caution()


def _show_days(document: dict[str, Any]) -> None:
    from analysis.measures import NETWORK_MEASURES, UNIT_MEASURES

    put_heading(document)
    put_text(
        f"Exact Markov chain, {document['states']} states, by uniformisation in {document['steps']} steps",
        _start(document["start"]),
        "",
    )
    times = [(f"{day['day']:g}", day) for day in document["days"]] + [("long run", document["long_run"])]
    shown = [m for m in UNIT_MEASURES if m.name in BY_DAY]
    for name in document["long_run"]["units"]:
        put_table(
            f"{name} (utilisation, times: shares, 0 to 1; marked h: the unit's own population, wherever treated)",
            ("after days", *(m.reads + (" (h)" if m.by_home else "") for m in shown)),
            [(label, *(_digits(then["units"][name][m.name]) for m in shown)) for label, then in times],
        )
    put_table(
        "Network",
        ("after days", *(m.reads for m in NETWORK_MEASURES), "distance to the long run"),
        [
            (label, *(_digits(then["network"][m.name]) for m in NETWORK_MEASURES), _digits(_distance(then)))
            for label, then in times
        ],
    )
    bound = max((day["error_bound"] for day in document["days"]), default=0.0)
    put_text(
        "Shares and rates are those at that moment, not averages since the start. Given the start, no share is off by "
        f"more than {bound:.1e}; a mean of beds by that times the beds, a rate by that times the arrivals a day. The "
        "distance to the long run is the most by which any share differs from its long-run value."
    )
    put_caution()


def _start(start: dict[str, Any]) -> str:
    if start["network"] == "empty":
        return "From the empty network"
    thresholds = ", ".join(f"{name} {k}" for name, k in start["thresholds"].items())
    return (
        f"From the long run under the policy `{start['policy']}` (closure thresholds {thresholds}) and "
        f"{start['arrivals_per_day']:g} arrivals a day"
    )


def _distance(then: dict[str, Any]) -> float:
    return then.get("distance_to_long_run", 0.0)


def _digits(value: float | None) -> str:
    return "-" if value is None else f"{value:.6g}"
