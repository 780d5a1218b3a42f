"""Stays as exponential phases, each phase known once, so that patients with one future are counted together.

A stay of this kind is a walk through exponential phases that never returns to one: its state at any moment is
the phase, and the chain stays a chain (Neuts, "Matrix-geometric solutions in stochastic models", 1981, from
memory). Two phases are one where they last equally long and lead to the same phases with the same
probabilities: the last stages of two Erlang stays of one stage length, or two groups of one mean.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import NamedTuple

from sim.durations import Duration

Starts = dict[int, float]  # number of a phase -> probability that a stay begins there


class Moments(NamedTuple):
    """The first three moments of a stay: E[X], E[X^2], E[X^3] in days and their powers."""

    first: float
    second: float
    third: float


@dataclass(frozen=True)
class Phase:
    """One exponential phase. mean_days: its mean, at a stay factor of 1.

    onward: number of the next phase -> probability; what is left of 1 is the end of the stay.
    """

    mean_days: float
    onward: Mapping[int, float]


class PhaseBook:
    """Phases numbered from 0, none of them twice, each after those that it leads to."""

    def __init__(self) -> None:
        self.phases: list[Phase] = []
        self._numbers: dict[tuple, int] = {}

    def number(self, mean_days: float, onward: Mapping[int, float]) -> int:
        """The number of a phase, a new one only where none coincides with it (to 12 digits)."""
        key = (_digits(mean_days), tuple(sorted((after, _digits(share)) for after, share in onward.items())))
        if key not in self._numbers:
            self._numbers[key] = len(self.phases)
            self.phases.append(Phase(mean_days, dict(onward)))
        return self._numbers[key]

    def starts(self, stay: Duration) -> Starts:
        """Where a stay of `is_phase_type` begins; its phases are entered into the book."""
        match stay.family:
            case "erlang":
                means = (stay.mean / stay.stages,) * stay.stages
                return {self._row(means, (1.0,) * (stay.stages - 1)): 1.0}
            case "coxian":
                return {self._row([1 / rate for rate in stay.rates], stay.goes_on): 1.0}
            case "hyperexponential":
                return _added(
                    (share, {self.number(mean, {}): 1.0}) for share, mean in stay.distribution().phases
                )
            case "mixture":
                parts = [part for part in stay.parts if part.weight > 0]
                total = sum(part.weight for part in parts)
                return _added((part.weight / total, self.starts(part)) for part in parts)
        return {self.number(stay.mean, {}): 1.0}

    def _row(self, means: Sequence[float], goes_on: Sequence[float]) -> int:
        """Phases one after another, each left for the next with a probability; the number of the first."""
        number = -1
        for mean, share in reversed(list(zip(means, (*goes_on, 0.0), strict=True))):
            number = self.number(mean, {number: share} if share > 0 else {})
        return number

    def reached(self, starts: Iterable[int]) -> list[int]:
        """The phases that a stay can pass through from any of `starts`, in the order of their numbers."""
        ahead, found = list(starts), set()
        while ahead:
            number = ahead.pop()
            if number not in found:
                found.add(number)
                ahead += self.phases[number].onward
        return sorted(found)

    def moments(self, starts: Starts) -> Moments:
        """The moments of a stay that begins so; sums of positive terms, by conditioning on the first phase."""
        left: list[Moments] = []  # from each phase on
        for phase in self.phases:
            mean, (first, second, third) = phase.mean_days, _mixed(phase.onward, left)
            left.append(
                Moments(
                    mean + first,
                    2 * mean * (mean + first) + second,
                    6 * mean**2 * (mean + first) + 3 * mean * second + third,
                )
            )
        return _mixed(starts, left)


def is_phase_type(stay: Duration) -> bool:
    """Whether a stay is made of exponential phases, under whatever name."""
    match stay.family:
        case "exponential" | "erlang" | "hyperexponential" | "coxian":
            return True
        case "gamma" | "weibull":
            return stay.cv == 1
        case "mixture":
            return all(is_phase_type(part) for part in stay.parts if part.weight > 0)
    return False


def _digits(value: float) -> str:
    """A number to 12 digits: what differs by rounding only (0.3 / 3 and 0.1) is the same."""
    return f"{value:.11e}"


def _added(parts: Iterable[tuple[float, Starts]]) -> Starts:
    total: Starts = {}
    for weight, starts in parts:
        for number, share in starts.items():
            total[number] = total.get(number, 0.0) + weight * share
    return total


def _mixed(weights: Mapping[int, float], moments: Sequence[Moments]) -> Moments:
    return Moments(*(sum(share * moments[n][order] for n, share in weights.items()) for order in range(3)))
