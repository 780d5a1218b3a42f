"""What one run changes of a scenario: run table, policy, demand, target, thresholds; faults at once, changes in words.

Overrides are given by name, each with a value or None: `seed`, `replications`, `confidence`, `policy`, `demand`,
`target`, `exponential` (bool), and `threshold` and `incoming` (tuples of `UNIT=K`).
"""

from __future__ import annotations

import unicodedata
from collections.abc import Mapping
from types import MappingProxyType
from typing import Any

from sim.errors import Fault

NOTHING: Mapping[str, Any] = MappingProxyType(
    dict.fromkeys(("seed", "replications", "confidence", "policy", "demand", "target"))
    | {"exponential": False, "threshold": (), "incoming": ()}
)
LIMITS = {"seed": (0, 2**63 - 1), "replications": (1, 1_000_000), "workers": (1, 1024)}
LONGEST_THRESHOLD = 9  # digits


def overridden(scenario: Any, values: Mapping[str, Any], faults: list[Fault]) -> tuple[Any, Any]:
    """The scenario and the policy after every override; what is at fault is added to `faults` and left out.

    The order is fixed: the run table, the policy's beds and targets, demand, target, exponential, then thresholds over
    the policy's. Keys of faults are the command line's options (`--demand`).
    """
    changes = {key: values[key] for key in ("seed", "replications", "confidence") if values[key] is not None}
    scenario = _under(scenario.with_run(**changes), values["policy"])
    scenario = _with_demand(scenario, values.get("demand"), faults)
    scenario = _with_target(scenario, values.get("target"), faults)
    if values["exponential"]:
        scenario = scenario.exponential()
    policy = _policy(scenario, values["policy"], faults)
    policy = policy.with_thresholds(_per_unit("--threshold", values["threshold"], scenario, faults))
    incoming = _per_unit("--incoming", values["incoming"], scenario, faults)
    return scenario, policy.with_rule("incoming_threshold", incoming)


def _with_demand(scenario: Any, factor: float | None, faults: list[Fault]) -> Any:
    if factor is None:
        return scenario
    from analysis.settings import demand_bounds

    bounds = demand_bounds(scenario)
    least, most = bounds.least, bounds.most
    if not bounds.holds(factor):
        rule, remedy = (
            f"must be from {least:.3g} to {most:.6g} here",
            "give a factor such as 1.1 for 10 % more patients",
        )
        faults.append(Fault(None, "--demand", rule, f"got {factor:g}", remedy))
        return scenario
    return scenario.with_demand(factor)


def _with_target(scenario: Any, target: float | None, faults: list[Fault]) -> Any:
    if target is None:
        return scenario
    if not 0 < target <= 1:
        faults.append(
            Fault(
                None,
                "--target",
                "must be above 0 and at most 1",
                f"got {target:g}",
                "give a share such as 0.75",
            )
        )
        return scenario
    return scenario.with_target(target)


def _under(scenario: Any, name: str | None) -> Any:
    """The network that the policy is for; of an unknown policy `_policy` tells."""
    try:
        return scenario.under(None if name is None else unicodedata.normalize("NFC", name))
    except KeyError:
        return scenario


def _policy(scenario: Any, name: str | None, faults: list[Fault]) -> Any:
    from sim.wording import nearest, shown

    try:
        return scenario.policy(None if name is None else unicodedata.normalize("NFC", name))
    except KeyError:
        known = [row.name for row in scenario.policies]
        faults.append(
            Fault(
                None,
                "--policy",
                "must name a policy of the scenario",
                f"got {shown(name)}",
                nearest(name, known),
            )
        )
        return scenario.policy()


def _per_unit(option: str, entries: tuple[str, ...], scenario: Any, faults: list[Fault]) -> dict[str, int]:
    """The thresholds of repeated UNIT=K options; the last one for a unit holds."""
    from sim.wording import nearest, shown

    chosen = {}
    for entry in entries:
        name, found, number = unicodedata.normalize("NFC", entry).rpartition("=")
        digits = number.strip().lstrip("0") or number.strip()[-1:]
        if not found or not digits.isdecimal() or len(digits) > LONGEST_THRESHOLD:
            rule, remedy = (
                "must be UNIT=K, K a whole number, 0 or more",
                f'write "{scenario.unit_names[0]}=9"',
            )
            faults.append(Fault(None, option, rule, f"got {shown(entry)}", remedy))
        elif name not in scenario.unit_names:
            remedy = nearest(name, scenario.unit_names)
            faults.append(
                Fault(None, option, "must name a unit of the scenario", f"got {shown(name)}", remedy)
            )
        elif int(digits) > scenario.unit(name).beds:
            beds = scenario.unit(name).beds
            rule = "must not be above the unit's beds"
            faults.append(
                Fault(None, option, rule, f"got {shown(entry)} for {beds} beds", f"choose from 0 to {beds}")
            )
        else:
            chosen[name] = int(digits)
    return chosen


def changes_of(values: Mapping[str, Any]) -> tuple[str, ...]:
    """What overrides change of the scenario, in words."""
    said = []
    if values["policy"] is not None:
        said.append(f"policy {values['policy']}")
    said += [f"closure threshold {entry.replace('=', ' ')}" for entry in values["threshold"]]
    said += [f"incoming threshold {entry.replace('=', ' ')}" for entry in values["incoming"]]
    if values.get("demand") is not None:
        said.append(f"demand x {values['demand']:g}")
    if values.get("target") is not None:
        said.append(f"target {values['target']:g} for every unit")
    if values["exponential"]:
        said.append("exponential counterpart (stays of the same means, no delay, constant demand)")
    return tuple(said)
