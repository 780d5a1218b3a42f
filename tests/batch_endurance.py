"""`python -m tests.batch_endurance [MOMENTS]`: a batch killed at many moments must leave the store of a whole one.

Run by hand, for it takes minutes. A batch on two worker processes is killed with SIGKILL, workers and all, after ever
more runs have been kept (20 moments unless told otherwise), each time resumed by the same command, and at last run to
its end. The table's hash must be that of an uninterrupted batch, and so must every part's result.
"""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from sim.errors import StoreError
from sim.store import Store

ROOT = Path(__file__).resolve().parents[1]
PLAN = """\
schema = 1
title = "To be killed (invented)"
scenarios = ["{file}"]
demand = [0.9, 1.1]
targets = [0.65, 0.7]
exponential = [false, true]
replications = 6
analyses = ["simulate", "game"]
"""
CLIENT = """
import sys
import sim.replicate
sim.replicate.SECONDS_PER_TASK = 0.02  # many small tasks, so that there are many moments to be killed at
class Undrawn:
    def __getattr__(self, name):
        if name.startswith("__"):
            raise AttributeError(name)
        return lambda *_, **__: None
for room in ("figures", "figures_replies", "figures_paths"):
    sys.modules["analysis." + room] = Undrawn()
from analysis.command.entry import main
main()
"""


def batch(plan: Path, folder: Path) -> subprocess.Popen:
    """A batch in a process group of its own."""
    command = [sys.executable, "-c", CLIENT, "batch", str(plan), "--out", str(folder), "--workers", "2"]
    quiet = subprocess.DEVNULL
    return subprocess.Popen(command, cwd=ROOT, stdout=quiet, stderr=quiet, start_new_session=True)


def told(folder: Path) -> tuple[int, str]:
    """Rows and hash of a folder's store; (0, "") where none is there yet."""
    try:
        with Store(folder) as store:
            return store.counts()["rows"], store.table_hash()
    except StoreError:
        return 0, ""


def rows_in(folder: Path) -> int:
    """Rows of a folder's store."""
    try:
        with Store(folder) as store:
            return store.counts()["rows"]
    except StoreError:
        return 0


def results(folder: Path) -> dict[str, object]:
    """Each part's result, less what it says of the store."""
    documents = {file.parent.name: json.loads(file.read_text()) for file in folder.glob("*/result.json")}
    return {name: {**one, "reused": None, "computed": None} for name, one in documents.items()}


def kill_at(moment: int, plan: Path, folder: Path) -> int:
    """Starts the batch, kills it when so many runs are there, and gives how many there are; -1 where it was faster."""
    running = batch(plan, folder)
    while rows_in(folder) < moment and running.poll() is None:
        time.sleep(0.05)
    if running.poll() is not None:
        return -1
    os.killpg(running.pid, signal.SIGKILL)
    running.wait()
    return rows_in(folder)


def main(moments: int = 20) -> int:
    """Prints each moment and the verdict; 0 where everything agrees."""
    with tempfile.TemporaryDirectory() as place:
        plan, whole, killed = Path(place, "plan.toml"), Path(place, "whole"), Path(place, "killed")
        plan.write_text(PLAN.format(file=ROOT / "scenarios" / "two-units.toml"), encoding="utf-8")
        assert batch(plan, whole).wait() == 0
        rows, digest = told(whole)
        for number in range(moments):
            kept = kill_at(rows * number // moments, plan, killed)
            print(f"{number + 1}: killed with {kept} of {rows} runs kept", flush=True)
        assert batch(plan, killed).wait() == 0
        agrees = told(killed) == (rows, digest) and results(killed) == results(whole) != {}
    print(f"{rows} runs, table hash {digest[:16]}...: {'the same' if agrees else 'DIFFERENT'}")
    return 0 if agrees else 1


if __name__ == "__main__":
    sys.exit(main(*map(int, sys.argv[1:])))
