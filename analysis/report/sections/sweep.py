"""Costs over demand, targets and more: what a sweep leaves, point by point."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from analysis.report.blocks import Block, Figure, Points, Table, Text, table
from analysis.report.contents import Figures, Headline, Results, optional
from analysis.report.words import DAYS_A_YEAR, counted, estimate, listed, name, point, sentence

TITLE = "Over demand and targets"
DRAWN = "analysis.figures_sweep"
MOST_LISTED = 60
LEAST_PRICE = 1.00005  # shown as 1.0000 below
AXES = ("demand", "target", "delay", "cv", "soft", "transfer_weight")
RATES = ("network_turned_away_per_day", "network_transfers_per_day")
EACH_ALONE = "Every row is a network of its own, and its intervals hold for it alone."


def headlines(results: Results) -> Iterator[Headline]:
    for one in results.of("sweep"):
        yield from (Headline(35, found, one) for found in one.document["findings"][:1])


def blocks(results: Results, figures: Figures) -> Iterator[Block]:
    found = results.of("sweep")
    for one in found:
        document = one.document
        yield from results.heading(one, found)
        yield Points(tuple(map(sentence, [*document["methods"], *document["findings"]])))
        yield Text(" ".join([EACH_ALONE, *document["notes"]]))
        yield from _pictures(document, figures)
        yield _points(document, one.is_exact)
        more = len(document["points"]) - len(_shown(document))
        if more > 0:
            yield Text(f"Not in the table, but in points.csv: {counted(more, 'point')}, with a price of 1.0000 or too "
                       "many for a page.")  # fmt: skip


def _shown(document: Mapping[str, Any]) -> Sequence[Mapping[str, Any]]:
    """The points of the table: those that are not known to cost nothing, else all, as far as a page can hold them."""
    ends = [(one, one["price_of_anarchy"]["high"]) for one in document["points"]]
    dear = [one for one, high in ends if high is None or high >= LEAST_PRICE]
    return (dear or document["points"])[:MOST_LISTED]


def priced(value: Mapping[str, Any], digits: int) -> str:
    """A number of a document in which exact ones have their ends upon them."""
    exact = value.get("mean") is not None and value["low"] == value["mean"] == value["high"]
    return estimate(value["mean"] if exact else value, digits)


def rates(place: Mapping[str, Any] | None) -> tuple[str, ...]:
    """The network's refusals and transfers a year at a profile."""
    return tuple("-" if place is None else point(place[rate], 1, DAYS_A_YEAR) for rate in RATES)


def closed(place: Mapping[str, Any] | None) -> str:
    """The greatest share of time that any unit is closed with a free bed."""
    if place is None:
        return "-"
    return point(max(place["closed_with_free_bed_fraction"].values()), 1, 100) + " %"


def _points(document: Mapping[str, Any], exact: bool) -> Table:
    axes = [axis for axis in document["axes"] if axis in document["varied"]]
    rows = [
        (
            ", ".join(_at(one, axis) for axis in axes),
            _equilibria(one),
            priced(one["price_of_anarchy"], 4),
            priced(one["lost_per_year"], 1),
            " / ".join(rates(one["worst_equilibrium"])),
            " / ".join(rates(one["optimum"])),
            closed(one["worst_equilibrium"]),
        )
        for one in _shown(document)
    ]
    whose = "exact" if exact else "means, without intervals where simulated"
    caption = (
        f"Points (turned away / moved: patients a year at the worst listed equilibrium and at the best fixed "
        f"thresholds; closed with a free bed: the unit most so; these {whose})"
    )
    columns = (
        "at",
        "equilibria",
        "price of anarchy",
        "lost a year",
        "at the worst",
        "at the best",
        "closed with a bed free",
    )
    return table(caption, columns, rows)


def _at(one: Mapping[str, Any], axis: str) -> str:
    value = one["beds"][axis.removeprefix("beds of ")] if axis.startswith("beds of ") else one[axis]
    return f"{name(axis.replace('_', ' '))} {value:g}"


def _equilibria(one: Mapping[str, Any]) -> str:
    found = one["equilibria"]
    if "count" in found:
        return f"{found['count']} (exact)"
    confirmed = found.get("confirmed")
    return f"{found['possible']} possible" + ("" if confirmed is None else f", {confirmed} confirmed")


def _pictures(document: Mapping[str, Any], figures: Figures) -> Iterator[Figure]:
    axes = document["axes"]
    varied = [axis for axis in document["varied"] if len(axes[axis]) > 1]
    maps = [axis for axis in varied if axis != "transfer_weight"]
    if len(maps) > 1:
        down, across = maps[:2]
        width, height = (min(len(axes[axis]), 20) for axis in (across, down))
        yield figures.draw(
            optional(DRAWN, "price_surface", document, across=across, down=down),
            f"Price of anarchy over {_words(maps[:2])}",
            f"A cell for each point, darker is dearer; the numbers stand in the table below. {_highest(document)}",
            (max(6.0, 2.6 + 0.55 * width), max(3.6, 2.2 + 0.42 * height)),
        )
    for along in varied[:2]:
        by = next((axis for axis in varied if axis != along), None)
        yield figures.draw(
            optional(DRAWN, "price_slices", document, along=along, by=by),
            f"Price of anarchy along {_words([along])}",
            f"{'A line' if by is None else f'A line for each {_words([by])}'}, with its intervals as a band where "
            f"simulated. {_highest(document)}",
        )


def _words(axes: Sequence[str]) -> str:
    return listed([name(axis.replace("_", " ")) for axis in axes])


def _highest(document: Mapping[str, Any]) -> str:
    return sentence(document["findings"][0])
