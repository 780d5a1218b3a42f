"""What the steps of a notebook hand over: frozen results, each a document, a frame and a fragment of HTML."""

from __future__ import annotations

import copy
import os
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from analysis.notebook import frames
from analysis.notebook.how import folder_faults
from analysis.notebook.page import Grid, page
from analysis.result_files import RESULT, write_result
from sim.errors import Fault, ScenarioError
from sim.provenance import now, provenance
from sim.scenario.describe import describe
from sim.wording import nearest, shown

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.figure import Figure

    from analysis.games import GameAnalysis
    from analysis.notebook.network import Network

BY_HOME = "Rates marked h count the unit's own population, wherever treated."
PRICES = {
    "price_of_anarchy": "price of anarchy", "price_of_stability": "price of stability",
    "lost_per_year": "forgone a year in the worst listed equilibrium",
}  # fmt: skip


@dataclass(frozen=True, repr=False, eq=False)
class Result:
    """One result. document: as `--json` prints it. provenance: with the command line that repeats it.

    notices: advice on the scenario, and what there was to say while it ran.
    """

    document: Mapping[str, Any]
    provenance: Mapping[str, Any]
    notices: tuple[str, ...] = ()

    def to_dict(self) -> dict[str, Any]:
        """The document, plain values only: numbers of a simulation as `{"mean", "low", "high"}`."""
        return copy.deepcopy(dict(self.document))

    def to_frame(self) -> pd.DataFrame:
        """The result as a tidy frame; columns as the class says."""
        raise NotImplementedError

    def save(self, folder: str | os.PathLike[str]) -> Path:
        """Writes `result.json` and `provenance.json`, as the command does with --out; returns the folder.

        Raises ScenarioError where a result lies there already, or where nothing can be written.
        """
        path = Path(folder)
        faults = list(folder_faults(path, "folder"))
        if (path / RESULT).exists():
            rule, remedy = "must not hold a result already", "choose another folder"
            faults.append(Fault(None, "folder", rule, f"got {str(path)!r}", remedy))
        if faults:
            raise ScenarioError(faults)
        path.mkdir(parents=True, exist_ok=True)
        write_result(path, self.document, self.provenance)
        return path

    def __repr__(self) -> str:
        return f"<{type(self).__name__} of {self.document['scenario'] or '(no title)'}: {'; '.join(self._reads())}>"

    def _repr_html_(self) -> str:
        changes = self.document["changes"]
        said = [f"Changed for this run: {'; '.join(changes)}."] if changes else []
        failed = len(self.document.get("failed", ()))
        lost = [f"{failed} tasks failed; their runs are left out."] if failed else []
        heading = f"{type(self).__name__}: {self.document['scenario'] or '(no title)'}"
        return page(heading, [*said, *self._sentences()], self._grids(), [*self.notices, *lost])

    def _reads(self) -> Iterable[str]:
        """What a line says of it."""
        return self._sentences()

    def _sentences(self) -> Iterable[str]:
        return ()

    def _grids(self) -> Iterable[Grid]:
        return ()


def _rests_on(document: Mapping[str, Any]) -> str:
    """How many replications are behind a document, and how sure its intervals are."""
    noun = "replication" if document["replications"] == 1 else "replications"
    return (
        f"{document['replications']} {noun}, {100 * document['confidence']:g} % intervals, "
        f"seed {document['seed']}, engine {document['engine']}"
    )


@dataclass(frozen=True, repr=False, eq=False)
class Measured(Result):
    """Measures by unit and of the network: the frame has `where`, `measure`, `mean`, `low`, `high`.

    Rates a day, shares 0 to 1; `where` is a unit or `network`. An exact number is its own low and high; NaN stands
    where there is no number.
    """

    def to_frame(self) -> pd.DataFrame:
        """One row for each measure of each unit, then of the network."""
        return frames.measures(self.document)

    def occupancy(self) -> pd.DataFrame:
        """Share of time with so many occupied beds: `where`, `beds`, `mean`, `low`, `high`."""
        return frames.occupancy(self.document)

    def _grids(self) -> Iterator[Grid]:
        from analysis.measures import NETWORK_MEASURES, UNIT_MEASURES

        units, network = self.document["units"], self.document["network"]
        yield Grid(
            f"By unit. {BY_HOME}",
            ("measure", *units),
            [
                (m.reads + (" (h)" if m.by_home else ""), *(units[name].get(m.name) for name in units))
                for m in UNIT_MEASURES
            ],
        )
        yield Grid("Network", ("measure", "value"), [(m.reads, network[m.name]) for m in NETWORK_MEASURES])


