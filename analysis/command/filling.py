"""How a command fills the tables of several networks: each by the exact chain or by runs, kept beside --out."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Any

from analysis.command.controls import controls_of
from analysis.command.entry import Interrupted, say
from analysis.command.jobs import Jobs
from analysis.command.options import Request

LEAST = 2


@dataclass
class Filling:
    """The networks that are filled, in order, and how.

    runs: of every simulated network so far. exact: how many cells were solved and how many were kept.
    """

    filled: list[Any] = field(default_factory=list)
    runs: list[Any] = field(default_factory=list)
    exact: dict[str, int] = field(default_factory=dict)
    hashes: list[str] = field(default_factory=list)
    interrupted: bool = False

    def add(self, other: Filling) -> None:
        """Another filling's networks and how they were filled, after the own ones."""
        self.filled += other.filled
        self.runs += other.runs
        self.hashes += other.hashes
        self.interrupted = self.interrupted or other.interrupted
        for name, count in other.exact.items():
            self.exact[name] = self.exact.get(name, 0) + count

    def ran(self, request: Request) -> Any | None:
        """The runs told of as one; None where nothing was simulated."""
        if not self.runs:
            return None
        jobs = Jobs(request)
        for one in self.runs:
            jobs.add(one)
        return jobs.joined()


def fill(request: Request, networks: Sequence[Any], *, label: str, controls: bool) -> Filling:
    """Fills one network after the other; Ctrl-C ends it, and what is filled by then is handed over."""
    filling = Filling()
    _notices(request, networks)
    for place, network in enumerate(networks):
        own = replace(request, scenario=network.scenario, policy=network.policy)
        told = label if len(networks) == 1 else f"{label}, network {place + 1} of {len(networks)}"
        if network.method == "exact":
            _solve(filling, own, network, told)
        else:
            _simulate(filling, own, network, told, controls)
        if filling.interrupted:
            break
    return filling


def _notices(request: Request, networks: Sequence[Any]) -> None:
    """Advice on the runs, and what the command line changed in vain."""
    from sim.scenario.describe import advice

    if any(network.method != "exact" for network in networks):
        for said in advice(request.scenario):
            say(f"advice: {said}")
    if any(change.startswith("closure threshold") for change in request.changes):
        say("closure thresholds are the units' to choose: --threshold has no effect where they choose one")


def _solve(filling: Filling, request: Request, network: Any, label: str) -> None:
    from analysis.command.exact_cells import solved
    from analysis.exact_tables import must_compile
    from analysis.sweeping import Filled

    if must_compile(request.scenario, request.policy, network.profiles.cells):
        say("compiling the exact chain's kernels, once on this machine (some seconds)")
    try:
        cells, kept = solved(request, network.policies, label=label)
    except Interrupted:
        filling.interrupted = True
        return
    for name, count in kept.items():
        filling.exact[name] = filling.exact.get(name, 0) + count
    filling.filled.append(Filled(network, cells=cells))


def _simulate(filling: Filling, request: Request, network: Any, label: str, controls: bool) -> None:
    from analysis.command.running import require, run_replications
    from analysis.payoffs import TableSums
    from analysis.sweeping import Filled

    replications = request.scenario.run.replications
    sums = TableSums(request.scenario, network.profiles.cells, replications)
    ran = run_replications(request, network.policies, label=label, take=sums.add, keep=True)
    filling.runs.append(ran)
    filling.interrupted = ran.interrupted
    complete = sums.complete
    if len(complete) < LEAST and not ran.interrupted and not filling.filled:
        require(len(complete), False, least=LEAST)
    unfinished = ran.interrupted and len(complete) < replications
    if len(complete) < LEAST or (unfinished and filling.filled):
        return  # what it has is in the store; it is shown only where nothing else could be
    known = controls_of(request, complete, controls)
    filling.hashes += [sums.record_hashes[address] for address in sorted(sums.record_hashes)]
    filling.filled.append(Filled(network, sums=sums.sums(), controls=known))


def told_of(filling: Filling, request: Request) -> dict[str, Any]:
    """What a document says of how its networks were filled."""
    from analysis.filling import filling_document

    return filling_document(
        request.scenario, filling.ran(request), filling.hashes, filling.exact, interrupted=filling.interrupted
    )
