"""What the exact chain covers, and why a scenario is refused."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

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
        if not _is_exponential(group.stay):
            yield f"patients.{group.group}.stay: the stay must be exponential, got {_described(group.stay)}"


def _is_exponential(stay) -> bool:
    """Whether the family, at these numbers, is the exponential one under another name."""
    match stay.family:
        case "exponential":
            return True
        case "erlang":
            return stay.stages == 1
        case "gamma" | "weibull" | "hyperexponential":
            return stay.cv == 1
        case "coxian":
            return len(stay.rates) == 1 or stay.goes_on[0] == 0
        case "mixture":
            parts = [part for part in stay.parts if part.weight > 0]
            means = {part.distribution().mean() for part in parts}
            return len(means) == 1 and all(map(_is_exponential, parts))
    return False


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
