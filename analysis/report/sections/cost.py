"""What selfish rules cost: patients a year, beside refusals, transfers and beds kept free behind closed gates."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from analysis.report.blocks import Block, Figure, Points, Table, Text, table
from analysis.report.contents import Figures, Headline, Results, optional
from analysis.report.reading import Result
from analysis.report.sections.equilibria import is_searched
from analysis.report.words import (
    DAYS_A_YEAR,
    EXACT,
    a_year,
    between,
    estimate,
    listed,
    name,
    point,
    profile,
    sentence,
)

TITLE = "What selfish rules cost in patients a year"
THROUGHPUT = (
    "With patients treated as the only welfare nobody should ever close early: every early closing refuses or moves "
    "patients whom a free bed could have taken. The price of that rule is transfers, which such a "
    "welfare does not count; "
    "read the refusals, the transfers and the time closed with a free bed below beside every ratio."
)
ONE_NETWORK = (
    "The price of anarchy is the ratio of this one network under the stated goals, not a bound over "
    "a class of networks. "
    "“Best” means the best fixed thresholds; a rule that looks at the whole network's state could do better still."
)
BEST = "the best fixed thresholds"
BY_HOME = ("turned_away_per_day", "diverted_out_per_day")
PRICES = {
    "price_of_anarchy": ("price of anarchy (best welfare against the worst equilibrium, 1 or more)", 4),
    "price_of_stability": ("price of stability (best welfare against the best equilibrium, 1 or more)", 4),
    "lost_per_year": ("lost a year at the worst equilibrium", 1),
}
RATES = {"turned_away_per_day": "turned away", "transfers_per_day": "moved"}
WEIGHTS = (0, 0.25, 0.5, 0.75, 1)  # of a transfer, that the table shows
Named = tuple[str, Mapping[str, Any], Mapping[str, Any]]  # words, chosen strategies, outcome


def headlines(results: Results) -> Iterator[Headline]:
    for one in results.of("game"):
        yield Headline(12, _lost(one), one)
        if (said := _trade(one)) is not None:
            yield Headline(14, said, one)


def blocks(results: Results, figures: Figures) -> Iterator[Block]:
    found = results.of("game")
    for one in found:
        document = one.document
        yield from results.heading(one, found)
        yield Text(sentence(_lost(one)))
        if document["welfare"]["kind"] == "throughput":
            yield Text(THROUGHPUT, warns=True)
        yield _prices(document)
        yield from _with_intervals(document)
        yield _outcomes(one)
        yield from _picture(one, figures)
        yield from _over_weights(document, figures)
        yield Points(tuple(sentence(said) for said in _further(one)))
        yield Text(ONE_NETWORK)


def unit_of_loss(document: Mapping[str, Any]) -> str:
    """What is lost in a year."""
    welfare = document["welfare"]
    if welfare["kind"] == "throughput":
        return "patients a year"
    return f"a year of ({welfare['reads'].replace(' a day', '')})"


def _lost(result: Result) -> str:
    """The loss at the worst equilibrium, with the strength that the document has."""
    document = result.document
    lost, ratio = document.get("lost_per_year"), document.get("price_of_anarchy")
    known = between(lost)
    if known is None:
        reason = document.get("reason") or (lost or {}).get("reason") or "no equilibrium is listed"
        return f"No statement on what selfish rules cost: {reason}"
    if is_searched(document):
        return (
            f"What selfish rules cost is at least {point(lost)} {unit_of_loss(document)}, a lower "
            "bound from the cells that "
            "the search visited"
        )
    if document["welfare"]["kind"] == "throughput":
        said = f"At the worst equilibrium the network treats {known} patients a year fewer than under {BEST}"
    else:
        said = f"The worst equilibrium costs the network {known} {unit_of_loss(document)} more than {BEST}"
    price = estimate(ratio, 4) if result.is_exact and ratio is not None else between(ratio, 4)
    said += "" if price is None else f" (price of anarchy {price})"
    if result.is_exact:
        return said
    if document.get("possible") is None:
        return (
            (f"{said}, for the profiles listed only: that these may be the wrong ones is not in the interval")
            .replace("the worst equilibrium", "the worst candidate")
            .replace("The worst equilibrium", "The worst candidate")
        )
    return f"{said}, whichever of the possible profiles are the equilibria"


def _trade(result: Result) -> str | None:
    """Refusals against transfers: the best fixed thresholds beside the worst listed profile."""
    rows = list(named(result.document))
    if len(rows) < 2:
        return None
    (fixed, best, at_best), (which, worst, at_worst) = rows[:2]
    whose = "exact" if result.is_exact else "means of the replications; the section on costs has intervals"
    return (
        f"The {fixed} ({profile(best)}) turn {_all(at_best, 'turned_away_per_day')} "
        "patients away a year and "
        f"move {_all(at_best, 'diverted_out_per_day')}, the {which} ({profile(worst)}) turns "
        f"{_all(at_worst, 'turned_away_per_day')} away and moves "
        f"{_all(at_worst, 'diverted_out_per_day')}, with time closed "
        f"with a free bed {listed(_closed(at_worst))} ({whose})"
    )


def _closed(outcome: Mapping[str, Any]) -> list[str]:
    return [
        f"{name(unit)} {100 * part:.1f} %" for unit, part in outcome["closed_with_free_bed_fraction"].items()
    ]


def _all(outcome: Mapping[str, Any], part: str) -> str:
    """The network's total a year."""
    return point(sum(outcome[part].values()), 1, DAYS_A_YEAR)


