"""Figures of decisions between policies: `(document, ax) -> ax`, no computing, readable in grey."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import seaborn as sns
from matplotlib import pyplot as plt
from matplotlib.axes import Axes

from analysis.figures import save_figure, short_name

MARKERS = "osD^vP*X"
COLOURS = sns.color_palette("colorblind", 8)
LINES = ("-", "--", "-.", ":")
TOLD, NOT_TOLD = "black", "white"
MOST_ROWS = 60


def difference_forest(document: Mapping[str, Any], ax: Axes, *, measure: str, reads: str) -> Axes:
    """Differences of one of the network's measures, a year, with simultaneous bands; filled where told apart."""
    rows = [
        one for one in document["differences"] if one["where"] == "network" and one["measure"] == measure
    ][:MOST_ROWS]
    ax.axvline(0, color="0.5", linewidth=0.8)
    for place, one in enumerate(rows):
        number = one["a_year"]
        if number["low"] is not None:
            ax.plot([number["low"], number["high"]], [place, place], color="0.3", linewidth=1.4)
        face = NOT_TOLD if one["verdict"] == "cannot be told apart" else TOLD
        marker = "x" if number["low"] is None else "o"
        ax.scatter(number["mean"], place, marker=marker, s=30, facecolors=None if marker == "x" else face,
                   edgecolors=None if marker == "x" else "black", color="black" if marker == "x" else None,
                   zorder=3)  # fmt: skip
    labels = [f"{short_name(one['policy'])}\nagainst {short_name(one['against'])}" for one in rows]
    ax.set_yticks(range(len(rows)), labels, fontsize=8)
    ax.set_ylim(len(rows) - 0.5, -0.5)
    ax.set(xlabel=f"{reads}, difference (patients a year)", title=reads[:1].upper() + reads[1:])
    return ax


def refusals_against_transfers(document: Mapping[str, Any], ax: Axes) -> Axes:
    """Each policy's refusals and transfers with their uncertainty; filled where efficient by the estimates."""
    for place, one in enumerate(document["refusals_against_transfers"]):
        away, moved = one["turned_away_a_year"], one["transfers_a_year"]
        colour = COLOURS[place % len(COLOURS)]
        ax.errorbar(
            moved["mean"], away["mean"], xerr=_ends(moved), yerr=_ends(away), fmt=MARKERS[place % len(MARKERS)],
            color=colour, markerfacecolor=colour if one["efficient_on_estimates"] else "white",
            markeredgecolor="black", ecolor="0.4", capsize=2, markersize=8,
            label=f"{short_name(one['policy'])} ({one['verdict']})",
        )  # fmt: skip
    ax.set(
        xlabel="transfers (patients a year)", ylabel="turned away (patients a year)",
        title="Refusals against transfers (filled: efficient on the estimates)",
    )  # fmt: skip
    ax.legend(loc="upper center", bbox_to_anchor=(0.5, -0.16), frameon=False, fontsize=8)
    return ax


def _ends(number: Mapping[str, Any]) -> np.ndarray | None:
    if number["low"] is None:
        return None
    return np.array([[number["mean"] - number["low"]], [number["high"] - number["mean"]]])


def years_turned_away(document: Mapping[str, Any], ax: Axes) -> Axes:
    """Each policy's years in order: the share of years with so many turned away or fewer; one in ten is marked."""
    found = document["worst_year"]
    ax.axhline(1 - 1 / found["one_year_in"], color="0.5", linewidth=0.8)
    for place, (policy, years) in enumerate(found["turned_away_by_year"].items()):
        share = np.arange(1, len(years) + 1) / len(years)
        ax.step(years, share, where="post", color=COLOURS[place % len(COLOURS)],
                linestyle=LINES[place % len(LINES)], marker=MARKERS[place % len(MARKERS)], markevery=[],
                markeredgecolor="black", label=short_name(policy))  # fmt: skip
        [bad] = [
            one["bad_year"] for one in found["rows"]
            if (one["policy"], one["where"], one["measure"]) == (policy, "network", "turned away")
        ]  # fmt: skip
        ax.errorbar(
            bad["mean"], 1 - 1 / found["one_year_in"], xerr=_ends(bad), fmt=MARKERS[place % len(MARKERS)],
            color="black", markerfacecolor=COLOURS[place % len(COLOURS)], capsize=3, markersize=7,
        )  # fmt: skip
    ax.set(
        xlabel="turned away in a year (patients)", ylabel="share of years with so many or fewer", ylim=(0, 1.02),
        title=f"Good years and bad: one year in {found['one_year_in']:g} is right of the marks",
    )  # fmt: skip
    ax.legend(fontsize=8, loc="lower right")
    return ax


