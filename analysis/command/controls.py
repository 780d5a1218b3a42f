"""The option that switches control variates, and what a command says of them."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from typing import Any

import click

from analysis.command.options import Request

controls_option = click.option(
    "--controls/--no-controls", default=True, show_default=True,
    help="Use arrivals and offered work, whose means are known, to narrow every interval (where replications suffice).",
)  # fmt: skip


def controls_of(request: Request, replications: Sequence[int], wanted: bool) -> Any:
    """The control variates of these replications; None where not wanted, or where replications are too few."""
    from analysis.controls import offered_controls

    return offered_controls(request.scenario, replications) if wanted else None


def controls_sentence(document: dict[str, Any]) -> Iterator[str]:
    """What control variates did, in words."""
    told = document.get("controls")
    if told and told["used"]:
        won = sorted(_numbers(told["variance_ratio"]))
        said = f"from {won[0]:.1f} to {won[-1]:.1f} times" if won else "not known how much"
        kinds = [f"{len(told['names'])}: arrivals and offered work"] if told["names"] else []
        kinds += ["the exponential counterpart"] if document.get("counterpart", {}).get("used") else []
        larger = "; below 1 means larger" if won and won[0] < 0.95 else ""
        yield f"Control variates ({', '.join(kinds)}, with known means) made variances smaller, {said}{larger}."


def _numbers(tree: Any) -> Iterable[float]:
    """Every number of a nested mapping."""
    if isinstance(tree, dict):
        for branch in tree.values():
            yield from _numbers(branch)
    elif tree is not None:
        yield tree
