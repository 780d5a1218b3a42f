"""Texts that are no TOML, and sound texts damaged at random: always faults in plain words, never a crash.

The syntax is that of the TOML specification, v1.0.0 (Preston-Werner, Gedam et al., 2021). The network is
invented.
"""

import re

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sim.errors import ScenarioError
from sim.scenario import parse_scenario

SOUND = """\
schema = 1
title = "Two invented units" # a comment
[run]
seed = 4021
measured_days = 728
[[units]]
name = "Ashgill"
beds = 12
closure_threshold = 11
admit_while_closed = 0.5
referral_order = ["Norbeck"]
[[units]]
name = "Norbeck"
beds = 18
[[patients]]
group = "A"
home = "Ashgill"
per_day = 2.1
day_of_week = [
  1, 1, 1, 1, 1, # working days
  0.8, 0.8,
]
stay = { family = "coxian", rates_per_day = [0.5, 0.1], goes_on = [0.2] }
[[patients]]
group = "N"
home = "Norbeck"
per_day = 3.3
[patients.stay]
family = "mixture"
parts = [{ family = "erlang", mean_days = 2, stages = 3, weight = 1 }]
[diversion]
when_all_closed = "any_bed"
delay = { family = "lognormal", mean_hours = 2.5, cv = 0.5 }
[game]
goal = { shape = "squared", judged_over_days = 91 }
welfare = { kind = "loss", transfer_weight = 0.3 }
strategies = { Ashgill = { from = 1, to = 12 }, Norbeck = { values = [6, 9] } }
[[policies]]
name = "p"
incoming_threshold = { Ashgill = 2 }
referral_order = { Norbeck = ["Ashgill"] }
review_hours = { Norbeck = 8 }
"""


def faults_of(text):
    """Every fault of a text; none where it is sound. Any other exception passes."""
    try:
        parse_scenario(text, file="s.toml")
    except ScenarioError as error:
        return error.faults
    return ()


def test_the_sound_text_is_sound():
    assert faults_of(SOUND) == ()


BRACKETS = "write `[[units]]` in double brackets above each row"
QUOTES = "(a key with spaces or accents needs quotes)"
SYNTAX = [
    ("beds = 12", "beds =", "no value that TOML knows, correct this line (text needs quotes)"),
    ('name = "Ashgill"', "name = Ashgill", "no value that TOML knows, correct this line (text needs quotes)"),
    ('name = "Ashgill"', 'name = "Ashgill', "a line that ends inside quotes, close the quotes"),
    ("beds = 12", "beds 12", f"a key without `=` after it, write `key = value` {QUOTES}"),
    ("beds = 12", "é = 12", f"no key where one was expected, correct this line {QUOTES}"),
    ("beds = 12", "beds = 12\nbeds = 13", "a key is given twice, remove one of the two"),
    ("beds = 12", "beds = 12 13", "expected newline or end of document after a statement, correct this line"),
    ("[game]", "[run]", "a second table 'run', join the two"),
    ("[game]", "[units]", f"a second table `[units]`, {BRACKETS}"),
    ("[game]", "[[game]", "expected ']]' at the end of an array declaration, correct this line"),
    ("beds = 12", "beds = " + "[" * 5000, "nested too deeply, flatten it"),
    ("beds = 12", ".".join("a" * 1200) + " = 1", "nested too deeply, flatten it"),
]


@pytest.mark.parametrize("ending", ["\n", "\r\n"], ids=["unix", "windows"])
@pytest.mark.parametrize(("old", "new", "said"), SYNTAX)
def test_syntax_errors(old, new, said, ending):
    assert SOUND.count(f"\n{old}\n") == 1
    line = SOUND[: SOUND.index(f"\n{old}\n") + 1].count("\n") + 1 + new.count("\n")
    text = SOUND.replace(f"\n{old}\n", f"\n{new}\n").replace("\n", ending)
    assert [fault.located("s.toml") for fault in faults_of(text)] == [
        f"s.toml:{line}: file: must be valid TOML, {said}"
    ]


@pytest.mark.parametrize("open_end", ["x = [1,\n2", 'x = """\n\n', "x = {", "x ="])
def test_what_is_missing_at_the_end_is_told_at_the_last_line_that_is_not_blank(open_end):
    text = SOUND + open_end + "\n\n\n"
    (fault,) = faults_of(text)
    assert fault.line == text.rstrip().count("\n") + 1


