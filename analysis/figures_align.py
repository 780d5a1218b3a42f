"""Figures of an alignment: `(document, ax) -> ax`, no computing, readable in grey."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from matplotlib import pyplot as plt
from matplotlib.axes import Axes

from analysis.figures import save_figure
from analysis.figures_sweep import COLOURS, LINES, MARKERS, spread


def loss_over_targets(row: Mapping[str, Any], ax: Axes) -> Axes:
    """What the worst possible equilibrium loses over the common target, a line with its band for some demands."""
    points = row["points"]
    demands = spread(list(dict.fromkeys(one["demand"] for one in points)))
    for place, demand in enumerate(demands):
        mine = [one for one in points if one["demand"] == demand]
        _line(ax, mine, place, demand)
    allowed = [one["allowed_per_year"] for one in points if one["demand"] in (demands[0], demands[-1])]
    ax.axhspan(min(allowed), max(allowed), color="0.8", zorder=0)
    for end in sorted({min(allowed), max(allowed)}):
        label = "delta, the loss allowed" if end == min(allowed) else None
        ax.axhline(end, color="0.25", linewidth=1.2, label=label)
    for lowest in row["lowest"][:1]:
        at = next(iter(lowest.values()))
        ax.axvline(at, color="black", linewidth=1, linestyle=":", label=f"lowest that holds: {at:g}")
    ax.set(
        xlabel="target utilisation of every unit", ylabel="lost at the worst possible equilibrium (welfare a year)",
        title=f"Stays {row['stays']}\n(open marks: out of some unit's reach)",
    )  # fmt: skip
    ax.legend(fontsize=8)
    return ax


def _line(ax: Axes, points: list[Any], place: int, demand: float) -> None:
    colour = COLOURS[place % len(COLOURS)]
    at = np.array([next(iter(one["targets"].values())) for one in points])
    mean, low, high = (
        np.array([one["lost_per_year"][end] for one in points], float) for end in ("mean", "low", "high")
    )
    ax.fill_between(at, low, high, color=colour, alpha=0.2, linewidth=0)
    ax.plot(at, mean, LINES[place % len(LINES)], color=colour)
    reached = np.array([not one["out_of_reach"] for one in points])
    marker = MARKERS[place % len(MARKERS)]
    ax.plot(at[reached], mean[reached], marker, color=colour, markersize=5, label=f"demand x {demand:g}")
    ax.plot(at[~reached], mean[~reached], marker, color=colour, markersize=5, markerfacecolor="white")


def save_alignment(document: Mapping[str, Any], folder: Path) -> list[Path]:
    """Draws `align.png` and `.svg`, a panel a row; nothing for targets by unit."""
    if document["per_unit"]:
        return []
    rows = document["rows"]
    figure, panels = plt.subplots(1, len(rows), figsize=(6.2 * len(rows), 4.6), squeeze=False, sharey=True)
    for row, ax in zip(rows, panels[0], strict=True):
        loss_over_targets(row, ax)
    return save_figure(figure, folder, "align")
