"""A comparison of policies as text."""

from __future__ import annotations

from typing import Any

from analysis.command.output import interval, number, put_caution, put_heading, put_table, put_text

MOST_PAIRS = 10


def show(document: dict[str, Any]) -> None:
    """Levels, differences, homes, the best, refusals against transfers, and what else was asked for."""
    from analysis.comparison_document import PAIRED

    put_heading(document)
    put_text(
        f"{len(document['policies'])} policies, {document['replications']} replications each, "
        f"{100 * document['confidence']:g} % intervals, seed {document['seed']}, engine {document['engine']}",
        "",
    )
    _show_levels(document)
    _show_differences(document)
    put_text(PAIRED, "")
    _show_homes(document)
    _show_best(document)
    _show_efficient(document)
    for finding in document["findings"]:
        put_text(finding["statement"] + ".")
    _show_selection(document["selection"])
    _show_worst_year(document["worst_year"])
    _show_input(document["input_uncertainty"])
    put_caution()


def _show_levels(document: dict[str, Any]) -> None:
    from analysis.measures import NETWORK_MEASURES, UNIT_MEASURES

    shown = [m for m in NETWORK_MEASURES if m.name != "arrivals_per_day"]
    put_table(
        "Network (intervals of each number alone)", ("policy", *(m.reads for m in shown)),
        [(one["name"], *(interval(one["network"][m.name]) for m in shown)) for one in document["policies"]],
    )  # fmt: skip
    names = ("utilisation", "closed_with_free_bed_fraction", "diverted_out_per_day", "turned_away_per_day")
    shown = [m for m in UNIT_MEASURES if m.name in names]
    put_table(
        "By unit (utilisation, times: shares, 0 to 1; marked h: the unit's own population, wherever treated)",
        ("policy", "unit", "beds", "closes at", *(m.reads + (" (h)" if m.by_home else "") for m in shown)),
        [
            (one["name"], unit, one["beds"][unit], one["thresholds"][unit],
             *(number(one["units"][unit][m.name]["mean"]) for m in shown))
            for one in document["policies"] for unit in one["units"]
        ],
    )  # fmt: skip


def _pairs(document: dict[str, Any]) -> list[tuple[str, str]]:
    """All pairs, or where they are many only those with the base."""
    pairs = list(dict.fromkeys((one["policy"], one["against"]) for one in document["differences"]))
    return (
        pairs
        if len(pairs) <= MOST_PAIRS
        else [pair for pair in pairs if pair[1] == document["policies"][0]["name"]]
    )


def band(one: dict[str, Any]) -> str:
    """A difference a year with its band, if it has one; `*` where it is told apart from 0."""
    if one["a_year"]["low"] is None:
        return f"{number(one['a_year']['mean'], 1)} (no band)"
    return interval(one["a_year"], 1) + (" *" if one["verdict"] not in ("cannot be told apart",) else "")


def _show_differences(document: dict[str, Any]) -> None:
    pairs, found = _pairs(document), {}
    for one in document["differences"]:
        if one["where"] == "network":
            found[one["policy"], one["against"], one["measure"]] = one
    measures = {
        "throughput_per_day": "treated", "turned_away_per_day": "turned away", "transfers_per_day": "transfers"
    }  # fmt: skip
    if pairs:
        put_table(
            "Differences in patients a year, with bands that hold for all at once (* told apart; else they cannot be)",
            ("policy", "against", *measures.values()),
            [(*pair, *(band(found[*pair, name]) for name in measures)) for pair in pairs],
        )
    without = [
        one
        for one in found.values()
        if one["a_year"]["low"] is None and (one["policy"], one["against"]) in pairs
    ]
    put_text(
        *dict.fromkeys(f"No band: {one['policy']} and {one['against']}: {one['reason']}." for one in without)
    )
    if len(pairs) < len({(one["policy"], one["against"]) for one in document["differences"]}):
        put_text("Only differences from the first policy are shown; all pairs are in --json and --out.", "")


def _show_homes(document: dict[str, Any]) -> None:
    pairs = _pairs(document)
    rows = [one for one in document["by_home"] if (one["policy"], one["against"]) in pairs]
    if rows:
        put_table(
            "Who gains, who loses: the patients of each home, a year (gains: fewer of them)",
            ("policy", "against", "patients of", "counted", "difference", "verdict"),
            [
                (one["policy"], one["against"], one["home"], one["counted"],
                 interval(one["a_year"], 1), one["verdict"])
                for one in rows
            ],
        )  # fmt: skip


def _show_best(document: dict[str, Any]) -> None:
    if len(document["policies"]) < 2:
        return
    put_table(
        f"Could it be the best by {document['welfare']['reads']}? (ahead: of the best other policy, a year)",
        ("policy", "could be the best", "ahead"),
        [
            (one["policy"], one["could_be_best"], interval(one["ahead_of_best_other_a_year"], 1))
            for one in document["could_be_best"]
        ],
    )


def _show_efficient(document: dict[str, Any]) -> None:
    put_table(
        "Refusals against transfers, patients a year (efficient: no other policy has fewer of both)",
        ("policy", "turned away", "transfers", "verdict", "on the estimates alone"),
        [
            (one["policy"], interval(one["turned_away_a_year"], 1), interval(one["transfers_a_year"], 1),
             one["verdict"], "efficient" if one["efficient_on_estimates"] else "not efficient")
            for one in document["refusals_against_transfers"]
        ],
    )  # fmt: skip


def _show_selection(found: dict[str, Any] | None) -> None:
    if found is not None:
        most = max(found["two_stage_replications"].values())
        put_text(
            "", found["statement"] + ".",
            f"Without common intakes, in two stages, a policy would need up to {most:,} replications.",
        )  # fmt: skip


def _show_worst_year(found: dict[str, Any] | None) -> None:
    if found is None:
        put_text("", "What the worst year in ten brings: give --years 100 (runs of a year each).")
        return
    put_text("")
    put_table(
        f"The worst year in {found['one_year_in']:g}, from {found['years']} years (patients; the interval assumes no "
        "distribution)",
        ("policy", "where", "counted", "mean year", "worst year in ten"),
        [
            (
                one["policy"],
                one["where"],
                one["measure"],
                number(one["mean_year"], 1),
                interval(one["bad_year"], 0),
            )
            for one in found["rows"]
        ],
    )
    reasons = {one["bad_year"]["reason"] for one in found["rows"] if "reason" in one["bad_year"]}
    put_text(*sorted(reasons))


def _show_input(found: dict[str, Any] | None) -> None:
    if found is None:
        return
    put_text("")
    put_table(
        f"What of the error the records bring, from {found['resamples']} resamplings (a year; the interval holds both)",
        ("policy", "against", "measure", "mean (low to high)", "records' share", "can still narrow by"),
        [
            (one["policy"], one["against"] or "", one["measure"].replace("_", " "), interval(one, 1),
             number(one["input_share"], 2), number(one["can_shrink_by"], 2))
            for one in found["rows"]
        ],
    )  # fmt: skip
    put_text(found["statement"] + ".")
