"""The network: its units, patients and rules, and how it fares under one policy."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from analysis.measures import NETWORK_MEASURES, UNIT_MEASURES, Measure
from analysis.report.blocks import Block, Heading, Points, Table, Text, table
from analysis.report.contents import Figures, Headline, Results, optional
from analysis.report.reading import Network, Result
from analysis.report.words import a_year, counted, estimate, listed, name, profile, sentence, share

TITLE = "The network"
DRAWN = "analysis.figures_report"
BY_DAY = ("utilisation", "full_fraction", "closed_with_free_bed_fraction", "turned_away_per_day")
RHYTHMS = {"hour_of_day": "hour", "day_of_week": "weekday"}
RATES = {"throughput_per_day": "treats", "turned_away_per_day": "turns away", "transfers_per_day": "moves"}
LAST_RESORT = {
    "home_bed": "when every unit asked is closed or full, the patient is admitted at home if a bed is free there, else "
    "turned away",
    "any_bed": "when every unit asked is closed or full, any free bed is sought whatever the gates, then along "
    "the referral order; without one the patient is turned away",
    "turned_away": "when every unit asked is closed or full, the patient is turned away",
}


def headlines(results: Results) -> Iterator[Headline]:
    for one in results.of("transient"):
        if one.document["days"]:
            yield from _headlines_of_days(one)
    for one in results.of("simulate", "exact"):
        network, units = one.document["network"], one.document["units"]
        yield Headline(
            40,
            f"Under the closure thresholds {profile(one.document['thresholds'])} the network treats "
            f"{a_year(network['throughput_per_day'])} patients a year",
            one,
        )
        yield Headline(
            41,
            f"It turns {a_year(network['turned_away_per_day'])} patients away a year and moves "
            f"{a_year(network['transfers_per_day'])} between units",
            one,
        )
        closed = [
            f"{name(unit)} {share(own['closed_with_free_bed_fraction'])}" for unit, own in units.items()
        ]
        yield Headline(42, f"Time closed with a free bed: {listed(closed)}", one)


def _headlines_of_days(result: Result) -> Iterator[Headline]:
    """The first moment asked for, beside the long run."""
    first, later = result.document["days"][0], result.document["long_run"]
    for rank, (key, words) in enumerate(RATES.items(), 40):
        yield Headline(
            rank,
            f"{first['day']:g} days after the start the network {words} patients at a rate of "
            f"{a_year(first['network'][key])} "
            f"a year, in the long run of {a_year(later['network'][key])}",
            result,
        )


def blocks(results: Results, figures: Figures) -> Iterator[Block]:
    for network in results.networks:
        if len(results.networks) > 1:
            used = [f"“{name(one.label)}”" for one in results.all if one.network is network]
            yield Heading(f"Scenario {network.number}: {name(network.title)}")
            yield Text(f"Results on it: {listed(used)}.")
        yield from _described(network)
    running = results.of("simulate", "exact", "transient")
    for one in running:
        yield Heading(f"How it fares: {name(one.label)}")
        yield Text(results.basis(one))
        yield from _days(one) if one.kind == "transient" else _measures(one, figures)


# ---- the scenario ----


def _described(network: Network) -> Iterator[Block]:
    told = network.described
    yield _units(network, told)
    yield _groups(network, told)
    yield Points(tuple(_rules(network, told)))


def _units(network: Network, told: Mapping[str, Any] | None) -> Table:
    rows = []
    for unit in network.tables["units"]:
        known = (told or {"units": {}})["units"].get(unit["name"], {})
        beds = unit["beds"]
        load = known.get("offered_load_per_bed")
        rows.append((
            name(unit["name"]), str(beds), str(unit.get("closure_threshold", beds)),
            str(unit.get("incoming_threshold", unit.get("closure_threshold", beds))),
            f"{unit['target_utilisation']:g}" if "target_utilisation" in unit else "-",
            "not known here" if load is None else f"{load:.3f}",
        ))  # fmt: skip
    caption = (
        "Units as the scenario gives them (thresholds in beds; load: own patients' bed-days per bed and day)"
    )
    return table(caption, ("unit", "staffed beds", "closes at", "closes to others at", "target utilisation",
                           "offered load per bed"), rows)  # fmt: skip


def _groups(network: Network, told: Mapping[str, Any] | None) -> Table:
    rows = []
    for group in network.tables["patients"]:
        known = (told or {"patients": {}})["patients"].get(group["group"])
        rows.append((
            name(group["group"]), name(group["home"]), f"{group['per_day']:g}", str(group["stay"].get("family", "-")),
            "in the data file" if known is None else f"{known['mean_days']:.3f}",
            "in the data file" if known is None else f"{known['cv']:.3f}",
            listed([word for key, word in RHYTHMS.items() if key in group]) or "no",
        ))  # fmt: skip
    caption = "Patient groups as the scenario gives them (stays in days; cv: coefficient of variation)"
    return table(caption, ("group", "home", "a day", "stay", "mean stay", "cv", "varies by"), rows)


def _rules(network: Network, told: Mapping[str, Any] | None) -> Iterator[str]:
    if told is not None:
        yield from (sentence(f"{rule.replace('_', ' ')}: {said}") for rule, said in told["rules"].items())
    else:
        kind = network.tables.get("diversion", {}).get("when_all_closed", "home_bed")
        yield sentence(LAST_RESORT.get(kind, kind))
        yield "Stays come from data files, which are not part of the results; their hashes are in the provenance."
    if network.tables.get("policies"):
        yield sentence(f"named policies: {listed([name(row['name']) for row in network.tables['policies']])}")


# ---- how it fares ----


def _measures(result: Result, figures: Figures) -> Iterator[Block]:
    document = result.document
    units, thresholds = document["units"], document["thresholds"]
    yield Text(f"Closure thresholds: {profile(thresholds)}.")
    rows = [
        (
            _reads(m) + (" (of the home's patients)" if m.by_home else ""),
            *(_value(m, own.get(m.name)) for own in units.values()),
        )
        for m in UNIT_MEASURES
    ]
    caption = "By unit, with intervals (patients a year; shares of time or of patients)"
    yield table(caption, ("measure", *map(name, units)), rows)
    whole = [(_reads(m), _value(m, document["network"].get(m.name))) for m in NETWORK_MEASURES]
    yield table("The whole network, patients a year, with intervals", ("measure", "a year"), whole)
    for unit, own in units.items():
        yield figures.draw(
            optional(DRAWN, "occupancy", own["occupancy"], unit=unit, closes_at=thresholds.get(unit)),
            f"Occupied beds of {name(unit)}",
            f"Bars: the share of time with so many of {counted(len(own['occupancy']) - 1, 'bed')} occupied; mean "
            f"{estimate(own['mean_occupied'])}, time full {share(own['full_fraction'])}. A line marks "
            "the closure threshold.",
            (7.0, 3.2),
        )  # fmt: skip
    yield from _over_time(result, figures)


def _reads(measure: Measure) -> str:
    """What a measure counts; rates are given a year."""
    return measure.reads.replace(" a day", " a year")


def _value(measure: Measure, value: Any) -> str:
    if value is None:
        return "-"
    if measure.name.endswith("_per_day"):
        return a_year(value)
    return estimate(value) if measure.name == "mean_occupied" else share(value)


def _over_time(result: Result, figures: Figures) -> Iterator[Block]:
    """Advice on the warm-up, the hours of the week, precision and batch means, where the run was asked for them."""
    document = result.document
    if advice := document.get("warm_up_advice"):
        said = (
            f"no advice: {advice['reason']}"
            if advice["days"] is None
            else f"{advice['days']:g} days are advised"
        )
        yield Text(f"Warm-up: {advice['present_days']:g} days were used; {said}.")
    if aim := document.get("precision"):
        yield from _precision(aim)
    if batches := document.get("batch_means"):
        yield from _batches(batches)
    if week := document.get("hour_of_week"):
        yield Text("The hours of the week: bands hold for all 168 hours of a unit at once, units one by one.")
        for unit, hours in week.items():
            top, low = max(hours, key=lambda one: one["mean"]), min(hours, key=lambda one: one["mean"])
            draw = optional(
                "analysis.figures_paths", "week_of_unit", hours, document["hour_of_week_basis"], unit=unit
            )
            yield figures.draw(
                draw, f"Mean occupied beds of {name(unit)} by hour of the week",
                f"Monday to Sunday. Highest {estimate(top)} at hour {top['hour']}, lowest {estimate(low)} at hour "
                f"{low['hour']} of the week.", (8.0, 3.2),
            )  # fmt: skip


def _precision(aim: Mapping[str, Any]) -> Iterator[Block]:
    """What was aimed at, and what was reached."""
    ended = (
        "everything aimed at was reached"
        if aim["reached"]
        else f"it ended by {aim['ended_by'].replace('_', ' ')}"
    )
    yield Text(
        f"Precision: half of an interval was to be at most {100 * aim['relative']:g} % of the estimate, each measure "
        f"by itself; {ended}."
    )
    rows = [
        (
            name(one["where"]), one["measure"].replace("_", " "),
            "-" if one["relative"] is None else f"{100 * one['relative']:.2f} %",
            {True: "reached", False: "not reached", None: "not judged"}[one["reached"]],
        )
        for one in aim["measures"]
    ]  # fmt: skip
    yield table("Relative half-widths", ("where", "measure", "half-width", "aim"), rows)


def _batches(found: Mapping[str, Any]) -> Iterator[Block]:
    """The intervals of a single run from its batches, where it was long enough."""
    if found["batches"] is None:
        yield Text(f"No batch means of the one replication: {found['reason']}.")
        return
    yield Text(
        f"Batch means of the one replication, {found['batches']} batches of {found['batch_days']:.1f} days: they stand "
        "beside its numbers, never in their place."
        + (f" Doubtful, for batches hang together: {listed(found['doubtful'])}." if found["doubtful"] else "")
    )
    rows = [
        (name(where), measure.replace("_", " "), estimate(one, 3))
        for where, measures in [*found["units"].items(), ("network", found["network"])]
        for measure, one in measures.items()
    ]
    yield table(
        "Means with intervals between batches (beds, patients a day)", ("where", "measure", "mean"), rows
    )


def _days(result: Result) -> Iterator[Block]:
    """Day by day after a start, and in the long run."""
    document = result.document
    shown = [one for one in UNIT_MEASURES if one.name in BY_DAY]
    times = [(f"day {one['day']:g}", one) for one in document["days"]] + [("long run", document["long_run"])]
    for unit in document["long_run"]["units"]:
        rows = [(when, *(_value(m, then["units"][unit].get(m.name)) for m in shown)) for when, then in times]
        yield table(
            f"{name(unit)}: at that moment, not averages since the start",
            ("when", *(_reads(m) for m in shown)),
            rows,
        )
