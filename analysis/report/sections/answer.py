"""The answer in three sentences, each no stronger than its interval."""

from __future__ import annotations

from collections.abc import Iterator

from analysis.report.blocks import Block, Points, Text
from analysis.report.contents import Figures, Results, headlines
from analysis.report.words import sentence

TITLE = "Answer"
SENTENCES = 3
CAUTION = (
    "For planning only, not for decisions on a patient or a live bed. Results depend on the data and the assumptions "
    "of the scenario; local protocols and licensed clinicians decide."
)
FILLING = (
    "How well the model fits a real network is not answered by these results",
    "Every statement holds for the network as its scenario describes it, and for nothing else",
)


def blocks(results: Results, figures: Figures) -> Iterator[Block]:
    yield Points(tuple(sentence(one) for one in [*headlines(results), *FILLING][:SENTENCES]))
    yield Text(CAUTION, warns=True)
