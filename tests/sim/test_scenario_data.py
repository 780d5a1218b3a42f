"""Files that a scenario names, and the scenario file itself: missing, unreadable, or not what they should be.

Networks and numbers are invented.
"""

import os

import pytest

from sim.errors import ScenarioError
from sim.scenario import read_scenario

SCENARIO = """\
schema = 1
[[units]]
name = "A"
beds = 12
[[patients]]
group = "recorded"
home = "A"
per_day = 1
stay = { family = "empirical", file = "stays.csv", column = "days" }
"""
STAY_LINE = 9


def told(folder, text=SCENARIO):
    """The faults of a scenario file in the folder, as `LINE KEY: rule, value, remedy`."""
    path = folder / "s.toml"
    path.write_bytes(text.encode() if isinstance(text, str) else text)
    try:
        read_scenario(path)
    except ScenarioError as error:
        assert error.file == str(path)
        return [fault.located("").removeprefix(":").replace(": ", " ", 1) for fault in error.faults]
    return []


def told_of(folder, csv):
    """The same of recorded stays with this content."""
    (folder / "stays.csv").write_bytes(csv if isinstance(csv, bytes) else csv.encode())
    return told(folder)


STAY = f"{STAY_LINE} patients.recorded.stay"
ENTRIES = f"{STAY}.column: every entry of column 'days' of stays.csv must be a number from 0 to 36,500"


def test_sound_data(tmp_path):
    assert told_of(tmp_path, "days\n0\n36500\n") == []
    assert told_of(tmp_path, "id, days ,note\n1, 2.5 ,\n") == []


@pytest.mark.parametrize(
    "missing", ["-1", "", "four", "nan", "inf", "-inf", "1e300", "36500.01", "1_000", "2,5", "  "]
)
def test_what_is_no_length_of_stay(tmp_path, missing):
    entry = f'"{missing}"'
    assert told_of(tmp_path, f"id,days\n1,3\n2,{entry}\n3,4\n") == [
        f"{ENTRIES}, got line 3: {missing.strip()!r}, mend or remove those rows"
    ]


def test_rows_at_fault_are_counted_and_the_first_are_shown_by_their_lines(tmp_path):
    assert told_of(tmp_path, 'note,days\nx,-1\n"two\nlines",\nshort\nx,2\nx,a\nx,b\n') == [
        f"{ENTRIES}, got line 2: '-1'; line 4: ''; line 5: ''; and 2 more, mend or remove those rows"
    ]


def test_three_rows_at_fault_are_all_shown(tmp_path):
    (one,) = told_of(tmp_path, "days\n-1\n-2\n-3\n")
    assert "got line 2: '-1'; line 3: '-2'; line 4: '-3', mend" in one


def test_a_blank_line_between_stays_is_a_stay_that_was_not_recorded(tmp_path):
    assert told_of(tmp_path, "days\n1\n\n2\n\n\n") == [
        f"{ENTRIES}, got line 3: '', mend or remove those rows"
    ]


def test_no_stays_at_all(tmp_path):
    remedy = "must hold at least one number, got none, add rows"
    assert told_of(tmp_path, "days\n\n") == [f"{STAY}.column: column 'days' of stays.csv {remedy}"]


@pytest.mark.parametrize(
    ("header", "remedy"),
    [
        ("id,Days,note", "did you mean `Days`?"),
        ("id;days", "separate the columns by commas, not by semicolons or tabs"),
        ("", "known here: nothing"),
        ("days,days", "several columns bear this name; rename all but one"),
        ('"a\x1b[31m"', r"known here: `'a\x1b[31m'`"),
    ],
)
def test_the_column_must_be_there_once(tmp_path, header, remedy):
    assert told_of(tmp_path, f"{header}\n1,2,3\n") == [
        f"{STAY}.column: must name one column of stays.csv, got 'days', {remedy}"
    ]


