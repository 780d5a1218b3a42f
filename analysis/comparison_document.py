"""A comparison of policies as a document, and as sentences that claim no more than its bands allow."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np

from analysis.anarchy import DAYS_A_YEAR
from analysis.comparison import NETWORK, TOLD_APART, Chance, Comparison, Difference, could_be_best
from analysis.confidence import Estimate, mean_estimate
from analysis.efficient_set import INEFFICIENT, Efficiency, efficient_set
from analysis.findings import Finding
from analysis.goals import welfare_of
from analysis.measures import NETWORK_MEASURES, UNIT_MEASURES, Measure, Sums, network_sums
from analysis.named_policies import Case
from analysis.selecting import Race
from analysis.selection import Selection, two_stage_replications
from analysis.simulation import estimate_measure, of_unit
from analysis.worst_year import ONE_IN, bad_years
from sim.lowering import lower_network, lower_policy, plan_intake
from sim.store_rows import cell_hash, scenario_hash

PAIRED = (
    "Every policy met the same patients. The bands hold for all differences at once; where a band holds 0 the two "
    "policies cannot be told apart, which is not the same as being alike."
)


def a_year(estimate: Estimate) -> Estimate:
    """A rate a day as one a year."""
    numbers = (
        None if one is None else one * DAYS_A_YEAR for one in (estimate.mean, estimate.low, estimate.high)
    )
    return Estimate(*numbers, estimate.reason)


def is_rate(measure: Measure) -> bool:
    """Whether a measure counts patients a day."""
    return measure.name.endswith("_per_day")


def comparison_document(
    comparison: Comparison, sums: Sequence[Sums], rng: np.random.Generator
) -> dict[str, Any]:
    """Plain values. sums: of each policy, as they were compared."""
    welfare = welfare_of(comparison.cases[0].scenario)
    best = could_be_best(comparison.names, comparison.welfare, comparison.confidence, rng)
    efficient = efficient_set(comparison)
    return {
        "policies": [
            _policy(case, own, comparison.confidence) for case, own in zip(comparison.cases, sums, strict=True)
        ],
        "differences": [_difference(one) for one in comparison.differences],
        "simultaneous": True,
        "critical_value": comparison.critical,
        "welfare": {"kind": welfare.kind, "reads": welfare.reads, "sense": welfare.sense},
        "could_be_best": [_chance(one) for one in best],
        "refusals_against_transfers": [_efficiency(one) for one in efficient],
        "by_home": list(_by_home(comparison)),
        "findings": [
            Finding(said, None, "policies", _basis(comparison)).to_dict()
            for said in (
                *_same_rules(comparison.cases), *_of_best(best, welfare.reads, comparison.confidence),
                *_of_efficient(efficient),
            )
        ],
    }  # fmt: skip


def _basis(comparison: Comparison) -> str:
    return (
        f"{len(comparison.welfare)} paired replications, {100 * comparison.confidence:g} %, all bands at once"
    )


def _policy(case: Case, sums: Sums, confidence: float) -> dict[str, Any]:
    rules = case.policy.units
    whole = network_sums(sums)
    return {
        "name": case.name,
        "thresholds": case.policy.thresholds,
        "incoming_thresholds": {name: one.incoming for name, one in rules.items()},
        "referral_order": {name: list(one.referral_order) for name, one in rules.items()},
        "when_all_closed": case.policy.when_all_closed,
        "beds": {unit.name: unit.beds for unit in case.scenario.units},
        "units": {
            unit.name: {m.name: _level(m, of_unit(sums, place), confidence) for m in UNIT_MEASURES}
            | _occupancy(case, sums.get("occupancy_days"), place, confidence)
            for place, unit in enumerate(case.scenario.units)
        },
        "network": {m.name: _level(m, whole, confidence) for m in NETWORK_MEASURES},
    }


def _level(measure: Measure, sums: Sums, confidence: float) -> dict[str, Any]:
    return estimate_measure(measure, sums, confidence).within(0.0, measure.most).to_dict()


def _occupancy(case: Case, days: np.ndarray | None, place: int, confidence: float) -> dict[str, Any]:
    """Shares of time with so many beds of a unit occupied; days: (replications, units, levels), None where not kept."""
    if days is None:
        return {}
    shares = days[:, place, : case.scenario.units[place].beds + 1].T / case.scenario.run.measured_days
    return {"occupancy": [mean_estimate(share, confidence).within(0.0, 1.0).to_dict() for share in shares]}


def _difference(one: Difference) -> dict[str, Any]:
    plain = {
        "policy": one.policy, "against": one.against, "where": one.column.where,
        "measure": one.column.measure.name, **one.estimate.to_dict(), "verdict": one.verdict,
    }  # fmt: skip
    return plain | ({"a_year": a_year(one.estimate).to_dict()} if is_rate(one.column.measure) else {})


def _chance(one: Chance) -> dict[str, Any]:
    ahead = a_year(one.ahead)
    return {
        "policy": one.policy,
        "could_be_best": one.could_be_best,
        "ahead_of_best_other_a_year": ahead.to_dict(),
    }


def _efficiency(one: Efficiency) -> dict[str, Any]:
    return {
        "policy": one.policy, "turned_away_a_year": a_year(one.turned_away).to_dict(),
        "transfers_a_year": a_year(one.transfers).to_dict(), "verdict": one.verdict,
        "efficient_on_estimates": one.on_estimate, "beaten_by": list(one.by),
    }  # fmt: skip


# ---- who gains, who loses ----

_HOME_COUNTS = {"turned_away_per_day": "turned away", "diverted_out_per_day": "moved"}


def _by_home(comparison: Comparison) -> Iterator[dict[str, Any]]:
    for one in comparison.differences:
        counted = _HOME_COUNTS.get(one.column.measure.name)
        if one.column.where != NETWORK and counted is not None:
            yield {
                "policy": one.policy, "against": one.against, "home": one.column.where, "counted": counted,
                "a_year": a_year(one.estimate).to_dict(), "verdict": home_verdict(one),
            }  # fmt: skip


def home_verdict(one: Difference) -> str:
    """Whether the home's patients gain (fewer of them turned away or moved), lose, or neither can be told."""
    if one.verdict != TOLD_APART:
        return one.verdict
    return "gains" if (one.estimate.mean or 0) < 0 else "loses"


