"""The provenance of a command's result."""

from __future__ import annotations

import datetime
from collections.abc import Sequence
from typing import Any

import click

from analysis.command.options import Request
from sim import provenance as origin


def started() -> datetime.datetime:
    """This moment, to be kept until the end."""
    return origin.now()


def provenance(
    request: Request, command: str, begun: datetime.datetime | None = None, *, engine: str
) -> dict[str, Any]:
    """Where the command's result came from, with the arguments that repeat it."""
    return origin.provenance(
        request.scenario,
        command=["brimline", *_arguments(command)],
        engine=engine,
        started=begun or origin.now(),
    )


def _arguments(command: str) -> Sequence[str]:
    """The command line as `entry.run` got it."""
    context = click.get_current_context(silent=True)
    return [command] if context is None or context.obj is None else context.obj