def named(document: Mapping[str, Any]) -> Iterator[Named]:
    """The optimum, then the worst and the best listed equilibrium, with strategies and outcome."""
    optimum = document["optimum"]
    chosen = optimum.get("strategies") or optimum["thresholds"]
    ties = f" (1 of {len(chosen)} ties)" if len(chosen) > 1 else ""
    estimated = "" if document.get("method") == EXACT else ", by the estimates"
    yield f"best fixed thresholds{estimated}{ties}", chosen[0], optimum["outcome"]
    worst, best = (_extreme(document, which) for which in ("worst", "best"))
    noun = _noun(document)
    if worst is not None:
        yield f"{'only' if worst == best else 'worst'} {noun}", *worst
    if best is not None and best != worst:
        yield f"best {noun}", *best


def _noun(document: Mapping[str, Any]) -> str:
    """What a listed profile may be called."""
    if document.get("method") == EXACT:
        return "listed equilibrium"
    return "listed candidate" if document.get("possible") is None else "profile listed as possible"


def _extreme(document: Mapping[str, Any], which: str) -> tuple[Any, Any] | None:
    chosen = document.get(f"{which}_equilibrium_strategies") or document.get(f"{which}_equilibrium")
    for one in document["equilibria"]:
        if (
            chosen is not None
            and chosen in (one.get("strategies"), one.get("thresholds"))
            and "outcome" in one
        ):
            return chosen, one["outcome"]
    return None


def _prices(document: Mapping[str, Any]) -> Table:
    reason = {"mean": None, "reason": document.get("reason", "not worked out")}
    rows = [
        (f"{words}, {unit_of_loss(document)}" if key == "lost_per_year" else words,
         estimate(document[key] if document.get(key) is not None else reason, digits))
        for key, (words, digits) in PRICES.items()
    ]  # fmt: skip
    return table("Prices, with the interval of each", ("price", "value"), rows)


def _with_intervals(document: Mapping[str, Any]) -> Iterator[Table]:
    """Refusals and transfers of a simulated game's network, each with its interval, and against the best."""
    listed_ones = [(words, where) for words, where in _places(document) if "network" in where]
    rows = [
        (
            words,
            *(a_year(where["network"][rate]) for rate in RATES),
            *(a_year(where["more_than_at_the_optimum"][rate]) if "more_than_at_the_optimum" in where else "-"
              for rate in RATES),
        )
        for words, where in listed_ones
    ]  # fmt: skip
    if rows:
        columns = (
            "profile",
            *RATES.values(),
            *(f"more {said} than with the best" for said in RATES.values()),
        )
        yield table(
            "Turned away and moved in the whole network, patients a year (each interval by itself; differences on the "
            "same patients)", columns, rows,
        )  # fmt: skip


def _places(document: Mapping[str, Any]) -> Iterator[tuple[str, Mapping[str, Any]]]:
    """The optimum and the extreme listed profiles, as the document has them."""
    for words, chosen, outcome in named(document):
        own = [one for one in document["equilibria"] if one.get("outcome") is outcome]
        where = own[0] if own else document["optimum"]
        yield f"{words}: {profile(chosen)}", where


