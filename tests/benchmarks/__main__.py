"""`python -m tests.benchmarks`: ratios between the engines, measured in one run, and how cost grows."""

from __future__ import annotations

import numpy as np

from sim import compiled, reference
from sim.intake import draw_intake
from tests.benchmarks import c_loop, plain
from tests.benchmarks.networks import lowered, network_of, two_units
from tests.benchmarks.timing import in_turn, ratio

FEW = 7  # cells for the slow engines; the fast ones run the whole table


def engines() -> None:
    """The compiled engine against the plain script, the reference engine and C, intake shared over 357 cells."""
    network, rules, plan = two_units()
    intake = draw_intake(plan, 0)
    some = rules[:: len(rules) // FEW][:FEW]
    loop = c_loop.build()
    _same_results(network, some, intake, loop)
    work = {
        "plain": lambda: [plain.run(network, one, intake) for one in some],
        "reference": lambda: [reference.run(network, one, intake) for one in some],
        "compiled": lambda: compiled.run_table(network, rules, intake),
        "alone": lambda: compiled.run(network, rules[200], draw_intake(plan, 1)),
        "plain alone": lambda: plain.run(network, rules[200], draw_intake(plan, 1)),
    }
    if loop is not None:
        work["C"] = lambda: loop(network, rules, intake)
    taken = in_turn(work)
    share = FEW / len(rules)
    print(
        f"{len(rules)} cells, {len(intake)} patients, one replication; ratios of CPU time, "
        "median (least to greatest) of 5"
    )
    _row("plain SimPy script / compiled", ratio(taken, "plain", "compiled", slow_share=share), ">= 150")
    _row("reference engine / compiled", ratio(taken, "reference", "compiled", slow_share=share), ">= 30")
    if loop is not None:
        _row("compiled / the same loop in C", ratio(taken, "compiled", "C"), "<= 1.6")
    _row("one cell with its own draws: plain / compiled", ratio(taken, "plain alone", "alone"), ">= 40")
    table = min(taken["compiled"])
    print(
        f"whole table, 30 replications: {30 * table:.2f} s of CPU (bar 1 to 3 s); "
        f"{table / len(rules) * 1e6:.0f} us a cell\n"
    )


def _row(name: str, ratios: tuple[float, float, float], bar: str) -> None:
    median, least, greatest = ratios
    print(f"  {name:48} {median:8.2f}  ({least:.2f} to {greatest:.2f})   bar {bar}")


def _same_results(network, some, intake, loop) -> None:
    """Every contender must simulate the same thing, or the ratios mean nothing."""
    for place, one in enumerate(some):
        record = compiled.run(network, one, intake)
        assert record.hash == reference.run(network, one, intake).hash
        occupied, transfers, away = plain.run(network, one, intake)
        assert np.allclose(
            occupied, record.occupancy_days.sum(axis=0) @ np.arange(network.beds.max() + 1), rtol=1e-9
        )
        assert (transfers, away) == (record.diverted.sum(), record.turned_away.sum())
        if loop is not None:
            occupancy, gates, _ = (array[0] for array in loop(network, some[place : place + 1], intake))
            assert np.array_equal(occupancy, record.occupancy_days[0]) and np.array_equal(
                gates, record.gate_days
            )


def growth() -> None:
    """How the compiled engine's cost grows with beds, units, cells and years."""
    cases = {
        "beds of one unit": [(f"{beds}", [beds], 20, 364.0) for beds in (10, 30, 100, 150, 300)],
        "units of 12 beds": [(f"{units}", [12] * units, 20, 364.0) for units in (1, 2, 4, 8)],
        "cells (two units)": [(f"{cells}", [12, 18], cells, 364.0) for cells in (1, 10, 100, 1000)],
        "years (two units)": [(f"{years}", [12, 18], 20, 364.0 * years) for years in (1, 4, 16)],
    }
    for title, sizes in cases.items():
        print(f"{title:20} {'patients':>9} {'us a cell':>10} {'ns a patient and cell':>22}")
        for name, beds, cells, measured in sizes:
            network, rules, plan = lowered(network_of(beds, measured=measured), cells)
            intake = draw_intake(plan, 0)
            taken = in_turn({"it": lambda n=network, r=rules, i=intake: compiled.run_table(n, r, i)})["it"]
            each = min(taken) / cells
            print(f"{name:20} {len(intake):9} {each * 1e6:10.0f} {each / len(intake) * 1e9:22.0f}")
        print()


if __name__ == "__main__":
    engines()
    growth()
