"""`simulate --precision`: replications in rounds until the named measures are known well enough."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import click

from analysis.command.entry import say
from analysis.command.options import FiniteRange, Request
from analysis.command.output import number, put_table, put_text
from sim.errors import Fault, ScenarioError

if TYPE_CHECKING:
    from analysis.command.running import Ran
    from analysis.stopping import Aim
    from sim.replicate import Run

LEAST_RELATIVE = 1e-6


def precision_options(function: Any) -> Any:
    """Adds --precision and --precise."""
    precise = click.option(
        "--precise", multiple=True, metavar="[UNIT=]MEASURE",
        help="What --precision is for (repeatable) [default: patients treated and turned away a day, every unit's "
        "utilisation].",
    )  # fmt: skip
    precision = click.option(
        "--precision", metavar="G", type=FiniteRange(LEAST_RELATIVE, 1, max_open=True),
        help="Run until the relative error is at most G, such as 0.01; --replications is then the most [10000].",
    )  # fmt: skip
    return precision(precise(function))


def aim_of(request: Request, precision: float | None, precise: tuple[str, ...]) -> Aim | None:
    """What the options ask for, with every fault; None without --precision."""
    from analysis.stopping import DEFAULT_MEASURES, FIRST_LOOK, Aim

    faults: list[Fault] = []
    if precision is None:
        if precise:
            rule, remedy = "says what --precision is for", "add --precision 0.01, or leave --precise out"
            raise ScenarioError([Fault(None, "--precise", rule, "got no --precision", remedy)])
        return None
    most = _most(faults, FIRST_LOOK)
    where = [place for name in precise or DEFAULT_MEASURES for place in _places(name, request, faults)]
    if faults:
        raise ScenarioError(faults, str(request.scenario.source.file))
    return Aim(precision, tuple(dict.fromkeys(where)), most)


def _most(faults: list[Fault], least: int) -> int:
    """The most replications: as the command line gives them; a file's own number is no bound on a precision."""
    from analysis.stopping import MOST_REPLICATIONS

    context = click.get_current_context(silent=True)
    given = None if context is None else context.params.get("replications")
    if given is not None and given < least:
        rule = (
            f"must be at least {least} with --precision: the spread of fewer replications stops it too soon"
        )
        faults.append(Fault(None, "--replications", rule, f"got {given}", "raise it, or leave it out"))
    return MOST_REPLICATIONS if given is None else given


def _places(name: str, request: Request, faults: list[Fault]) -> tuple[tuple[str, str], ...]:
    import unicodedata

    from analysis.stopping import MEASURES, places_of
    from sim.wording import nearest, shown

    try:
        return places_of(unicodedata.normalize("NFC", name), request.scenario)
    except KeyError as error:
        rule, known = "must be MEASURE or UNIT=MEASURE", [*MEASURES, *request.scenario.unit_names]
        remedy = nearest(error.args[0], known)
        faults.append(Fault(None, "--precise", rule, f"got {shown(name)}", remedy))
        return ()


@dataclass
class _Rounds:
    """The runs so far, by replication, and what became of the rounds."""

    runs: dict[int, Run]
    ran: Ran | None = None

    def take(self, reply: Any) -> None:
        if isinstance(reply, list):
            self.runs.update((run.replication, run) for run in reply)

    def add(self, ran: Ran) -> None:
        """The rounds so far as one: with a store, what was computed in any of them; the last failures."""
        if self.ran is not None and ran.computed is not None:
            computed = self.ran.computed + ran.computed
            ran = replace(ran, computed=computed, reused=len(self.runs) - computed)
        elif self.ran is not None:
            ran = replace(ran, failures=[*self.ran.failures, *ran.failures])
        self.ran = ran


def collect_until_precise(request: Request, aim: Aim, *, label: str) -> tuple[list[Run], Ran, dict[str, Any]]:
    """The runs by replication, how they were run, and the precision reached; Ctrl-C keeps what is there."""
    from analysis.command.running import require, run_replications
    from analysis.stopping import next_size, precision_document, precisions

    rounds, size, done = _Rounds({}), aim.first, 0
    found: list[Any] = []
    while size is not None:
        asked = replace(request, scenario=request.scenario.with_run(replications=size))
        try:
            rounds.add(
                run_replications(
                    asked, [request.policy], label=label, take=rounds.take, keep=True, first=done
                )
            )
        except KeyboardInterrupt:  # between two rounds
            if rounds.ran is None:
                raise
            rounds.ran = replace(rounds.ran, interrupted=True)
        require(len(rounds.runs), rounds.ran.interrupted)
        found = precisions([run.record for run in _in_order(rounds.runs)], request.scenario, aim)
        done, size = size, None if rounds.ran.interrupted else next_size(size, found, aim)
        if size is not None:
            say(f"{done} replications; {_widest(found)}; going on to {size}")
    return (
        _in_order(rounds.runs),
        rounds.ran,
        precision_document(found, aim, interrupted=rounds.ran.interrupted),
    )


def _in_order(runs: dict[int, Run]) -> list[Run]:
    return [runs[number] for number in sorted(runs)]


def _widest(found: list[Any]) -> str:
    """The measure that is furthest from the aim, in words."""
    open_ones = [one for one in found if one.reached is False and one.relative is not None]
    if not open_ones:
        return "no interval yet"
    worst = max(open_ones, key=lambda one: one.relative)
    return f"{worst.where}, {worst.measure} is known to {100 * worst.relative:.2g} %"


def show_precision(document: dict[str, Any]) -> None:
    """The precision reached, as a table and a sentence."""
    put_table(
        f"Precision: half-width over estimate, aimed at {100 * document['target']:.4g} %",
        ("where", "measure", "estimate", "half-width", "%", "reached"),
        [
            (one["where"], one["measure"], one["mean"], number(one["half_width"], 4),
             "-" if one["relative"] is None else number(100 * one["relative"], 2),
             "0 throughout" if one["reached"] is None else number(one["reached"]))
            for one in document["measures"]
        ],
    )  # fmt: skip
    put_text(
        {
            "precision": "Stopped because everything aimed at was reached; each interval stands by itself.",
            "most_replications": f"Stopped at the most replications ({document['most_replications']}), before "
            "everything aimed at was reached.",
            "interrupt": "Interrupted before everything aimed at was reached.",
        }[document["ended_by"]]
    )
