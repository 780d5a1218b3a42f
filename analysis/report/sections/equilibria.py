"""Equilibria: which profiles hold each other in place, said no more firmly than the table allows."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from analysis.figures_report import can_be_mapped
from analysis.report.blocks import Block, Figure, Heading, Points, Table, Text, table
from analysis.report.contents import Figures, Headline, Results, optional
from analysis.report.reading import Result
from analysis.report.words import EXACT, counted, estimate, name, profile, sentence

TITLE = "Equilibria"
MOST_LISTED = 25
MEANS = (
    "An equilibrium is a choice of thresholds from which no player gains by moving alone, under the goals that the "
    "scenario states. It tells neither how a network gets there nor that it will."
)
ESTIMATED = (
    "These are candidates of an estimated table. The point estimate of a game is often wrong: "
    "sampling error hides true "
    "equilibria and shows false ones. Run it again with more replications before relying on any of them."
)
SETS = (
    "A possible profile is one that the replications cannot exclude, and need not be an equilibrium. "
    "A confirmed one has, "
    "with the stated confidence, no gain from moving alone above epsilon."
)
SEARCHED = "A best-reply search visits part of the table; what it did not visit it does not exclude."


def headlines(results: Results) -> Iterator[Headline]:
    for one in results.of("game"):
        yield Headline(10, _said(one), one)


def blocks(results: Results, figures: Figures) -> Iterator[Block]:
    found = results.of("game")
    if found:
        yield Text(MEANS)
    for one in found:
        yield from results.heading(one, found)
        yield Text(f"{sentence(_said(one))} {_kind_of_statement(one.document)}".strip())
        yield from _epsilon(one.document)
        goals = one.document.get("goals") or {}
        yield Points(tuple(sentence(f"goal of {name(who)}: {goal}") for who, goal in goals.items()))
        yield _listed(one)
        more = len(one.document["equilibria"]) - MOST_LISTED
        if more > 0:
            yield Text(f"{counted(more, 'more profile')} stand in the result's file.")
        yield from _pictures(one, figures)
        yield from _replies(one, figures)
        yield from _beyond_pure(one.document)
        yield from _theory(one.document)


def _epsilon(document: Mapping[str, Any]) -> Iterator[Block]:
    """How much, or little, confirmed says."""
    for one in document["findings"]:
        if one["statement"].startswith("Epsilon is "):
            yield Text(sentence(one["statement"]))


def is_searched(document: Mapping[str, Any]) -> bool:
    """Whether a search took the place of the whole table."""
    return document.get("payoffs") is None


def _said(result: Result) -> str:
    """What is known of the equilibria, in one sentence."""
    document = result.document
    pure = [one for one in document["equilibria"] if one.get("kind", "pure") == "pure"]
    if result.is_exact and not is_searched(document):
        noun = (
            "profile of thresholds is an equilibrium"
            if len(pure) == 1
            else "profiles of thresholds are equilibria"
        )
        return f"{len(pure)} {noun} in pure strategies within a regret of {document['tolerance']:g} (exact)"
    if document.get("possible") is not None or is_searched(document):
        return document["findings"][0]["statement"]
    noun = "candidate" if len(pure) == 1 else "candidates"
    return f"The estimated table shows {len(pure)} {noun} for an equilibrium, which it cannot decide"


def _kind_of_statement(document: Mapping[str, Any]) -> str:
    if is_searched(document):
        return SEARCHED
    if document.get("method") == EXACT:
        return ""
    return ESTIMATED if document.get("possible") is None else SETS


def _listed(result: Result) -> Table:
    document = result.document
    players = document["players"]
    notice = any("years_to_notice" in one for one in document["equilibria"])
    rows = [
        (
            f"{one['verdict']}, {one.get('kind', 'pure')}",
            chosen_in(one),
            *(estimate(one["regret"].get(who), 4) for who in players),
            *(_soonest(one.get("years_to_notice", {}).get(who)) for who in players if notice),
            estimate(one["welfare"], 3),
        )
        for one in document["equilibria"][:MOST_LISTED]
    ]
    columns = ["verdict", "thresholds", *(f"regret of {name(who)}" for who in players)]
    columns += [f"{name(who)} would notice" for who in players] if notice else []
    caption = "Regret: the most a player gains by moving alone, in its goal's unit; welfare: a day"
    said = "; notice: years of own data until the gain shows, at the soonest" if notice else ""
    return table(caption + said, [*columns, "welfare"], rows)


def _soonest(years: Mapping[str, Any] | None) -> str:
    """The low end: the gain may be smaller and take longer to show, or be none."""
    if years is None:
        return "-"
    return "no gain to notice" if years.get("low") is None else f"after {years['low']:,.0f} years or later"


def chosen_in(one: Mapping[str, Any]) -> str:
    """The strategies of a listed profile in words; a mixed one with its probabilities."""
    if one.get("kind") != "mixed":
        return profile(one.get("strategies") or one["thresholds"])
    return "; ".join(
        f"{name(who)} "
        + ", ".join(
            f"{part.get('threshold', part.get('strategy'))} ({100 * part['probability']:.0f} %)"
            for part in mix
        )
        for who, mix in one["thresholds"].items()
    )


def _pictures(result: Result, figures: Figures) -> Iterator[Figure]:
    document = result.document
    if not can_be_mapped(document):
        return
    width, height = (len(document["strategies"][who]) for who in reversed(document["players"]))
    size = (min(9.0, 3.6 + 0.3 * width), min(9.0, 2.6 + 0.26 * height))
    for player in document["players"]:
        yield figures.draw(
            optional("analysis.figures_report", "payoff_map", document, player=player),
            f"Payoffs of {name(player)}",
            f"A cell for each pair of strategies, {'smaller' if document['sense'] == 'cost' else 'larger'} is better. "
            f"Circles mark the best responses of {name(player)}"
            f"{' by the point estimates' if not result.is_exact else ''}; other marks the equilibria "
            "by verdict, which the "
            "table above lists.",
            size,
        )


def _replies(result: Result, figures: Figures) -> Iterator[Block]:
    """Both players' best replies, which cross at equilibria, and where one surely falls."""
    document = result.document
    found = document.get("possible_best_responses")
    if not found:
        return
    if can_be_mapped(document) and all(_is_plain(document["strategies"][who]) for who in document["players"]):
        sets = (
            ""
            if result.is_exact
            else " Dashes mark every strategy that may be a best reply, all sets at once."
        )
        yield figures.draw(
            optional("analysis.figures_report", "best_replies", document),
            "Best replies, which cross at equilibria",
            f"Each player's best threshold for every threshold of the other{'' if result.is_exact else ', estimated'}."
            f"{sets} Diamonds mark the profiles of the table above.", (6.4, 5.6),
        )  # fmt: skip
    many = {who: sum(len(one["possible"]) > 1 for one in found[who]["replies"]) for who in found}
    if not result.is_exact:
        yield Points(tuple(
            f"{name(who)}: {many[who]} of {len(found[who]['replies'])} situations leave more than one possible best "
            f"reply{_falls(found[who]['falls'])}." for who in found
        ))  # fmt: skip


