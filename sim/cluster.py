"""Workers on other machines, behind the interface of `sim.workers`: the same answers, whoever computes them.

A machine with other versions of what matters is refused by name; one with other floating-point bits may help, but no
replication is ever put together from two kinds of bits. Workers may come and go, and the scheduler be started again.
"""

from __future__ import annotations

import itertools
import pickle
import time
from collections import deque
from collections.abc import Callable, Hashable, Iterable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from sim.errors import RunError
from sim.machines import link as line
from sim.machines.desk import Desk
from sim.machines.hello import bits, differences, hello
from sim.workers import Binding, Reply, Task, ThisProcess

NOBODY_SECONDS = 60.0  # without a worker, before that is said (and said again)
WAIT_SECONDS = 0.2
AGAIN_SECONDS = 2.0
RATE_SECONDS = 60.0
FIRST_SECONDS = 20.0  # for the first worker to say who it is
LAST_SECONDS = 5.0  # at the least, for answers under way when an end is asked for


@dataclass
class Machine:
    """What is known of one machine: its workers by address with their threads, and its answers."""

    name: str
    threads: dict[str, int] = field(default_factory=dict)
    answers: int = 0
    times: deque[float] = field(default_factory=deque)  # of the answers of the last minute

    def note(self, now: float) -> None:
        """An answer arrived."""
        self.answers += 1
        self.times.append(now)

    def rate(self, now: float, began: float) -> float:
        """Answers a second over the last minute, or since the beginning."""
        while self.times and self.times[0] < now - RATE_SECONDS:
            self.times.popleft()
        return len(self.times) / max(1.0, min(RATE_SECONDS, now - began))


def machine_of(worker: str) -> str:
    """The machine of a worker's name, which is MACHINE/NUMBER."""
    return worker.rpartition("/")[0] or worker


