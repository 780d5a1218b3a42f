"""The processes of a machine: the scheduler, or the workers of one laptop; `python -m sim.machines.processes`.

Each is the child of a command that starts it again when it ends, and ends itself when that command is gone: its
standard input is the sign. Whoever has lost the scheduler ends for good in dask, so it is replaced here.
"""

from __future__ import annotations

import asyncio
import contextlib
import json
import logging
import os
import signal
import socket
import subprocess
import sys
import tempfile
import threading
import time
import uuid
from collections.abc import Callable
from pathlib import Path
from typing import Any

from sim.errors import RunError
from sim.machines.keys import security

LOOPBACK_ONLY = "127.0.0.1:0"  # dask opens a page there, unasked and unguarded
CANNOT = 3  # status of a child for which trying again is of no use
LONGEST_PAUSE = 30.0
WORKER_TTL_SECONDS = 30.0
START_SECONDS = 60.0


def keep_running(role: str, settings: dict[str, Any], *, say: Callable[[str], None]) -> None:
    """Runs the process of that role, and again whenever it ends, until Ctrl-C; RunError where it cannot start."""
    with contextlib.suppress(ValueError):  # not the main thread
        signal.signal(signal.SIGTERM, _as_ctrl_c)
    pause = 1.0
    while True:
        started = time.monotonic()
        status = _run_once(role, settings)
        if status == CANNOT:
            raise RunError(f"the {role} cannot run here")
        pause = 1.0 if time.monotonic() - started > LONGEST_PAUSE else min(LONGEST_PAUSE, 2 * pause)
        say(f"the {role} has ended (status {status}); starting it again in {pause:.0f} s")
        time.sleep(pause)


def _as_ctrl_c(*_: object) -> None:
    raise KeyboardInterrupt


def _run_once(role: str, settings: dict[str, Any]) -> int:
    command = [sys.executable, "-m", "sim.machines.processes", role, json.dumps(settings)]
    child = subprocess.Popen(command, stdin=subprocess.PIPE)
    try:
        return child.wait()
    finally:  # Ctrl-C: the child sees its input end
        assert child.stdin is not None
        child.stdin.close()
        with contextlib.suppress(subprocess.TimeoutExpired):
            child.wait(15)
        child.kill()


def _until_parent_ends(stop: Callable[[], None]) -> None:
    sys.stdin.buffer.read()
    stop()
    time.sleep(10)
    os._exit(1)  # whatever still hangs


# ---- the scheduler ----


async def scheduler(settings: dict[str, Any]) -> None:
    """A scheduler on one address, by TLS alone; its page is for this machine alone."""
    import dask
    from distributed import Scheduler

    dask.config.set({"distributed.scheduler.worker-ttl": f"{settings['ttl']} s"})
    try:
        running = await Scheduler(
            host=settings["host"], port=settings["port"], protocol="tls", dashboard_address=LOOPBACK_ONLY,
            security=security(Path(settings["keys"])),
        )  # fmt: skip
    except (OSError, RuntimeError) as error:
        _say(f"cannot listen on {settings['host']}:{settings['port']}: {error.__cause__ or error}")
        raise SystemExit(CANNOT) from error
    _say(f"the scheduler listens on {running.address}")
    try:
        await running.finished()
    finally:
        await running.close()


# ---- the workers ----


async def machine(settings: dict[str, Any]) -> None:
    """The workers of this machine, each a process with one thread, since the slow engine holds Python's lock."""
    with tempfile.TemporaryDirectory(prefix="brimline-", ignore_cleanup_errors=True) as folder:
        await asyncio.gather(*(_seat(settings, number, folder) for number in range(settings["workers"])))


async def _seat(settings: dict[str, Any], number: int, folder: str) -> None:
    """One worker, replaced whenever it ends."""
    told = pause = 0.0
    nanny = None
    while True:
        try:
            nanny = _nanny(settings, number, folder)
            await asyncio.wait_for(nanny.start(), START_SECONDS)
            if told:
                _say("back at work")
            told = pause = 0.0
            await _while_alive(nanny)
        except Exception as error:
            if number == 0 and not told:
                _say(
                    f"no place at {settings['address']} yet ({_short(error)}); trying again until there is one"
                )
            told = 1.0
        with contextlib.suppress(Exception):  # nanny may be None
            await asyncio.wait_for(nanny.close(reason="replaced"), 10)
        pause = min(LONGEST_PAUSE, max(1.0, 2 * pause))
        await asyncio.sleep(pause)


def _nanny(settings: dict[str, Any], number: int, folder: str) -> Any:
    from distributed import Nanny

    return Nanny(
        settings["address"], nthreads=1, name=f"{settings['name']}/{number + 1}-{uuid.uuid4().hex[:6]}",
        host=settings["host"] or _own_address(settings["address"]), protocol="tls",
        security=security(Path(settings["keys"])),
        dashboard_address=LOOPBACK_ONLY, local_directory=folder, silence_logs=logging.CRITICAL,
        death_timeout=START_SECONDS,
    )  # fmt: skip


def _own_address(scheduler: str) -> str:
    """The address from which this machine reaches the scheduler: dask would listen on all of them."""
    host, _, port = scheduler.removeprefix("tls://").rpartition(":")
    family, *_, place = socket.getaddrinfo(host.strip("[]"), int(port), type=socket.SOCK_DGRAM)[0]
    with socket.socket(family, socket.SOCK_DGRAM) as probe:
        probe.connect(place)  # sends nothing
        return probe.getsockname()[0]


async def _while_alive(nanny: Any) -> None:
    """Until the nanny has ended, or has been without a worker for long: it restarts one that was killed."""
    without = 0.0
    while nanny.status.name == "running" and without < 20.0:
        await asyncio.sleep(1.0)
        without = 0.0 if nanny.is_alive() else without + 1.0


def _short(error: Exception) -> str:
    lines = str(error.__cause__ or error).strip().splitlines()
    return lines[-1][:200] if lines else type(error).__name__


def _say(text: str) -> None:
    print(f"brimline: {text}", file=sys.stderr, flush=True)


ROLES = {"scheduler": scheduler, "worker": machine}


async def _run(role: str, settings: dict[str, Any]) -> None:
    task = asyncio.current_task()
    loop = asyncio.get_running_loop()
    stop = lambda: loop.call_soon_threadsafe(task.cancel)  # noqa: E731 - bound to this loop
    threading.Thread(target=_until_parent_ends, args=(stop,), daemon=True).start()
    with contextlib.suppress(asyncio.CancelledError):
        await ROLES[role](settings)


def main() -> None:
    """Runs one role with its settings, both from the command line."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # Ctrl-C is the parent's to handle
    import distributed  # noqa: F401 - sets up its logging, which is then silenced

    for name in list(logging.root.manager.loggerDict):
        if name.partition(".")[0] in ("distributed", "tornado", "asyncio"):
            logging.getLogger(name).setLevel(logging.CRITICAL)
    asyncio.run(_run(sys.argv[1], json.loads(sys.argv[2])))


if __name__ == "__main__":
    main()
