"""Documents as tidy pandas frames. A number that is null is NaN here."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np
import pandas as pd

from analysis.games import GameAnalysis
from analysis.profiles import choice_columns
from analysis.sweeping import point_rows

ENDS = ("mean", "low", "high")
NETWORK = "network"


def _ends(number: Any) -> dict[str, float | None]:
    """An estimate's ends; an exact number is its own."""
    if isinstance(number, Mapping):
        return {end: number[end] for end in ENDS}
    return dict.fromkeys(ENDS, number)


def _tidy(rows: Iterator[dict[str, Any]], columns: tuple[str, ...]) -> pd.DataFrame:
    """A frame with these columns, ends as floats, also where there is no row."""
    frame = pd.DataFrame(list(rows), columns=list(columns))
    return frame.astype({column: float for column in (*ENDS, "exact", "z") if column in columns})


def _measures(tree: Mapping[str, Any]) -> Iterator[dict[str, Any]]:
    """Every measure of every unit, then of the network."""
    for where, values in (*tree["units"].items(), (NETWORK, tree["network"])):
        for measure, number in values.items():
            if measure != "occupancy":
                yield {"where": where, "measure": measure, **_ends(number)}


def measures(document: Mapping[str, Any]) -> pd.DataFrame:
    """`where`, `measure`, `mean`, `low`, `high`."""
    return _tidy(_measures(document), ("where", "measure", *ENDS))


def occupancy(document: Mapping[str, Any]) -> pd.DataFrame:
    """`where`, `beds`, `mean`, `low`, `high`: shares of time."""
    rows = (
        {"where": where, "beds": beds, **_ends(share)}
        for where, values in document["units"].items()
        for beds, share in enumerate(values["occupancy"])
    )
    return _tidy(rows, ("where", "beds", *ENDS))


def agreement(document: Mapping[str, Any]) -> pd.DataFrame:
    """The measures of a verification, one row each."""
    columns = ("where", "measure", "exact", *ENDS, "z", "agrees", "reason")
    return _tidy(iter(document["measures"]), columns)


def differences(document: Mapping[str, Any]) -> pd.DataFrame:
    """The differences of a comparison, one row each."""
    return _tidy(iter(document["differences"]), ("policy", "against", "where", "measure", *ENDS, "verdict"))


def levels(document: Mapping[str, Any]) -> pd.DataFrame:
    """Each policy's own measures."""
    rows = ({"policy": one["name"], **row} for one in document["policies"] for row in _measures(one))
    return _tidy(rows, ("policy", "where", "measure", *ENDS))


def prices(document: Mapping[str, Any], names: Mapping[str, str]) -> pd.DataFrame:
    """`price`, `mean`, `low`, `high`, `reason`; names: key of the document -> words."""
    rows = (
        {"price": words, **_ends(document[key]), "reason": _reason(document[key]) or _why(document, key)}
        for key, words in names.items()
    )
    return _tidy(rows, ("price", *ENDS, "reason"))


def _reason(number: Any) -> str | None:
    return number.get("reason") if isinstance(number, Mapping) else None


def _why(document: Mapping[str, Any], key: str) -> str | None:
    """Why an exact number is null."""
    return document.get("reason") if document[key] is None else None


def equilibria(game: GameAnalysis) -> pd.DataFrame:
    """What the players choose, the verdict, regrets with upper ends, and welfare a day with limits."""
    profiles, listed = game.table.profiles, game.equilibria
    cells = np.array([one.profile for one in listed], int).reshape(-1, len(profiles.players))
    columns: dict[str, Any] = dict(choice_columns(profiles, cells))
    columns["verdict"] = [one.verdict for one in listed]
    for player in profiles.players:
        columns[f"regret {player}"] = _floats(one.regret[player].mean for one in listed)
        if not game.is_exact:
            columns[f"regret {player} high"] = _floats(one.regret[player].high for one in listed)
    for end in ("mean",) if game.is_exact else ENDS:
        name = "welfare" if end == "mean" else f"welfare {end}"
        columns[name] = _floats(getattr(one.welfare, end) for one in listed)
    return pd.DataFrame(columns)


def _floats(values: Any) -> np.ndarray:
    return np.array([np.nan if value is None else value for value in values], float)


def payoffs(game: GameAnalysis, player: int) -> pd.DataFrame:
    """A player's payoffs: own strategies down, what the others choose across."""
    profiles = game.table.profiles
    own = np.moveaxis(game.table.payoffs[player], player, 0)
    others = [place for place in range(len(profiles.players)) if place != player]
    return pd.DataFrame(
        own.reshape(len(own), -1), index=_axis(game, [player]), columns=_axis(game, others)
    )  # fmt: skip


def _axis(game: GameAnalysis, players: list[int]) -> pd.Index:
    """What some players choose: one level each, thresholds as numbers and anything else as labels."""
    if not players:
        return pd.Index(["nobody else plays"])
    chosen = [_choices(game, player) for player in players]
    return chosen[0] if len(chosen) == 1 else pd.MultiIndex.from_product(chosen)


def _choices(game: GameAnalysis, player: int) -> pd.Index:
    """One player's strategies, named."""
    profiles = game.table.profiles
    cells = np.zeros((profiles.shape[player], len(profiles.players)), int)
    cells[:, player] = np.arange(profiles.shape[player])
    name, values = list(choice_columns(profiles, cells).items())[player]
    return pd.Index(values, name=name)


def rows(tables: Mapping[str, Mapping[str, Any]], name: str) -> pd.DataFrame:
    """A frame with one row a table, its name first."""
    return pd.DataFrame([{name: key, **values} for key, values in tables.items()])


def ledger(document: Mapping[str, Any]) -> pd.DataFrame:
    """`closes`, `home`, `counted`, `mean`, `low`, `high`, `verdict`: patients a year."""
    rows = ({**one, **_ends(one["a_year"])} for one in document["matrix"])
    return _tidy(rows, ("closes", "home", "counted", *ENDS, "verdict"))


def displaced(document: Mapping[str, Any]) -> pd.DataFrame:
    """Whom closings displace, one row for each kind of patient."""
    columns = ("closes", "group", "home", "without", "now", "patients", "a_year")
    return _tidy(iter(document["displaced"]), columns)


def points(document: Mapping[str, Any]) -> pd.DataFrame:
    """The points of a sweep, one row each."""
    return pd.DataFrame(list(point_rows(document["points"])))


def losses(document: Mapping[str, Any]) -> pd.DataFrame:
    """Every loss of an alignment, one row each."""
    targets = [f"target {unit}" for unit in document["rows"][0]["points"][0]["targets"]]
    rows = (
        {"stays": row["stays"], **one, **_ends(one["lost_per_year"]), "allowed": one["allowed_per_year"]}
        | dict(zip(targets, one["targets"].values(), strict=True))
        for row in document["rows"]
        for one in row["points"]
    )
    return _tidy(rows, ("stays", "demand", *targets, "method", "possible", *ENDS, "allowed", "verdict"))
