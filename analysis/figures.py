"""Figures: `(data, ax) -> ax`, no computing, readable in grey; the only room that imports seaborn."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import matplotlib

matplotlib.use("Agg")

import numpy as np  # noqa: E402
import seaborn as sns  # noqa: E402
from matplotlib import pyplot as plt  # noqa: E402
from matplotlib.axes import Axes  # noqa: E402

from analysis.equilibria import regrets  # noqa: E402
from analysis.games import CONFIRMED, EXACT, GameAnalysis  # noqa: E402

matplotlib.rcParams["svg.hashsalt"] = "brimline"  # the same bytes every time
matplotlib.rcParams["text.parse_math"] = False  # a $ in a unit's name is a $
FORMATS = ("png", "svg")
LONGEST_LABEL = 32
LONGEST_AXIS = 60
LEAST_WIDTH = 6.0  # inches: the legend has two entries


def payoff_heat_map(game: GameAnalysis, ax: Axes, *, player: int) -> Axes:
    """One player's payoffs over both players' strategies (two players).

    Open circles mark the player's best responses, diamonds the equilibria: white what may be one, black what is
    confirmed or exact.
    """
    table = game.table
    names, labels = [short_name(name) for name in table.profiles.players], table.profiles.labels
    sns.heatmap(
        table.payoffs[player], ax=ax, cmap="cividis_r" if table.goal.sense == "cost" else "cividis",
        xticklabels=labels[1], yticklabels=labels[0], cbar_kws={"label": _scale(game, player)},
    )  # fmt: skip
    ax.invert_yaxis()
    best = np.argwhere(regrets(table.payoffs, table.goal.sense)[player] <= game.tolerance)
    _mark(ax, best, "o", "none", "black", f"best response of {names[player]}", 46)
    for verdict, cells in _by_verdict(game).items():
        face = "black" if verdict in (EXACT, CONFIRMED) else "white"
        _mark(ax, cells, "D", face, "white" if face == "black" else "black", f"equilibrium ({verdict})", 64)
    ax.set(
        title=f"What {names[player]} pays: {'darker is worse' if table.goal.sense == 'cost' else 'lighter is better'}",
        xlabel=_axis(game, 1), ylabel=_axis(game, 0),
    )  # fmt: skip
    ax.tick_params(axis="y", rotation=0)
    ax.legend(loc="upper center", bbox_to_anchor=(0.5, -0.14), ncols=2, frameon=False, fontsize=8)
    return ax


def _by_verdict(game: GameAnalysis) -> dict[str, np.ndarray]:
    """Verdict -> the profiles of the equilibria with it, (equilibria, 2)."""
    verdicts = dict.fromkeys(one.verdict for one in game.equilibria)
    return {
        verdict: np.array([one.profile for one in game.equilibria if one.verdict == verdict])
        for verdict in verdicts
    }


def _axis(game: GameAnalysis, player: int) -> str:
    """What runs along a player's axis."""
    profiles = game.table.profiles
    beds = " (beds)" if profiles.is_plain else ""
    return _folded(profiles.reads(player)) + beds


def short_name(name: str) -> str:
    """A unit's name as far as a figure has room for it."""
    return name if len(name) <= LONGEST_LABEL else name[: LONGEST_LABEL - 1] + "…"


def _scale(game: GameAnalysis, player: int) -> str:
    return _folded(f"{game.table.goal.reads_of(player)} ({game.table.goal.sense})")


def _folded(text: str) -> str:
    """A text in lines that an axis has room for."""
    return "\n".join(textwrap.wrap(text, LONGEST_AXIS, max_lines=3, placeholder="…"))


def _mark(ax: Axes, cells: np.ndarray, marker: str, face: str, edge: str, label: str, size: float) -> None:
    ax.scatter(
        cells[:, 1] + 0.5, cells[:, 0] + 0.5, marker=marker, s=size, facecolors=face, edgecolors=edge, linewidths=1.3,
        label=label, zorder=3,
    )  # fmt: skip