def ledger_matrix(document: Mapping[str, Any], ax: Axes, *, counted: str, reads: str) -> Axes:
    """Who pays for whose closure: patients a year, a row for each unit that closes; `*` where told apart from 0."""
    units = document["units"]
    cells = {(one["closes"], one["home"]): one for one in document["matrix"] if one["counted"] == counted}
    values = np.array([[cells[row, column]["a_year"]["mean"] for column in units] for row in units])
    texts = [[_cell(cells[row, column]) for column in units] for row in units]
    most = max([1e-9, *(abs(one["a_year"]["mean"]) for one in document["matrix"] if one["home"] in units)])
    names = [short_name(unit) for unit in units]
    sns.heatmap(
        values, ax=ax, cmap="PuOr", vmin=-most, vmax=most, annot=np.array(texts), fmt="", linewidths=0.5,
        linecolor="white", xticklabels=names, yticklabels=names, annot_kws={"fontsize": 9},
        cbar_kws={"label": f"more {reads} (patients a year)"},
    )  # fmt: skip
    ax.set(
        title=f"More {reads} because a unit closes early",
        xlabel="patients of (home)",
        ylabel="unit that closes",
    )
    ax.tick_params(axis="y", rotation=0)
    return ax


def _cell(one: Mapping[str, Any]) -> str:
    number = one["a_year"]
    text = f"{number['mean']:+.1f}".replace("+0.0", "0.0").replace("-0.0", "0.0") + (
        "" if one["verdict"] == "cannot be told apart" else " *"
    )
    return text if number["low"] is None else f"{text}\n{number['low']:.1f} to {number['high']:.1f}"


# ---- files ----

_NETWORK = {"turned_away_per_day": "turned away", "transfers_per_day": "transfers"}


def save_comparison(document: Mapping[str, Any], folder: Path) -> list[Path]:
    """Draws `comparison-differences`, `comparison-refusals`, and with bad years `comparison-years`."""
    written: list[Path] = []
    pairs = min(MOST_ROWS, len({(one["policy"], one["against"]) for one in document["differences"]}))
    if pairs:
        figure, axes = plt.subplots(1, 2, figsize=(11, 1.8 + 0.45 * pairs), sharey=True)
        for ax, (measure, reads) in zip(axes, _NETWORK.items(), strict=True):
            difference_forest(document, ax, measure=measure, reads=reads)
        share = f"{100 * document['confidence']:g} %"
        figure.suptitle(
            f"Bands hold for all differences at once ({share}); filled: told apart; x: no band", fontsize=9
        )
        written += save_figure(figure, folder, "comparison-differences")
    written += _saved(folder, "comparison-refusals", (6.5, 5.5), refusals_against_transfers, document)
    if document["worst_year"] is not None:
        written += _saved(folder, "comparison-years", (7, 4.5), years_turned_away, document)
    return written


def _saved(
    folder: Path, name: str, size: tuple[float, float], draw: Any, document: Mapping[str, Any]
) -> list[Path]:
    figure, ax = plt.subplots(figsize=size)
    draw(document, ax)
    return save_figure(figure, folder, name)


def save_ledger(document: Mapping[str, Any], folder: Path) -> list[Path]:
    """Draws `ledger`: a matrix of patients turned away, and one of patients moved."""
    side = 2.2 + 1.15 * min(len(document["units"]), 20)
    figure, axes = plt.subplots(1, 2, figsize=(2 * side + 1, side))
    counted: Sequence[tuple[str, str]] = (("turned away", "turned away"), ("moved", "moved"))
    for ax, (key, reads) in zip(axes, counted, strict=True):
        ledger_matrix(document, ax, counted=key, reads=reads)
    share = f"{100 * document['confidence']:g} %"
    figure.suptitle(
        f"*: told apart from 0; bands hold for all cells at once ({share}); no band: too rare", fontsize=9
    )
    return save_figure(figure, folder, "ledger")
