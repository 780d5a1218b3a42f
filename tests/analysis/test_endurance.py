"""Commands survive the loss of themselves, of their workers, and of room on the disk: real processes, real files."""

from __future__ import annotations

import json
import os
import signal
import sqlite3
import subprocess
import sys
from contextlib import closing, contextmanager
from pathlib import Path

import pytest

from analysis.command.entry import run
from sim.store import Store
from sim.store_file import FILE
from tests.endurance import SCENARIO, client, hash_of, killed_and_resumed, rows_in, wait_for_rows

PROC = pytest.mark.skipif(not Path("/proc/self/task").exists(), reason="finds workers by /proc")
ROOT = Path(__file__).resolve().parents[2]


@pytest.fixture
def scenario(tmp_path):
    path = tmp_path / "two.toml"
    path.write_text(SCENARIO, encoding="utf-8")
    return path


def test_kill_9_of_the_command_at_random_moments_then_resume_gives_the_same_table(tmp_path):
    """The study with 20 moments is `python -m tests.endurance`."""
    kills, same = killed_and_resumed(tmp_path, moments=2, replications=15)
    assert same and all(kill.under_way for kill in kills)


def workers_of(process: int) -> list[int]:
    """The loky processes that a process has started."""
    children = Path(f"/proc/{process}/task").glob("*/children")
    found = {int(number) for file in children for number in file.read_text().split()}
    return [one for one in found if b"LokyProcess" in Path(f"/proc/{one}/cmdline").read_bytes()]


@PROC
@pytest.mark.parametrize(("command", "what"), [("simulate", signal.SIGSTOP), ("game", signal.SIGKILL)])
def test_a_worker_killed_or_stopped_under_a_command_costs_nothing(scenario, tmp_path, command, what):
    asked = (command, scenario, "--replications", 90 if command == "simulate" else 15)
    assert run([*map(str, asked), "--out", str(tmp_path / "whole")]) == 0
    process = client(*asked, "--out", tmp_path / "hurt", workers=2)
    wait_for_rows(tmp_path / "hurt", 30, process)
    os.kill(workers_of(process.pid)[0], what)
    _, said = process.communicate(timeout=120)
    assert (process.returncode, "Traceback" in said) == (0, False), said
    assert hash_of(tmp_path / "hurt") == hash_of(tmp_path / "whole")
    document = json.loads((tmp_path / "hurt" / "result.json").read_text())
    assert document["failed"] == []


# ---- the disk ----


@contextmanager
def small_disk(place: Path, size: str):
    """A file system in memory of that size; only root may have one."""
    place.mkdir()
    mounted = (
        sys.platform == "linux"
        and os.geteuid() == 0
        and _mount("-t", "tmpfs", "-o", f"size={size}", "tmpfs", place)
    )
    if not mounted:
        pytest.skip("no file system can be mounted here")
    try:
        yield place
    finally:
        subprocess.run(["umount", "-l", str(place)], check=True)


def _mount(*arguments: object) -> bool:
    return subprocess.run(["mount", *map(str, arguments)], capture_output=True, check=False).returncode == 0


def test_a_full_disk_is_told_and_after_room_is_made_the_table_is_the_same(scenario, tmp_path, show):
    asked = ("simulate", scenario, "--replications", 400, "--workers", 1)
    assert show(*asked, "--out", tmp_path / "whole")[0] == 0
    with small_disk(tmp_path / "small", "600k") as disk:
        status, _, said = show(*asked, "--out", disk / "r")
        assert status == 1
        assert str(disk / "r" / FILE) in said and "free some space" in said and "is kept" in said
        assert "Traceback" not in said and "unexpectedly" not in said
        kept = rows_in(disk / "r")
        assert 0 < kept < 400
        assert _mount("-o", "remount,size=20m", disk)
        status, _, said = show(*asked, "--out", disk / "r")
        assert status == 0 and f"{kept} of 400 runs are in" in said
        assert hash_of(disk / "r") == hash_of(tmp_path / "whole")


LIMITED = """
import resource, sys
resource.setrlimit(resource.RLIMIT_FSIZE, (400_000, resource.RLIM_INFINITY))
from analysis.command.entry import main
main()
"""


@pytest.mark.skipif(os.name != "posix", reason="limits of POSIX")
def test_a_limit_on_the_size_of_files_is_told_and_loses_nothing(scenario, tmp_path, show):
    asked = ["simulate", str(scenario), "--replications", "400", "--workers", "1"]
    command = [sys.executable, "-c", LIMITED, *asked, "--out", str(tmp_path / "r")]
    ended = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=False)
    assert ended.returncode == 1, ended.stderr
    assert "free some space" in ended.stderr and "is kept" in ended.stderr and "Traceback" not in ended.stderr
    kept = rows_in(tmp_path / "r")
    assert 0 < kept < 400
    assert show(*asked, "--out", tmp_path / "r")[0] == show(*asked, "--out", tmp_path / "whole")[0] == 0
    assert hash_of(tmp_path / "r") == hash_of(tmp_path / "whole")


