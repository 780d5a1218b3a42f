"""What a rule must say of itself.

A rule is declared once, here in `sim/rules`: its keys, its lowered arrays, its draws, its events, its columns of
the record, how it reads, and what the exact chain makes of it. The engines each implement it behind the hooks
*arrive, choose unit, occupy, bed frees, gate, timer*; they share nothing but what is declared and lowered, so
that a mistake cannot hide in both.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from sim.tables import Table

if TYPE_CHECKING:
    from sim.scenario import Policy, Scenario
    from sim.scenario.crosschecks import Draft

Lowered = Mapping[str, Any]


def _lowers_nothing(*_: Any) -> Lowered:
    return {}


def _modelled(scenario: Scenario, policy: Policy) -> Iterator[str]:
    """The chain models the rule: no refusal."""
    yield from ()


def _no_faults(draft: Draft) -> None:
    """No rule between keys."""


@dataclass(frozen=True)
class Rule:
    """One optional rule.

    name: in the trade's words. unit_keys, policy_keys, diversion_keys: the keys it adds to `[[units]]`,
    `[[policies]]` and `[diversion]`, as tables to inherit from. parameters: the fields it adds to a policy's
    rules of a unit. check: faults between its keys and others. lower_policy, lower_network, plan: what it adds
    to `Rules`, `Network` and `IntakePlan` of `sim.lowering`; None where the rule is off. purposes: its draws,
    by number. event_kinds: its events, by place in the order of events. record_columns: its fields of a record,
    None where the rule is off. reads: the rule as it stands, in words, or None where it is off. chain_refuses:
    why the exact chain cannot answer under it; nothing where the chain models it.
    """

    name: str
    reads: Callable[[Scenario, Policy], str | None]
    unit_keys: type[Table] | None = None
    policy_keys: type[Table] | None = None
    diversion_keys: type[Table] | None = None
    parameters: type | None = None
    check: Callable[[Draft], None] = _no_faults
    lower_policy: Callable[[Scenario, Policy], Lowered] = _lowers_nothing
    lower_network: Callable[[Scenario], Lowered] = _lowers_nothing
    plan: Callable[[Scenario], Lowered] = _lowers_nothing
    purposes: Mapping[str, int] = field(default_factory=dict)
    event_kinds: Mapping[str, int] = field(default_factory=dict)
    record_columns: tuple[str, ...] = ()
    chain_refuses: Callable[[Scenario, Policy], Iterator[str]] = _modelled


def of_units(policy: Policy, parameter: str) -> dict[str, Any]:
    """Unit name -> its value of one parameter, in scenario order."""
    return {name: getattr(rules, parameter) for name, rules in policy.units.items()}


def in_words(values: Mapping[str, Any], says: Callable[[Any], str]) -> str | None:
    """`NAME says(value)` for every unit whose value is true, or None where none is."""
    return "; ".join(f"{name} {says(value)}" for name, value in values.items() if value) or None