def _is_plain(strategies: Sequence[Any]) -> bool:
    return all(isinstance(one, int | float) for one in strategies)


def _falls(fall: Mapping[str, Any] | None) -> str:
    """Where replies that theory expects to rise are shown to fall."""
    if fall is None:
        return "; nothing refutes that replies never fall as others' thresholds rise"
    return (
        f"; the reply falls from {fall['at_least']} or more at {profile(fall['from'])} to {fall['at_most']} or less at "
        f"{profile(fall['to'])}"
    )


def _beyond_pure(document: Mapping[str, Any]) -> Iterator[Block]:
    said = []
    if mixed := document.get("mixed"):
        may = "; the list may be incomplete" if mixed.get("may_be_incomplete") else ""
        said += [
            f"{counted(mixed['found'], 'equilibrium', 'equilibria')} in mixed strategies, of {mixed['of']}{may}",
            mixed["reads"],
        ]
    if correlated := document.get("correlated"):
        said.append(_correlated(correlated, document.get("method") == EXACT))
    if dynamics := document.get("dynamics"):
        said += [
            f"{rule['reads']}: ends in {rule['ends']} after {counted(rule['rounds'], 'round')}"
            for rule in dynamics["rules"].values()
        ] + [dynamics["reads"]]  # fmt: skip
    if said:
        yield Heading("Beyond pure equilibria")
        yield Points(tuple(map(sentence, said)))


def _correlated(found: Mapping[str, Any], exact: bool) -> str:
    if found.get("best") is None or found.get("worst") is None:
        return f"Correlated equilibria of {found['of']}: {found.get('reason', 'none found')}"
    mark = "exact" if exact else "without intervals"
    return (
        f"Whatever correlated equilibrium of {found['of']} is played, welfare lies between "
        f"{found['worst']['welfare']:.4f} "
        f"and {found['best']['welfare']:.4f} a day ({mark})"
    )


def _theory(document: Mapping[str, Any]) -> Iterator[Block]:
    said = [*document.get("structure", {}).get("reads", [])]
    said += [document["search"]["reads"]] if "search" in document else []
    if said:
        yield Heading("What theory promises of this table")
        yield Points(tuple(map(sentence, said)))
