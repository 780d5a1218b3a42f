"""What a cluster costs a task, and what that leaves of many workers: `python -m tests.benchmarks.cluster`.

Measured with two workers on this machine, TLS on. Tasks sleep, so that it is the way there and back that is measured,
not how busy the machine is otherwise. What 2 to 1,000 workers would give is simulated on paper: the desk itself hands
out the tasks, under a clock that only counts, with a client that takes the measured time for each.
"""

from __future__ import annotations

import heapq
import pickle
import tempfile
import time
from collections.abc import Callable, Iterable
from pathlib import Path
from statistics import median
from typing import Any

import psutil

from sim.lowering import lower_network, lower_policy, plan_intake
from sim.machines.desk import Desk
from sim.replicate import run_batch
from sim.scenario import read_scenario
from sim.workers import LocalProcesses, Reply, Workers
from tests.cluster.site import ROOT, Site
from tests.cluster.tasks import nap

CELLS = 216  # of the demo's game
TRIES = 3


def sizes() -> tuple[int, int]:
    """Bytes of a whole replication of the demo's game, as a task and as its answer."""
    scenario = read_scenario(ROOT / "scenarios" / "two-units.toml")
    policy = scenario.policy()
    rules = [
        lower_policy(scenario, policy.with_thresholds({"Norbeck": 1 + place % 18})) for place in range(CELLS)
    ]
    arguments = (lower_network(scenario), plan_intake(scenario), [0], list(range(CELLS)), rules, "compiled")
    return len(pickle.dumps(arguments)), len(pickle.dumps(run_batch(*arguments)))


def seconds_for(workers: Workers, tasks: Iterable[tuple[int, tuple]]) -> float:
    started = time.perf_counter()
    for reply in workers.run(nap, tasks):
        assert reply.failure is None, reply.failure
    return time.perf_counter() - started


def efficiency(workers_of: Callable[[], Workers], length: float, load: int, answer: int) -> float:
    """The share of two workers' time that went into tasks; processes are up before, median of a few tries."""
    count = 2 * max(8, min(100, int(2.0 / length)))
    work = [(number, (length, bytes(load), answer)) for number in range(count)]
    return median(count * length / 2 / seconds_for(workers_of(), work) for _ in range(TRIES))


def local() -> Workers:
    """Two processes that are up."""
    workers = LocalProcesses(2)
    seconds_for(workers, [(number, (0.0, b"", 0)) for number in range(8)])
    return workers


def overheads(site: Site, load: int, answer: int, count: int = 400) -> dict[str, float]:
    """Seconds a task, of tasks that do nothing: by the clock, and of CPU in the client and in the scheduler."""
    scheduler = psutil.Process(site.processes["scheduler"].pid)
    cluster = site.ready("bench")
    before, own = sum(scheduler.cpu_times()[:2]), time.process_time()
    clock = seconds_for(cluster, [(number, (0.0, bytes(load), answer)) for number in range(count)])
    return {
        "clock": clock / count,
        "client": (time.process_time() - own) / count,
        "scheduler": (sum(scheduler.cpu_times()[:2]) - before) / count,
    }


def on_paper(workers: int, length: float, each: float, delay: float, rounds: int = 30) -> float:
    """The efficiency of so many workers at tasks of so many seconds, where a task holds up the client for `each`."""
    clock = _Clock()
    desk = Desk([(number, ()) for number in range(rounds * workers)], own="", clock=clock)
    for number in range(workers):
        desk.join(str(number), "", 1)
    free: dict[str, float] = {}
    arriving: list[tuple[float, int, Any]] = []

    def send() -> None:
        for order in desk.orders():
            free[order.address] = max(clock.now + delay, free.get(order.address, 0.0)) + length
            heapq.heappush(arriving, (free[order.address] + delay, order.number, order.task[0]))

    send()
    since = 0
    while not desk.finished:
        at, number, key = heapq.heappop(arriving)
        clock.now = max(clock.now, at) + each
        desk.answer(number, Reply(key))
        since += 1
        if since > workers // 50 or not arriving:  # as the client does: all that came, then orders
            send()
            since = 0
    return rounds * length / clock.now


class _Clock:
    now = 0.0

    def __call__(self) -> float:
        return self.now


def main() -> None:
    """Measures, then reckons."""
    load, answer = sizes()
    print(f"a replication of the demo's game ({CELLS} cells): task {load:,} bytes, answer {answer:,} bytes")
    with tempfile.TemporaryDirectory() as folder, Site(Path(folder)) as site:
        site.join("bench", 2)
        print("efficiency of two workers, by task length:  local   cluster   cluster, demo's bytes")
        for length in (0.01, 0.1, 1.0):
            here = efficiency(local, length, 0, 0)
            there = [
                efficiency(lambda: site.ready("bench"), length, *size) for size in ((0, 0), (load, answer))
            ]
            print(f"  {length:5.2f} s  {here:6.3f}   {there[0]:6.3f}   {there[1]:6.3f}")
        for name, size in (("empty", (0, 0)), ("demo's bytes", (load, answer))):
            found = [overheads(site, *size) for _ in range(TRIES)]
            cost = {part: median(one[part] for one in found) for part in found[0]}
            print(
                f"a task, {name}: " + ", ".join(f"{part} {1e3 * each:.2f} ms" for part, each in cost.items())
            )
            _reckon(max(cost["client"], cost["scheduler"]), cost["clock"])


def _reckon(each: float, delay: float) -> None:
    print(
        "  on paper, efficiency by workers and task length (the narrowest of client and scheduler serves one by one)"
    )
    lengths = (0.1, 1.0, 10.0)
    for workers in (2, 10, 100, 1000):
        row = [on_paper(workers, length, each, delay) for length in lengths]
        print(
            f"  {workers:5d}  "
            + "  ".join(f"{length:g} s {one:.2f}" for length, one in zip(lengths, row, strict=True))
        )
    limits = ", ".join(f"{length:g} s: {length / each:,.0f}" for length in lengths)
    print(f"  workers that it can keep busy with tasks of {limits}")


if __name__ == "__main__":
    main()
