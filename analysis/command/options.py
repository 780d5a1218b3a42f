"""The options that every command takes, and the request that they make of a scenario."""

from __future__ import annotations

import functools
import math
import os
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import click

from analysis.command.caution import CAUTION
from analysis.command.usage import Checked
from analysis.overrides import LIMITS, changes_of, overridden
from sim.errors import Fault, ScenarioError

ENGINES = ("compiled", "reference")


@dataclass(frozen=True)
class Request:
    """A scenario with every override of the command line applied, and how to run it.

    confidence: as the command line gave it; the scenario's run table has the one in force. changes: what the
    command line changed of the scenario, in words. kept: hands over runs that are there, instead of running any.
    cluster: the full address of a scheduler.
    """

    scenario: Any
    policy: Any
    confidence: float | None
    workers: int | None
    engine: str | None
    out: Path | None
    as_json: bool
    changes: tuple[str, ...] = ()
    kept: Callable[..., Any] | None = None
    cluster: str | None = None

    @property
    def heading(self) -> dict[str, Any]:
        """What every document begins with."""
        return {"scenario": self.scenario.title, "changes": list(self.changes)}


class FiniteRange(click.FloatRange):
    """A number within bounds; neither NaN nor infinity."""

    name = "number"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> float:
        number = click.FLOAT.convert(value, param, ctx)
        if not math.isfinite(number):
            self.fail(f"{value!r} is not a finite number", param, ctx)
        return super().convert(number, param, ctx)


def scenario_command(
    function: Callable[..., Any], *, own_axes: Sequence[str] = (), check: Callable[..., list[Fault]] | None = None
) -> click.Command:  # fmt: skip
    """A command on one SCENARIO with the common options; the function gets a Request and its own options.

    own_axes: common options that the command takes in a form of its own. check: gives the faults of its own options,
    from the scenario and their values, so that they are told of with all others.
    """

    @functools.wraps(function)
    def read_then_run(**values: Any) -> Any:
        own = {name: value for name, value in values.items() if name not in _COMMON}
        also = None if check is None else lambda scenario: check(scenario, own)
        return function(request_of(values, also), **own)

    decorated: Callable[..., Any] = read_then_run
    for name, option in reversed(list(zip(_COMMON, _OPTIONS, strict=True))):
        if name not in own_axes:
            decorated = option(decorated)
    return click.command(cls=Checked, epilog=CAUTION)(decorated)


_OPTIONS = (
    click.argument("scenario", type=click.Path(path_type=Path)),
    click.option(
        "--json", "as_json", is_flag=True, help="One JSON document on standard output, nothing else there."
    ),
    click.option("--seed", type=click.IntRange(*LIMITS["seed"]), help="Seed of every draw."),
    click.option(
        "--replications", type=click.IntRange(*LIMITS["replications"]), help="Number of replications."
    ),
    click.option(
        "--confidence", type=FiniteRange(0, 1, min_open=True, max_open=True), help="Of every interval."
    ),
    click.option(
        "--workers",
        type=click.IntRange(*LIMITS["workers"]),
        help="Worker processes [default: the cores, if worth it].",
    ),
    click.option(
        "--cluster",
        metavar="ADDRESS",
        help="Run on the machines of a cluster; see `brimline cluster --help`.",
    ),
    click.option(
        "--engine", type=click.Choice(ENGINES), help="Simulation engine [default: by the size of the job]."
    ),
    click.option("--out", type=click.Path(path_type=Path, file_okay=False), help="Folder for the results."),
    click.option(
        "--threshold", multiple=True, metavar="UNIT=K", help="Closure threshold of a unit (repeatable)."
    ),
    click.option(
        "--incoming", multiple=True, metavar="UNIT=K", help="Incoming threshold of a unit (repeatable)."
    ),
    click.option("--demand", type=float, metavar="X", help="Multiply every arrival rate."),
    click.option("--target", type=float, metavar="T", help="Target utilisation of every unit."),
    click.option("--policy", metavar="NAME", help="One of the scenario's policies."),
    click.option(
        "--exponential", is_flag=True, help="Exponential stays of the same means, no delay, constant demand."
    ),
)
_COMMON = (
    "scenario", "as_json", "seed", "replications", "confidence", "workers", "cluster", "engine", "out", "threshold",
    "incoming", "demand", "target", "policy", "exponential",
)  # fmt: skip


