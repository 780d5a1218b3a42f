"""What was asked."""

from __future__ import annotations

from collections.abc import Iterator

from analysis.report.blocks import Block, Points, Text
from analysis.report.contents import Figures, Results
from analysis.report.reading import Result
from analysis.report.words import name, sentence

TITLE = "Question"
ASKED = {
    "game": "what thresholds hold each other in place when every player pursues its own goal ({goal}), and what that "
    "costs against the best fixed thresholds by {welfare}",
    "verify": "does the simulation agree with the exact Markov chain, measure by measure",
    "compare": "how do the named policies differ on the same patients",
    "ledger": "whose early closing costs whose patients what",
    "sweep": "how does what selfish rules cost change with demand and targets",
    "align": "which targets bring every possible equilibrium near the best",
    "simulate": "how does the network fare under the policy {policy}",
    "exact": "how does the network fare in the long run under its closure thresholds",
    "transient": "how does the network fare day by day after a start",
}


def blocks(results: Results, figures: Figures) -> Iterator[Block]:
    several = len(results.networks) > 1
    titles = "; ".join(f"scenario {one.number}: {name(one.title)}" for one in results.networks)
    yield Text(
        f"{'Networks' if several else 'Network'}: {titles if several else name(results.networks[0].title)}."
    )
    yield Text("Put to it, one question for each result:")
    yield Points(tuple(_asked(one, several) for one in results.all))


def _asked(result: Result, several: bool) -> str:
    document = result.document
    welfare = document.get("welfare")
    said = ASKED[result.kind].format(
        goal=document.get("goal", "as the scenario states"),
        welfare=welfare.get("reads", "") if isinstance(welfare, dict) else "",
        policy=f"“{name(str(document.get('policy', '')))}”",
    )
    where = f", scenario {result.network.number}" if several else ""
    changed = f", changed for this run: {'; '.join(document['changes'])}" if document.get("changes") else ""
    return sentence(f"{said}? (result “{name(result.label)}”{where}{changed})")
