"""The desk that hands tasks to machines: which task goes where, what comes back, and what is asked for again.

It knows no network and no process, only addresses, tasks and a clock, so that every case can be tried in a test.

A worker has at most two tasks a thread under way, so that a late one finds work left. At the end, tasks that are late
are asked for a second time elsewhere, and the first answer counts. Tasks that a lost worker had are run again alone;
one that has been alone with two lost workers is given up. All tasks of a group (the blocks of a replication) come
from machines of the same bits.
"""

from __future__ import annotations

import itertools
from collections import deque
from collections.abc import Callable, Hashable, Iterable, Iterator
from dataclasses import dataclass, field
from typing import NamedTuple

from sim.workers import Binding, Reply, Task

WINDOW = 2  # tasks under way a thread
MOST_COPIES = 3
LATE_SECONDS = 1.0  # at the least, before a task is asked for a second time
LOST_ALONE = 2  # workers that a task may lose while it runs alone
PATIENCE_SECONDS = 60.0  # for machines of certain bits to come back


class Order(NamedTuple):
    """A task to be sent to a worker."""

    number: int
    address: str
    task: Task


@dataclass(eq=False)
class _Group:
    key: Hashable
    bits: str | None
    alone: bool  # of one task only
    size: int
    pinned: bool  # to its bits, before anything was handed out
    works: set[_Work] = field(default_factory=set)  # those whose answers have not been handed on
    held: list[Reply] = field(default_factory=list)
    weight: int = 0  # of what is held, or has been handed on


@dataclass(eq=False)
class _Work:
    task: Task
    group: _Group
    weight: int
    copies: dict[int, tuple[_Seat, float]] = field(default_factory=dict)
    done: bool = False
    lost: int = 0
    lost_alone: int = 0

    def given_to(self, seat: _Seat) -> bool:
        return any(other is seat for other, _ in self.copies.values())


@dataclass(eq=False)
class _Seat:
    """A worker at work."""

    address: str
    bits: str
    threads: int
    orders: set[int] = field(default_factory=set)
    alone: bool = False  # has a task that must run alone

    @property
    def room(self) -> int:
        return 0 if self.alone else WINDOW * self.threads - len(self.orders)


