"""An alignment as a document, and in words that never take "fuller" for "better"."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any

from analysis.alignment import Delta, Loss, Row, Targets, turning_of
from analysis.sweep_document import method_sentences
from analysis.sweeping import number, place_document

NOT_FULLER = (
    "Where throughput alone is valued this is about the utilisation of the busiest unit when nobody closes early. A "
    "target as high as that tells every unit never to close early; it is not a reason to run fuller, for how full the "
    "units are then follows from demand and beds."
)
NO_COMMON_GOAL = (
    "The answer is about targets as an incentive, within this model: it says nothing of how full a unit can safely be, "
    "of staff, or of patients whose transfer is a risk."
)


def alignment_document(
    rows: Sequence[Row],
    targets: Sequence[float],
    demands: Sequence[float],
    delta: Delta,
    level: float,
    *,
    per_unit: bool,
) -> dict[str, Any]:
    """Plain values, without NaN. level: of one statement."""
    return {
        "targets_tried": list(targets),
        "per_unit": per_unit,
        "demands": list(demands),
        "delta": {"reads": delta.reads, "share": delta.share, "a_year": delta.a_year},
        "level_of_one_statement": level,
        "welfare": rows[0].welfare.reads,
        "rows": [_row(row) for row in rows],
        "statements": [said for row in rows for said in _statements(row, delta, demands)],
        "notes": [*([NOT_FULLER] if _is_about_throughput(rows) else []), NO_COMMON_GOAL],
    }


def _is_about_throughput(rows: Sequence[Row]) -> bool:
    welfare = rows[0].welfare
    return welfare.kind == "throughput" or welfare.transfer_weight == 0


def _row(row: Row) -> dict[str, Any]:
    first = row.filled[0].network.scenario
    names = first.unit_names
    turned = turning_of(row.advice)
    return {
        "stays": row.stays,
        "methods": " ".join(
            method_sentences([one.network for one in row.filled], len(row.losses) // len(row.filled))
        ).rstrip("."),
        "networks": [
            {
                "demand": one.network.setting.demand,
                "method": one.network.method,
                "why": one.network.why,
                "replications": one.replications,
            }
            for one in row.filled
        ],
        "lowest": [_targets(one, names) for one in row.answer.lowest],
        "target": row.answer.lowest[0][0]
        if row.answer.lowest and len(set(row.answer.lowest[0])) == 1
        else None,
        "reason": row.answer.reason,
        "higher_ones_that_do_not_hold": [_targets(one, names) for one in row.answer.not_above],
        "beside": [_loss(loss, names) for loss in _beside(row)],
        "busiest_when_nobody_closes_early": None if row.busiest is None else vars(row.busiest),
        "transfer_weight_at_which_the_advice_turns": {
            "weight": None if turned is None else turned.weight,
            "to": None if turned is None else [_targets(one, names) for one in turned.answer.lowest],
            "reason": _why_no_turn(row) if turned is None else turned.answer.reason,
            "over": [
                {"weight": one.weight, "lowest": [_targets(lowest, names) for lowest in one.answer.lowest]}
                for one in row.advice
            ],
        },
        "overview": list(_overview(row, names)),
        "points": [_loss(loss, names) for loss in row.losses],
    }


def _overview(row: Row, names: Sequence[str]) -> Iterator[dict[str, Any]]:
    """Every set of targets over all demands: the demand that stands in its way, else the one with the largest loss."""
    by_targets: dict[Targets, list[Loss]] = {}
    for loss in row.losses:
        by_targets.setdefault(loss.targets, []).append(loss)
    for targets, mine in by_targets.items():
        worst = max(mine, key=lambda one: (not one.holds, _excess(one)))
        holds = all(one.holds for one in mine)
        yield {
            "targets": _targets(targets, names),
            "verdict": "holds" if holds else worst.verdict,
            "worst_demand": worst.demand,
            "lost_per_year": number(worst.lost, worst.method == "exact"),
            "allowed_per_year": worst.allowed,
            "comes_with": _comes_with(mine),
        }


def _excess(loss: Loss) -> float:
    """How far the loss may be above delta; infinite where nothing bounds it."""
    return float("inf") if loss.lost.high is None else loss.lost.high - loss.allowed


def _why_no_turn(row: Row) -> str:
    if not row.advice:
        return "no weights were tried"
    return f"the advice is the same at every weight tried, up to {row.advice[-1].weight:g}"


def _beside(row: Row) -> list[Loss]:
    """The losses at the answer, or at the highest target where there is none."""
    if not row.answer.lowest:
        return []
    return [loss for loss in row.losses if loss.targets == row.answer.lowest[0]]


def _targets(targets: Targets, names: Sequence[str]) -> dict[str, float]:
    return dict(zip(names, targets, strict=True))


def _loss(loss: Loss, names: Sequence[str]) -> dict[str, Any]:
    return {
        "targets": _targets(loss.targets, names),
        "demand": loss.demand,
        "method": loss.method,
        "possible": loss.possible,
        "lost_per_year": number(loss.lost, loss.method == "exact"),
        "allowed_per_year": loss.allowed,
        "verdict": loss.verdict,
        "out_of_reach": list(loss.out_of_reach),
        "worst_equilibrium": None if loss.worst is None else place_document(loss.worst),
        "optimum": place_document(loss.optimum),
    }


# ---- in words ----


def _statements(row: Row, delta: Delta, demands: Sequence[float]) -> Iterator[str]:
    who, over = f"Stays {row.stays}: ", _demands(demands)
    if not row.answer.lowest:
        yield f"{who}no answer, for {row.answer.reason}."
    else:
        lowest = row.answer.lowest[0]
        sure = _confidence(row)
        yield (
            f"{who}the lowest {_kind(lowest)} tried at which every possible equilibrium loses at most {delta.reads}"
            f" against the optimum, {over}, is {_words(lowest, row)}{sure}."
        )
        if len(row.answer.lowest) > 1:
            others = "; ".join(_words(one, row) for one in row.answer.lowest[1:4])
            left = len(row.answer.lowest) - 4
            more = f"; and {left} more" if left > 0 else ""
            yield f"Targets of which none is lower for every unit hold too: {others}{more}."
        yield from _not_above(row)
        with_it = _comes_with(_beside(row))
        yield (
            f"With it units are {with_it['occupied_percent']} % occupied, {with_it['moved_per_day']} patients a day "
            f"are moved and {with_it['turned_away_per_day']} turned away, at the worst possible equilibrium."
        )
    if row.busiest is not None:
        one = row.busiest
        yield (
            f"When nobody closes early the busiest unit is {one.unit}, {100 * one.utilisation:.1f} % occupied at "
            f"demand x {one.demand:g}."
        )
    if row.advice:
        yield _turning(row)


def _not_above(row: Row) -> Iterator[str]:
    """That higher targets need not hold."""
    failing = row.answer.not_above
    if failing:
        listed = "; ".join(_words(one, row) for one in failing[:6]) + ("; ..." if len(failing) > 6 else "")
        yield (
            f"Not every higher one does as well: not {listed} (beyond delta, not shown, or out of some unit's reach: "
            "see the table)."
        )


def _kind(targets: Targets) -> str:
    return "common target" if len(set(targets)) == 1 else "set of targets by unit (by the mean over beds)"


def _words(targets: Targets, row: Row) -> str:
    if len(set(targets)) == 1:
        return f"{targets[0]:g}"
    names = row.filled[0].network.scenario.unit_names
    return ", ".join(f"{name} {target:g}" for name, target in zip(names, targets, strict=True))


def _demands(demands: Sequence[float]) -> str:
    if len(demands) == 1:
        return f"at demand x {demands[0]:g}"
    return f"at each of {len(demands)} demands from x {demands[0]:g} to x {demands[-1]:g}"


def _confidence(row: Row) -> str:
    if all(one.cells is not None for one in row.filled):
        return " (exact)"
    confidence = row.filled[0].network.scenario.run.confidence
    return f" (with {100 * confidence:g} % confidence, over all targets and demands tried)"


def _comes_with(losses: Sequence[Loss]) -> dict[str, str]:
    """Occupancy, transfers and refusals at the worst possible equilibrium, lowest to highest over units and demands."""
    worst = [loss.worst for loss in losses if loss.worst is not None]
    return {
        "occupied_percent": _span([value for one in worst for value in one.utilisation.values()], 100, 1),
        "moved_per_day": _span([sum(one.diverted_out_per_day.values()) for one in worst], 1, 3),
        "turned_away_per_day": _span([sum(one.turned_away_per_day.values()) for one in worst], 1, 3),
    }


def _span(values: Sequence[float], scale: float, digits: int) -> str:
    if not values:
        return "-"
    low, high = (f"{scale * end:.{digits}f}" for end in (min(values), max(values)))
    return low if low == high else f"{low} to {high}"


def _turning(row: Row) -> str:
    turned = turning_of(row.advice)
    if turned is None:
        return f"Over the weight of a transfer {_why_no_turn(row)}."
    now = (
        "there is no such target" if not turned.answer.lowest else f"it is {_words(turned.answer.lowest[0], row)}"
    )  # fmt: skip
    exact = all(one.cells is not None for one in row.filled)
    sure = "" if exact else " (each weight's answer has the confidence by itself)"
    weight = turned.weight
    return f"Where a transfer counts for {weight:g} patients turned away the advice turns: {now}{sure}."
