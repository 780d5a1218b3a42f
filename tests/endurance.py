"""`python -m tests.endurance`: kill -9 of a command at 20 moments, then resume; prints a table, status 1 on any loss.

The moments are rows in the store, drawn with a fixed seed, and a random wait after them, so that commits, tasks and
starts are all hit. In the end the table's hash must be that of a run that nobody killed.
"""

from __future__ import annotations

import random
import signal
import subprocess
import sys
import tempfile
import time
from dataclasses import dataclass
from pathlib import Path

from sim.errors import StoreError
from sim.store import Store

ROOT = Path(__file__).resolve().parents[1]
SEED, MOMENTS, REPLICATIONS, CELLS = 20261201, 20, 60, 6
SCENARIO = """
schema = 1
title = "Two tiny units (invented)"
run = { seed = 5, warm_up_days = 14, measured_days = 56, replications = 4 }

[[units]]
name = "Ashgill"
beds = 2
target_utilisation = 0.5

[[units]]
name = "Norbeck"
beds = 3
target_utilisation = 0.6

[[patients]]
group = "Ashgill emergencies"
home = "Ashgill"
per_day = 0.7
stay = { family = "lognormal", mean_days = 2.0, cv = 1.3 }

[[patients]]
group = "Norbeck emergencies"
home = "Norbeck"
per_day = 0.9
stay = { family = "exponential", mean_days = 2.0 }
"""
# The command as it is, but with every run a task of its own, and a worker given up after a second.
CLIENT = """
import sys, sim.replicate, sim.workers
sim.replicate.SECONDS_PER_TASK = 1e-9
sim.replicate.LEAST_TASK_SECONDS = 0.0
sim.workers.LEAST_PATIENCE_SECONDS, sim.workers.PATIENCE_TASKS = 1.0, 3
from analysis.command.entry import main
main()
"""


def client(*arguments: object, workers: int) -> subprocess.Popen[str]:
    """A command in a process of its own, its runs by the reference engine."""
    command = [
        sys.executable,
        "-c",
        CLIENT,
        *map(str, arguments),
        "--engine",
        "reference",
        "--workers",
        str(workers),
    ]
    return subprocess.Popen(command, cwd=ROOT, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE, text=True)


def rows_in(folder: Path) -> int:
    """Rows in the store of a folder; -1 where there is none yet."""
    try:
        with Store(folder) as store:
            return store.counts()["rows"]
    except StoreError:
        return -1


def hash_of(folder: Path) -> str:
    """The hash over the whole table of a folder."""
    with Store(folder) as store:
        return store.table_hash()


def wait_for_rows(folder: Path, rows: int, process: subprocess.Popen[str]) -> None:
    """Waits until so many rows are there, or the process has ended."""
    while rows_in(folder) < rows and process.poll() is None:
        time.sleep(0.005)


@dataclass(frozen=True)
class Kill:
    """One kill: when it was due, and the rows then in the store; the command had not ended by itself."""

    due: int
    wait: float
    rows: int
    under_way: bool


def killed_and_resumed(
    place: Path, *, moments: int, workers: int = 2, replications: int = REPLICATIONS
) -> tuple[list[Kill], bool]:
    """Kills a game at so many moments and lets it end; the kills, and whether the table is that of a whole run."""
    scenario, drawn = place / "two.toml", random.Random(SEED)
    scenario.write_text(SCENARIO, encoding="utf-8")
    asked = ("game", scenario, "--replications", replications)
    _finish(*asked, "--out", place / "whole", workers=1)
    kills = []
    for due in sorted(drawn.randrange(int(0.9 * CELLS * replications)) for _ in range(moments)):
        wait, process = drawn.uniform(0, 0.05), client(*asked, "--out", place / "killed", workers=workers)
        wait_for_rows(place / "killed", due, process)
        time.sleep(wait)
        process.send_signal(signal.SIGKILL)
        under_way = process.wait() == -signal.SIGKILL
        kills.append(Kill(due, wait, rows_in(place / "killed"), under_way))
    _finish(*asked, "--out", place / "killed", workers=workers)
    return kills, hash_of(place / "killed") == hash_of(place / "whole")


def _finish(*arguments: object, workers: int) -> None:
    process = client(*arguments, workers=workers)
    _, said = process.communicate()
    if process.returncode != 0:
        raise RuntimeError(said)


def main() -> int:
    """The whole study, with one worker and with two."""
    status = 0
    for workers in (1, 2):
        with tempfile.TemporaryDirectory() as place:
            kills, same = killed_and_resumed(Path(place), moments=MOMENTS, workers=workers, replications=200)
        print(f"workers {workers}: kill, due at row, wait (s), rows kept, under way")
        for number, kill in enumerate(kills, 1):
            print(f"{number:4} {kill.due:6} {kill.wait:7.3f} {kill.rows:6} {kill.under_way}")
        print(f"the table resumed is that of a run that nobody killed: {same}")
        status |= not same
    return int(status)


if __name__ == "__main__":
    sys.exit(main())
