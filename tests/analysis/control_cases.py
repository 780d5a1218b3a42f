"""Tiny networks for central control, and the same network written plainly, to enumerate every rule."""

from __future__ import annotations

import itertools

import numpy as np

from analysis.control.display import rule_frame
from analysis.goals import Welfare
from sim.scenario import Scenario

THROUGHPUT, LOSS = Welfare("throughput"), Welfare("loss", 0.4)
CLOSE = 1e-8  # of numbers that are all near 1


def network(beds, patients, *, orders=None, factors=None, game=None, resort="home_bed", **keys):
    """Units A, B, ... ; patients: (home, arrivals a day, mean stay in days) of each group."""
    names = "ABCD"[: len(beds)]
    units = [{"name": name, "beds": b} for name, b in zip(names, beds, strict=True)]
    for place, unit in enumerate(units):
        unit |= {} if orders is None or orders[place] is None else {"referral_order": list(orders[place])}
        unit |= {} if factors is None else {"stay_factor": factors[place]}
        unit |= {key: values[place] for key, values in keys.items()}
    groups = [
        {"group": f"g{place}", "home": home, "per_day": rate, "stay": _stay(mean)}
        for place, (home, rate, mean) in enumerate(patients)
    ]
    tables = {"diversion": {"when_all_closed": resort}} | ({} if game is None else {"game": game})
    return Scenario.model_validate({"schema": 1, "units": units, "patients": groups, **tables})


def _stay(mean):
    return {"family": "exponential", "mean_days": mean}


def erlang_loss(offered, beds):
    """Share of arrivals turned away by Erlang's formula, by its recursion over the beds."""
    share = 1.0
    for bed in range(1, beds + 1):
        share = offered * share / (bed + offered * share)
    return share


class Plain:
    """A tiny network in dictionaries: a state holds each unit's patients by mean stay."""

    def __init__(self, scenario, welfare):
        self.scenario, self.welfare = scenario, welfare
        self.units = {unit.name: unit for unit in scenario.units}
        self.means = sorted({group.mean_stay_days for group in scenario.patients})
        per_unit = [
            [
                c
                for c in itertools.product(range(unit.beds + 1), repeat=len(self.means))
                if sum(c) <= unit.beds
            ]
            for unit in scenario.units
        ]
        self.states = list(itertools.product(*per_unit))
        self.decisions = {
            (state, group.group): self.options(state, group)
            for state in self.states
            for group in scenario.patients
        }

    def options(self, state, group):
        free = {
            n for n, patients in zip(self.units, state, strict=True) if sum(patients) < self.units[n].beds
        }
        reach = [group.home, *self.scenario.policy().units[group.home].referral_order]
        return [unit for unit in reach if unit in free] + [None]

    def changed(self, state, unit, mean, change):
        counts = [list(patients) for patients in state]
        counts[list(self.units).index(unit)][self.means.index(mean)] += change
        return tuple(map(tuple, counts))

    def gain(self, rule):
        """Long-run welfare a day of a rule {(state, group): unit or None}, more being better."""
        place = {state: index for index, state in enumerate(self.states)}
        flow, reward = np.zeros((len(place), len(place))), np.zeros(len(place))
        for state, here in place.items():
            for group in self.scenario.patients:
                unit = rule[state, group.group]
                reward[here] += group.per_day * self.value(group.home, unit)
                if unit is not None:
                    flow[here, place[self.changed(state, unit, group.mean_stay_days, +1)]] += group.per_day
            for name, patients in zip(self.units, state, strict=True):
                for mean, number in zip(self.means, patients, strict=True):
                    if number:
                        rate = number / (mean * self.units[name].stay_factor)
                        flow[here, place[self.changed(state, name, mean, -1)]] += rate
        balance = flow - np.diag(flow.sum(axis=1))
        balance[:, 0] = 1.0
        return np.linalg.solve(balance.T, np.eye(len(place))[0]) @ reward

    def value(self, home, unit):
        if self.welfare.kind == "throughput":
            return float(unit is not None)
        return -1.0 if unit is None else -self.welfare.transfer_weight * (unit != home)

    def best(self):
        """The largest gain of all deterministic stationary rules; decisions with one option are not chosen."""
        rules = itertools.product(*self.decisions.values())
        return max(self.gain(dict(zip(self.decisions, rule, strict=True))) for rule in rules)


TINY = {
    "equal stays": network((1, 2), [("A", 0.9, 2.0), ("B", 1.4, 2.0)]),
    "unequal stays": network((1, 1), [("A", 0.9, 1.0), ("B", 0.5, 6.0)]),
    "slower elsewhere": network((1, 1), [("A", 1.2, 1.0), ("B", 0.7, 1.0)], factors=(1.0, 2.5)),
    "one road only": network((1, 2), [("A", 0.9, 2.0), ("B", 1.8, 2.0)], orders=(None, ())),
}
WELFARES = {"throughput": THROUGHPUT, "loss": LOSS}


def as_plain(plain, result):
    """The rule as the file gives it: a row a state, an action a group."""
    frame = rule_frame(result)
    assert len(frame) == result.problem.states
    rule = {}
    for _, row in frame.iterrows():
        counts = [[0] * len(plain.means) for _ in plain.units]
        for column in (name for name in row.index if name.startswith("occupied ")):
            unit, _, stay = column.removeprefix("occupied ").partition(", mean stay ")
            mean = float(stay.removesuffix(" days") or plain.means[0])
            counts[list(plain.units).index(unit)][plain.means.index(mean)] = row[column]
        for group in plain.scenario.patients:
            action = row[f"action {group.group}"]
            rule[tuple(map(tuple, counts)), group.group] = None if action == "turned away" else action
    return rule
