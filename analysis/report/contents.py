"""The report as a whole: its sections in the board's order, and what every section can ask of the results."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from functools import partial
from importlib import import_module
from typing import Any

from analysis.report.blocks import Block, Figure, Heading, Section, Text
from analysis.report.reading import Network, Result
from analysis.report.words import counted, name
from sim.errors import RunError

# The order is the board's: what was asked, what the answer is, what it rests on. A new section is a module with
# TITLE and blocks(results, figures), and optionally headlines(results), and its name here.
SECTIONS = (
    "question", "answer", "network", "verification", "equilibria", "cost", "sweep", "align", "policies", "ledger",
    "limits", "methods", "origin",
)  # fmt: skip


@dataclass(frozen=True)
class Report:
    """A report. title: of the scenario, or of the first of several."""

    title: str
    sections: tuple[Section, ...]


@dataclass(frozen=True)
class Headline:
    """A statement for the answer. rank: the lowest are printed, one of each. result: what it rests on."""

    rank: int
    said: str
    result: Result


class Results:
    """The results that a report is written from, in the order given."""

    def __init__(self, results: Sequence[Result]) -> None:
        self.all = tuple(results)

    def of(self, *kinds: str) -> tuple[Result, ...]:
        """The results of these kinds."""
        return tuple(one for one in self.all if one.kind in kinds)

    @property
    def networks(self) -> tuple[Network, ...]:
        """The scenarios, each once."""
        return tuple({one.network.sha256: one.network for one in self.all}.values())

    def basis(self, result: Result) -> str:
        """Where a result's numbers come from, in one sentence."""
        document = result.document
        said = f"Result “{name(result.label)}”"
        if len(self.networks) > 1:
            said += f", scenario {result.network.number} ({name(result.network.title)})"
        if document.get("changes"):
            said += f", changed for this run: {'; '.join(document['changes'])}"
        return f"{said}. {_numbers(result)}"

    def heading(self, result: Result, kinds: Sequence[Result]) -> Iterator[Block]:
        """The result's own heading where its section has several, and its basis."""
        if len(kinds) > 1:
            yield Heading(f"{name(result.label)}")
        yield Text(self.basis(result))


def _numbers(result: Result) -> str:
    document = result.document
    if result.is_exact and document.get("phase_fit"):
        return "Every number is exact for the fitted stays, without sampling error, and near for the scenario's own."
    if result.is_exact:
        return "Every number is exact: from the Markov chain of the scenario, without sampling error."
    if document.get("replications") is None:
        said = "replications as the result says"
    else:
        said = counted(document["replications"], "replication")
    if document.get("confidence") is not None:
        said += f", intervals at {100 * document['confidence']:g} %"
    return f"Simulated: {said}, seed {document.get('seed', 'not recorded')}."


class Figures:
    """Draws figures with ids of their own, in order."""

    def __init__(self) -> None:
        self._drawn = 0

    def draw(
        self, draw: Callable[[Any], Any], title: str, description: str, size: tuple[float, float] = (7.0, 4.2)
    ) -> Figure:
        """One figure. draw: gets the axes; description: says what is to be seen, for those who cannot see it."""
        from analysis.figures_report import inline_svg

        self._drawn += 1
        svg = inline_svg(
            draw, prefix=f"figure-{self._drawn}", title=title, description=description, size=size
        )
        return Figure(svg, title, description)

    def number(self) -> str:
        """The prefix of the next figure, for one that is written by hand."""
        self._drawn += 1
        return f"figure-{self._drawn}"


def report_of(results: Sequence[Result]) -> Report:
    """The report on these results; sections without matter are left out. RunError where a document is damaged."""
    asked, figures = Results(results), Figures()
    modules = [(place, import_module(f"analysis.report.sections.{place}")) for place in SECTIONS]
    sections = [Section(module.TITLE, place, _blocks(module, asked, figures)) for place, module in modules]
    return Report(results[0].network.title, tuple(one for one in sections if one.blocks))


def _blocks(module: Any, results: Results, figures: Figures) -> tuple[Block, ...]:
    """A section's blocks; RunError where a document is not as its command writes it."""
    try:
        return tuple(module.blocks(results, figures))
    except (LookupError, TypeError, AttributeError, ValueError) as error:
        raise RunError(
            f"the section “{module.TITLE}” cannot be written: a result.json is not as this version's commands write it "
            f"({type(error).__name__}: {error}); run its command again"
        ) from error


def headlines(results: Results) -> list[Headline]:
    """The most important statements of every section that makes some, by rank; one of each rank."""
    modules = [import_module(f"analysis.report.sections.{place}") for place in SECTIONS]
    found = [one for module in modules if hasattr(module, "headlines") for one in module.headlines(results)]
    first = {
        one.rank: one for one in reversed(found)
    }  # of several results of a kind, the one that was given first
    return [first[rank] for rank in sorted(first)]


def optional(module: str, function: str, *arguments: Any, **named: Any) -> Callable[[Any], Any]:
    """A figure's function bound to its data, loaded only when it is drawn."""

    def draw(ax: Any) -> Any:
        return partial(getattr(import_module(module), function), *arguments, **named)(ax=ax)

    return draw
