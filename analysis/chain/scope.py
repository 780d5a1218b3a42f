"""What the exact chain covers, and why a scenario is refused."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from analysis.chain.phases import is_phase_type
from sim.errors import BrimlineError
from sim.rules import RULES
from sim.scenario import Policy, Scenario


class OutOfScope(BrimlineError):  # noqa: N818 - the name says it all
    """The scenario has rules or distributions that the chain does not model; holds every reason."""

    def __init__(self, reasons: Iterable[str]) -> None:
        self.reasons = tuple(reasons)
        super().__init__("\n".join(self.reasons))

    def __reduce__(self):  # the message is not the argument
        return type(self), (self.reasons,)


def refusals(scenario: Scenario, policy: Policy) -> tuple[str, ...]:
    """Every reason why the chain cannot give this scenario's exact measures; empty where it can.

    scenario: the network. policy: the rules it is run by.
    Returns one sentence a reason, `KEY: rule, value`, rows of the file by their names.
    """
    of_rules = (reason for rule in RULES for reason in rule.chain_refuses(scenario, policy))
    return (*_stays(scenario), *_arrivals(scenario), *of_rules)


def _stays(scenario: Scenario) -> Iterator[str]:
    for group in scenario.patients:
        if not is_phase_type(group.stay):
            rule = f"the stay must be exponential or of exponential phases, got {_described(group.stay)}"
            yield f"patients.{group.group}.stay: {rule}; {_remedy(group.mean_stay_days)}"


def _remedy(mean_stay_days: float) -> str:
    if mean_stay_days == 0:
        return "leave the group out: it never needs a bed"
    return "give --phase-fit N for at most N phases in its place, or --exponential, or simulate"


def _described(stay) -> str:
    """A family and the numbers that tell it from the exponential one."""
    details = [f"{key} {getattr(stay, key):g}" for key in ("cv", "stages") if hasattr(stay, key)]
    details += [f"{len(getattr(stay, key))} {noun}" for key, noun in _LISTED.items() if hasattr(stay, key)]
    return f"{stay.family} ({', '.join(details)})" if details else stay.family


_LISTED = {"rates": "phases", "parts": "parts"}


def _arrivals(scenario: Scenario) -> Iterator[str]:
    for group in scenario.patients:
        for key in ("hour_of_day", "day_of_week"):
            weights = getattr(group, key)
            if weights is not None and min(weights) < max(weights):
                span = f"weights from {min(weights):g} to {max(weights):g}"
                yield f"patients.{group.group}.{key}: arrivals must come at a constant rate, got {span}"
