"""README and DEVELOPERS say what is true: their commands run, and print what they show."""

from __future__ import annotations

import doctest
import re
import shlex
import subprocess
from pathlib import Path

import pytest

from analysis.command.entry import COMMANDS, run
from analysis.plan import read_plan
from sim.scenario import parse_scenario, read_scenario

ROOT = Path(__file__).resolve().parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
EXAMPLES = [
    (block.splitlines()[0].removeprefix("$ brimline "), block.splitlines()[1:])
    for block in re.findall(r"```\n(\$ brimline .*?)```", README, flags=re.S)
]


@pytest.mark.parametrize(("command", "shown"), EXAMPLES, ids=[command.split()[0] for command, _ in EXAMPLES])
def test_an_example_prints_what_it_shows(command, shown, capsys, monkeypatch):
    """Every line shown appears in the output, in this order; `...` stands for lines left out."""
    monkeypatch.chdir(ROOT)
    assert run(shlex.split(command)) == 0
    printed = [line.rstrip() for line in capsys.readouterr().out.splitlines()]
    place = 0
    for line in (line.rstrip() for line in shown if line != "..."):
        assert line in printed[place:], f"`{line}` is not printed (any more, or not in this order)"
        place = printed.index(line, place) + 1


def test_the_notebook_shown_gives_what_it_shows(monkeypatch):
    """Every line is run as in a notebook, and shows what stands below it."""
    [block] = re.findall(r"```python\n(.*?)```", README, flags=re.S)
    monkeypatch.chdir(ROOT)
    assert len(doctest.DocTestParser().get_examples(block)) >= 9
    assert failures_of(block) == 0


def test_a_wrong_number_in_the_notebook_shown_would_be_seen():
    assert failures_of(">>> 1 + 1\n3\n") == 1


def failures_of(block):
    """How many examples of a notebook show something else."""
    notebook = doctest.DocTestParser().get_doctest(block, {}, "README.md", "README.md", 0)
    runner = doctest.DocTestRunner(verbose=False, optionflags=doctest.NORMALIZE_WHITESPACE)
    return runner.run(notebook).failed


def test_every_command_has_an_example_or_is_named():
    assert {command.split()[0] for command, _ in EXAMPLES} >= set(COMMANDS) - {
        "exact",
        "results",
        "report",
        "batch",
        "cluster",
    }
    assert all(f"`{name}" in README or f"brimline {name}" in README for name in COMMANDS)


def test_the_readme_opens_with_the_job_and_the_caution():
    opening = README.split("##")[0]
    assert "closure rules" in opening and "planning only" in opening
    assert "licensed clinicians decide" in opening


def test_ci_runs_the_readmes_test_command():
    script = (ROOT / ".ci" / "run").read_text(encoding="utf-8")
    extract = script[script.index("command=") : script.index("\n", script.index("command="))]
    found = subprocess.run(
        ["bash", "-c", f'{extract}; printf %s "$command"'],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=True,
    ).stdout
    assert found.startswith("python3 -m venv") and "pytest" in found and found in README
    assert found.count("\n") == 0


def test_the_toml_shown_is_legal():
    blocks = re.findall(r"```toml\n(.*?)```", README, flags=re.S)
    assert blocks
    demo = (ROOT / "scenarios" / "exponential.toml").read_text(encoding="utf-8")
    first_unit, rest = demo.split("[[units]]", 2)[1], demo.split("[[units]]", 2)
    for block in blocks:  # keys of the first unit of a demo network
        parse_scenario(f"{rest[0]}[[units]]{first_unit}{block}\n[[units]]{rest[2]}")


def test_the_plan_shown_is_legal(tmp_path):
    [block] = re.findall(r"```plan\n(.*?)```", README, flags=re.S)
    (tmp_path / "scenarios").symlink_to(ROOT / "scenarios")
    (tmp_path / "night.toml").write_text(block, encoding="utf-8")
    parts = [
        part
        for part, _ in read_plan(tmp_path / "night.toml", lambda part: read_scenario(part.scenario)).parts
    ]
    assert len(parts) == 2 * 3 * (1 + 2) and parts[-1].exponential and not parts[0].exponential


def test_the_rooms_that_developers_are_told_of_exist():
    rooms = re.findall(r"`((?:sim|analysis|tests)/[\w/.]*)`", DEVELOPERS)
    assert len(rooms) > 15
    assert [room for room in rooms if not (ROOT / room).exists()] == []


def test_every_module_has_its_line_in_the_table_of_rooms():
    """A file in `sim` or `analysis` stands in the table by its own name or by its folder's."""
    table = DEVELOPERS.split("## Walls")[0]
    for package in ("sim", "analysis"):
        for file in sorted((ROOT / package).glob("*.py")):
            if file.name != "__init__.py":
                assert file.name in table, f"{package}/{file.name} is missing in DEVELOPERS.md"
        for folder in (one for one in (ROOT / package).iterdir() if (one / "__init__.py").exists()):
            assert f"{package}/{folder.name}/" in table, (
                f"{package}/{folder.name} is missing in DEVELOPERS.md"
            )


def test_demo_networks_say_that_they_are_invented():
    scenarios = sorted((ROOT / "scenarios").glob("*.toml"))
    assert len(scenarios) >= 4
    assert all("invented" in path.read_text(encoding="utf-8").splitlines()[0] for path in scenarios)
