"""Hostile names: a unit called like an attack is harmless in pages, pictures, Markdown, terminals, CSV, file names."""

import csv
import json
import re
from io import StringIO
from pathlib import Path
from xml.etree import ElementTree

import pytest

from analysis.command.entry import run
from analysis.report import read_results, report_of, to_html, to_markdown
from analysis.report.blocks import Section, Text, table
from analysis.report.contents import Report
from analysis.report.words import clean, name
from sim.wording import in_spreadsheet, visible
from tests.analysis.report_cases import breaches, page_of

TURNED = "\u202eward\u2066"
HEBREW = "\u05d9\u05d7\u05d9\u05d3\u05d4"
NAMES = {
    "script": ("<script>alert(1)</script>", '"><img src=x onerror=alert(2)>'),
    "markup": ("</svg></style>--><b>{{ 7*7 }}{% raw %}", "[a](https://example.org) `x` | y $x^2$ \\u202e"),
    "turned": (TURNED, HEBREW),
    "long": ("W" * 200, "=1+1/../../../etc/passwd"),
}
DRAWN = {
    "svg", "title", "desc", "defs", "g", "path", "use", "clipPath", "rect", "text", "tspan", "marker", "line", "image",
    "pattern",
}  # fmt: skip
SCENARIO = """
schema = 1
title = {title}

[run]
seed = 5
warm_up_days = 14
measured_days = 28
replications = 2

[[units]]
name = {one}
beds = 2
target_utilisation = 0.5

[[units]]
name = {two}
beds = 2
target_utilisation = 0.6

[[patients]]
group = {one}
home = {one}
per_day = 0.7
stay = {{ family = "exponential", mean_days = 2.0 }}

[[patients]]
group = "{other} patients"
home = {two}
per_day = 0.9
stay = {{ family = "exponential", mean_days = 2.0 }}

[[policies]]
name = {one}
closure_threshold = {{ {one} = 1, {two} = 1 }}
"""


def scenario_of(one, two, file):
    """A scenario whose units, title, group and policy have these names."""
    quoted = {"one": json.dumps(one, ensure_ascii=False), "two": json.dumps(two, ensure_ascii=False)}
    text = SCENARIO.format(title=quoted["one"], other=json.dumps(two, ensure_ascii=False)[1:-1], **quoted)
    file.write_text(text if len(two) < 190 else text.replace(" patients", ""), encoding="utf-8")
    return str(file)


@pytest.fixture(scope="module", params=NAMES)
def hostile(request, tmp_path_factory):
    """(names, folders of an exact game and of a comparison, both forms of the report)."""
    folder = tmp_path_factory.mktemp(request.param)
    file = scenario_of(*NAMES[request.param], folder / "two.toml")
    folders = [folder / "game", folder / "compare"]
    assert run(["game", file, "--exact", "--out", str(folders[0]), "--json"]) == 0
    assert run(["compare", file, "--out", str(folders[1]), "--json"]) == 0
    report = report_of(read_results(folders))
    return NAMES[request.param], folders, to_html(report), to_markdown(report)


def test_the_page_stays_sound_and_shows_the_name(hostile):
    names, _, html, _ = hostile
    assert list(breaches(html)) == []
    page = page_of(html)
    cells = {one.text for one in page.of("th", "td")}
    assert {name(visible(one)) for one in names} <= cells


def test_the_pictures_are_sound(hostile):
    _, _, html, _ = hostile
    pictures = re.findall(r"<svg.*?</svg>", html, flags=re.S)
    assert len(pictures) >= 5
    for picture in pictures:
        tags = {one.tag.rpartition("}")[2] for one in ElementTree.fromstring(picture).iter()}
        assert tags <= DRAWN


def test_no_text_turns_round_what_follows(hostile):
    _, _, html, markdown = hostile
    for text in (html, markdown):
        assert not set(text) & set("\u202a\u202b\u202c\u202d\u202e\u2066\u2067")
        assert text.count("\u2068") == text.count("\u2069")
        assert not re.search("[\x00-\x09\x0b-\x1f\x7f]", text)


def test_markdown_holds_no_markup_of_a_name(hostile):
    _, _, _, markdown = hostile
    prose = markdown.split("### Scenario 1")[0]
    commands = [line for line in prose.splitlines() if line.startswith("    ")]
    prose = "\n".join(line for line in prose.splitlines() if line not in commands)
    assert not re.search(r"(?<!\\)<", prose) and not re.search(r"(?<!\\)\]\(", prose)
    widths = [len(re.findall(r"(?<!\\)\|", line)) for line in prose.splitlines() if line.startswith("|")]
    for before, after in zip(widths, widths[1:], strict=False):
        assert before == after or min(before, after) >= 3


def test_pictures_and_tables_are_named_by_numbers(hostile):
    _, folders, _, _ = hostile
    for folder in folders:
        for file in folder.iterdir():
            assert re.fullmatch(r"[a-z0-9.-]+", file.name), file.name


def test_the_terminal_is_told_nothing_but_text(tmp_path, show):
    file = scenario_of(TURNED, "=x", tmp_path / "two.toml")
    for command in (["check"], ["exact"], ["game", "--exact"]):
        status, out, err = show(command[0], file, *command[1:])
        assert status == 0 and "\\u202eward" in out
        assert not set(out + err) & set("\u202e\u2066\x1b")


def test_no_cell_of_a_csv_file_is_a_formula(tmp_path, show):
    file = scenario_of("=1+1", "+2", tmp_path / "two.toml")
    trace, intake = tmp_path / "trace.csv", tmp_path / "intake.csv"
    assert show("simulate", file, "--trace", trace, "--intake-out", intake, "--out", tmp_path / "s")[0] == 0
    assert show("results", "export", tmp_path / "s", tmp_path / "runs.csv")[0] == 0
    assert show("game", file, "--exact", "--control", "--out", tmp_path / "g")[0] == 0
    files = [trace, intake, tmp_path / "runs.csv", *(tmp_path / "g").glob("*.csv")]
    assert len(files) == 5
    for one in files:
        rows = list(csv.reader(StringIO(Path(one).read_text(encoding="utf-8"))))
        cells = [cell for row in rows for cell in row]
        assert any("1+1" in cell for cell in cells), one
        assert [cell for cell in cells if cell[:1] in "=+@" and cell] == [], one
        assert [
            cell for cell in cells if cell.startswith("-") and not re.fullmatch(r"-[\d.e+-]+", cell)
        ] == []


@pytest.mark.parametrize("text", ["=1", "+1", "-1", "@x"])
def test_a_formula_is_kept_from_being_one(text):
    assert in_spreadsheet(text) == f"'{text}"
    assert in_spreadsheet(f"a{text}") == f"a{text}"


def test_what_acts_unseen_is_shown():
    assert visible("a\x1b[31m\u202eb\n") == "a\\u001b[31m\\u202eb\\u000a"
    assert visible(HEBREW + "é\u200d") == HEBREW + "é\u200d"
    assert clean({"a\u202e": ["b\x00", 1, None]}) == {"a\\u202e": ["b\\u0000", 1, None]}
    assert name("plain") == "plain" and name(HEBREW) == f"\u2068{HEBREW}\u2069"


def test_any_block_escapes_what_it_is_given():
    bad = '<script>alert("x")</script>'
    report = Report(bad, (Section(bad, "a", (Text(bad), table(bad, [bad, bad], [[bad, bad]]))),))
    html = to_html(report)
    assert "<script>" not in html and html.count("&lt;script&gt;") == 10
    assert not re.search(r"(?<!\\)<", to_markdown(report))
