"""The entry point: finds the command, and turns every error into plain words and an exit status.

Status: 0 done; 1 the computation failed, or a check it ran did not hold; 2 command line, scenario or data at
fault; 130 interrupted.
"""

from __future__ import annotations

import importlib
import os
import sys
import traceback
from collections.abc import Sequence

import click

import sim
from analysis.command.caution import CAUTION
from sim.errors import BrimlineError, Fault, ScenarioError, StoreError

DONE, FAILED, AT_FAULT, INTERRUPTED = 0, 1, 2, 130
COMMANDS = {
    "check": "Read the scenario back as tables before anything runs.",
    "simulate": "Simulate one policy: its measures with intervals.",
    "exact": "The same measures from the exact Markov chain.",
    "verify": "Hold the simulation against the exact chain, measure by measure.",
    "game": "Payoff table, equilibria, optimum and price of anarchy.",
    "batch": "A long plan of scenarios and analyses, resumable, by rounds through the night.",
    "compare": "Policies side by side on the same patients: differences, the best, bad years.",
    "ledger": "Who pays for whose closure: what each unit's early closing costs each home.",
    "sweep": "Equilibria and the price of anarchy over demand, targets and more.",
    "align": "The lowest target at which every possible equilibrium is near the optimum.",
    "report": "One page for the board from what --out left.",
    "cluster": "Several machines as one: keys, the scheduler, workers, who is there.",
    "results": "What runs with --out have left: list, show, export, verify, repeat, watch.",
}


class Interrupted(Exception):
    """Ctrl-C, after what was computed has been handed over."""


class CheckFailed(Exception):
    """A check that the command ran did not hold; its result has been handed over."""


class LazyCommands(click.Group):
    """Knows its commands by name and imports one only when it is needed."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, name: str) -> click.Command | None:
        if name not in COMMANDS:
            return None
        return importlib.import_module(f"analysis.command.{name}").command

    def resolve_command(self, ctx: click.Context, args: list[str]):
        if args and args[0] not in COMMANDS:
            from sim.wording import nearest

            raise click.UsageError(f"There is no command `{args[0]}`; {nearest(args[0], COMMANDS)}", ctx)
        return super().resolve_command(ctx, args)

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))


@click.command(cls=LazyCommands, epilog=CAUTION, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(sim.__version__, prog_name="brimline")
def brimline() -> None:
    """Closure rules in a network of critical-care units: simulate them, and find what selfish ones cost.

    Commands read a SCENARIO, a TOML file; `results` reads what they left in a folder. Start with `brimline
    check SCENARIO`.
    """


def main(arguments: Sequence[str] | None = None) -> None:
    """Runs the command line and exits with its status."""
    for stream in (sys.stdout, sys.stderr):  # a name that the terminal cannot show is shown in escapes
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="backslashreplace")
    try:
        status = run(list(sys.argv[1:] if arguments is None else arguments))
    finally:
        if "sim.workers" in sys.modules:
            sys.modules["sim.workers"].stop_processes()  # a stopped one would keep this one from ending
    sys.exit(status)


def run(arguments: list[str]) -> int:
    """Runs the command line; returns the exit status."""
    as_json = "--json" in arguments
    try:
        status = brimline.main(arguments, prog_name="brimline", standalone_mode=False, obj=tuple(arguments))
        return status if isinstance(status, int) else DONE
    except Interrupted:
        return INTERRUPTED
    except CheckFailed:
        return FAILED
    except (KeyboardInterrupt, click.Abort):
        say("interrupted")
        return INTERRUPTED
    except click.ClickException as error:
        return _usage_fault(error, as_json)
    except ScenarioError as error:
        return _scenario_faults(error, as_json)
    except BrimlineError as error:
        return _failure(error, as_json)
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return FAILED
    except OSError as error:
        say(f"could not read or write: {error}")
        return FAILED
    except Exception as error:
        say(f"failed unexpectedly: {type(error).__name__}: {error} (BRIMLINE_DEBUG=1 shows where)")
        if os.environ.get("BRIMLINE_DEBUG"):
            traceback.print_exc()
        return FAILED


def say(text: str) -> None:
    """One notice on standard error."""
    print(f"brimline: {text}", file=sys.stderr)


def _usage_fault(error: click.ClickException, as_json: bool) -> int:
    error.show(sys.stderr)
    parameter = getattr(error, "param", None)
    key = getattr(error, "option_name", None) or (
        parameter.opts[-1] if parameter is not None else "command line"
    )
    if as_json:
        _put_faults([Fault(None, key, "is not a valid use", error.format_message(), "see --help")])
    return AT_FAULT


def _scenario_faults(error: ScenarioError, as_json: bool) -> int:
    for fault in error.faults:
        print(fault.located(error.file), file=sys.stderr)
    if as_json:
        _put_faults(error.faults)
    return AT_FAULT


def _put_faults(faults: Sequence[Fault]) -> None:
    from analysis.command.output import put_json

    put_json({"faults": [vars(fault) for fault in faults]})


def _failure(error: BrimlineError, as_json: bool) -> int:
    """An error that names reasons is at the scenario's door; any other is a failed computation."""
    reasons = getattr(error, "reasons", None)
    if reasons is None:
        say(str(error))
        if as_json and isinstance(error, StoreError):  # raised before anything is shown
            from analysis.command.output import put_json

            put_json({"failed": str(error)})
        return FAILED
    for reason in reasons:
        say(reason)
    if as_json:
        from analysis.command.output import put_json

        put_json({"reasons": list(reasons)})
    return AT_FAULT
