"""The compiled engine's kernels, compiled before a machine's workers start; `python -m sim.machines.ahead`.

In a process of its own, for the command that starts workers stays all night and needs no compiler. Without it every
worker's first task would compile for itself, all at once.
"""

from __future__ import annotations

import importlib.util
import subprocess
import sys
from collections.abc import Callable

from sim import engines

SCENARIO = """
schema = 1
title = "A few patients, to compile for (invented)"
run = { warm_up_days = 1, measured_days = 7 }
units = [{ name = "Ashgill", beds = 2 }, { name = "Norbeck", beds = 2, review_hours = 8 }]

[[patients]]
group = "Ashgill emergencies"
home = "Ashgill"
per_day = 1.0
stay = { family = "exponential", mean_days = 1.0 }
"""


def compile_ahead(*, say: Callable[[str], None]) -> None:
    """Compiles unless that has been done on this machine; tells what it does, and goes on where it cannot."""
    if importlib.util.find_spec("numba") is None or engines.is_compiled():
        return
    from sim.compiled.cache import cache_folder, folder_is_writable

    if not folder_is_writable():
        say(f"{cache_folder()} cannot be written, so each worker compiles the engine for itself")
        return
    say("compiling the engine, once on this machine (some seconds)")
    ended = subprocess.run([sys.executable, "-m", "sim.machines.ahead"], capture_output=True, check=False)
    if ended.returncode != 0:
        say("the engine could not be compiled ahead; the workers will try with their first tasks")


def main() -> None:
    """Compiles."""
    from sim.lowering import lower_network, lower_policy, plan_intake
    from sim.scenario import parse_scenario

    scenario = parse_scenario(SCENARIO)
    rules = [lower_policy(scenario, scenario.policy())]
    engines.load("compiled").warm(lower_network(scenario), rules, plan_intake(scenario))


if __name__ == "__main__":
    main()
