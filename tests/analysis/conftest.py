"""The command line, called in this process: `call` gives its status and the one document that it printed."""

import json

import pytest

from analysis.command.entry import run
from tests.analysis.builders import no_constants

TWO = """
schema = 1
title = "Two tiny units (invented)"

[run]
seed = 5
warm_up_days = 14
measured_days = 56
replications = 4

[[units]]
name = "A"
beds = 2
target_utilisation = 0.5

[[units]]
name = "B=b"                     # a name may hold the sign that splits `--threshold UNIT=K`
beds = 3
target_utilisation = 0.6

[[patients]]
group = "A emergencies"
home = "A"
per_day = 0.7
stay = { family = "exponential", mean_days = 2.0 }

[[patients]]
group = "B emergencies"
home = "B=b"
per_day = 0.9
stay = { family = "exponential", mean_days = 2.0 }

[[policies]]
name = "early"
closure_threshold = { A = 1, "B=b" = 2 }
"""
THIRD = """
[[units]]
name = "C"
beds = 2
target_utilisation = 0.4

[[patients]]
group = "C emergencies"
home = "C"
per_day = 0.4
stay = { family = "exponential", mean_days = 2.0 }

[game]
strategies = { "B=b" = { values = [1, 3] } }
"""
BEYOND_THE_CHAIN = """
[diversion]
delay = { family = "constant", mean_hours = 2.0 }
"""


@pytest.fixture
def two(tmp_path):
    """A scenario file of two tiny units within the scope of the exact chain."""
    return written(tmp_path / "two.toml", TWO)


@pytest.fixture
def three(tmp_path):
    """The same with a third unit."""
    return written(tmp_path / "three.toml", TWO + THIRD)


@pytest.fixture
def delayed(tmp_path):
    """The two units with transfers that take time: beyond the exact chain, unless made exponential."""
    return written(tmp_path / "delayed.toml", TWO + BEYOND_THE_CHAIN)


def written(path, text):
    path.write_text(text, encoding="utf-8")
    return str(path)


@pytest.fixture
def call(capsys):
    """Runs a command with `--json`; standard output must hold one JSON document and nothing else."""

    def called(*arguments):
        status = run([*map(str, arguments), "--json"])
        return status, json.loads(capsys.readouterr().out, parse_constant=no_constants)

    return called


@pytest.fixture
def show(capsys):
    """Runs a command as a person would; gives its status, standard output and standard error."""

    def shown(*arguments):
        status = run([*map(str, arguments)])
        return status, *capsys.readouterr()

    return shown