def _same_rules(cases: Sequence[Case]) -> Iterator[str]:
    """Policies that are one and the same to an engine."""
    found: dict[tuple[str, str], list[str]] = {}
    for case in cases:
        network = scenario_hash(lower_network(case.scenario), plan_intake(case.scenario))
        rules = cell_hash(lower_policy(case.scenario, case.policy))
        found.setdefault((network, rules), []).append(case.name)
    for names in found.values():
        if len(names) > 1:
            yield f"{quoted(names)} are the same rules in this network"


def _of_best(best: Sequence[Chance], reads: str, confidence: float) -> Iterator[str]:
    could = [one.policy for one in best if one.could_be_best]
    cannot = [one.policy for one in best if not one.could_be_best]
    sure = f"at {100 * confidence:g} %"
    if len(best) == 1:
        return
    if len(could) == 1:
        yield f"Best by {reads}: only {quoted(could)} could be, {sure}"
    else:
        rest = f"; {quoted(cannot)} cannot be" if cannot else ""
        yield f"Best by {reads}: {quoted(could)} could each be, and cannot be told apart in this{rest}, {sure}"


def _of_efficient(efficient: Sequence[Efficiency]) -> Iterator[str]:
    for one in efficient:
        if one.verdict == INEFFICIENT:
            yield (
                f"{quoted([one.policy])} turns no fewer patients away and moves no fewer than "
                f"{quoted(one.by, 'or')}, and is worse in one of the two"
            )


def quoted(names: Sequence[str], word: str = "and") -> str:
    """Names in quotes, as a list in a sentence."""
    marked = [f'"{name}"' for name in names]
    return marked[0] if len(marked) == 1 else f"{', '.join(marked[:-1])} {word} {marked[-1]}"


# ---- selection, and bad years ----


def selection_document(race: Race) -> dict[str, Any] | None:
    """What the sequential selection found; None where it has not seen its first stage."""
    found, names = race.found, race.names
    if found is None:
        return None
    first = race.first_stage_values()
    alone = two_stage_replications(first, race.difference, 1 - race.confidence, first_stage=len(first))
    return {
        "selected": None if found.selected is None else names[found.selected],
        "difference_a_year": race.difference * DAYS_A_YEAR,
        "confidence": race.confidence,
        "first_stage": len(first),
        "replications": found.used,
        "decides_by": found.most,
        "still_in": [names[place] for place in found.alive],
        "dropped": {names[place]: at for place, at in found.dropped.items()},
        "two_stage_replications": dict(zip(names, alone, strict=True)),
        "statement": _selected_reads(found, names, race.difference * DAYS_A_YEAR, race.confidence),
    }


def _selected_reads(found: Selection, names: Sequence[str], difference: float, confidence: float) -> str:
    if found.selected is None:
        return (
            f"Not decided after {found.used} replications: {quoted([names[one] for one in found.alive])} are still in; "
            f"it decides after {found.most} at the latest (--most)"
        )
    return (
        f"Selected: {quoted([names[found.selected]])}, after {found.used} replications. With probability "
        f"{100 * confidence:g} % or more it is the best, if the best is ahead by {difference:g} a year or more; "
        "among policies nearer than that any may be selected"
    )


def bad_year_document(cases: Sequence[Case], sums: Sequence[Sums], confidence: float) -> dict[str, Any]:
    """What one year in ten brings, by policy. sums: of each policy, over replications of a year each."""
    rows = bad_years([case.name for case in cases], cases[0].scenario, sums, confidence)
    return {
        "one_year_in": ONE_IN, "years": len(rows[0].years), "confidence": confidence,
        "rows": [one.to_dict() for one in rows],
        "turned_away_by_year": {
            one.policy: sorted(one.years.tolist())
            for one in rows
            if (one.where, one.measure) == (NETWORK, "turned away")
        },
    }  # fmt: skip
