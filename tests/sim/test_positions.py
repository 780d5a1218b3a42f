"""Lines of keys, on TOML texts in which every key's value is the number of the line it must be found on.

The forms of keys, tables and arrays are those of the TOML specification, v1.0.0 (Preston-Werner, Gedam et
al., 2021). Values are read by Python's tomllib, so that the places are held against another reader.
"""

import tomllib

import pytest

from sim.scenario.positions import key_lines, line_of


def numbers(value, path=()):
    """Every whole number of a document, with its path."""
    if isinstance(value, dict):
        return [found for key, inner in value.items() for found in numbers(inner, (*path, key))]
    if isinstance(value, list):
        return [found for row, inner in enumerate(value) for found in numbers(inner, (*path, row))]
    return [(path, value)] if isinstance(value, int) else []


SELF_NUMBERED = {
    "keys": "a = 1\n\nb = 3\n",
    "comments and blank lines": "# about\n\na = 3 # three\n# nothing\nb = 5",
    "tables": "[run]\nseed = 2\n[game]\nx = 4\n[run.more]\ny = 6\n",
    "arrays of tables": (
        "[[units]]\nx = 2\n[[units]]\nx = 4\n[units.sub]\ny = 6\n"
        "[[units.parts]]\nz = 8\n[[units.parts]]\nz = 10\n"
    ),
    "dotted keys": "a.b.c = 1\na . b . d = 2\n[t]\nu.v = 4\nu.w = 5\n",
    "dotted headers": "[ a . b ]\nx = 2\n[a.c]\nx = 4\n[[d.e]]\nx = 6\n[[d.e]]\nx = 8\n",
    "quoted keys": '"two words" = 1\n\'dots.inside\' = 2\n"" = 3\n["North = South"]\nx = 5\n',
    "escaped keys": '"\\u0041shgill" = 1\n',
    "inline tables": "a = { b = 1, c = { d = 1, e = [1, { f = 1 }] } }\n",
    "arrays over several lines": "a = [\n  2, # two\n  # none\n\n  5, 5,\n  6\n]\nb = 8",
    "tables inside arrays": "a = [\n  { b = 2 },\n  { b = 3, c = [ 3,\n 4] },\n]\n",
    "text over several lines": 'a = """\n[not]\nb = 1\n"""\nc = 5\n\'d\' = 6\n',
    "text with quotes at its end": "a = '''it's'''''\nb = 2\nc = \"\"\"\"said\"\"\"\"\nd = 4\n",
    "keys that look like values": "true = 1\n1979-05-27 = 2\ninf = 3\n-1 = 4\n",
    "text beyond ASCII": 'a = "é\u2028\U0001f600"\n"Sévère" = 2\n',
    "indented": "  a = 1\n\tb = 2\n  [c]\n    d = 4\n",
}


@pytest.mark.parametrize("ending", ["\n", "\r\n"], ids=["unix", "windows"])
@pytest.mark.parametrize("text", SELF_NUMBERED.values(), ids=SELF_NUMBERED)
def test_every_number_stands_on_its_own_line(text, ending):
    text = text.replace("\n", ending)
    lines = key_lines(text)
    found = numbers(tomllib.loads(text))
    assert len(found) >= 1
    assert [(path, lines[path]) for path, _ in found] == found


def test_a_table_stands_at_its_header_and_an_inline_table_at_its_key():
    lines = key_lines("[run]\nseed = 1\n[[units]]\n[[units]]\nstay = {\n}\n".replace("{\n}", "{}"))
    assert lines[("run",)] == 1
    assert (lines[("units",)], lines[("units", 0)], lines[("units", 1)]) == (3, 3, 4)
    assert lines[("units", 1, "stay")] == 5


def test_a_table_that_is_only_implied_stands_where_it_is_first_implied():
    lines = key_lines("schema = 1\n[game.strategies.Ashgill]\nfrom = 1\n[[units]]\nstay.family = 'x'\n")
    assert (lines[("game",)], lines[("game", "strategies")]) == (2, 2)
    assert lines[("units", 0, "stay")] == 5


def test_a_reopened_table_keeps_its_first_line():
    lines = key_lines("[a.b]\nx = 1\n[a]\ny = 1\n[a.c]\nz = 1\n")
    assert (lines[("a",)], lines[("a", "b")], lines[("a", "c")]) == (1, 1, 5)


def test_what_the_file_does_not_hold_is_sought_at_the_nearest_table_above():
    lines = key_lines("schema = 1\n[run]\nseed = 1\n[[units]]\nname = 'A'\n")
    assert line_of(lines, ("run", "confidence")) == 2
    assert line_of(lines, ("units", 0, "referral_order", 3)) == 4
    assert line_of(lines, ("nowhere", "at", "all")) == 1


def test_an_empty_text_has_one_line():
    assert line_of(key_lines(""), ("schema",)) == 1


def test_keys_are_composed_as_values_are():
    """The same letter as one character and as two (Unicode Standard Annex 15, form NFC)."""
    assert ("Se\u0301ve\u0300re",) not in key_lines('"Se\u0301ve\u0300re" = 1')
    assert key_lines('"Se\u0301ve\u0300re" = 1')[("S\u00e9v\u00e8re",)] == 1
    assert key_lines('"Se\\u0301ve\\u0300re" = 1')[("S\u00e9v\u00e8re",)] == 1
