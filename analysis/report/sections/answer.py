"""The answer in three sentences, each no stronger than its interval."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from analysis.caution import CAUTION
from analysis.report import contents
from analysis.report.blocks import Block, Points, Text
from analysis.report.words import listed, sentence

TITLE = "Answer"
SENTENCES = 3
FILLING = (
    "How well the model fits a real network is not answered by these results",
    "Every statement holds for the network as its scenario describes it, and for nothing else",
    "No interval covers a wrong assumption of the scenario",
)


def blocks(results: contents.Results, figures: contents.Figures) -> Iterator[Block]:
    found = contents.headlines(results)[:SENTENCES]
    said = [one.said for one in found]
    yield Points(tuple(sentence(one) for one in [*said, *FILLING][:SENTENCES]), ordered=True)
    yield from _bases(found, results)
    yield Text(CAUTION, warns=True)


def _bases(found: Sequence[contents.Headline], results: contents.Results) -> Iterator[Text]:
    """What the sentences rest on, where there are several results or the run changed the scenario."""
    sentences: dict[str, list[str]] = {}
    for place, one in enumerate(found, 1):
        sentences.setdefault(results.basis(one.result), []).append(str(place))
    for basis, places in sentences.items():
        yield Text(f"{'Sentence' if len(places) == 1 else 'Sentences'} {listed(places)}: {basis}")
