"""The command line with a scenario, data or options at fault: status 2, plain words, and never a traceback.

Faults go to standard error as `FILE:LINE: KEY: rule, value, remedy`; with `--json` also to standard output,
one document and nothing else there. Networks are invented.
"""

import json

import pytest

from analysis.command.entry import run

SCENARIO = """\
schema = 1
[[units]]
name = "Ashgill"
beds = 12
[[units]]
name = "North = South"
beds = 18
closure_threshold = 15
[[patients]]
group = "Ashgill emergencies"
home = "Ashgill"
per_day = 2.1
stay = { family = "exponential", mean_days = 4 }
[[policies]]
name = "close only when full"
closure_threshold = { Ashgill = 12 }
"""
COMMANDS = ("check", "simulate", "exact", "verify", "game")


@pytest.fixture
def brimline(tmp_path, capsys):
    """Runs a command on a scenario text; gives the status and both outputs, which hold no traceback."""

    def runs(*options, command="check", text=SCENARIO, path=None):
        path = path or tmp_path / "s.toml"
        if not path.exists():
            path.write_bytes(text.encode() if isinstance(text, str) else text)
        status = run([command, str(path), *options])
        captured = capsys.readouterr()
        assert "Traceback" not in captured.err
        assert "unexpectedly" not in captured.err
        return status, captured.out, captured.err.replace(str(path), "s.toml")

    return runs


def told(lines):
    """Standard error as one expects it of these faults."""
    return "".join(f"{line}\n" for line in lines)


BROKEN = SCENARIO.replace("beds = 12", "beds = 0").replace('home = "Ashgill"', 'home = "Ashgil"')
BROKEN_TOLD = [
    "s.toml:4: units.Ashgill.beds: must be at least 1, got 0, raise it",
    "s.toml:11: patients.Ashgill emergencies.home: must be the name of a unit, got 'Ashgil', "
    "did you mean `Ashgill`?",
]


@pytest.mark.parametrize("command", COMMANDS)
def test_every_command_tells_every_fault_of_the_file(brimline, command):
    assert brimline(command=command, text=BROKEN) == (2, "", told(BROKEN_TOLD))


@pytest.mark.parametrize("command", COMMANDS)
def test_faults_as_json_stand_alone_on_standard_output(brimline, command):
    status, out, err = brimline("--json", command=command, text=BROKEN)
    assert (status, err) == (2, told(BROKEN_TOLD))
    assert json.loads(out) == {
        "faults": [
            {
                "line": 4, "key": "units.Ashgill.beds", "rule": "must be at least 1", "value": "got 0",
                "remedy": "raise it",
            },
            {
                "line": 11, "key": "patients.Ashgill emergencies.home", "rule": "must be the name of a unit",
                "value": "got 'Ashgil'", "remedy": "did you mean `Ashgill`?",
            },
        ]
    }  # fmt: skip


def test_a_scenario_that_is_not_there(brimline, tmp_path):
    assert brimline(path=tmp_path) == (
        2, "", "s.toml: must be a file that can be read, is a directory, correct the path\n",
    )  # fmt: skip
    status = run(["check", str(tmp_path / "no.toml")])
    assert status == 2


def test_a_missing_scenario_as_json(capsys, tmp_path):
    path = tmp_path / "no.toml"
    assert run(["check", str(path), "--json"]) == 2
    out, err = capsys.readouterr()
    rule, value = "must be a file that can be read", "no such file or directory"
    assert json.loads(out) == {
        "faults": [
            {"line": None, "key": str(path), "rule": rule, "value": value, "remedy": "correct the path"}
        ]
    }
    assert err == f"{path}: {rule}, {value}, correct the path\n"


def test_a_scenario_that_is_not_utf_8(brimline):
    assert brimline(text=SCENARIO.encode("utf-16")) == (
        2, "", "s.toml: must be text in UTF-8, byte 1 is not UTF-8, save it again in UTF-8\n",
    )  # fmt: skip


def test_a_scenario_that_is_no_toml(brimline):
    status, out, err = brimline(text=SCENARIO.replace("beds = 18", "beds = eighteen"))
    assert (status, out) == (2, "")
    assert err.startswith("s.toml:7: file: must be valid TOML, ")


def test_data_at_fault(brimline):
    stay = '{ family = "empirical", file = "stays.csv", column = "days" }'
    text = SCENARIO.replace('{ family = "exponential", mean_days = 4 }', stay)
    status, out, err = brimline("--json", text=text)
    (fault,) = json.loads(out)["faults"]
    assert (status, fault["line"]) == (2, 13)
    assert fault["key"] == "patients.Ashgill emergencies.stay.file"
    assert "s.toml:13: patients.Ashgill emergencies.stay.file: must name a CSV file that can be read" in err


OPTIONS = [
    ("--threshold", "Ashgil=3", "must name a unit of the scenario, got 'Ashgil', did you mean `Ashgill`?"),
    ("--threshold", "=3", "must name a unit of the scenario, got '', known here: `Ashgill`, `North = South`"),
    ("--threshold", "North=3",
     "must name a unit of the scenario, got 'North', known here: `Ashgill`, `North = South`"),
    ("--threshold", "Ashgill=13",
     "must not be above the unit's beds, got 'Ashgill=13' for 12 beds, choose from 0 to 12"),
    ("--threshold", "North = South=19",
     "must not be above the unit's beds, got 'North = South=19' for 18 beds, choose from 0 to 18"),
    ("--incoming", "Ashgill=13",
     "must not be above the unit's beds, got 'Ashgill=13' for 12 beds, choose from 0 to 12"),
    ("--policy", "close when full",
     "must name a policy of the scenario, got 'close when full', did you mean `close only when full`?"),
]  # fmt: skip


