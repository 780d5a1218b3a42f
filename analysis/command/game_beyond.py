"""The options of `game` that go beyond pure equilibria, and what the command shows and writes of them."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import click

from analysis.command.entry import say
from analysis.command.options import Request
from analysis.command.output import number, put_table, put_text

MOST_LISTED = 10
MOST_STATES = "the first {} are shown, all are in --json and --out"


def beyond_options(function: Callable[..., Any]) -> Callable[..., Any]:
    """--mixed, --correlated and --dynamics."""
    options = (
        click.option("--mixed/--no-mixed", default=None,
                     help="Also equilibria in mixed strategies [default: for an exact game of two units without a pure "
                          "one]."),
        click.option("--correlated", is_flag=True,
                     help="Also the best and the worst welfare of correlated equilibria: bounds without a selection."),
        click.option("--dynamics", is_flag=True,
                     help="Also where best replies and fictitious play lead from the present thresholds."),
    )  # fmt: skip
    for option in reversed(options):
        function = option(function)
    return function


def require_a_table(wanted: dict[str, Any]) -> None:
    """Refuses what a best-reply search cannot give."""
    asked = [f"--{name}" for name, value in wanted.items() if value]
    if asked:
        raise click.UsageError(
            f"{', '.join(asked)} needs the whole table: add --search table, or list fewer thresholds"
        )


def look_beyond(request: Request, analysis: Any, document: dict[str, Any], **wanted: Any) -> Any:
    """Works it out and adds it to the document."""
    from analysis.beyond_pure import Wanted, beyond, beyond_document, with_mixed

    asked = Wanted(**wanted)
    if asked.mixes(analysis):
        say("looking for mixed equilibria (Ctrl-C stops)")
    found = beyond(analysis, asked, request.policy, request.scenario.run.seed)
    document |= beyond_document(found)
    document["equilibria"] = with_mixed(document["equilibria"], found)
    return found


def show_beyond(document: dict[str, Any], found: Any) -> None:
    """The mixed equilibria as a table, and what else was found in sentences."""
    from analysis.beyond_pure import beyond_sentences
    from analysis.prices_document import study_sentences

    put_text(*study_sentences(found.study))
    rows = [one for one in document["equilibria"] if one["kind"] == "mixed"]
    if rows:
        put_text("")
        put_table(
            f"Mixed equilibria ({document.get('chooses', 'closure threshold')}: probability)",
            ("verdict", *document["players"], "largest regret", "welfare"),
            [_row(document, one) for one in rows[:MOST_LISTED]],
        )
        if len(rows) > MOST_LISTED:
            put_text(f"... {MOST_STATES.format(MOST_LISTED)}.")
    put_text(*beyond_sentences(found))


def _row(document: dict[str, Any], one: dict[str, Any]) -> tuple[str, ...]:
    from analysis.profiles import text_of

    mixes = (
        "  ".join(
            f"{text_of(part.get('threshold', part.get('strategy')))}: {part['probability']:.3f}"
            for part in one["thresholds"][player]
        )
        for player in document["players"]
    )
    regret = max(map(_plain, one["regret"].values()))
    verdict = one["verdict"] + (", of a continuum" if one["in_continuum"] else "")
    return (verdict, *mixes, f"{regret:.1e}", number(_plain(one["welfare"])))


def _plain(value: Any) -> float:
    return value["mean"] if isinstance(value, dict) else value


def write_pictures(folder: Path, found: Any) -> None:
    """The pictures of prices over weights and, for two players, of best replies."""
    from analysis.figures_replies import save_price_curve, save_replies

    save_price_curve(found, folder)
    profiles = found.game.table.profiles
    if found.bands is not None and len(profiles.players) == 2 and profiles.is_plain:
        save_replies(found, folder)
