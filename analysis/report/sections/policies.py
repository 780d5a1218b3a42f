"""Policies side by side: differences on the same patients, with bands that hold for all at once."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from analysis.report.blocks import Block, Points, Table, Text, table
from analysis.report.contents import Figures, Headline, Results, optional
from analysis.report.reading import Result
from analysis.report.words import a_year, estimate, name, profile, sentence, share

TITLE = "Policies side by side"
PAIRED = (
    "Every policy met the same patients. The bands of the differences hold for all of them at once; "
    "where a band holds 0 "
    "the two policies cannot be told apart, which is not the same as being alike."
)
APART = "cannot be told apart"
NETWORK = {
    "throughput_per_day": "treated", "turned_away_per_day": "turned away", "transfers_per_day": "transfers",
}  # fmt: skip


def headlines(results: Results) -> Iterator[Headline]:
    for one in results.of("compare"):
        best = [
            found["statement"] for found in one.document["findings"] if found["statement"].startswith("Best")
        ]
        yield from (Headline(20, said, one) for said in best)
        if (widest := _widest(one.document)) is not None:
            yield Headline(22, widest, one)


def blocks(results: Results, figures: Figures) -> Iterator[Block]:
    found = results.of("compare")
    for one in found:
        document = one.document
        yield from results.heading(one, found)
        yield Text(PAIRED)
        if document["findings"]:
            yield Points(tuple(sentence(finding["statement"]) for finding in document["findings"]))
        yield from _tables(document)
        yield from _pictures(one, figures)
        yield from _more(document)


def _widest(document: Mapping[str, Any]) -> str | None:
    """The largest difference in refusals that can be told apart, with the transfers that go with it."""
    rows = [one for one in document["differences"] if one["where"] == "network"]
    apart = [one for one in rows if one["measure"] == "turned_away_per_day" and one["verdict"] != APART]
    if not apart:
        return "The policies' refusals cannot be told apart by these replications"
    one = max(apart, key=lambda row: abs(row["mean"]))
    pair = (one["policy"], one["against"])
    moved = next(
        (
            row
            for row in rows
            if (row["policy"], row["against"]) == pair and row["measure"] == "transfers_per_day"
        ),
        None,
    )
    return (
        f"“{name(pair[0])}” against “{name(pair[1])}”: {estimate(one['a_year'])} more patients turned away a year and "
        f"{estimate(None if moved is None else moved['a_year'])} more moved (a number below 0 means fewer)"
    )


def _tables(document: Mapping[str, Any]) -> Iterator[Table]:
    rows = [
        (name(one["name"]), profile(one["thresholds"]), *(a_year(one["network"][key]) for key in NETWORK))
        for one in document["policies"]
    ]  # fmt: skip
    yield table("The network under each policy, patients a year (the interval of each number alone)",
                ("policy", "closure thresholds", *NETWORK.values()), rows)  # fmt: skip
    rows = [
        (name(one["name"]), name(unit), share(own["utilisation"]), share(own["closed_with_free_bed_fraction"]),
         a_year(own["turned_away_per_day"]), a_year(own["diverted_out_per_day"]))
        for one in document["policies"] for unit, own in one["units"].items()
    ]  # fmt: skip
    yield table("By unit (turned away, moved: the unit's own population, patients a year; the interval of each alone)",
                ("policy", "unit", "utilisation", "closed with a free bed", "turned away", "moved"), rows)  # fmt: skip
    rows = [
        (f"{name(one['policy'])} against {name(one['against'])}", NETWORK[one["measure"]], estimate(one["a_year"]),
         one["verdict"])
        for one in document["differences"] if one["where"] == "network" and one["measure"] in NETWORK
    ]  # fmt: skip
    yield table("Differences of the network, patients a year, bands for all at once",
                ("policies", "measure", "difference", "verdict"), rows)  # fmt: skip
    rows = [
        (f"{name(one['policy'])} against {name(one['against'])}", name(one["home"]), one["counted"],
         estimate(one["a_year"]), one["verdict"])
        for one in document["by_home"]
    ]  # fmt: skip
    yield table("Who gains and who loses: the patients of each home, a year",
                ("policies", "patients of", "counted", "difference", "verdict"), rows)  # fmt: skip
    rows = [
        (name(one["policy"]), "yes" if one["could_be_best"] else "no", estimate(one["ahead_of_best_other_a_year"]))
        for one in document["could_be_best"]
    ]  # fmt: skip
    yield table(f"Could it be the best by {document['welfare']['reads']}? (ahead: of the best other policy, a year)",
                ("policy", "could be the best", "ahead"), rows)  # fmt: skip


def _pictures(result: Result, figures: Figures) -> Iterator[Block]:
    document = result.document
    pairs = sum(
        one["where"] == "network" and one["measure"] == "turned_away_per_day"
        for one in document["differences"]
    )
    for measure, reads in (("turned_away_per_day", "turned away"), ("transfers_per_day", "transfers")):
        yield figures.draw(
            optional("analysis.figures_policies", "difference_forest", document, measure=measure, reads=reads),
            f"Differences in {reads}, patients a year",
            f"A line for each of {pairs} pairs of policies: estimate and band for all at once; filled "
            "where told apart. The "
            "numbers stand in the table of differences.", (7.0, max(2.6, 1.2 + 0.5 * min(pairs, 60))),
        )  # fmt: skip
    yield figures.draw(
        optional("analysis.figures_policies", "refusals_against_transfers", document),
        "Refusals against transfers",
        "A point for each policy with its intervals: " + "; ".join(
            f"{name(one['policy'])} {estimate(one['turned_away_a_year'])} turned away, "
            f"{estimate(one['transfers_a_year'])} moved" for one in document["refusals_against_transfers"]
        ) + ".",
    )  # fmt: skip


def _more(document: Mapping[str, Any]) -> Iterator[Block]:
    """A selection, bad years, and what of the error the records bring, where the run was asked for them."""
    if selection := document.get("selection"):
        yield Text(sentence(selection["statement"]))
    if worst := document.get("worst_year"):
        rows = [
            (
                *(name(one[key]) for key in ("policy", "where", "measure")),
                f"{one['mean_year']:.1f}",
                estimate(one["bad_year"], 0),
            )
            for one in worst["rows"]
        ]
        of = f"{worst['one_year_in']:g}, from {worst['years']} years"
        columns = ("policy", "where", "counted", "mean year", "bad year")
        yield table(f"The worst year in {of} (patients; mean years: without interval)", columns, rows)
    if records := document.get("input_uncertainty"):
        yield Text(sentence(records["statement"]))
