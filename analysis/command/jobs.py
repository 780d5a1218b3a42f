"""Several jobs of one command, one after another, told of as one."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from typing import Any

from analysis.command.options import Request


class Jobs:
    """The jobs of one command, one after another; Ctrl-C in one ends them all."""

    def __init__(self, request: Request) -> None:
        self.request = request
        self._runs: list[Any] = []

    @property
    def interrupted(self) -> bool:
        """Whether Ctrl-C has ended the work."""
        return bool(self._runs) and self._runs[-1].interrupted

    def run(self, groups: Sequence[Any], taker: Callable[[int], Any], *, label: str, start: int = 0) -> None:
        """Runs each group's policies on its network; `taker(place)` is what takes a group's replies."""
        from analysis.command.running import run_replications

        for place, group in enumerate(groups):
            if self.interrupted:
                return
            own = replace(self.request, scenario=group.scenario, policy=group.policies[0])
            take = taker(place)
            self._runs.append(
                run_replications(own, group.policies, label=label, take=take, keep=True, first=start)
            )

    def add(self, ran: Any) -> None:
        """A job that was run in another way."""
        self._runs.append(ran)

    def interrupt(self) -> None:
        """Notes that Ctrl-C ended work that was no job of runs."""
        self._runs[-1] = replace(self._runs[-1], interrupted=True)

    def joined(self) -> Any:
        """How all of them were run, as one."""
        first = self._runs[0]
        kept = first.reused is not None
        return replace(
            first,
            failures=[one for ran in self._runs for one in ran.failures],
            interrupted=self.interrupted,
            computed=sum(ran.computed or 0 for ran in self._runs) if kept else None,
            reused=sum(ran.reused or 0 for ran in self._runs) if kept else None,
        )
