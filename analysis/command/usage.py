"""What is at fault in the values of a command line: all of it at once, each with key, rule, value and remedy."""

from __future__ import annotations

import unicodedata
from collections import Counter
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import click

from sim.errors import Fault, ScenarioError
from sim.wording import shown

HELP = "see `{} --help`"


class Checked(click.Command):
    """A command that tells of every value that its options cannot take, not only of the first."""

    def parse_args(self, ctx: click.Context, args: list[str]) -> list[str]:
        given = list(args)
        try:
            rest = super().parse_args(ctx, args)
        except click.BadParameter:
            raise ScenarioError(_faults(self, ctx, given)) from None
        if faults := _faults(self, ctx, given):
            raise ScenarioError(faults)
        return rest


def _faults(command: click.Command, ctx: click.Context, args: list[str]) -> list[Fault]:
    values, _, _ = command.make_parser(ctx).parse_args(args=list(args))
    return [
        fault
        for parameter in command.get_params(ctx)
        if not parameter.is_eager
        for fault in (
            *_empty(parameter, values),
            *_repeated(parameter, values),
            *_not_taken(parameter, values, ctx),
        )
    ]


def _not_taken(parameter: click.Parameter, values: Mapping[str, Any], ctx: click.Context) -> Iterator[Fault]:
    """What a parameter's own type or check refuses."""
    value, _ = parameter.consume_value(ctx, values)
    try:
        parameter.process_value(ctx, value)
    except click.MissingParameter:
        yield Fault(None, _key(parameter), "is required", "missing", HELP.format(ctx.command_path))
    except click.BadParameter as error:
        rule, remedy = _rule(parameter.type), HELP.format(ctx.command_path)
        said = error.message.rstrip(".")
        yield Fault(None, _key(parameter), rule or f"cannot be taken: {said}", f"got {_shown(value)}", remedy)


def _empty(parameter: click.Parameter, values: Mapping[str, Any]) -> Iterator[Fault]:
    """An empty path would be the folder that the command runs in."""
    if isinstance(parameter.type, click.Path):
        value = values.get(parameter.name)
        if "" in (value if isinstance(value, list | tuple) else [value]):
            yield Fault(None, _key(parameter), "must not be empty", "got ''", "name a file or a folder")


def _repeated(parameter: click.Parameter, values: Mapping[str, Any]) -> Iterator[Fault]:
    """A unit given two values by one option: which one would hold?"""
    if not (parameter.multiple if isinstance(parameter, click.Option) else False):
        return
    if not str(parameter.metavar).startswith("UNIT="):
        return
    entries = [entry for entry in values.get(parameter.name) or () if isinstance(entry, str) and "=" in entry]
    names = Counter(unicodedata.normalize("NFC", entry.rpartition("=")[0]) for entry in entries)
    for name in (name for name, times in names.items() if times > 1):
        rule, got = "must name each unit once", f"got {shown(name)} {names[name]} times"
        yield Fault(None, _key(parameter), rule, got, "keep one of them")


def _rule(kind: click.ParamType) -> str | None:
    """What a value must be, in words; None where only the check's own message says so."""
    if isinstance(kind, click.types.IntParamType):
        return f"must be a whole number{_bounds(kind)}"
    if isinstance(kind, click.types.FloatParamType):
        return f"must be a number{_bounds(kind)}"
    if isinstance(kind, click.Choice):
        return f"must be one of {', '.join(f'`{choice}`' for choice in kind.choices)}"
    if isinstance(kind, click.Path):
        wanted = "a folder" if kind.dir_okay and not kind.file_okay else "a file"
        return f"must be {wanted}{' that is there' if kind.exists else ''}"
    return None


def _bounds(kind: Any) -> str:
    """`from 1 to 9`, `above 0 and at most 1`, `0 or more`."""
    low, high = getattr(kind, "min", None), getattr(kind, "max", None)
    if low is None and high is None:
        return ""
    if high is None:
        return f" above {low:g}" if kind.min_open else f", {low:g} or more"
    if low is not None and not (kind.min_open or kind.max_open):
        return f" from {low} to {high}"
    above = "" if low is None else f" {'above' if kind.min_open else 'at least'} {low:g} and"
    return f"{above} {'below' if kind.max_open else 'at most'} {high:g}"


def _key(parameter: click.Parameter) -> str:
    return parameter.opts[0] if isinstance(parameter, click.Option) else parameter.human_readable_name


def _shown(value: Any) -> str:
    if isinstance(value, list | tuple):
        return ", ".join(_shown(one) for one in value)
    return shown(str(value) if isinstance(value, Path) else value)