class Desk:
    """Hands out `tasks` as workers become free.

    own: this machine's bits; groups of them are answered task by task, others only when they are whole. binding:
    what the task of a key belongs to; by default each stands alone. clock: seconds. Of desks that follow each other,
    numbers: of orders, so that a late answer to one is known to be no other's. left: bits -> when a worker with them
    last left; began: when workers could first come.
    """

    def __init__(
        self,
        tasks: Iterable[Task],
        *,
        own: str,
        clock: Callable[[], float],
        binding: Callable[[Hashable], Binding] | None = None,
        numbers: Iterator[int] | None = None,
        left: dict[str, float] | None = None,
        began: float | None = None,
    ) -> None:
        self._source, self._own, self._clock = iter(tasks), own, clock
        self._binding = binding or Binding
        self._groups: dict[Hashable, _Group] = {}
        self._seats: dict[str, _Seat] = {}
        self._waiting: dict[str | None, deque[_Work]] = {None: deque()}  # by the bits that they need
        self._suspects: list[_Work] = []
        self._orders: dict[int, _Work] = {}
        self._numbers = itertools.count() if numbers is None else numbers
        self._ahead = next(self._source, None)
        self._open = 0
        self._here: _Work | None = None
        self._began = clock() if began is None else began
        self._left = {} if left is None else left
        self._stopped = False
        self._late_ones: list[tuple[float, _Work]] | None = None
        self._seconds, self._answers = 0.0, 0
        self.reissued = self.requeued = 0

    # ---- workers ----

    def join(self, address: str, bits: str, threads: int) -> None:
        """A worker may have tasks from now on."""
        self._seats[address] = _Seat(address, bits, threads)

    def leave(self, address: str, *, blame: bool = True) -> list[Reply]:
        """A worker is gone; its tasks wait again. blame: one of them may be why. Gives the tasks given up."""
        seat = self._seats.pop(address, None)
        if seat is None:
            return []
        self._left[seat.bits] = self._clock()
        works = [self._orders.pop(number) for number in list(seat.orders)]
        for work in works:
            work.copies = {number: copy for number, copy in work.copies.items() if copy[0] is not seat}
        return [reply for work in works for reply in self._lost(work, seat.alone, blame)]

    def broken(self, number: int, why: str) -> list[Reply]:
        """An order could not be run where it was sent, for no fault that its function told of."""
        work = self._orders.get(number)
        if work is None:
            return []
        seat = self._take_back(number, work)
        return self._lost(work, seat.alone, True, why, alone_now=seat)

    def _lost(
        self, work: _Work, alone: bool, blame: bool, why: str = "", alone_now: _Seat | None = None
    ) -> list[Reply]:
        if alone_now is not None:
            alone_now.alone = False
        if work.done:
            return []
        work.lost += blame
        work.lost_alone += blame and alone
        if work.lost_alone >= LOST_ALONE:
            said = (
                why
                or f"{work.lost} workers were lost while they ran this task, the last {LOST_ALONE} with no other"
            )
            return self._settle(work, Reply(work.task[0], failure=f"{said} (out of memory?)"))
        if not work.copies:
            self.requeued += 1
            self._wait(work)
        return []

    def _wait(self, work: _Work) -> None:
        if self._stopped:
            self._drop(work)
        elif work.lost:
            self._suspects.append(work)
        else:
            self._waiting.setdefault(work.group.bits, deque()).append(work)

    # ---- orders ----

    def orders(self) -> Iterator[Order]:
        """What to send now."""
        self._late_ones = None
        for seat in self._spread(list(self._seats.values())):
            work = self._next(seat)
            if work is not None:
                yield self._give(work, seat)

    def _spread(self, seats: list[_Seat]) -> Iterator[_Seat]:
        """Seats with room, one task each in turn; those that must become empty for a suspect get none."""
        emptying = len(self._suspects)
        for seat in sorted(seats, key=lambda seat: len(seat.orders)) if emptying else ():
            if emptying and not seat.alone and any(self._fits(work, seat) for work in self._suspects):
                emptying -= 1
                seats.remove(seat)
                if not seat.orders:
                    yield seat
        seats = [seat for seat in seats if seat.room > 0]
        while seats:
            served = []
            for seat in seats:
                before = len(seat.orders)
                yield seat
                if before < len(seat.orders) and seat.room > 0:
                    served.append(seat)
            seats = served

    def _next(self, seat: _Seat) -> _Work | None:
        if not seat.orders:
            for work in self._suspects:
                if self._fits(work, seat):
                    self._suspects.remove(work)
                    seat.alone = True
                    return work
        return self._fresh(seat) or self._late(seat)

    def _fits(self, work: _Work, seat: _Seat) -> bool:
        return work.group.bits in (None, seat.bits)

    def _fresh(self, seat: _Seat) -> _Work | None:
        """A task that nobody has yet, bound ones first."""
        bound, free = self._waiting.setdefault(seat.bits, deque()), self._waiting[None]
        while bound or free:
            work = (bound or free).popleft()
            if not work.done and self._fits(work, seat):
                return work
            if not work.done:  # its group has been bound since
                self._wait(work)
        while self._ahead is not None:
            work = self._entered(self._ahead)
            self._ahead = next(self._source, None)
            if self._fits(work, seat):
                return work
            self._wait(work)
        return None

    def _entered(self, task: Task) -> _Work:
        binding = self._binding(task[0])
        alone = binding.weight >= binding.size
        group = self._groups.get(binding.group)
        if group is None:
            group = _Group(binding.group, binding.bits, alone, binding.size, binding.bits is not None)
            if not alone:
                self._groups[binding.group] = group
        work = _Work(task, group, binding.weight)
        group.works.add(work)
        self._open += 1
        return work

    def _late(self, seat: _Seat) -> _Work | None:
        """At the end: the oldest task under way elsewhere, if it is late."""
        if self._late_ones is None:
            self._late_ones = self._find_late()
        if len(seat.orders) >= seat.threads:
            return None
        for place, (_, work) in enumerate(self._late_ones):
            if self._fits(work, seat) and not work.given_to(seat):
                del self._late_ones[place]
                self.reissued += 1
                return work
        return None

    def _find_late(self) -> list[tuple[float, _Work]]:
        late = self._clock() - max(LATE_SECONDS, 2 * self.usual_seconds)
        late_ones = dict.fromkeys(self._orders.values())  # in the order in which they were sent
        works = [work for work in late_ones if not work.lost and len(work.copies) < MOST_COPIES]
        asked = [(max(at for _, at in work.copies.values()), work) for work in works]
        return sorted(((at, work) for at, work in asked if at < late), key=lambda one: one[0])

    def _give(self, work: _Work, seat: _Seat) -> Order:
        number = next(self._numbers)
        if work.group.bits is None and not work.group.alone:
            work.group.bits = seat.bits
        work.copies[number] = (seat, self._clock())
        seat.orders.add(number)
        self._orders[number] = work
        return Order(number, seat.address, work.task)

    # ---- answers ----

    def worker_of(self, number: int) -> str | None:
        """The address that an order went to, while it is wanted."""
        work = self._orders.get(number)
        return None if work is None else work.copies[number][0].address

    def orders_of(self, address: str) -> list[int]:
        """The orders under way at a worker."""
        seat = self._seats.get(address)
        return [] if seat is None else list(seat.orders)

    def key_of(self, number: int) -> Hashable:
        """The key of an order that is wanted."""
        return self._orders[number].task[0]

    def answer(self, number: int, reply: Reply) -> list[Reply]:
        """An order has been answered; gives the replies that are ready now."""
        work = self._orders.get(number)
        if work is None:
            return []
        _, since = work.copies[number]
        seat = self._take_back(number, work)
        seat.alone = False
        self._seconds += self._clock() - since
        self._answers += 1
        return self._settle(work, reply)

    def _take_back(self, number: int, work: _Work) -> _Seat:
        del self._orders[number]
        seat, _ = work.copies.pop(number)
        seat.orders.discard(number)
        return seat

    def _settle(self, work: _Work, reply: Reply) -> list[Reply]:
        work.done = True
        for number in list(work.copies):
            self._take_back(number, work).alone = False
        group = work.group
        group.weight += work.weight
        if group.weight >= group.size:
            self._groups.pop(group.key, None)
        if group.alone or group.bits == self._own:
            return self._released(group, [work], [reply])
        group.held.append(reply)
        return self._whole(group) if group.weight >= group.size else self._cut_short(group)

    def _cut_short(self, group: _Group) -> list[Reply]:
        """What is held, where whoever gave the tasks gives no more of this group."""
        return self._whole(group) if self._ahead is None and len(group.held) == len(group.works) else []

    def _whole(self, group: _Group) -> list[Reply]:
        held, group.held = group.held, []
        return self._released(group, list(group.works), held)

    def _released(self, group: _Group, works: list[_Work], replies: list[Reply]) -> list[Reply]:
        self._open -= len(replies)
        group.works.difference_update(works)
        return replies

    @property
    def finished(self) -> bool:
        """Whether every task has been answered."""
        return self._ahead is None and self._open == 0

    # ---- an early end ----

    def stop(self) -> list[Reply]:
        """Nothing more is handed out, what is under way may still arrive; gives what need not wait for more."""
        self._stopped, self._ahead, self._source = True, None, iter(())
        waiting = [*itertools.chain.from_iterable(self._waiting.values()), *self._suspects]
        self._waiting, self._suspects = {None: deque()}, []
        for work in waiting:
            self._drop(work)
        return [reply for group in self._groups.values() for reply in self._cut_short(group)]

    def _drop(self, work: _Work) -> None:
        if not work.done and not work.copies and work in work.group.works:
            work.group.works.remove(work)
            self._open -= 1

    def give_up(self) -> list[Reply]:
        """No longer waits for what is under way; gives what was held for it."""
        return [reply for group in self._groups.values() for reply in group.held]

    @property
    def usual_seconds(self) -> float:
        """From an order to its answer, on average; 0 before the first."""
        return self._seconds / max(1, self._answers)

    # ---- bits that nobody has any more ----

    def _gone(self, bits: str) -> bool:
        """Whether no worker has had these bits for long, while there are other workers."""
        there = {seat.bits for seat in self._seats.values()}
        since = self._left.get(bits, self._began)
        return bool(there) and bits not in there and self._clock() - since > PATIENCE_SECONDS

    def begin_again(self) -> int:
        """Groups of foreign bits that are gone begin again whole, with whoever is there; gives their number."""
        gone = [
            group
            for group in self._groups.values()
            if group.works
            and not group.pinned
            and group.bits not in (None, self._own)
            and self._gone(group.bits)
        ]
        for group in gone:
            self._begin_again(group)
        return len(gone)

    def _begin_again(self, group: _Group) -> None:
        self._take_from_waiting(group)
        group.bits = None
        group.held.clear()
        group.weight = 0
        self.requeued += len(group.works)
        for work in group.works:
            work.done = False
            self._wait(work)

    def _take_from_waiting(self, group: _Group) -> None:
        self._suspects = [work for work in self._suspects if work.group is not group]
        waiting = self._waiting.get(group.bits, deque())
        self._waiting[group.bits] = deque(work for work in waiting if work.group is not group)

    def hand_back(self) -> list[Reply]:
        """The tasks of groups pinned to foreign bits that are gone, answered as handed back: they may begin again."""
        needed = {*self._waiting, *(work.group.bits for work in self._suspects)} - {None, self._own}
        gone = {bits for bits in needed if self._gone(bits)}
        works = [work for bits in gone for work in self._waiting.get(bits, ())]
        works += [work for work in self._suspects if work.group.bits in gone]
        groups = dict.fromkeys(work.group for work in works if work.group.pinned)
        return [reply for group in groups for reply in self._handed_back(group)]

    def _handed_back(self, group: _Group) -> list[Reply]:
        self._take_from_waiting(group)
        self._groups.pop(group.key, None)
        group.held.clear()
        works = list(group.works)
        for work in works:
            work.done = True
        return self._released(group, works, [Reply(work.task[0], handed_back=True) for work in works])

    def to_run_here(self) -> Task | None:
        """A task that needs this machine's bits, which no worker has had for long: run it, and call `ran_here`."""
        if not self._gone(self._own):
            return None
        suspects = [work for work in self._suspects if work.group.bits == self._own and not work.lost_alone]
        if waiting := self._waiting.get(self._own):
            self._here = waiting.popleft()
        elif suspects:
            self._here = suspects[0]
            self._suspects.remove(self._here)
        else:
            return None
        return self._here.task

    def ran_here(self, reply: Reply) -> list[Reply]:
        """What became of the task that `to_run_here` gave."""
        assert self._here is not None
        return self._settle(self._here, reply)
