"""Plan files: what their lists multiply to, and every fault at once. Networks are invented."""

import pytest

from analysis.command.entry import run
from analysis.plan import MOST_PARTS, is_plan, read_plan
from sim.errors import ScenarioError
from tests.analysis.conftest import TWO


@pytest.fixture
def planned(tmp_path):
    """Writes a plan beside `two.toml`; gives its path."""
    (tmp_path / "two.toml").write_text(TWO, encoding="utf-8")

    def write(text):
        file = tmp_path / "plan.toml"
        file.write_text("schema = 1\n" + text, encoding="utf-8")
        return file

    return write


def parts_of(file):
    return [part for part, _ in read_plan(file, lambda part: None).parts]


def test_lists_multiply_and_the_command_line_of_a_part_says_all(planned, tmp_path):
    parts = parts_of(
        planned(
            'scenarios = ["two.toml"]\ndemand = [0.8, 1]\ntargets = [0.7, 0.75]\npolicies = ["early"]\n'
            'exponential = [false, true]\nanalyses = ["game"]\nreplications = 7\n'
        )
    )
    assert len(parts) == len({part.name for part in parts}) == 8
    assert parts[-1].arguments == [
        "game", str(tmp_path / "two.toml"), "--demand", "1", "--target", "0.75", "--policy", "early",
        "--replications", "7", "--exponential",
    ]  # fmt: skip


def test_one_policys_measures_need_no_targets(planned):
    text = 'scenarios = ["two.toml"]\ntargets = [0.7, 0.8, 0.9]\nanalyses = ["simulate", "game"]\n'
    assert [part.analysis for part in parts_of(planned(text))] == ["simulate", "game", "game", "game"]


def test_rows_take_from_the_top_what_they_do_not_give_and_come_by_priority(planned):
    parts = parts_of(
        planned(
            'scenarios = ["two.toml"]\ndemand = [0.8]\n[[parts]]\npriority = 2\n[[parts]]\n'
            'analyses = ["simulate"]\ndemand = [1.2, 1.1]\n'
        )
    )
    assert [(part.analysis, part.demand, part.priority) for part in parts] == [
        ("simulate", 1.2, 1), ("simulate", 1.1, 1), ("game", 0.8, 2)
    ]  # fmt: skip


def test_parts_of_one_name_have_folders_of_their_own(planned):
    text = 'scenarios = ["two.toml", "./two.toml"]\npolicies = ["a/b", "a b"]\n'
    names = [part.name for part in parts_of(planned(text))]
    assert len(set(names)) == 4 and not any(sign in name for name in names for sign in "/\\ ")


def test_a_plan_is_told_from_a_scenario_by_its_contents(planned, tmp_path):
    assert is_plan(planned('scenarios = ["two.toml"]')) and is_plan(planned("scenarois = []"))
    assert is_plan(planned("[[parts]]\n"))
    assert not is_plan(tmp_path / "two.toml") and not is_plan(planned(""))


FAULTY = """\
scenarios = ["two.toml", "none.toml"]
demand = [0.8, -1, 1e9]
target = [0.7]
policies = ["erly"]
analyses = ["simulate", "gane"]
[[parts]]
priority = 0
[[parts]]
name = "winter"
policies = []
demand = [1.0, 1.0]
targets = [1.5]
"""
TOLD = """\
plan.toml:2: scenarios.2: none.toml: must be a file that can be read, no such file or directory, correct the path
plan.toml:3: demand.2: must be above 0, got -1, raise it
plan.toml:3: demand.3: must be from 1.43e-09 to 446429 here (two.toml), got 1e+09, give a factor such as 1.1 for \
10 % more patients
plan.toml:4: target: is not a known key of this table, got [0.7], did you mean `targets`?
plan.toml:5: policies.1: must name a policy of the scenario (two.toml), got 'erly', did you mean `early`?
plan.toml:6: analyses.2: must be one of "simulate", "game", got 'gane', did you mean `game`?
plan.toml:8: parts.1.priority: must be at least 1, got 0, raise it
plan.toml:11: parts.winter.policies: must not be empty, got [], add an entry
plan.toml:12: parts.winter.demand.2: must not repeat an entry, got 1.0 again, remove it
plan.toml:13: parts.winter.targets.1: must be at most 1, got 1.5, lower it
"""


def test_every_fault_is_told_at_once_with_its_line(planned, show, call, tmp_path):
    file = planned(FAULTY)
    status, out, said = show("batch", file, "--out", tmp_path / "r")
    assert (status, out) == (2, "")
    assert said.replace(f"{tmp_path}/", "") == TOLD
    assert not (tmp_path / "r").exists()
    status, document = call("batch", file, "--out", tmp_path / "r")
    assert status == 2 and [fault["line"] for fault in document["faults"]] == [
        2,
        3,
        3,
        4,
        5,
        6,
        8,
        11,
        12,
        13,
    ]


def test_a_scenarios_own_faults_stand_at_its_entry(planned, show, tmp_path):
    (tmp_path / "two.toml").write_text(TWO.replace("beds = 2", "beds = 0"))
    status, _, said = show("batch", planned('scenarios = ["two.toml"]\ndemand = [0.8, 1.0]\n'))
    assert status == 2
    assert said.replace(f"{tmp_path}/", "") == (
        "plan.toml:2: scenarios.1: two.toml:13: units.A.beds: must be at least 1, got 0, raise it\n"
    )


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ("demand = [1.0]", "plan.toml:1: scenarios: is required, missing"),
        ("[[parts]]\ndemand = [1.0]", "plan.toml:2: parts.1.scenarios: is required, missing"),
        ('scenarios = "two.toml"', "plan.toml:2: scenarios: must be an array"),
        ('scenarios = ["two.toml"', "plan.toml:2: file: must be valid TOML"),
        ('scenarios = ["two.toml"]\nexponential = ["no"]', "plan.toml:3: exponential.1: "),
        ('scenarios = ["two.toml"]\n[parts]', "plan.toml:3: parts: must be an array"),
    ],
)  # fmt: skip
def test_other_faults(planned, show, text, told):
    status, _, said = show("batch", planned(text))
    assert status == 2 and told in said and "Traceback" not in said and "unexpectedly" not in said


def test_a_schema_of_another_number_and_too_many_parts_are_faults(planned):
    file = planned('scenarios = ["two.toml"]')
    file.write_text(file.read_text().replace("schema = 1", "schema = 2"))
    with pytest.raises(ScenarioError, match="must be 1, the only form of plan files"):
        parts_of(file)
    many = ", ".join(f"{0.1 + place / 1e4}" for place in range(MOST_PARTS + 1))
    with pytest.raises(ScenarioError, match="at most 1,000 parts, got 1,001"):
        parts_of(planned(f'scenarios = ["two.toml"]\ndemand = [{many}]'))


def test_a_folder_that_cannot_be_written_is_told_before_anything_runs(planned, capsys, tmp_path):
    (tmp_path / "file").write_text("")
    assert (
        run(["batch", str(planned('scenarios = ["two.toml"]')), "--out", str(tmp_path / "file" / "r")]) == 2
    )
    assert "--out: must be a folder that can be written" in capsys.readouterr().err
