"""The line to a scheduler: who is there, orders sent, and everything that happens, as events in one queue.

dask's own scheduling is not relied on: every order names its worker, so that nothing hangs where a worker is gone.
"""

from __future__ import annotations

import asyncio
import contextlib
import logging
import pickle
import queue
import re
import uuid
from collections.abc import Callable
from pathlib import Path
from typing import Any, NamedTuple

from sim.errors import RunError
from sim.machines.hello import answer, hello
from sim.machines.keys import security

LOOK_SECONDS = 0.5
CONNECT_SECONDS = 10.0
HELLO_SECONDS = 120.0
SILENT = ("distributed", "distributed.client", "distributed.core", "distributed.comm", "tornado.application")


class Present(NamedTuple):
    """A worker as the scheduler knows it."""

    address: str
    name: str
    threads: int


class Workers(NamedTuple):
    """Event: who is there now."""

    present: list[Present]


class Said(NamedTuple):
    """Event: what a new worker says of itself, or why it cannot."""

    address: str
    hello: dict[str, Any] | None
    why: str = ""


class Answer(NamedTuple):
    """Event: an order has been answered."""

    number: int
    payload: bytes


class Broken(NamedTuple):
    """Event: dask gave an order up."""

    number: int
    why: str


class Lost(NamedTuple):
    """Event: the scheduler is gone; the link is of no more use."""

    why: str


Event = Workers | Said | Answer | Broken | Lost


def present(dask_scheduler: Any) -> tuple[str, list[tuple[str, str, int]]]:
    """Runs in the scheduler: its identity, and its workers."""
    workers = [
        (one.address, str(one.name), one.nthreads)
        for one in dask_scheduler.workers.values()
        if one.status.name == "running"
    ]
    return dask_scheduler.id, workers


class Link:
    """A connection to the scheduler at `address`; RunError where none can be made."""

    def __init__(self, address: str, keys: Path) -> None:
        import distributed

        for name in SILENT:
            logging.getLogger(name).setLevel(logging.CRITICAL)
        self._events: queue.SimpleQueue[Event] = queue.SimpleQueue()
        self._futures: dict[int, Any] = {}
        self._mark = uuid.uuid4().hex[:12]
        own = {"security": security(keys)} if address.startswith("tls") else {}
        try:
            self._client = distributed.Client(
                address, timeout=CONNECT_SECONDS, set_as_default=False, name="brimline", **own
            )
        except (OSError, TimeoutError, ValueError) as error:
            raise RunError(_unreachable(address, error)) from error
        self._client.loop.add_callback(self._look)

    def next_event(self, timeout: float) -> Event | None:
        """The next event, if there is one within so many seconds."""
        try:
            return self._events.get(timeout=timeout) if timeout > 0 else self._events.get_nowait()
        except queue.Empty:
            return None

    async def _look(self) -> None:
        """Looks who is there, over and over; a scheduler that is another one than before has lost everything."""
        identity = None
        while self._client.status == "running":
            try:
                seen, workers = await asyncio.wait_for(
                    self._client._run_on_scheduler(present), CONNECT_SECONDS
                )
            except Exception as error:
                return self._events.put(Lost(f"{type(error).__name__}: {error}"))
            if identity not in (None, seen):
                return self._events.put(Lost("it was started again"))
            identity = seen
            self._events.put(Workers([Present(*one) for one in workers]))
            await asyncio.sleep(LOOK_SECONDS)
        return self._events.put(Lost("the connection was closed"))

    def ask(self, address: str) -> None:
        """Asks a worker who it is; a Said event follows."""
        self._client.loop.add_callback(self._ask, address)

    async def _ask(self, address: str) -> None:
        try:
            said = await asyncio.wait_for(
                self._client._run(hello, workers=[address], on_error="return"), HELLO_SECONDS
            )
            there = said[address]
        except Exception as error:
            there = error
        failed = not isinstance(there, dict)
        why = f"{type(there).__name__}: {there}" if failed else ""
        self._events.put(Said(address, None if failed else there, why))

    def send(self, number: int, address: str, function: Callable[..., Any], task: tuple[Any, tuple]) -> None:
        """Sends an order to a worker; an Answer or Broken event follows, or none if either side is lost."""
        payload = pickle.dumps((task[0], function, task[1]))
        future = self._client.submit(
            answer, payload, key=f"brimline-{self._mark}-{number}", workers=[address],
            allow_other_workers=False, pure=False,
        )  # fmt: skip
        self._futures[number] = future
        self._client.loop.add_callback(self._attend, number, future)

    async def _attend(self, number: int, future: Any) -> None:
        try:
            result = await future._result()
            self._events.put(Answer(number, result))
        except (asyncio.CancelledError, Exception) as error:
            if number in self._futures and not future.cancelled():
                self._events.put(Broken(number, f"{type(error).__name__}: {error}"))

    def forget(self, number: int) -> None:
        """The order is of no more interest: it is dropped where it has not begun."""
        future = self._futures.pop(number, None)
        if future is not None:
            future.release()

    def close(self) -> None:
        """Ends the connection, whatever is under way."""
        self._futures.clear()
        with contextlib.suppress(Exception):  # a scheduler that is gone cannot be taken leave of
            self._client.close(timeout=2)


def _unreachable(address: str, error: Exception) -> str:
    said = str(error.__cause__ or error)
    if "ssl" in said.lower() or "certificate" in said.lower():
        why = "its certificate is not of the keys given: every machine needs the same folder of keys"
    else:
        why = (
            "is `brimline cluster host` running there, is the address right, does a firewall block the port?"
        )
    lines = re.sub(r"^in <[^>]*>: ", "", said.strip()).splitlines()
    return f"no scheduler answers at {address} ({lines[-1] if lines else type(error).__name__}); {why}"