def request_of(values: Mapping[str, Any], also: Callable[[Any], list[Fault]] | None = None) -> Request:
    """The request that the values of the common options make; ScenarioError with every fault, also's too."""
    from sim.scenario import read_scenario

    scenario = read_scenario(values["scenario"])
    faults: list[Fault] = []
    scenario, policy = overridden(scenario, values, faults)
    _writable(values["out"], faults)
    cluster = _cluster(values, faults)
    faults += also(scenario) if also is not None else []
    if faults:
        raise ScenarioError(faults, str(values["scenario"]))
    return Request(
        scenario,
        policy,
        values["confidence"],
        values["workers"],
        values["engine"],
        values["out"],
        values["as_json"],
        changes_of(values),
        cluster=cluster,
    )


def call_with(request: Request, name: str, arguments: Sequence[str]) -> None:
    """Runs a scenario command on a request that is there already; its own options come from the arguments."""
    from analysis.command.entry import brimline

    command = brimline.get_command(None, name)  # type: ignore[arg-type]
    with command.make_context(name, list(arguments), obj=(name, *arguments)) as context:
        own = {option: value for option, value in context.params.items() if option not in _COMMON}
        command.callback.__wrapped__(request, **own)


def require_folder(folder: Path) -> None:
    """A fault where results cannot be written there."""
    faults: list[Fault] = []
    _writable(folder, faults)
    if faults:
        raise ScenarioError(faults)


def require_cluster(address: str | None, workers: int | None) -> str | None:
    """The full address of a cluster; ScenarioError where it cannot be used."""
    faults: list[Fault] = []
    full = _cluster({"cluster": address, "workers": workers}, faults)
    if faults:
        raise ScenarioError(faults)
    return full


def _cluster(values: Mapping[str, Any], faults: list[Fault]) -> str | None:
    """The full address of the scheduler; the cluster's packages are looked for only where one is given."""
    if values.get("cluster") is None:
        return None
    from sim.machines.keys import full_address, require_packages

    if values["workers"] is not None:
        rule, remedy = "must not stand beside --cluster", "give it to `brimline cluster join` on each machine"
        faults.append(Fault(None, "--workers", rule, f"got {values['workers']}", remedy))
    try:
        require_packages("--cluster")
        return full_address(values["cluster"])
    except ScenarioError as error:
        faults.extend(error.faults)
        return None


def require_file_can_be_written(option: str, path: Path, request: Request) -> None:
    """A fault where a file to be written is the scenario or its data, or stands where nothing can be written."""
    source = Path(request.scenario.source.file)
    own = [source, *(source.parent / name for name in request.scenario.source.data)]
    rule, remedy = "", "choose another file"
    if any(path.resolve() == one.resolve() for one in own):
        rule = "must not be the scenario or one of its data files"
    elif not path.parent.is_dir() or not os.access(path.parent, os.W_OK):
        rule, remedy = "must be in a folder that can be written", "make the folder, or choose another"
    if rule:
        raise ScenarioError([Fault(None, option, rule, f"got {str(path)!r}", remedy)], str(source))


def _writable(folder: Path | None, faults: list[Fault]) -> None:
    """Results must be writable before hours are spent on them."""
    if folder is None:
        return
    above = folder
    while not above.exists() and above != above.parent:
        above = above.parent
    blocked = folder.is_symlink() and not folder.exists() or (folder / "earlier").is_file()
    if blocked or not above.is_dir() or not os.access(above, os.W_OK):
        rule, remedy = "must be a folder that can be written", "choose another folder"
        faults.append(Fault(None, "--out", rule, f"got {str(folder)!r}", remedy))
