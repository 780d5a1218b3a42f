"""The closure ledger: whose early closing costs whose patients what."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from analysis.report.blocks import Block, Heading, Points, Text, table
from analysis.report.contents import Figures, Headline, Results, optional
from analysis.report.words import counted, estimate, name, point, profile, sentence

TITLE = "The closure ledger"
MEANS = (
    "One unit at a time closes only when full, all else stays, and both runs meet the same patients: "
    "what is left is what "
    "that unit's early closing does. Bands hold for all numbers at once; more is worse."
)
MOST_DISPLACED = 30


def headlines(results: Results) -> Iterator[Headline]:
    for one in results.of("ledger"):
        said = (found["statement"] for found in one.document.get("findings", []))
        yield from (Headline(rank, one_said, one) for rank, one_said in enumerate(said, 30))


def blocks(results: Results, figures: Figures) -> Iterator[Block]:
    found = results.of("ledger")
    for one in found:
        document = one.document
        yield from results.heading(one, found)
        yield Text(f"{MEANS} Policy “{name(document['policy'])}”: {profile(document['thresholds'])}.")
        yield Points(tuple(sentence(finding["statement"]) for finding in document["findings"]))
        rows = [
            (name(row["closes"]), name(row["home"]), row["counted"], estimate(row["a_year"]), row["verdict"])
            for row in document["matrix"]
        ]  # fmt: skip
        columns = ("closes early", "patients of", "counted", "more a year", "verdict")
        yield table("More patients a year because a unit closes early", columns, rows)
        yield from _pictures(document, figures)
        yield from _displaced(document)
        yield from _episode(document.get("episode"))


def _pictures(document: Mapping[str, Any], figures: Figures) -> Iterator[Block]:
    beside = 1.0 * len(document["units"])
    for what in dict.fromkeys(row["counted"] for row in document["matrix"]):
        yield figures.draw(
            optional("analysis.figures_policies", "ledger_matrix", document, counted=what, reads=what),
            f"More {what} because a unit closes early, patients a year",
            "A row for each unit that closes, a column for each home; a star marks what is told "
            "apart from 0. The numbers "
            "stand in the table above.", (min(9.0, 4.5 + beside), min(9.0, 2.4 + beside * 0.8)),
        )  # fmt: skip


def _displaced(document: Mapping[str, Any]) -> Iterator[Block]:
    rows = [
        (name(row["closes"]), name(row["group"]), name(row["without"]), name(row["now"]), str(row["patients"]),
         point(row["a_year"]))
        for row in document.get("displaced", [])[:MOST_DISPLACED]
    ]  # fmt: skip
    if rows:
        yield table(
            f"Patients followed one by one in {document['traced_replications']} replications (a count "
            "of what was traced, an "
            "example without interval)", ("closes", "group", "without it", "now", "patients", "a year"), rows,
        )  # fmt: skip


def _episode(found: Mapping[str, Any] | None) -> Iterator[Block]:
    """One closing alone, patient by patient."""
    if found is None:
        return
    yield Heading(f"One closing of {name(found['unit'])}")
    yield Text(
        f"Closing {found['number']} of {found['of']} in replication {found['replication']}, from day "
        f"{found['from_day']:.2f} to {found['until_day']:.2f}: its gate held open to its own patients displaces "
        f"{counted(len(found['displaced']), 'patient')} otherwise. An example, without interval."
    )
    rows = [
        (
            f"day {one['arrival_days']:.2f}",
            name(one["group"]),
            name(one["home"]),
            name(one["without"]),
            name(one["now"]),
        )
        for one in found["displaced"][:MOST_DISPLACED]
    ]
    if rows:
        columns = ("arrives", "group", "home", "without the closing", "with it")
        yield table(
            "Whom it displaced, later patients too, for whom beds are free or taken otherwise", columns, rows
        )