@dataclass(frozen=True, repr=False, eq=False)
class Simulation(Measured):
    """One policy's measures with intervals, from replications."""

    def _sentences(self) -> Iterator[str]:
        thresholds = ", ".join(f"{name} {k}" for name, k in self.document["thresholds"].items())
        yield f"Policy: {self.document['policy']}; closure thresholds {thresholds}"
        yield _rests_on(self.document)


@dataclass(frozen=True, repr=False, eq=False)
class Exact(Measured):
    """One policy's measures from the exact Markov chain."""

    def _sentences(self) -> Iterator[str]:
        yield f"Exact Markov chain, {self.document['states']:,} states"


@dataclass(frozen=True, repr=False, eq=False)
class Agreement(Result):
    """The simulation held against the exact chain.

    The frame has `where`, `measure`, `exact`, `mean`, `low`, `high` (simultaneous limits), `z`, `agrees`, `reason`.
    """

    @property
    def agrees(self) -> bool:
        """Whether every measure that was tested holds."""
        return bool(self.document["agrees"])

    def to_frame(self) -> pd.DataFrame:
        """One row for each measure, tested or not."""
        return frames.agreement(self.document)

    def figure(self) -> Figure:
        """Every z against its limits, and each unit's occupancy, as a matplotlib Figure."""
        from analysis.figures_notebook import agreement_figure

        return agreement_figure(self.document)

    def _sentences(self) -> Iterator[str]:
        off = sum(not one["agrees"] for one in self.document["measures"])
        yield "The simulation agrees with the exact chain" if self.agrees else f"{off} measures DISAGREE"
        yield (
            f"{self.document['replications']} replications; a correct simulator would be refused with a chance of at "
            f"most {self.document['false_alarm_rate']:g}"
        )

    def _grids(self) -> Iterator[Grid]:
        columns = ("where", "measure", "exact", "mean", "low", "high", "z", "agrees")
        rows = [
            [one["where"], one["measure"].replace("_", " "), *(one[column] for column in columns[2:])]
            for one in self.document["measures"]
        ]
        yield Grid("Simulation against the exact chain", columns, rows)


@dataclass(frozen=True, repr=False, eq=False, kw_only=True)
class Game(Result):
    """A game's table and what it says. analysis: all of it, as `analysis.games` has it.

    The frame has one row a profile: a column for each player's threshold (or strategy), payoffs with limits, regrets,
    welfare a day, then what happens by unit.
    """

    analysis: GameAnalysis

    @property
    def players(self) -> tuple[str, ...]:
        """Who chooses, in scenario order."""
        return tuple(self.document["players"])

    def to_frame(self) -> pd.DataFrame:
        """The whole table, one row a profile."""
        from analysis.game_document import game_frame

        return game_frame(self.analysis)

    @property
    def equilibria(self) -> pd.DataFrame:
        """The pure ones, a row each: choices, `verdict`, regrets (and upper ends), welfare a day (and limits)."""
        return frames.equilibria(self.analysis)

    @property
    def prices(self) -> pd.DataFrame:
        """`price`, `mean`, `low`, `high`, `reason`: of anarchy, of stability, and welfare forgone a year."""
        return frames.prices(self.document, PRICES)

    def payoffs(self, player: str) -> pd.DataFrame:
        """A player's payoffs (means, in the goal's unit): own strategies down, the others' across.

        Raises ScenarioError where nobody of that name plays.
        """
        return frames.payoffs(self.analysis, self._place(player))

    def _place(self, player: str) -> int:
        if player not in self.players:
            rule, remedy = "must name a player of the game", nearest(str(player), self.players)
            raise ScenarioError([Fault(None, "player", rule, f"got {shown(player)}", remedy)])
        return self.players.index(player)

    def figure(self) -> Figure:
        """Both players' payoffs as heat maps, as a matplotlib Figure.

        Raises ScenarioError where not just two play.
        """
        from analysis.figures_notebook import payoff_figure

        if len(self.players) != 2:
            rule, remedy = "must be two for a picture", "use payoffs(player) or to_frame()"
            raise ScenarioError([Fault(None, "players", rule, f"got {len(self.players)}", remedy)])
        return payoff_figure(self.analysis)

    def _reads(self) -> Iterator[str]:
        yield self._basis()
        found = len(self.document["equilibria"])
        yield f"{found} {'equilibrium' if found == 1 else 'equilibria'} listed"

    def _basis(self) -> str:
        if self.document["method"] == "exact":
            return "exact Markov chain"
        return ("" if self.analysis.race is None else "at most ") + _rests_on(self.document)

    def _sentences(self) -> Iterator[str]:
        """Goal, basis and findings, with what they do not say."""
        from analysis.findings import ONE_NETWORK, POINT_ESTIMATE_WARNING, SETS_NOTE

        yield f"Goal: {self.document['goal']}. Welfare: {self.document['welfare']['reads']}."
        yield self._basis() + "."
        yield from self.document.get("racing", {}).get("reads", ())
        yield from (finding["statement"] + "." for finding in self.document["findings"])
        yield ONE_NETWORK
        if not self.analysis.is_exact:
            yield POINT_ESTIMATE_WARNING if self.analysis.sets is None else SETS_NOTE

    def _grids(self) -> Iterator[Grid]:
        yield _grid("Equilibria (regret in the goal's unit, welfare a day)", self.equilibria)
        named = [(PRICES[name], self.document[name]) for name in PRICES]
        yield Grid("What selfish rules cost", ("price", "value"), named)


