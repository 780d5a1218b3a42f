"""Results over several networks or rules: what closing costs whom, sweeps, alignments, and the written report."""

from __future__ import annotations

import os
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from analysis.notebook import frames
from analysis.notebook.page import Grid, page
from analysis.notebook.results import Result

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, repr=False, eq=False)
class Ledger(Result):
    """What each unit's early closing costs each home.

    The frame has `closes`, `home`, `counted`, `mean`, `low`, `high` (patients a year, bands that hold for all at once)
    and `verdict`.
    """

    def to_frame(self) -> pd.DataFrame:
        """One row for each unit that closes, each home and what is counted."""
        return frames.ledger(self.document)

    @property
    def displaced(self) -> pd.DataFrame:
        """Whom each closing displaces, in the replications that were followed patient by patient."""
        return frames.displaced(self.document)

    def _reads(self) -> Iterator[str]:
        yield f"{self.document['replications']} paired replications"
        yield from (finding["statement"] for finding in self.document["findings"])

    def _sentences(self) -> Iterator[str]:
        yield (
            f"Policy: {self.document['policy']}; {self.document['replications']} paired replications, "
            f"{100 * self.document['confidence']:g} % bands that hold for all at once."
        )
        yield from (finding["statement"] + "." for finding in self.document["findings"])

    def _grids(self) -> Iterator[Grid]:
        columns = ("closes", "home", "counted", "a_year", "verdict")
        rows = [[one[column] for column in columns] for one in self.document["matrix"]]
        yield Grid("More patients a year because a unit closes early", columns, rows)


@dataclass(frozen=True, repr=False, eq=False)
class Sweep(Result):
    """Equilibria and what selfish rules cost over a grid.

    The frame has one row a point: the axes, the method, how many equilibria, prices with their ends, then what happens
    at the optimum and at the extreme equilibria; the columns of the command's `points.csv`.
    """

    def to_frame(self) -> pd.DataFrame:
        """One row a point."""
        return frames.points(self.document)

    def _reads(self) -> Iterator[str]:
        yield f"{len(self.document['points'])} points"
        yield from self.document["findings"]

    def _sentences(self) -> Iterator[str]:
        from analysis.findings import ONE_NETWORK

        yield f"Goal: {self.document['goal']}. Welfare: {self.document['welfare']}."
        yield from self.document["methods"]
        yield from (finding + "." for finding in self.document["findings"])
        yield from (ONE_NETWORK, *self.document["notes"])

    def _grids(self) -> Iterator[Grid]:
        varied = self.document["varied"]
        rows = [
            [str(place), *(_axis(one, name) for name in varied), _count(one), one["price_of_anarchy"],
             one["lost_per_year"]]
            for place, one in enumerate(self.document["points"], 1)
        ]  # fmt: skip
        columns = ("point", *varied, "equilibria", "price of anarchy", "lost a year")
        yield Grid("Price of anarchy (equilibria: exact, or possible / confirmed)", columns, rows)


def _axis(one: Mapping[str, Any], name: str) -> Any:
    return one["beds"].get(name.removeprefix("beds of ")) if name.startswith("beds of ") else one[name]


def _count(one: Mapping[str, Any]) -> str:
    return " / ".join(str(value) for value in one["equilibria"].values())


@dataclass(frozen=True, repr=False, eq=False)
class Alignment(Result):
    """The lowest targets at which every possible equilibrium is near the optimum.

    The frame has one row for each way of taking the stays, each set of targets and each demand: `stays`, `demand`,
    `target U` by unit, `method`, `possible` equilibria, `mean`, `low`, `high` (lost a year), `allowed`, `verdict`.
    """

    def to_frame(self) -> pd.DataFrame:
        """One row for each statement."""
        return frames.losses(self.document)

    @property
    def lowest(self) -> Mapping[str, tuple[Mapping[str, float], ...]]:
        """By way of taking the stays: the lowest targets by unit that hold, none of which is below another."""
        return {row["stays"]: tuple(row["lowest"]) for row in self.document["rows"]}

    def _reads(self) -> Iterable[str]:
        return self.document["statements"][:1]

    def _sentences(self) -> Iterator[str]:
        document = self.document
        yield f"Welfare: {document['welfare']}. Near the optimum: a loss of at most {document['delta']['reads']}."
        yield from (*document["statements"], *document["notes"])

    def _grids(self) -> Iterator[Grid]:
        columns = ("target", "demand x", "lost a year", "allowed", "verdict")
        for row in self.document["rows"]:
            rows = [
                [
                    _targets(one),
                    one["worst_demand"],
                    one["lost_per_year"],
                    one["allowed_per_year"],
                    one["verdict"],
                ]
                for one in row["overview"]
            ]
            yield Grid(f"Stays {row['stays']}: {row['methods']}", columns, rows)


def _targets(one: Mapping[str, Any]) -> str:
    named = [f"{target:g}" for target in one["targets"].values()]
    return named[0] if len(set(named)) == 1 else ", ".join(named)


@dataclass(frozen=True)
class Report:
    """A report that was written. file: where. kinds: result by label -> its kind. answer: its three sentences."""

    file: Path
    kinds: Mapping[str, str]
    answer: tuple[str, ...]

    def to_dict(self) -> dict[str, Any]:
        """The document of the command's `--json`."""
        return {"written": [str(self.file)], "kinds": dict(self.kinds), "answer": list(self.answer)}

    def _repr_html_(self) -> str:
        rows = list(self.kinds.items())
        return page(f"Report: {self.file}", self.answer, [Grid("Results", ("result", "kind"), rows)])


def report(
    folders: Iterable[str | os.PathLike[str]] | str | os.PathLike[str], path: str | os.PathLike[str]
) -> Report:
    """Writes the report of result folders as one page: Markdown where `path` ends in .md, else HTML.

    folders: as the commands leave them with --out, or `Result.save` does; one may stand alone. Raises ScenarioError
    where a folder holds no result, or the file cannot be written.
    """
    from analysis.report.writing import answer_of, written

    one = isinstance(folders, str | os.PathLike)
    results: Sequence[Path] = [Path(folders)] if one else [Path(folder) for folder in folders]  # type: ignore[arg-type,union-attr]
    file = Path(path)
    read, made = written(results, file, option="path")
    return Report(file, {result.label: result.kind for result in read}, tuple(answer_of(made)))
