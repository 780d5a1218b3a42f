"""Verification: the simulation against the exact chain. It tells of the program, not of the model's fit."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from analysis.measures import NETWORK_MEASURES, UNIT_MEASURES
from analysis.report.blocks import Block, Text, table
from analysis.report.contents import Figures, Headline, Results, optional
from analysis.report.reading import Result
from analysis.report.words import counted, name

TITLE = "Verification"
MEANS = (
    "This verifies the program against the model; it says nothing of how well the model fits a real network."
)
READS = {one.name: one.reads for one in (*NETWORK_MEASURES, *UNIT_MEASURES)}


def headlines(results: Results) -> Iterator[Headline]:
    for one in results.of("verify"):
        yield Headline(50, _said(one), one)
        yield Headline(51, MEANS, one)


def blocks(results: Results, figures: Figures) -> Iterator[Block]:
    found = results.of("verify")
    for one in found:
        yield from results.heading(one, found)
        yield Text(_said(one) + ".", warns=not one.document["agrees"])
        yield Text(MEANS)
        yield from _figures(one, figures)
        yield _table(one)


def _said(result: Result) -> str:
    document = result.document
    tested = [one for one in document["measures"] if one["z"] is not None]
    off = sum(not one["agrees"] for one in tested)
    chance = f"a correct simulator would be refused with a chance of at most {document['false_alarm_rate']:g}"
    if document["agrees"]:
        return f"The simulation agrees with the exact chain in all {len(tested)} measures tested together ({chance})"
    return f"The simulation DISAGREES with the exact chain in {off} of {counted(len(tested), 'measure')} ({chance})"


def _figures(result: Result, figures: Figures) -> Iterator[Block]:
    document = result.document
    tested = [one for one in document["measures"] if one["z"] is not None]
    if tested:
        largest = max(abs(one["z"]) for one in tested)
        yield figures.draw(
            optional("analysis.figures", "verification_z", document), "Simulated less exact, in standard errors",
            f"A point a measure, {len(tested)} in all; the largest is {largest:.2f} from 0, the limit "
            "for all at once is "
            f"{document['critical_z']:.2f}.", (7.0, max(3.0, 0.17 * len(tested) + 1)),
        )  # fmt: skip
    for unit in dict.fromkeys(
        one["where"] for one in document["measures"] if one["measure"].startswith("occupancy ")
    ):
        yield figures.draw(
            optional("analysis.figures", "verification_occupancy", document, where=unit),
            f"Occupied beds of {name(unit)}: simulated and exact",
            "A line for the exact shares of time, points with simultaneous limits for the simulated ones.", (7.0, 3.2),
        )  # fmt: skip


def _table(result: Result) -> Any:
    rows = [
        (
            name(one["where"]), READS.get(one["measure"], one["measure"]), f"{one['exact']:.4f}",
            "-" if one["mean"] is None else f"{one['mean']:.4f}",
            "-" if one["low"] is None else f"{one['low']:.4f} to {one['high']:.4f}",
            "not tested" if one["z"] is None else "agrees" if one["agrees"] else "DISAGREES",
        )
        for one in result.document["measures"]
        if not (one["measure"].startswith("occupancy ") and one["agrees"])
    ]  # fmt: skip
    return table("Measures (shares 0 to 1, patients a day; limits hold for all at once); levels of occupancy that "
                 "agree stand in the pictures and in the result's file",
                 ("where", "measure", "exact", "simulated", "limits", "verdict"), rows)  # fmt: skip
