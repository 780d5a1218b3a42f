"""What is never said: no source, document, help or output of a command holds a phrase that claims too much."""

from __future__ import annotations

from pathlib import Path

import click
import pytest

from analysis.command.entry import COMMANDS as NAMES
from analysis.command.entry import brimline, run
from analysis.report.words import NEVER_SAID
from tests.analysis.test_interface import COMMANDS, SCENARIO

ROOT = Path(__file__).resolve().parents[2]
PHRASES = {*NEVER_SAID, "will settle at"}
LISTED = ROOT / "analysis" / "report" / "words.py"  # where the phrases themselves are named


def said(text):
    """The phrases in a text, across its line ends."""
    return {phrase for phrase in PHRASES if phrase in " ".join(text.lower().split())}


def sources():
    rooms = [path for room in ("sim", "analysis", "scenarios") for path in (ROOT / room).rglob("*")]
    suffixes = {".py", ".toml", ".csv", ".html", ".css", ".md", ".j2"}
    return [ROOT / "README.md", ROOT / "DEVELOPERS.md", *(path for path in rooms if path.suffix in suffixes)]


def test_no_source_says_it():
    found = {str(path): said(path.read_text(encoding="utf-8")) for path in sources() if path != LISTED}
    assert len(found) > 100
    assert {path: phrases for path, phrases in found.items() if phrases} == {}


def test_the_search_finds_a_planted_phrase_across_a_line_end_and_the_list_itself():
    assert said("These rules are\n  Safe to\n  close, they WILL settle\nat 0.8") == {
        "safe to close",
        "will settle at",
    }
    assert said(LISTED.read_text(encoding="utf-8")) >= set(NEVER_SAID)


def every_command(command, path=("brimline",)):
    yield path, command
    if isinstance(command, click.Group):
        with click.Context(command, info_name=path[-1]) as context:
            for name in command.list_commands(context):
                yield from every_command(command.get_command(context, name), (*path, name))


def test_no_help_says_it():
    helps = {}
    for path, command in every_command(brimline):
        with click.Context(command, info_name=" ".join(path)) as context:
            helps[path] = command.get_help(context)
    assert len(helps) > len(NAMES) + 8
    assert {path: said(text) for path, text in helps.items() if said(text)} == {}


@pytest.mark.parametrize("name", COMMANDS)
def test_no_output_says_it(name, tmp_path, capsys):
    path = tmp_path / "s.toml"
    path.write_text(SCENARIO, encoding="utf-8")
    command, *options = COMMANDS[name]
    assert run([command, str(path), *options, "--workers", "1", "--engine", "reference"]) == 0
    captured = capsys.readouterr()
    assert len(captured.out) > 300 and "planning only" in captured.out
    assert said(captured.out + captured.err) == set()
