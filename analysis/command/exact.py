"""`brimline exact`: the measures of one policy from the exact Markov chain."""

from __future__ import annotations

from typing import Any

from analysis.command.options import Request, scenario_command
from analysis.command.output import prepare_folder, put_caution, put_json, put_table, put_text, write_result
from analysis.command.phase_fit import fitted, option, show_fits


@option
def exact(request: Request, phase_fit: int | None) -> None:
    """Measures from the exact Markov chain, where the scenario is within its scope (--exponential brings it there).

    With --phase-fit N they are exact for the fitted stays, and near for the scenario's own.
    """
    from analysis.chain import solve
    from analysis.command.provenance import provenance, started

    begun = started()
    request, told = fitted(request, phase_fit)
    document = solve(request.scenario, request.policy).to_dict() | told
    if request.out is not None:
        write_result(
            prepare_folder(request.out), document, provenance(request, "exact", begun, engine="exact chain")
        )
    if request.as_json:
        put_json(document)
    else:
        _show(document)


command = scenario_command(exact)


def _show(document: dict[str, Any]) -> None:
    from analysis.measures import NETWORK_MEASURES, UNIT_MEASURES

    put_text(document["scenario"] or "(no title)", f"Exact Markov chain, {document['states']} states", "")
    show_fits(document)
    units = document["units"]
    put_table(
        "By unit (rates marked h count the unit's own population, wherever treated)",
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


def _digits(value: float | None) -> str:
    return "-" if value is None else f"{value:.6g}"