@dataclass(frozen=True, repr=False, eq=False)
class Comparison(Result):
    """Policies side by side on the same patients.

    The frame has `policy`, `against`, `where`, `measure`, `mean`, `low`, `high` (bands that hold for all at once), and
    `verdict`; a difference is the first less the second.
    """

    def to_frame(self) -> pd.DataFrame:
        """One row for each difference."""
        return frames.differences(self.document)

    @property
    def levels(self) -> pd.DataFrame:
        """`policy`, `where`, `measure`, `mean`, `low`, `high`: each policy's own measures."""
        return frames.levels(self.document)

    @property
    def could_be_best(self) -> tuple[str, ...]:
        """The policies that could be the best by the network's welfare, at the confidence."""
        return tuple(one["policy"] for one in self.document["could_be_best"] if one["could_be_best"])

    def figure(self) -> Figure:
        """Differences of the network, a year, with their bands, as a matplotlib Figure."""
        from analysis.figures_notebook import comparison_figure

        return comparison_figure(self.document)

    def _reads(self) -> Iterator[str]:
        yield _rests_on(self.document)
        yield f"{len(self.document['policies'])} policies"

    def _sentences(self) -> Iterator[str]:
        from analysis.comparison_document import PAIRED

        yield _rests_on(self.document) + "."
        yield PAIRED
        yield from (finding["statement"] + "." for finding in self.document["findings"])

    def _grids(self) -> Iterator[Grid]:
        columns = ("policy", "against", "measure", "a_year", "verdict")
        rows = [
            [one[column] for column in columns]
            for one in self.document["differences"]
            if one["where"] == "network"
        ]
        yield Grid("Differences of the network, patients a year", columns, rows)
        gains = ("policy", "against", "home", "counted", "a_year", "verdict")
        by_home = [[one[column] for column in gains] for one in self.document["by_home"]]
        yield Grid("Who gains, who loses: patients a year by home", gains, by_home)


@dataclass(frozen=True, repr=False, eq=False)
class Description(Result):
    """A network read back before it runs; the frame has one row a unit (beds, rates a day, hours)."""

    @classmethod
    def of(cls, network: Network) -> Description:
        """The description of a network."""
        told = describe(network.scenario, network.policy)
        heading = {"scenario": network.title, "changes": list(network.changes), "policy": network.policy.name}
        origin = provenance(network.scenario, command=network.command("check"), engine="none", started=now())
        return cls(heading | told, origin, tuple(told["advice"]))

    def to_frame(self) -> pd.DataFrame:
        """One row a unit."""
        return frames.rows(self.document["units"], "unit")

    def patients(self) -> pd.DataFrame:
        """One row a group of patients: rates a day, stays in days."""
        return frames.rows(self.document["patients"], "group")

    def _sentences(self) -> Iterator[str]:
        run = self.document["run"]
        yield (
            f"Policy: {self.document['policy']}; {run['replications']} replications of {run['measured_days']:g} days "
            f"after {run['warm_up_days']:g} of warm-up"
        )
        yield f"A game has {self.document['game']['cells']:,} cells, {self.document['game']['runs']:,} runs"

    def _grids(self) -> Iterator[Grid]:
        yield _listed("Units", "unit", self.document["units"], skipped=("referral_order",))
        yield _listed("Patients", "group", self.document["patients"])


def _listed(
    title: str, name: str, rows: Mapping[str, Mapping[str, Any]], skipped: Sequence[str] = ()
) -> Grid:
    columns = [key for key in next(iter(rows.values())) if key not in skipped]
    texts = [key.replace("_", " ") for key in columns]
    return Grid(title, (name, *texts), [(row, *(own[key] for key in columns)) for row, own in rows.items()])


def _grid(title: str, frame: pd.DataFrame) -> Grid:
    return Grid(title, [str(column) for column in frame.columns], frame.to_numpy(object).tolist())
