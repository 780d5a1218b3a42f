"""Every optional rule, one file each: its declaration. A new rule is written there and listed here."""

from sim.rules import hysteresis, incoming, last_resort, out_of_use, reviews, soft_closure, transfer
from sim.rules.declaration import Rule

RULES: tuple[Rule, ...] = (
    incoming.RULE, hysteresis.RULE, soft_closure.RULE, last_resort.RULE, transfer.RULE, reviews.RULE, out_of_use.RULE
)  # fmt: skip


def tables(which: str) -> tuple[type, ...]:
    """What the rules add to one kind of table (`unit_keys`, `policy_keys`, `diversion_keys`, `parameters`)."""
    return tuple(getattr(rule, which) for rule in RULES if getattr(rule, which) is not None)


__all__ = ["RULES", "Rule", "tables"]
