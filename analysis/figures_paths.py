"""Figures of runs over time: the start of a run, and the hours of the week; no computing, readable in grey."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from matplotlib import pyplot as plt
from matplotlib.axes import Axes

from analysis.figures import save_figure, short_name

DAYS = ("Mon", "Tue", "Wed", "Thu", "Fri", "Sat", "Sun")


def warm_up_path(advice: Mapping[str, Any], ax: Axes, *, unit: str, beds: int) -> Axes:
    """One unit's average occupancy from an empty network on, with the present and the advised warm-up."""
    path, width = np.array(advice["path"][unit]), advice["observation_days"]
    ax.stairs(
        path,
        width * np.arange(len(path) + 1),
        baseline=None,
        color="0.35",
        linewidth=1.2,
        label="average of the runs",
    )
    ax.axhline(beds, color="0.7", linewidth=1, linestyle=":", label="beds")
    ax.axvline(advice["present_days"], color="0.5", linewidth=2, linestyle="--",
               label=f"present warm-up ({advice['present_days']:g} days)")  # fmt: skip
    if advice["days"] is not None:
        ax.axvline(
            advice["days"], color="black", linewidth=2, label=f"advised warm-up ({advice['days']:g} days)"
        )
    if advice["cut_days"].get(unit) is not None:
        cut = advice["cut_days"][unit]
        ax.plot([cut], [0], marker="^", color="black", markersize=9, clip_on=False, linestyle="none",
                label=f"this unit's own cut, MSER-5 ({cut:g} days)")  # fmt: skip
    ax.set(title=short_name(unit), ylabel="occupied beds", ylim=(0, 1.05 * beds), xlim=(0, width * len(path)))
    return ax


def week_of_unit(
    hours: Sequence[Mapping[str, Any]], basis: Mapping[str, Any], ax: Axes, *, unit: str
) -> Axes:
    """One unit's mean occupied beds by hour of the week, Monday first, with its simultaneous band."""
    edges = np.arange(len(hours) + 1)
    mean = np.array([one["mean"] for one in hours], float)
    low = high = mean
    if basis["method"][unit] is not None:
        low, high = (np.array([one[end] for one in hours], float) for end in ("low", "high"))
        ax.stairs(high, edges, baseline=low, fill=True, color="0.8",
                  label=f"band for all 168 hours at once ({100 * basis['confidence']:g} %)")  # fmt: skip
    ax.stairs(mean, edges, color="black", linewidth=1.4, baseline=None, label="mean of the runs")
    for day in range(1, 7):
        ax.axvline(24 * day, color="0.9", linewidth=0.8, zorder=0)
    ax.set_xticks(24 * np.arange(7) + 12, DAYS)
    ax.set_xticks(6 * np.arange(29), minor=True)
    ax.tick_params(axis="x", which="major", length=0)
    room = 0.06 * max(high.max() - low.min(), 0.1)
    ax.set(
        title=short_name(unit),
        ylabel="occupied beds",
        xlim=(0, 168),
        ylim=(low.min() - room, high.max() + room),
    )
    return ax


def save_warm_up(advice: Mapping[str, Any], beds: Mapping[str, int], folder: Path) -> list[Path]:
    """Draws `warm-up.png` and `.svg`, a panel a unit."""
    figure, axes = _panels(len(beds))
    for ax, (unit, count) in zip(axes, beds.items(), strict=True):
        warm_up_path(advice, ax, unit=unit, beds=count)
        ax.legend(fontsize=8, loc="lower right")
    axes[-1].set_xlabel("days from the start of the run, every unit empty")
    return save_figure(figure, folder, "warm-up")


def save_hour_of_week(week: Mapping[str, Any], basis: Mapping[str, Any], folder: Path) -> list[Path]:
    """Draws `hour-of-week.png` and `.svg`, a panel a unit."""
    figure, axes = _panels(len(week))
    for ax, (unit, hours) in zip(axes, week.items(), strict=True):
        week_of_unit(hours, basis, ax, unit=unit)
    axes[0].legend(fontsize=8, loc="best")
    axes[-1].set_xlabel("hour of the week (ticks: every 6 hours); the axes of beds do not begin at 0")
    return save_figure(figure, folder, "hour-of-week")


def _panels(count: int) -> tuple[Any, Sequence[Axes]]:
    figure, axes = plt.subplots(count, 1, figsize=(9, 0.8 + 2.7 * count), squeeze=False)
    return figure, axes[:, 0]