def test_a_disk_that_cannot_be_written_is_told_and_can_be_read(scenario, tmp_path, show):
    asked = ("simulate", scenario, "--replications", 4)
    with small_disk(tmp_path / "small", "20m") as disk:
        assert show(*asked, "--out", disk / "r")[0] == 0
        assert _mount("-o", "remount,ro", disk)
        for folder in (disk / "r", disk / "new"):
            status, _, said = show(*asked, "--out", folder)
            assert status in (1, 2) and str(folder) in said, said
            assert "written" in said and "choose another folder" in said, said
        assert show("results", "show", disk / "r")[0] == 0


AS_NOBODY = """
import os, sys
from pathlib import Path
from sim.errors import StoreError
from sim.store import Store
if os.geteuid() == 0:
    os.setgid(65534)
    os.setuid(65534)
Store(Path(sys.argv[1])).close()
try:
    Store(Path(sys.argv[1]), write=True)
except StoreError as error:
    sys.exit(str(error))
"""


@pytest.mark.skipif(os.name != "posix", reason="rights of POSIX")
@pytest.mark.parametrize("what", ["folder", "file"])
def test_what_belongs_to_somebody_else_is_refused_and_can_be_read(scenario, tmp_path, show, what):
    folder = tmp_path / "r"
    assert show("simulate", scenario, "--replications", 4, "--out", folder)[0] == 0
    for place in (tmp_path, *tmp_path.parents[:3]):  # pytest's own are closed to others
        if not place.stat().st_mode & 0o001:
            place.chmod(0o755)
    folder.chmod(0o555 if what == "folder" else 0o777)
    (folder / FILE).chmod(0o444)
    (folder / "runs.lock").chmod(0o444 if what == "folder" else 0o666)
    ended = subprocess.run(
        [sys.executable, "-c", AS_NOBODY, str(folder)], cwd=ROOT, capture_output=True, text=True, check=False
    )
    folder.chmod(0o777)
    assert ended.returncode == 1
    assert "cannot be written" in ended.stderr and "choose another folder" in ended.stderr
    assert "Traceback" not in ended.stderr


# ---- exact cells ----


EXACT_CLIENT = """
import os, signal, sys
import analysis.exact_tables as tables
solve, done = tables.solve, []
def counted(*arguments):
    done.append(1)
    if len(done) == 4:
        os.kill(os.getpid(), int(sys.argv.pop()))
    return solve(*arguments)
tables.solve, tables.CELLS_PER_TASK = counted, 1
number = sys.argv[-1]
from analysis.command.entry import main
main(sys.argv[1:-1])
"""


def exact_cells(folder: Path) -> int:
    with Store(folder) as store:
        return store.counts()["exact_cells"]


@pytest.mark.skipif(os.name != "posix", reason="signals of POSIX")
@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGKILL])
def test_an_exact_table_goes_on_where_it_was_stopped(scenario, tmp_path, call, number):
    """Stopped in the fourth of six cells."""
    folder, asked = tmp_path / "r", ("game", scenario, "--exact", "--exponential")
    command = [sys.executable, "-c", EXACT_CLIENT, *map(str, asked), "--out", str(folder), str(int(number))]
    ended = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=False)
    assert ended.returncode == (130 if number == signal.SIGINT else -signal.SIGKILL), ended.stderr
    if number == signal.SIGINT:
        assert "3 of 6 solved cells are kept" in ended.stderr
    assert exact_cells(folder) == 3
    status, document = call(*asked, "--out", folder)
    assert (status, document.pop("reused"), document.pop("computed")) == (0, 3, 3)
    assert document == call(*asked)[1]
    again = call(*asked, "--target", 0.55, "--out", folder)[1]
    assert (again["reused"], again["computed"]) == (6, 0)


def test_exact_cells_are_verified_and_a_flipped_bit_is_caught(scenario, tmp_path, call, show):
    folder = tmp_path / "r"
    assert call("game", scenario, "--exact", "--phase-fit", 2, "--out", folder)[1]["computed"] == 6
    shown = call("results", "show", folder)[1]
    assert (shown["exact_cells"], shown["rows"], shown["complete"]) == (6, 0, True)
    status, document = call("results", "verify", folder)
    assert (status, document["exact_checked"], document["agrees"]) == (0, 6, True)
    status, document = call("results", "repeat", folder)
    assert (status, document["compared"], document["agrees"]) == (0, 6, True)
    with closing(sqlite3.connect(folder / FILE)) as db, db:
        number, blob = db.execute("SELECT id, vals FROM exact LIMIT 1").fetchone()
        db.execute("UPDATE exact SET vals = ? WHERE id = ?", (blob[:-1] + bytes([blob[-1] ^ 1]), number))
    status, _, said = show("results", "verify", folder)
    assert status == 1 and "is damaged" in said
    assert show("results", "repeat", folder)[0] == 1


def test_workers_and_this_process_solve_cells_to_the_same_bits(scenario, tmp_path, show):
    for workers in (1, 2):
        folder = tmp_path / str(workers)
        assert (
            show("game", scenario, "--exact", "--exponential", "--workers", workers, "--out", folder)[0] == 0
        )
    assert hash_of(tmp_path / "1") == hash_of(tmp_path / "2")