def test_deep_nesting_within_bounds_is_a_fault_of_its_key():
    (fault,) = faults_of(SOUND.replace("beds = 12", "beds = " + "[" * 200 + "]" * 200))
    assert fault.located("s.toml").startswith(
        "s.toml:8: units.Ashgill.beds: must be a whole number, got [[...]], "
    )


ODD_VALUES = [
    "9" * 400, "0x" + "f" * 4000, "nan", "-inf", "1e300", "5e-324", "-1", "0", "0.5", "1_000", "true",
    "2024-01-31", "07:30:00", "[]", "[[]]", "[[[1]]]", "[nan]", "[1, 'a']", "['Ashgill', 'Ashgill']", "{}",
    "{ a = {} }", "[{}]", "{ Ashgill = {} }", "{ family = 'mixture', parts = [] }", "{ family = [] }",
    "{ family = 'coxian', rates_per_day = [1e300], goes_on = [] }", "{ kind = {} }", "''", '"\\u0000"',
    '"\\u001b[2J"', "'network'", "'Ashgill'", "'lognormal'", "'''\nx\n'''", '"' + "x" * 3000 + '"',
]  # fmt: skip
ODD_KEYS = [
    "name",
    "beds",
    "family",
    "kind",
    "stay",
    "units",
    "per_day",
    "values",
    '"a b"',
    "''",
    "'[key]'",
    "a.b",
]
PIECES = [*"=[]{}\"'#,.\n\r\t\\ 0a-_", "é", "\u0301", "\u202e", "\x00", "\x7f", "\ufeff", "[[units]]\n"]
VALUE = re.compile(r"""= *(\{[^{}\n]*\}|\[[^\[\]]*\]|"[^"\n]*"|[-\w.]+)""")
KEY = re.compile(r"(\w+) *=")


def replaced(text, span, new):
    start, end = span
    return text[:start] + new + text[end:]


@st.composite
def damaged(draw):
    """The sound text with one to four values, keys, lines or stretches of characters exchanged."""
    text = SOUND
    for _ in range(draw(st.integers(1, 4))):
        kind = draw(st.sampled_from(["value", "value", "key", "cut", "insert", "lines"]))
        if kind in ("value", "key"):
            found = [match.span(1) for match in (VALUE if kind == "value" else KEY).finditer(text)]
            odd = st.sampled_from(ODD_VALUES if kind == "value" else ODD_KEYS)
            text = replaced(text, draw(st.sampled_from(found)), draw(odd)) if found else text
        elif kind == "lines":
            lines = text.split("\n")
            line = lines.pop(draw(st.integers(0, len(lines) - 1)))
            lines.insert(draw(st.integers(0, len(lines))), line)
            text = "\n".join(lines)
        else:
            start = draw(st.integers(0, len(text)))
            length = draw(st.integers(1, 40)) if kind == "cut" else 0
            new = "" if kind == "cut" else draw(st.sampled_from(PIECES))
            text = replaced(text, (start, start + length), new)
    return text


def is_in_plain_words(fault, text):
    """One printable line of sensible length, at a line of the text, with nothing of Python left in it."""
    told = fault.located("s.toml")
    lines = max(1, text.replace("\r\n", "\n").count("\n") + 1)
    return (
        1 <= fault.line <= lines
        and all((fault.key, fault.rule, fault.value, fault.remedy))
        and told.isprintable()
        and len(told) < 1500
        and not re.search(r"None|Error|pydantic|validation|object at|<class", told)
    )


@settings(max_examples=300, derandomize=True, deadline=None)
@given(damaged())
def test_a_damaged_text_is_told_in_plain_words_or_is_sound(text):
    for fault in faults_of(text):
        assert is_in_plain_words(fault, text), fault


@settings(max_examples=100, derandomize=True, deadline=None)
@given(st.text(st.characters(codec="utf-8"), max_size=60))
def test_any_text_at_all_is_no_scenario_and_no_crash(text):
    faults = faults_of(text)
    assert faults
    assert all(is_in_plain_words(fault, text) for fault in faults)