@pytest.mark.parametrize(("option", "value", "said"), OPTIONS)
def test_options_at_fault(brimline, option, value, said):
    status, out, err = brimline(option, value, "--json")
    assert (status, err) == (2, f"{option}: {said}\n")
    (fault,) = json.loads(out)["faults"]
    assert (fault["line"], fault["key"]) == (None, option)
    assert ", ".join((fault["rule"], fault["value"], fault["remedy"])) == said


NO_THRESHOLDS = [
    "Ashgill",
    "Ashgill=",
    "Ashgill=-1",
    "Ashgill=9.5",
    "Ashgill=nan",
    "Ashgill=\u00b2",
    "Ashgill=9=x",
    "",
]


@pytest.mark.parametrize("option", ["--threshold", "--incoming"])
@pytest.mark.parametrize("value", NO_THRESHOLDS)
def test_what_is_no_threshold(brimline, option, value):
    status, out, err = brimline(option, value)
    assert (status, out) == (2, "")
    assert err.startswith(f"{option}: must be UNIT=K, K a whole number")
    assert repr(value) in err


@pytest.mark.parametrize("digits", [400, 5000])
def test_a_threshold_of_absurd_size(brimline, digits):
    """Python reads no integer of more than 4300 digits."""
    status, out, err = brimline("--threshold", "Ashgill=" + "9" * digits)
    assert (status, out) == (2, "")
    assert err.startswith("--threshold: must ")
    assert err.count("\n") == 1


@pytest.mark.parametrize(
    ("option", "value"),
    [
        (option, value)
        for option in ("--demand", "--target")
        for value in ("0", "-1", "nan", "inf", "-inf", "1e300")
    ]
    + [("--target", "1.01"), ("--demand", "1e-320")],
)
def test_numbers_out_of_bounds(brimline, option, value):
    status, out, err = brimline(f"{option}={value}", "--json")
    assert status == 2
    assert err.startswith(f"{option}: must be ")
    (fault,) = json.loads(out)["faults"]
    assert (fault["key"], fault["value"]) == (option, f"got {float(value):g}")


def test_all_options_at_fault_are_told_at_once(brimline):
    options = [
        "--threshold",
        "A=1",
        "--incoming",
        "Ashgill=99",
        "--demand",
        "-1",
        "--target",
        "2",
        "--policy",
        "x",
    ]
    status, out, err = brimline(*options, "--threshold", "Ashgill", "--json")
    assert status == 2
    keys = [fault["key"] for fault in json.loads(out)["faults"]]
    assert sorted(keys) == ["--demand", "--incoming", "--policy", "--target", "--threshold", "--threshold"]
    assert [line.partition(":")[0] for line in err.splitlines()] == keys


def test_a_folder_that_cannot_be_made(brimline, tmp_path):
    (tmp_path / "taken").write_text("a file")
    status, out, err = brimline("--out", str(tmp_path / "taken" / "below"))
    assert (status, out) == (2, "")
    assert err.startswith("--out: must be a folder that can be written, got ")


UNKNOWN = [
    (["check", "s.toml", "--treshold", "A=1"], "--threshold"),
    (["simulate", "s.toml", "--replicates", "3"], "--replications"),
    (["chek", "s.toml"], "check"),
    (["simulat", "s.toml"], "simulate"),
]


@pytest.mark.parametrize(("arguments", "suggested"), UNKNOWN)
def test_unknown_options_and_commands_come_with_a_suggestion(capsys, arguments, suggested):
    assert run(arguments) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert "Did you mean" in err or "did you mean" in err
    assert suggested in err
    assert "Traceback" not in err


USES = [
    "nonsense s.toml", "check", "check s.toml more", "check s.toml --threshold", "check s.toml --seed -1",
    "check s.toml --seed x", f"check s.toml --seed {'9' * 30}", "check s.toml --replications 0",
    "check s.toml --replications 1.5", "check s.toml --confidence 1", "check s.toml --confidence nan",
    "check s.toml --workers 0", "check s.toml --engine warp", "check s.toml --demand x",
]  # fmt: skip


@pytest.mark.parametrize("arguments", USES)
def test_uses_that_are_not_valid(capsys, arguments):
    assert run([*arguments.split(), "--json"]) == 2
    out, err = capsys.readouterr()
    (fault,) = json.loads(out)["faults"]
    assert fault["line"] is None
    assert all(fault[part] for part in ("key", "rule", "value", "remedy"))
    assert err
    assert "Traceback" not in err


def test_without_a_command_the_help_is_shown(capsys):
    assert run([]) == 2
    out, err = capsys.readouterr()
    assert all(command in out + err for command in COMMANDS)


NOTHING_RUNS = ["--threshold", "Ashgill=0", "--incoming", "Ashgill=12", "--policy", "close only when full"]


def test_sound_options_are_no_fault(brimline):
    """A closure threshold below the incoming one is lowered with it; only the file's own pair must agree."""
    text = SCENARIO.replace("schema = 1\n", "schema = 1\n[run]\nmeasured_days = 7\nwarm_up_days = 0\n")
    options = [*NOTHING_RUNS, "--threshold", "North = South=4"]
    status, out, _ = brimline(*options, "--replications", "1", "--json", text=text)
    document = json.loads(out)
    assert (status, document["faults"]) == (0, [])
    units = document["units"]
    assert [units[name]["closure_threshold"] for name in ("Ashgill", "North = South")] == [0, 4]
    assert [units[name]["incoming_threshold"] for name in ("Ashgill", "North = South")] == [0, 4]
