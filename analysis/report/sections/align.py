"""Targets that align: the lowest at which every possible equilibrium is near the best, and what comes with it."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from analysis.report.blocks import Block, Figure, Heading, Points, Table, Text, table
from analysis.report.contents import Figures, Headline, Results, optional
from analysis.report.sections.sweep import closed, priced, rates
from analysis.report.words import listed, name, point, profile, sentence

TITLE = "Targets that align"
MOST_LISTED = 40
MEANS = (
    "The question is at which target no unit's own goal leads it to close early at the network's cost, at any of the "
    "demands tried. The statements of one result hold together with its confidence."
)


def headlines(results: Results) -> Iterator[Headline]:
    for one in results.of("align"):
        yield from (Headline(36, said, one) for said in one.document["statements"][:1])


def blocks(results: Results, figures: Figures) -> Iterator[Block]:
    found = results.of("align")
    for one in found:
        document = one.document
        yield from results.heading(one, found)
        yield Text(MEANS)
        yield Points(tuple(map(sentence, document["statements"])))
        yield Text(" ".join([*map(_busiest, document["rows"]), *document["notes"]]).strip(), warns=True)
        for row in document["rows"]:
            yield from _row(row, document, figures)


def _busiest(row: Mapping[str, Any]) -> str:
    """What such a target amounts to: the busiest unit's own load, not a level to aim at."""
    busiest, target = row["busiest_when_nobody_closes_early"], row["target"]
    if busiest is None or target is None:
        return ""
    whose = "exact" if _is_exact(row) else "a mean, without interval"
    return (
        f"Stays {row['stays']}: the lowest target, {target:g}, is to be read beside the busiest unit's utilisation "
        f"when nobody closes early, {point(busiest['utilisation'], 3)} ({name(busiest['unit'])}, at demand x "
        f"{busiest['demand']:g}; {whose}): from about there on no unit has a reason to close early."
    )


def _is_exact(row: Mapping[str, Any]) -> bool:
    return all(network["method"] == "exact" for network in row["networks"])


def _row(row: Mapping[str, Any], document: Mapping[str, Any], figures: Figures) -> Iterator[Block]:
    yield Heading(f"Stays {row['stays']}")
    yield Text(sentence(row["methods"]))
    yield from _picture(row, document, figures)
    yield _overview(row)
    more = len(row["overview"]) - MOST_LISTED
    if more > 0:
        yield Text(f"{more} more targets stand in the result's file.")
    if row["beside"]:
        yield _beside(row)


def _overview(row: Mapping[str, Any]) -> Table:
    rows = [
        (
            _target(one["targets"]), f"x {one['worst_demand']:g}", priced(one["lost_per_year"], 1),
            point(one["allowed_per_year"]), one["verdict"], *(one["comes_with"].get(key) or "-" for key in COMES_WITH),
        )
        for one in row["overview"][:MOST_LISTED]
    ]  # fmt: skip
    columns = ("target", "demand most in the way", "lost a year", "allowed", "verdict", *COMES_WITH.values())
    whose = "exact" if _is_exact(row) else "means, without intervals where simulated"
    return table(f"Every target tried; what comes with it, from the least to the most over demands and units ({whose})",
                 columns, rows)  # fmt: skip


COMES_WITH = {
    "occupied_percent": "occupied, %", "moved_per_day": "moved a day", "turned_away_per_day": "turned away a day",
}  # fmt: skip


def _beside(row: Mapping[str, Any]) -> Table:
    rows = [
        (
            f"x {one['demand']:g}", priced(one["lost_per_year"], 1), _thresholds(one["worst_equilibrium"]),
            " / ".join(rates(one["worst_equilibrium"])), closed(one["worst_equilibrium"]), _thresholds(one["optimum"]),
            " / ".join(rates(one["optimum"])),
        )
        for one in row["beside"]
    ]  # fmt: skip
    whose = "exact" if _is_exact(row) else "means, without intervals where simulated"
    columns = ("demand", "lost a year", "worst equilibrium", "turned away / moved there", "closed, bed free",
               "best fixed thresholds", "turned away / moved with them")  # fmt: skip
    return table(
        f"At the lowest target, demand by demand (turned away / moved: patients a year, {whose})",
        columns,
        rows,
    )


def _thresholds(place: Mapping[str, Any] | None) -> str:
    return "-" if place is None else profile(place["thresholds"])


def _target(targets: Mapping[str, float]) -> str:
    """One number for all units, or each unit's own."""
    values = set(targets.values())
    return (
        f"{values.pop():g}"
        if len(values) == 1
        else listed([f"{name(unit)} {one:g}" for unit, one in targets.items()])
    )


def _picture(row: Mapping[str, Any], document: Mapping[str, Any], figures: Figures) -> Iterator[Figure]:
    if document["per_unit"] or len(row["overview"]) < 2:
        return
    lowest = (
        "no target tried holds"
        if not row["lowest"]
        else f"the lowest that holds is {_target(row['lowest'][0])}"
    )
    yield figures.draw(
        optional("analysis.figures_align", "loss_over_targets", row),
        f"What the worst possible equilibrium loses over the common target, stays {row['stays']}",
        f"A line with its band for some of the demands, and the loss allowed as a grey strip: {lowest}. The numbers "
        "stand in the table below.",
    )
