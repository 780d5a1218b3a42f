"""Which patients a unit can come to treat, and what that leaves for the chain to count."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from analysis.chain.phases import PhaseBook
from analysis.chain.unit_states import COUNTED, UnitSpace
from sim.scenario import Policy, Scenario, UnitRules
from sim.scenario.units import Unit

Demand = Mapping[tuple[str, int], float]  # home, phase that the stay begins with -> arrivals a day
Steps = Mapping[tuple[int, int], float]  # phase, next phase -> probability


@dataclass(frozen=True)
class UnitLayout:
    """One unit as the chain sees it; its phases are those of every patient who can be treated here.

    name, beds: the unit and its staffed beds.
    phase_rates: the rate at which each phase ends here, per day, shape (phases,).
    onward: (phase, next phase) -> probability that the one leads to the other; the rest is discharged.
    arrivals: home unit -> arrivals a day by first phase, (phases,), of patients who can be treated here.
    space: what bounds its states.
    """

    name: str
    beds: int
    phase_rates: tuple[float, ...]
    onward: Steps
    arrivals: Mapping[str, tuple[float, ...]]
    space: UnitSpace

    @property
    def discharge_rates(self) -> tuple[float, ...]:
        """The rate at which a patient in each phase is discharged, per day, (phases,); 0 where none is."""
        left = [1.0] * len(self.phase_rates)
        for (phase, _), share in self.onward.items():
            left[phase] -= share
        return tuple(rate * max(share, 0.0) for rate, share in zip(self.phase_rates, left, strict=True))


def layout(scenario: Scenario, policy: Policy) -> tuple[UnitLayout, ...]:
    """Every unit of the scenario in file order, under the policy's rules."""
    book, demand = PhaseBook(), defaultdict(float)
    for group in scenario.patients:
        for phase, share in book.starts(group.stay).items():
            demand[group.home, phase] += group.per_day * share
    return tuple(_unit_layout(policy, book, demand, unit) for unit in scenario.units)


def state_bound(units: tuple[UnitLayout, ...]) -> int:
    """An upper bound of the number of states: the units' own multiplied; COUNTED where that is more."""
    bound = 1
    for unit in units:
        bound *= unit.space.size
        if bound >= COUNTED:
            return COUNTED
    return bound


def _unit_layout(policy: Policy, book: PhaseBook, demand: Demand, unit: Unit) -> UnitLayout:
    most = _most_by_home(policy, unit.name, unit.beds)
    taken = {key: per_day for key, per_day in demand.items() if most.get(key[0], 0) > 0}
    rate = {
        number: 1 / (book.phases[number].mean_days * unit.stay_factor)
        for number in book.reached(phase for _, phase in taken)
    }
    numbers = sorted(rate, key=rate.__getitem__)
    homes = {home: None for home, _ in taken}
    arrivals = {home: tuple(taken.get((home, number), 0.0) for number in numbers) for home in homes}
    onward = _steps(book, numbers)
    held = max((most[home] for home in homes), default=0)
    space = _space(policy.units[unit.name], held, len(numbers), tuple(onward))
    rates = tuple(rate[number] for number in numbers)
    return UnitLayout(unit.name, unit.beds, rates, onward, arrivals, space)


def _steps(book: PhaseBook, numbers: Sequence[int]) -> Steps:
    """The moves between phases, by their places in `numbers`."""
    place = {number: index for index, number in enumerate(numbers)}
    return {
        (place[number], place[after]): share
        for number in numbers
        for after, share in book.phases[number].onward.items()
    }


def _space(rules: UnitRules, most: int, phases: int, steps: tuple[tuple[int, int], ...]) -> UnitSpace:
    return UnitSpace(most, phases, rules.closure_threshold, rules.incoming, rules.reopening_gap, steps)


def _most_by_home(policy: Policy, name: str, beds: int) -> dict[str, int]:
    """Home -> the most patients that this unit can hold after it took one from there."""
    rules, resort = policy.units[name], policy.when_all_closed
    takes_when_closed = rules.admit_while_closed > 0 or resort != "turned_away"
    own = beds if takes_when_closed else rules.closure_threshold
    incoming = beds if resort == "any_bed" else rules.incoming
    referring = {home for home, others in policy.units.items() if name in others.referral_order}
    return dict.fromkeys(referring, incoming) | {name: own}
