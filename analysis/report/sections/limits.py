"""Limits and cautions: what the results do not tell, and what is missing from them."""

from __future__ import annotations

from collections.abc import Iterator

from analysis.caution import CAUTION
from analysis.report.blocks import Block, Points, Text
from analysis.report.contents import Figures, Results
from analysis.report.words import counted, listed, name, sentence

TITLE = "Limits and cautions"
ALWAYS = (
    "The network is what its scenario says: rates, stays, transfer times, targets and goals are "
    "assumptions unless they came "
    "from records, and no interval here covers a wrong assumption.",
    "Agreement with the exact chain shows that the program does what its model says. It is "
    "verification; whether the model "
    "fits a real network is for the analyst to show with data.",
    "Goals are stated, not observed: no result tells what a unit in fact pursues.",
    "An equilibrium is where no player gains by moving alone; nothing here says which one a network "
    "would come to, or when.",
    "A ratio hides who pays. Refusals, transfers and the time closed with a free bed, by home "
    "population, stand beside it.",
    "Patients are alike within a group: no severity, no outcome after discharge, no harm of a transfer is modelled.",
)
MISSING = {
    "verify": "no verification of the simulation against the exact chain (brimline verify)",
    "game": "no game, so nothing on equilibria or on what selfish rules cost (brimline game)",
    "compare": "no comparison of named policies (brimline compare)",
    "ledger": "no closure ledger (brimline ledger)",
}


def blocks(results: Results, figures: Figures) -> Iterator[Block]:
    yield Text(CAUTION, warns=True)
    yield Points((*ALWAYS, *map(sentence, _of_these(results))))


def _of_these(results: Results) -> Iterator[str]:
    absent = [said for kind, said in MISSING.items() if not results.of(kind)]
    if absent:
        yield f"this report holds {listed(absent)}"
    for one in results.all:
        label, document = f"result “{name(one.label)}”", one.document
        if document.get("interrupted"):
            yield f"{label} was interrupted: it rests on what had been computed until then"
        if document.get("failed"):
            yield f"{label}: {counted(len(document['failed']), 'run')} failed and are left out"
        if document.get("replications") == 1:
            yield f"{label} rests on one replication: it has no intervals between runs"
        if document.get("phase_fit"):
            yield f"{label} is exact for fitted stays, and near for the scenario's own"
        if any("exponential counterpart" in said for said in document.get("changes", [])):
            yield f"{label} is of the exponential counterpart, not of the scenario's own stays, delays and rhythms"
    if len(results.networks) > 1:
        yield "the results are of several scenarios; numbers of different scenarios are not paired"
