"""Help comes at once: nothing heavy is imported before a command needs it."""

import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
HEAVY = ("pandas", "numba", "seaborn", "matplotlib", "scipy.stats", "simpy")
PROGRAM = """
import sys
from analysis.command.entry import run
status = run({arguments})
print("LOADED", status, *(name for name in {heavy} if name in sys.modules))
"""


def loaded(*arguments):
    """Status, and which of the heavy libraries stand in memory, after a command in a process of its own."""
    program = PROGRAM.format(arguments=list(arguments), heavy=HEAVY)
    done = subprocess.run(
        [sys.executable, "-c", program], cwd=ROOT, capture_output=True, text=True, check=True
    )
    _, status, *names = done.stdout.splitlines()[-1].split()
    return int(status), set(names)


@pytest.mark.parametrize(
    "arguments", [["--help"], ["game", "--help"], ["verify", "--help"], ["check", "--help"]]
)
def test_help_loads_nothing_heavy(arguments):
    assert loaded(*arguments) == (0, set())


def test_a_fault_is_told_without_anything_heavy():
    assert loaded("simulate", "no-such-file.toml") == (2, set())


def test_the_exact_chain_needs_no_simulator_and_draws_nothing():
    scenario = str(ROOT / "scenarios" / "exponential.toml")
    status, names = loaded("exact", scenario, "--json")
    assert status == 0 and names <= {"numba"}


def test_the_check_can_see_what_is_loaded():
    """A planted import is seen: simulating with the reference engine does load SimPy."""
    scenario = str(ROOT / "scenarios" / "exponential.toml")
    status, names = loaded("simulate", scenario, "--replications", "2", "--engine", "reference")
    assert status == 0 and "simpy" in names and "seaborn" not in names
