"""How `simulate --counterpart` runs the exponential counterpart beside the scenario, and holds it against the chain."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import click

from analysis.command.entry import say
from analysis.command.options import Request
from analysis.command.output import put_text


@dataclass(frozen=True)
class Beside:
    """The request for the counterpart, and its exact measures."""

    request: Request
    exact: Any


counterpart_option = click.option(
    "--counterpart", is_flag=True,
    help="Also run the exponential counterpart, whose exact means narrow every interval; doubles the cost.",
)  # fmt: skip


def counterpart_scenario(request: Request) -> Any:
    """The exponential counterpart; a fault of the command line where the chain answers the scenario itself."""
    from analysis.chain import refusals

    if not refusals(request.scenario, request.policy):
        raise click.BadOptionUsage(
            "--counterpart",
            "--counterpart: the exact chain answers this scenario itself; use `exact`, or `game --exact`",
        )
    return request.scenario.exponential()


def exact_counterpart(request: Request) -> Beside:
    """The counterpart and the chain's answer, before anything runs; OutOfScope, with reasons, where it has none."""
    from analysis.chain import solve

    scenario = counterpart_scenario(request)
    return Beside(replace(request, scenario=scenario, out=None), solve(scenario, request.policy))


def run_counterpart(beside: Beside, request: Request, replications: Sequence[int]) -> tuple[Any, Any]:
    """The counterpart of these replications as a control, and its check; None where either cannot be had."""
    from analysis.command.running import collect_runs
    from analysis.controls import LEAST_DEGREES, offered_controls
    from analysis.counterpart import counterpart_of
    from analysis.verification import verify

    runs, _ = collect_runs(beside.request, label="counterpart")
    records = {run.replication: run.record for run in runs}
    if not set(replications) <= set(records):
        say("the counterpart was not run for every replication, so it is left out")
        return None, None
    listed = [records[one] for one in replications]
    checked = verify(listed, beside.exact, beside.request.scenario) if len(listed) > 1 else None
    known = offered_controls(request.scenario, replications)
    left = len(replications) - 2 if known is None else known.degrees - 1
    if left < LEAST_DEGREES:
        say(f"too few replications to use the counterpart: it needs {LEAST_DEGREES} degrees of freedom")
        return None, checked
    return counterpart_of(listed, beside.exact, request.scenario), checked


def counterpart_document(checked: Any, *, used: bool) -> dict[str, Any]:
    """Whether the counterpart narrowed the intervals, and how it stood against the chain."""
    tested = [one for one in checked.measures if one.z is not None]
    return {
        "used": used,
        "agrees": checked.agrees,
        "measures_tested": len(tested),
        "largest_z": max((abs(one.z) for one in tested), default=None),
        "critical_z": checked.critical,
        "false_alarm_rate": checked.false_alarm_rate,
    }


def show_counterpart(document: dict[str, Any]) -> None:
    """The counterpart's check in words."""
    told = document.get("counterpart")
    if told is None:
        return
    verdict = "agrees with the exact chain" if told["agrees"] else "DISAGREES with the exact chain"
    put_text(
        f"Validity: the exponential counterpart, simulated with the same draws, {verdict} in "
        f"{told['measures_tested']} measures (largest |z| {told['largest_z'] or 0:.2f}, "
        f"limit {told['critical_z']:.2f}).",
        "",
    )


def run_counterpart_table(
    request: Request, profiles: Any, sums: Any, exact: list[Any], controls: Any
) -> tuple[Any, dict[str, Any]]:
    """The counterpart of a whole table as a control (None where it cannot serve), and what the document says of it.

    request: for the counterpart. sums: of the scenario's own table. exact: measures by cell, as `solve_cells` has them.
    """
    from analysis.command.running import run_replications
    from analysis.controls import LEAST_DEGREES
    from analysis.counterpart import table_counterpart
    from analysis.payoffs import TableSums

    beside = TableSums(request.scenario, profiles.cells, request.scenario.run.replications)
    policies = list(profiles.policies(request.policy))
    run_replications(request, policies, label="counterpart", take=beside.add)
    if not set(sums.complete) <= set(beside.complete):
        say("the counterpart was not run for every replication, so it is left out")
        return None, {}
    made = table_counterpart(beside.sums_of(sums.complete), exact)
    checked = made.check()
    left = (len(sums.complete) - 1 if controls is None else controls.degrees) - 1
    used = left >= LEAST_DEGREES
    if not used:
        say(f"too few replications to use the counterpart: it needs {LEAST_DEGREES} degrees of freedom")
    return (made if used else None), {"counterpart": {"used": used} | checked}