def verification_z(document: Mapping[str, Any], ax: Axes) -> Axes:
    """Every tested measure's z against the limits within which a correct simulator stays."""
    tested = [one for one in document["measures"] if one["z"] is not None]
    wheres = list(dict.fromkeys(one["where"] for one in tested))
    limit = document["critical_z"]
    ax.axvspan(-limit, limit, color="0.9", zorder=0, label=f"limits ±{limit:.2f}")
    ax.axvline(0, color="0.5", linewidth=0.8, zorder=1)
    for place, one in enumerate(tested):
        marker = "osD^vP*X"[wheres.index(one["where"]) % 8]
        face = "black" if one["agrees"] else "white"
        ax.scatter(one["z"], place, marker=marker, s=22, facecolors=face, edgecolors="black", zorder=3)
    ax.set_yticks(
        range(len(tested)),
        [f"{short_name(one['where'])}: {one['measure'].replace('_', ' ')}" for one in tested],
        fontsize=7,
    )
    ax.set_ylim(len(tested) - 0.3, -0.7)
    ax.set(xlabel="z = (simulated - exact) / standard error", title="Simulation against the exact chain")
    ax.legend(loc="lower right", fontsize=8)
    return ax


def verification_occupancy(document: Mapping[str, Any], ax: Axes, *, where: str) -> Axes:
    """One unit's occupancy: exact shares as a line, simulated ones as points with simultaneous limits."""
    levels = [
        one
        for one in document["measures"]
        if one["where"] == where and one["measure"].startswith("occupancy ")
    ]
    names = [one["measure"].removeprefix("occupancy ").replace(" to ", "–") for one in levels]
    at = np.arange(len(levels))
    mean, low, high = (np.array([one[key] for one in levels], float) for key in ("mean", "low", "high"))
    ax.step(at, [one["exact"] for one in levels], where="mid", color="0.4", label="exact")
    ax.errorbar(
        at,
        mean,
        yerr=[mean - low, high - mean],
        fmt="o",
        color="black",
        markersize=4,
        capsize=2,
        label="simulated",
    )
    ax.set_xticks(at, names, fontsize=8)
    ax.set(
        title=short_name(where),
        xlabel="occupied beds (rare levels pooled)",
        ylabel="share of time",
        ylim=(0, None),
    )
    ax.legend(fontsize=8)
    return ax


def save_payoffs(game: GameAnalysis, folder: Path) -> list[Path]:
    """Draws each player's heat map into `payoffs-PLACE.png` and `.svg`, numbered in scenario order."""
    written = []
    rows, columns = game.table.profiles.shape
    for player in range(2):
        figure, ax = plt.subplots(
            figsize=(max(LEAST_WIDTH, 2.6 + 0.36 * min(columns, 40)), 2.4 + 0.32 * min(rows, 40))
        )
        payoff_heat_map(game, ax, player=player)
        written += save_figure(figure, folder, f"payoffs-{player + 1}")
    return written


def save_verification(document: Mapping[str, Any], folder: Path) -> list[Path]:
    """Draws `verification.png` and `.svg`: every z, and each unit's occupancy."""
    units = list(dict.fromkeys(one["where"] for one in document["measures"] if one["where"] != "network"))
    tested = sum(one["z"] is not None for one in document["measures"])
    figure = plt.figure(figsize=(12, max(4.5, 0.17 * tested + 1, 2.6 * len(units))))
    grid = figure.add_gridspec(len(units), 2, width_ratios=(1.1, 1))
    verification_z(document, figure.add_subplot(grid[:, 0]))
    for place, unit in enumerate(units):
        verification_occupancy(document, figure.add_subplot(grid[place, 1]), where=unit)
    return save_figure(figure, folder, "verification")


def save_figure(figure: Any, folder: Path, name: str) -> list[Path]:
    """Writes a figure in every format, the same bytes every time, and closes it."""
    figure.tight_layout()
    paths = [folder / f"{name}.{extension}" for extension in FORMATS]
    for path in paths:
        figure.savefig(path, dpi=150, metadata={"Date": None} if path.suffix == ".svg" else None)
    plt.close(figure)
    return paths
