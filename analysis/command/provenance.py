"""The provenance of a command's result."""

from __future__ import annotations

import datetime
import sys
from typing import Any

from analysis.command.options import Request
from sim import provenance as origin


def started() -> datetime.datetime:
    """This moment, to be kept until the end."""
    return origin.now()


def provenance(
    request: Request, command: str, begun: datetime.datetime | None = None, *, engine: str
) -> dict[str, Any]:
    """Where the command's result came from, with the arguments that repeat it."""
    arguments = ["brimline", *sys.argv[1:]] if sys.argv[1:2] == [command] else ["brimline", command]
    return origin.provenance(
        request.scenario, command=arguments, engine=engine, started=begun or origin.now()
    )
