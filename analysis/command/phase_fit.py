"""`--phase-fit N`: stays that the exact chain cannot count, replaced by exponential phases for this command."""

from __future__ import annotations

import dataclasses
from typing import Any

import click

from analysis.command.options import Request
from analysis.command.output import put_table, put_text

option = click.option(
    "--phase-fit", type=click.IntRange(1, 20), metavar="N",
    help="Replace stays not made of exponential phases by at most N phases each, and show the error.",
)  # fmt: skip


def fitted(request: Request, phases: int | None) -> tuple[Request, dict[str, Any]]:
    """The request with its stays replaced, and what its document then says of that; both as before for None."""
    if phases is None:
        return request, {}
    from analysis.chain import with_phase_fits

    scenario, fits = with_phase_fits(request.scenario, phases)
    told = {group: fit.to_dict() for group, fit in fits.items()}
    return dataclasses.replace(request, scenario=scenario), {"phase_fit": told}


def show_fits(document: dict[str, Any]) -> None:
    """What was replaced and by how much it differs, where the option was given."""
    if "phase_fit" not in document:
        return
    fits = document["phase_fit"]
    if not fits:
        put_text("Every stay is made of exponential phases already; none was replaced.", "")
        return
    columns = ("group", "phases", "mean (days)", "cv", "fitted", "skewness", "fitted", "largest distance")
    put_table(
        "Stays replaced by exponential phases (the distance is that of the distribution functions)",
        columns,
        [
            (group, fit["phases"], fit["target"]["mean_days"], fit["target"]["cv"], fit["fit"]["cv"],
             fit["target"]["skewness"], fit["fit"]["skewness"], fit["largest_distance"])
            for group, fit in fits.items()
        ],
    )  # fmt: skip