def _over_weights(document: Mapping[str, Any], figures: Figures) -> Iterator[Block]:
    """What selfish rules cost if transfers count: the curve, and some of its points as a table."""
    rows = [one for one in document.get("price_over_transfer_weights") or [] if _mean(one) is not None]
    if len(rows) < 2:
        return
    turning = document["transfer_weight_at_which_the_verdict_turns"].get("weight")
    yield figures.draw(
        optional("analysis.figures_report", "loss_over_weights", rows, turning=turning),
        "What selfish rules cost over the weight of a transfer",
        "Loss a year at the worst listed equilibrium beyond the least loss, where a transfer counts as so many "
        "patients turned away; a band where simulated, each weight by itself. Points of it stand in the table below.",
    )  # fmt: skip
    shown = [one for one in rows if any(abs(one["weight"] - weight) < 1e-9 for weight in WEIGHTS)]
    yield table(
        "Loss over the weight of a transfer (patients turned away and weighted transfers, a year; the price is a ratio "
        "of such losses)",
        ("weight of a transfer", "lost a year", "price of anarchy"),
        [(f"{one['weight']:g}", estimate(one["lost_per_year"]), estimate(one["price_of_anarchy"], 4)) for one in shown],
    )  # fmt: skip


def _mean(row: Mapping[str, Any]) -> float | None:
    lost = row["lost_per_year"]
    return lost.get("mean") if isinstance(lost, Mapping) else lost


def _outcomes(result: Result) -> Table:
    rows = [row for words, chosen, outcome in named(result.document) for row in _rows(words, chosen, outcome)]
    whose = "exact" if result.is_exact else "means of the replications, without intervals by home and unit"
    return table(
        f"What comes with it, by home and unit ({whose}; turned away, moved and treated: patients a year)",
        (
            "profile",
            "home or unit",
            "turned away",
            "moved",
            "closed with a free bed",
            "utilisation",
            "treated",
        ),
        rows,
    )


def _rows(words: str, chosen: Mapping[str, Any], outcome: Mapping[str, Any]) -> Iterator[Sequence[str]]:
    label = f"{words}: {profile(chosen)}"
    for unit in outcome["turned_away_per_day"]:
        yield (
            label, name(unit), point(outcome["turned_away_per_day"][unit], 1, DAYS_A_YEAR),
            point(outcome["diverted_out_per_day"][unit], 1, DAYS_A_YEAR),
            f"{100 * outcome['closed_with_free_bed_fraction'][unit]:.1f} "
            "%", f"{100 * outcome['utilisation'][unit]:.1f} %", "-",
        )  # fmt: skip
    treated = point(outcome["throughput_per_day"], 1, DAYS_A_YEAR)
    yield (label, "whole network", *(_all(outcome, part) for part in BY_HOME), "-", "-", treated)


def _picture(result: Result, figures: Figures) -> Iterator[Figure]:
    rows = {
        words: tuple(sum(outcome[part].values()) * DAYS_A_YEAR for part in BY_HOME)
        for words, _, outcome in named(result.document)
    }
    said = "; ".join(
        f"{words}: {away:.1f} turned away, {moved:.1f} moved" for words, (away, moved) in rows.items()
    )
    draw = optional("analysis.figures_report", "outcomes", rows)
    yield figures.draw(
        draw, "Patients turned away and moved in a year", sentence(said), (7.0, 1.6 + 0.6 * len(rows))
    )


def _further(result: Result) -> Iterator[str]:
    """The turning weight, bounds and yardsticks, each with what it holds for."""
    document = result.document
    told = ("transfer weight", "hese prices ")  # the turning weight, and whether the prices exist
    known = (one for one in document["findings"] if any(words in one["statement"] for words in told))
    yield from (f"{one['statement']} ({one['basis']})" for one in known)
    if "is" in document["optimum"]:
        yield f"The best fixed thresholds are {document['optimum']['is']}"
    within = document.get("prices_within_epsilon")
    if within and within.get("price_of_anarchy_at_least") is not None:
        yield (
            f"Among equilibria within a regret of {within['epsilon']:.2g} the price of anarchy is at least "
            f"{within['price_of_anarchy_at_least']:.4f} and the price of stability at most "
            f"{within['price_of_stability_at_most']:.4f} ({within['confirmed']} profiles are confirmed)"
        )
    bootstrap = document.get("prices_by_bootstrap")
    if bootstrap and bootstrap.get("price_of_anarchy") is not None:
        yield f"By resampling, price of anarchy {estimate(bootstrap['price_of_anarchy'], 4)}, {bootstrap['label']}"
    yield from _control(document)


def _control(document: Mapping[str, Any]) -> Iterator[str]:
    control = document.get("control")
    if control and control.get("selfishness") and control.get("static_thresholds"):
        static, selfish = control["static_thresholds"]["per_year"], control["selfishness"]["per_year"]
        yield (
            "Against the best rule that sees the whole network, which is a yardstick and not advice, "
            "fixed thresholds cost "
            f"{static['low']:.1f} to {static['high']:.1f} a year (bounds) and selfishness {estimate(selfish)} on top"
        )
