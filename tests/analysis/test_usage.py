"""Values that options cannot take: every one is told of at once, with key, rule, value and remedy; status 2."""

from __future__ import annotations

import json

import pytest

from analysis.command.entry import run

SCENARIO = "scenarios/two-units.toml"
HINT = "see `brimline {} --help`"


def told(capsys, *arguments):
    """The faults of a command line as JSON tells them; standard error holds one line for each, no traceback."""
    assert run([*arguments, "--json"]) == 2
    captured = capsys.readouterr()
    faults = json.loads(captured.out)["faults"]
    assert len(captured.err.splitlines()) == len(faults)
    assert "Traceback" not in captured.err and "unexpectedly" not in captured.err
    return [(fault["key"], fault["rule"], fault["value"], fault["remedy"]) for fault in faults]


def test_all_values_at_fault_are_told_at_once(capsys):
    given = ("--seed", "x", "--confidence", "nan", "--workers", "0", "--engine", "fast", "--demand", "")
    hint = HINT.format("simulate")
    assert told(capsys, "simulate", SCENARIO, *given) == [
        ("--seed", f"must be a whole number from 0 to {2**63 - 1}", "got 'x'", hint),
        ("--confidence", "must be a number above 0 and below 1", "got 'nan'", hint),
        ("--workers", "must be a whole number from 1 to 1024", "got '0'", hint),
        ("--engine", "must be one of `compiled`, `reference`", "got 'fast'", hint),
        ("--demand", "must be a number", "got ''", hint),
    ]


@pytest.mark.parametrize(
    ("arguments", "key"),
    [
        (["check", SCENARIO, "--half-width", "nan"], "--half-width"),
        (["check", SCENARIO, "--half-width", "inf"], "--half-width"),
        (["exact", SCENARIO, "--after-days", "1,,2"], "--after-days"),
        (["game", SCENARIO, "--minutes", "nan"], "--minutes"),
        (["game", SCENARIO, "--epsilon", "-1"], "--epsilon"),
        (["batch", SCENARIO, "--until", "25:00"], "--until"),
        (["results", "show", "no such folder"], "FOLDER"),
        (["check"], "SCENARIO"),
    ],
)
def test_one_value_at_fault(capsys, arguments, key):
    [(named, rule, value, remedy)] = told(capsys, *arguments)
    assert (
        named == key
        and rule
        and value
        and remedy == HINT.format(" ".join(arguments[: 1 + (key == "FOLDER")]))
    )


@pytest.mark.parametrize(
    "arguments",
    [
        ["simulate", SCENARIO, "--out", ""], ["simulate", SCENARIO, "--trace", ""], ["check", ""],
        ["report", "", "--out", "x.html"],
    ],
)  # fmt: skip
def test_an_empty_path_is_not_the_folder_one_stands_in(capsys, arguments):
    assert ("must not be empty", "got ''") in [fault[1:3] for fault in told(capsys, *arguments)]


@pytest.mark.parametrize("option", ["--threshold", "--incoming"])
def test_a_unit_given_two_values_is_a_fault_and_two_units_are_none(capsys, option):
    twice = (option, "Ashgill=8", option, "Norbeck=9", option, "Ashgill=7")
    assert told(capsys, "check", SCENARIO, *twice) == [
        (option, "must name each unit once", "got 'Ashgill' 2 times", "keep one of them")
    ]
    assert run(["check", SCENARIO, *twice[:4]]) == 0