def test_columns_are_found_however_their_accents_are_typed(tmp_path):
    """One letter of two characters is the letter of one character (Unicode Standard Annex 15, form NFC)."""
    (tmp_path / "stays.csv").write_text("dure\u0301e\n1\n", encoding="utf-8")
    assert told(tmp_path, SCENARIO.replace('"days"', '"dur\u00e9e"')) == []


@pytest.mark.parametrize("content", [b"days\n\xff\xfe\n", b'days\n"open\n', b"\x89PNG\r\n\x1a\n\x00"])
def test_what_is_no_csv(tmp_path, content):
    (one,) = told_of(tmp_path, content)
    assert one.startswith(f"{STAY}.file: must be a CSV file in UTF-8, got 'stays.csv' (")
    assert one.endswith("), save it again as CSV in UTF-8")


PATH_REMEDY = "correct the path (it is relative to the scenario file) or put the file there"


def test_a_csv_file_that_is_not_there(tmp_path):
    path = tmp_path / "stays.csv"
    rule = "must name a CSV file that can be read"
    assert told(tmp_path) == [f"{STAY}.file: {rule}, got '{path}' (no such file or directory), {PATH_REMEDY}"]
    path.mkdir()
    assert told(tmp_path) == [f"{STAY}.file: {rule}, got '{path}' (not a file), {PATH_REMEDY}"]
    path.rmdir()
    os.mkfifo(path)  # a pipe that nobody writes to would be read for ever
    assert told(tmp_path) == [f"{STAY}.file: {rule}, got '{path}' (not a file), {PATH_REMEDY}"]


def test_a_path_that_no_system_takes(tmp_path):
    (one,) = told(tmp_path, SCENARIO.replace("stays.csv", "a\\u0000b"))
    assert one.startswith(f"{STAY}.file: must name a CSV file that can be read, got")
    assert "\x00" not in one
    (one,) = told(tmp_path, SCENARIO.replace("stays.csv", "x" * 5000))
    assert one.startswith(f"{STAY}.file: must name a CSV file that can be read, got")
    assert len(one) < 500


def test_data_at_fault_inside_a_mixture(tmp_path):
    part = '{ family = "empirical", file = "no.csv", column = "x", weight = 1 }'
    stay = SCENARIO[SCENARIO.index("stay =") :]
    text = SCENARIO.replace(stay, f'stay = {{ family = "mixture", parts = [\n{part},\n{part}] }}\n')
    assert [one.split(":")[0] for one in told(tmp_path, text)] == [
        "10 patients.recorded.stay.parts.1.file",
        "11 patients.recorded.stay.parts.2.file",
    ]


def test_every_file_at_fault_is_told(tmp_path):
    again = SCENARIO[SCENARIO.index("[[patients]]") :].replace("recorded", "others").replace("stays", "no")
    assert [one.split(":")[0] for one in told(tmp_path, SCENARIO + again)] == [
        "9 patients.recorded.stay.file",
        "14 patients.others.stay.file",
    ]


def test_a_scenario_that_is_not_there(tmp_path):
    for path, why in ((tmp_path / "no.toml", "no such file or directory"), (tmp_path, "is a directory")):
        with pytest.raises(ScenarioError) as caught:
            read_scenario(path)
        (fault,) = caught.value.faults
        assert fault.line is None
        assert fault.located("ignored") == f"{path}: must be a file that can be read, {why}, correct the path"


def test_a_scenario_that_is_not_utf_8(tmp_path):
    latin = SCENARIO.replace('"A"', '"S\u00e9v\u00e8re"').encode("latin-1")
    (one,) = told(tmp_path, latin)
    assert one.endswith("must be text in UTF-8, byte 31 is not UTF-8, save it again in UTF-8")
    assert latin[30] == 0xE9


def test_a_scenario_of_unreasonable_size(tmp_path):
    (one,) = told(tmp_path, b"#" * 20_000_001)
    assert one.endswith("must be at most 20,000,000 bytes, it is larger, put data into CSV files")
