"""`python -m tests.benchmarks.chain`: whole tables against a sparse factorisation per cell, and large networks.

Ratios of CPU time, measured in turn in one run, after compilation; then how cost grows.
"""

from __future__ import annotations

import itertools
import resource
import time
from collections.abc import Sequence

import numpy as np
from scipy.sparse import csc_array
from scipy.sparse.linalg import splu

from analysis.chain import exact, solve, solved_together, table
from analysis.chain.limits import DEFAULT
from analysis.chain.network_states import network_chain
from sim.scenario import Policy, Scenario
from tests.benchmarks.timing import in_turn, ratio

SOME = 10  # cells for the slow contenders


def network(beds: Sequence[int], *, factors: Sequence[float] | None = None, load: float = 0.8) -> Scenario:
    """Invented units that close at nine tenths of their beds, exponential stays of 3.9 days, `home_bed`."""
    names = [f"Unit {place}" for place in range(len(beds))]
    stays = [3.9 * factor for factor in factors or [1.0] * len(beds)]
    units = [
        {"name": name, "beds": b, "stay_factor": stay / 3.9, "closure_threshold": max(1, 9 * b // 10)}
        for name, b, stay in zip(names, beds, stays, strict=True)
    ]
    groups = [
        {
            "group": name,
            "home": name,
            "per_day": load * b / stay,
            "stay": {"family": "exponential", "mean_days": 3.9},
        }
        for name, b, stay in zip(names, beds, stays, strict=True)
    ]
    return Scenario.model_validate({"schema": 1, "units": units, "patients": groups})


def every_policy(scenario: Scenario) -> list[Policy]:
    """All closure thresholds from 1 up."""
    ranges = [range(1, unit.beds + 1) for unit in scenario.units]
    base, names = scenario.policy(), scenario.unit_names
    return [base.with_thresholds(dict(zip(names, one, strict=True))) for one in itertools.product(*ranges)]


class Cell:
    """The balance equations of one cell, ready for scipy: probabilities relative to the last state."""

    def __init__(self, scenario: Scenario, policy: Policy) -> None:
        self.moves = network_chain(scenario, policy, DEFAULT).moves
        self.matrix, self.right = self.assembled()

    def assembled(self) -> tuple[csc_array, np.ndarray]:
        moves, states = self.moves, self.moves.states
        out = np.bincount(moves.origin, weights=moves.rate, minlength=states)
        every = np.arange(states)
        rows, columns = np.append(moves.target, every), np.append(moves.origin, every)
        whole = csc_array((np.append(moves.rate, -out), (rows, columns)), shape=(states, states))
        return whole[:-1, :-1].tocsc(), -whole[:-1, [states - 1]].toarray().ravel()

    def solve(self, order: str = "COLAMD") -> np.ndarray:
        weights = np.append(splu(self.matrix, permc_spec=order).solve(self.right), 1.0)
        return weights / weights.sum()


def lines_only(scenario: Scenario, policies: Sequence[Policy]) -> None:
    """The probabilities, measures and balance of every cell as arrays, without a result object for each."""
    cells, plan = range(len(policies)), table._plan(scenario, policies[0], DEFAULT)
    other = scenario.units[1 - plan.level].name
    lines = itertools.groupby(
        sorted(cells, key=lambda cell: policies[cell].thresholds[other]),
        key=lambda cell: policies[cell].thresholds[other],
    )
    table._observed(scenario, policies, [list(line) for _, line in lines], plan)


def tables() -> None:
    """The yardstick: 320 cells of two units with 16 and 20 beds."""
    scenario = network([16, 20])
    policies = every_policy(scenario)
    some = [Cell(scenario, policy) for policy in policies[:: len(policies) // SOME][:SOME]]
    taken = in_turn(
        {
            "LU": lambda: [cell.solve() for cell in some],
            "LU, natural": lambda: [cell.solve("NATURAL") for cell in some],
            "assembled LU": lambda: [cell.assembled() and cell.solve() for cell in some],
            "alone": lambda: [solve(scenario, policy) for policy in policies[:SOME]],
            "lines": lambda: lines_only(scenario, policies),
            "together": lambda: solved_together(scenario, policies),
        },
        rounds=9,
    )
    share = SOME / len(policies)
    print(
        f"{len(policies)} cells of 16 and 20 beds; median ratio of CPU time (least to greatest) of 9 rounds"
    )
    print(
        "                                            probabilities, measures, certificates / result objects too"
    )
    for name in ("LU", "LU, natural", "assembled LU", "alone"):
        bars = [ratio(taken, name, fast, slow_share=share) for fast in ("lines", "together")]
        print(
            f"  {name:14} / together   "
            + "   ".join("{:7.1f} ({:.1f} to {:.1f})".format(*bar) for bar in bars)
        )
    for name in ("lines", "together"):
        print(f"  {name}: {1e3 * min(taken[name]):.1f} ms")
    gap = max(
        float(np.abs(found.units[name].occupancy / alone.units[name].occupancy - 1).max())
        for found, alone in (
            (solved_together(scenario, policies)[cell], solve(scenario, policies[cell]))
            for cell in range(0, 320, 29)
        )
        for name in scenario.unit_names
    )
    print(f"  greatest difference from cells solved alone, relative to each probability: {gap:.1e}\n")


def growth_of_tables() -> None:
    """Cost of a whole table by beds."""
    print(f"{'beds of both':14} {'cells':>7} {'states':>7} {'ms':>9} {'us a cell':>10}")
    for beds in (5, 10, 20, 30, 40):
        scenario = network([beds, beds])
        policies = every_policy(scenario)
        taken = min(in_turn({"it": lambda s=scenario, p=policies: solved_together(s, p)}, rounds=2)["it"])
        cells = len(policies)
        print(f"{beds:<14} {cells:7} {(beds + 1) ** 2:7} {1e3 * taken:9.1f} {1e6 * taken / cells:10.1f}")
    print()


def large() -> None:
    """Seconds and memory of single large networks; bars: about 1 s for 65,536, 60 s and 2 GiB for 1,048,576."""
    print(f"{'network':34} {'states':>10} {'seconds':>8} {'GiB':>6}")
    cases = {
        "2 units of 60": ([60] * 2, None),
        "3 units of 15": ([15] * 3, None),
        "3 units of 30": ([30] * 3, None),
        "4 units of 15": ([15] * 4, None),
        "8 units of 3": ([3] * 8, None),
        "4 units of 15, rates to 1 : 1000": ([15] * 4, [1.0, 30.0, 0.03, 1.0]),
        "5 units of 15": ([15] * 5, None),
    }
    for name, (beds, factors) in cases.items():
        scenario = network(beds, factors=factors)
        started = time.process_time()
        states = solve(scenario, scenario.policy()).states
        seconds = time.process_time() - started
        memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20
        print(f"{name:34} {states:10,} {seconds:8.2f} {memory:6.2f}")
    print()


def elimination_or_relaxation() -> None:
    """Milliseconds of both for the same networks; the choice changes at `exact.ELIMINATED` states."""
    print(f"{'units of 3 alike':18} {'states':>7} {'eliminated':>11} {'relaxed':>9}   ms")
    chosen = exact.ELIMINATED
    for beds in (6, 9, 12, 16):
        scenario, took = network([beds] * 3), []
        for most in (10**9, 0):
            exact.ELIMINATED = most
            taken = in_turn({"it": lambda s=scenario: solve(s, s.policy())}, rounds=3)["it"]
            took.append(1e3 * min(taken))
        print(f"{beds:<18} {(beds + 1) ** 3:7} {took[0]:11.1f} {took[1]:9.1f}")
    exact.ELIMINATED = chosen


if __name__ == "__main__":
    tables()
    growth_of_tables()
    exact.ELIMINATED, before = 0, exact.ELIMINATED
    solve(network([2, 2]), network([2, 2]).policy())  # compiles
    solve(network([2, 2], factors=[1, 100]), network([2, 2], factors=[1, 100]).policy())
    exact.ELIMINATED = before
    large()
    elimination_or_relaxation()
