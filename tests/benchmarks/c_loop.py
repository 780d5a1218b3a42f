"""The same loop in C, compiled where gcc is there, called through ctypes."""

from __future__ import annotations

import ctypes
import shutil
import subprocess
import tempfile
from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np

from sim.intake import Intake
from sim.lowering import Network, Rules

_SIZE_OF_UNIT = 8 * 8 + 2 * 8


def build() -> Callable[..., list[np.ndarray]] | None:
    """The C table function, or None where there is no gcc."""
    gcc = shutil.which("gcc")
    if gcc is None:
        return None
    library = Path(tempfile.mkdtemp(prefix="brimline-loop-")) / "loop.so"
    subprocess.run(
        [gcc, "-O3", "-march=native", "-ffp-contract=off", "-shared", "-fPIC", "-o", str(library),
         str(Path(__file__).with_name("loop.c"))],
        check=True,
    )  # fmt: skip
    loop = ctypes.CDLL(str(library)).run_table

    def run_table(network: Network, rules: Sequence[Rules], intake: Intake) -> list[np.ndarray]:
        return _call(loop, network, rules, intake)

    return run_table


def _call(
    loop: Callable[..., None], network: Network, rules: Sequence[Rules], intake: Intake
) -> list[np.ndarray]:
    """Occupancy (cells, units, levels), gate days (cells, units, 8) and counts of every cell."""
    units, levels, cells = len(network.beds), int(network.beds.max()) + 1, len(rules)
    names = ("own_closes", "own_reopens", "incoming_closes", "incoming_reopens")
    thresholds = np.ascontiguousarray([[getattr(one, name) for name in names] for one in rules], np.int64)
    sums = [
        np.zeros((cells, units, levels)),
        np.zeros((cells, units, 8)),
        np.zeros((cells, units, 2 + 2 * units), np.int64),
    ]
    room = [np.zeros(units * _SIZE_OF_UNIT, np.uint8), np.zeros((int(network.beds.sum()) + 1) * 16, np.uint8)]
    whole, double = ctypes.c_int64, ctypes.c_double

    def at(array: np.ndarray) -> ctypes.c_void_p:
        return ctypes.c_void_p(array.ctypes.data)

    stay = np.ascontiguousarray(intake.stay[0])
    loop(
        whole(cells), whole(len(intake)), at(intake.arrival), at(intake.home), at(stay), at(intake.delay), whole(units),
        whole(levels), at(network.beds), at(thresholds), at(rules[0].referral_order), whole(rules[0].last_resort),
        double(network.edges[0]), double(network.edges[-1]), *map(at, room), *map(at, sums),
    )  # fmt: skip
    return sums