class Cluster:
    """The workers behind the scheduler at `address`, a full one; RunError where no scheduler answers at first.

    notice: told in words what a person should know. watch: told about once a second how the machines do.
    stays: between runs, until `close`. first_seconds: the longest wait for the first worker.
    """

    binds = True  # `run` takes a binding

    def __init__(
        self,
        address: str,
        keys: Path,
        *,
        notice: Callable[[str], None] = lambda text: None,
        watch: Callable[[str], None] = lambda text: None,
        stays: bool = False,
        first_seconds: float = FIRST_SECONDS,
    ) -> None:
        self._stays, self._first_seconds = stays, first_seconds
        self._numbers, self._left = itertools.count(), {}
        self.address, self._keys, self.notice, self.watch = address, keys, notice, watch
        self.machines: dict[str, Machine] = {}
        self.refused: dict[str, str] = {}  # machine -> why
        self._workers: dict[str, tuple[Machine, str]] = {}  # address -> machine and bits, once it may help
        self._asked: dict[str, line.Present] = {}
        self._link: line.Link | None = line.Link(address, keys)
        self._began = self._told = self._present_at = self._first = time.monotonic()

    def close(self) -> None:
        """Leaves the cluster."""
        if self._link is not None:
            self._link.close()
            self._link = None

    @property
    def count(self) -> int:
        """The threads of the machines that may help, at least one; waits a little for the first."""
        until = time.monotonic() + self._first_seconds
        while not (self._asked and self._all_known()) and time.monotonic() < until and self._link is not None:
            self._take(self._link.next_event(WAIT_SECONDS), None)
        return max(1, sum(sum(machine.threads.values()) for machine in self.machines.values()))

    def run(
        self,
        function: Callable[..., Any],
        tasks: Iterable[Task],
        binding: Callable[[Hashable], Binding] | None = None,
        go_on: Callable[[], bool] = lambda: True,
    ) -> Iterator[Reply]:
        """See Workers. binding: what the task of a key belongs to; by default each stands alone.

        go_on: asked all the time; once it says no, answers under way are waited for a little, and if nobody is there
        not at all.
        """
        self._hear()
        desk = Desk(
            tasks, own=bits(), clock=time.monotonic, binding=binding, numbers=self._numbers, left=self._left,
            began=self._first,
        )  # fmt: skip
        for address, (machine, its_bits) in self._workers.items():
            desk.join(address, its_bits, machine.threads[address])
        self._began = self._present_at = time.monotonic()
        self._told, whole = 0.0, False
        try:
            yield from self._rounds(function, desk, go_on)
            self.watch(self.sentence(time.monotonic()))
            whole = desk.finished
        finally:
            if not (whole and self._stays):
                self._forget_link()  # with it, orders under way are dropped everywhere

    def _hear(self) -> None:
        """What has happened since the last run."""
        while self._link is not None and (event := self._link.next_event(0)) is not None:
            self._take(event, None)

    def _rounds(self, function: Callable[..., Any], desk: Desk, go_on: Callable[[], bool]) -> Iterator[Reply]:
        end = None
        while not desk.finished:
            if end is None and not go_on():
                yield from desk.stop()
                end = time.monotonic() + max(LAST_SECONDS, 2 * desk.usual_seconds)
            if end is not None and (time.monotonic() > end or not self._workers):
                yield from desk.give_up()
                return
            yield from self._round(function, desk)

    def _round(self, function: Callable[..., Any], desk: Desk) -> Iterator[Reply]:
        if self._link is None and not self._connect_again():
            return
        for order in desk.orders():
            self._link.send(order.number, order.address, function, order.task)
        event = self._link.next_event(WAIT_SECONDS)
        while event is not None:  # all that has happened, before the next orders
            yield from self._take(event, desk)
            event = self._link.next_event(0) if self._link is not None else None
        if again := desk.begin_again():
            self.notice(
                f"{again} replications were begun on machines that are gone, and begin again elsewhere"
            )
        if handed_back := desk.hand_back():
            self.notice(
                "machines of the bits that began some replications are not here; these begin again whole"
            )
            yield from handed_back
        if (task := desk.to_run_here()) is not None:
            yield from desk.ran_here(next(ThisProcess().run(function, [task])))
        self._tell()

    # ---- the scheduler ----

    def _connect_again(self) -> bool:
        try:
            self._link = line.Link(self.address, self._keys)
        except RunError:
            time.sleep(AGAIN_SECONDS)
            self._tell()
            return False
        return True

    def _forget_link(self) -> None:
        self.close()
        self._left.update((its_bits, time.monotonic()) for _, its_bits in self._workers.values())
        self._workers.clear()
        self._asked.clear()
        for machine in self.machines.values():
            machine.threads.clear()

    # ---- events ----

    def _take(self, event: line.Event | None, desk: Desk | None) -> list[Reply]:
        match event:
            case line.Workers(present):
                return self._compare(present, desk)
            case line.Said():
                self._welcome(event, desk)
            case line.Answer(number, payload) if desk is not None:
                return self._answered(desk, number, payload)
            case line.Broken(number, why) if desk is not None:
                self._link.forget(number)
                return desk.broken(number, why)
            case line.Answer(number) | line.Broken(number):  # of the run before
                self._link.forget(number)
            case line.Lost(why):
                self.notice(f"the scheduler is out of reach ({why}); trying again until it is back")
                gone = list(self._workers)
                self._forget_link()
                return [reply for one in gone if desk is not None for reply in desk.leave(one, blame=False)]
        return []

    def _compare(self, present: list[line.Present], desk: Desk | None) -> list[Reply]:
        there = {one.address: one for one in present}
        for address in there.keys() - self._asked.keys():
            self._asked[address] = there[address]
            self._link.ask(address)
        replies = []
        for address in self._asked.keys() - there.keys():
            del self._asked[address]
            replies += self._gone(address, desk)
        return replies

    def _gone(self, address: str, desk: Desk | None) -> list[Reply]:
        if address not in self._workers:
            return []
        machine, its_bits = self._workers.pop(address)
        self._left[its_bits] = time.monotonic()
        del machine.threads[address]
        if not machine.threads:
            self.notice(f"{machine.name} is gone; its tasks go to others")
        if desk is None:
            return []
        for number in desk.orders_of(address):
            self._link.forget(number)
        return desk.leave(address)

    def _welcome(self, said: line.Said, desk: Desk | None) -> None:
        worker = self._asked.get(said.address)
        if worker is None:
            return
        name = machine_of(worker.name)
        why = f"it cannot run this program ({said.why})"
        if said.hello is not None:
            why = differences(said.hello["versions"], hello()["versions"])
        if why:
            self._refuse(name, why)
            return
        machine = self.machines.setdefault(name, Machine(name))
        if not machine.threads and said.hello["bits"] != bits():
            self.notice(f"{name} rounds numbers differently; its replications are kept whole and apart")
        machine.threads[worker.address] = worker.threads
        self._workers[worker.address] = machine, said.hello["bits"]
        self.refused.pop(name, None)
        if desk is not None:
            desk.join(worker.address, said.hello["bits"], worker.threads)

    def _refuse(self, name: str, why: str) -> None:
        if self.refused.get(name) != why:
            self.refused[name] = why
            self.notice(f"{name} is refused: {why}; install the same versions on every machine")

    def _answered(self, desk: Desk, number: int, payload: bytes) -> list[Reply]:
        worker = desk.worker_of(number)
        self._link.forget(number)
        if worker is None:
            return []
        if worker in self._workers:
            self._workers[worker][0].note(time.monotonic())
        key, status, value, its_bits, seconds = pickle.loads(payload)
        if status == "done":
            reply = Reply(key, value, seconds=seconds, fingerprint=its_bits)
        else:  # the key may be what could not be read
            reply = Reply(desk.key_of(number), failure=value, seconds=seconds, fingerprint=its_bits)
        return desk.answer(number, reply)

    def look(self) -> list[dict[str, Any]]:
        """Who is there, by machine: `workers`, `may_help` and the `reason` why not, `same_bits`."""
        until = time.monotonic() + FIRST_SECONDS
        seen = False
        while not (seen and self._all_known()) and time.monotonic() < until and self._link is not None:
            event = self._link.next_event(WAIT_SECONDS)
            seen = seen or isinstance(event, line.Workers)
            self._take(event, None)
        names = sorted({machine_of(one.name) for one in self._asked.values()})
        return [self._row(name) for name in names]

    def _all_known(self) -> bool:
        return all(
            address in self._workers or machine_of(one.name) in self.refused
            for address, one in self._asked.items()
        )

    def _row(self, name: str) -> dict[str, Any]:
        own = {address: its for address, (machine, its) in self._workers.items() if machine.name == name}
        count = sum(machine_of(one.name) == name for one in self._asked.values())
        reason = None if own else self.refused.get(name, "it has not said who it is yet")
        same = None if not own else set(own.values()) == {bits()}
        return {"machine": name, "workers": count, "may_help": bool(own), "reason": reason, "same_bits": same}

    # ---- telling ----

    def _tell(self) -> None:
        now = time.monotonic()
        if self._workers:
            self._present_at = now
        elif now - self._present_at > NOBODY_SECONDS:
            self._present_at = now
            why = "".join(f"; {name} is refused: {why}" for name, why in self.refused.items())
            self.notice(
                f"no worker for a minute at {self.address}; waiting (`brimline cluster join` on a machine){why}"
            )
        if now - self._told > 1.0:
            self._told = now
            self.watch(self.sentence(now))

    def sentence(self, now: float) -> str:
        """Each machine with its threads, its rate and how long ago its last answer came."""
        if not self._workers:
            return "no worker that may help at the moment"
        return "; ".join(
            f"{one.name} ({sum(one.threads.values())}) {one.rate(now, self._began):.1f} tasks/s, "
            + (f"last answer {now - one.times[-1]:.0f} s ago" if one.times else "no answer yet")
            for one in self.machines.values()
            if one.threads or one.times
        )
