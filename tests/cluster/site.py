"""A cluster of real processes on this machine: a scheduler and machines, TLS on, ended with the test."""

from __future__ import annotations

import json
import os
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import psutil

from sim.cluster import Cluster
from sim.machines import keys

ROOT = Path(__file__).resolve().parents[2]


class Site:
    """Processes by name: `scheduler`, and machines as they join."""

    def __init__(
        self, folder: Path, *, ttl: float = 30.0, host: str = "127.0.0.1", within: Sequence[str] = ()
    ) -> None:
        self.keys, self.ttl, self.host = folder / "keys", ttl, host
        self.processes: dict[str, subprocess.Popen] = {}
        self.said: list[str] = []
        if not self.keys.exists():
            keys.create(self.keys)
        self.port = free_port()
        self.address = f"tls://{host}:{self.port}"
        self.within = within
        self.start_scheduler()

    def __enter__(self) -> Site:
        return self

    def __exit__(self, *_: object) -> None:
        for process in self.processes.values():
            self._end(process)

    def start_scheduler(self) -> None:
        """Starts it (again) at the same address."""
        settings = {"host": self.host, "port": self.port, "keys": str(self.keys), "ttl": self.ttl}
        self.processes["scheduler"] = self._start("scheduler", settings, within=self.within)

    def join(
        self,
        name: str,
        workers: int = 1,
        *,
        cwd: Path = ROOT,
        path: Sequence[Path] = (),
        within: Sequence[str] = (),
    ) -> None:
        """A machine joins. cwd, path: where it finds the program. within: a command to run it by."""
        settings = {
            "address": self.address,
            "workers": workers,
            "host": None,
            "name": name,
            "keys": str(self.keys),
        }
        self.processes[name] = self._start("worker", settings, cwd=cwd, path=path, within=within)

    def _start(
        self, role: str, settings: dict[str, Any], *, cwd: Path = ROOT, path: Sequence[Path] = (),
        within: Sequence[str] = (),
    ) -> subprocess.Popen:  # fmt: skip
        found = os.pathsep.join(map(str, [*path, cwd, ROOT]))
        command = [*within, sys.executable, "-m", "sim.machines.processes", role, json.dumps(settings)]
        return subprocess.Popen(
            command,
            stdin=subprocess.PIPE,
            stderr=subprocess.DEVNULL,
            cwd=cwd,
            env=os.environ | {"PYTHONPATH": found},
        )

    def _end(self, process: subprocess.Popen) -> None:
        children = [] if process.poll() is not None else psutil.Process(process.pid).children(recursive=True)
        for one in children:
            one.send_signal(signal.SIGCONT) if one.is_running() else None
        process.stdin.close()
        try:
            process.wait(8)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait()
        for one in children:
            if one.is_running():
                one.kill()

    def kill(self, name: str, how: int = signal.SIGKILL) -> None:
        """A signal to the scheduler, or to the nanny of a machine."""
        self.processes[name].send_signal(how)

    def workers_of(self, name: str) -> list[psutil.Process]:
        """The worker processes of a machine: those of its children that do the work."""
        children = psutil.Process(self.processes[name].pid).children(recursive=True)
        return [one for one in children if "spawn_main" in " ".join(one.cmdline())]

    def cluster(self, **options: Any) -> Cluster:
        """A client; what it says is kept in `said`."""
        return Cluster(self.address, self.keys, notice=self.said.append, **options)

    def await_scheduler(self) -> None:
        """Until its port answers."""
        wait_for(lambda: _answers(self.host, self.port), "the scheduler")

    def ready(self, *names: str, **options: Any) -> Cluster:
        """A client, as soon as these machines may help."""
        self.await_scheduler()
        cluster = self.cluster(**options)
        wait_for(
            lambda: set(names) <= {row["machine"] for row in cluster.look() if row["may_help"]}, str(names)
        )
        return cluster


def wait_for(ready: Callable[[], bool], what: str, seconds: float = 240.0) -> None:
    """Until `ready`; far more time than any machine needs, so that nothing here judges speed."""
    until = time.monotonic() + seconds
    while not ready():
        assert time.monotonic() < until, f"{what} did not come"
        time.sleep(0.1)


def free_port() -> int:
    """A port that nobody has at the moment."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return probe.getsockname()[1]


def _answers(host: str, port: int) -> bool:
    try:
        socket.create_connection((host, port), timeout=1).close()
    except OSError:
        return False
    return True
