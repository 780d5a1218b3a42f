"""Figures of a sweep and of an alignment: `(document, ax) -> ax`, no computing, readable in grey."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import seaborn as sns
from matplotlib import pyplot as plt
from matplotlib.axes import Axes
from matplotlib.patheffects import Normal, Stroke

from analysis.figures import save_figure, short_name

MARKERS = "osD^vP*X"
COLOURS = sns.color_palette("colorblind", 8)
LINES = ("-", "--", "-.", ":")
MOST_LINES = 5
MOST_ANNOTATED = 150
CONTOURS_READ = """What selfish closing costs (grey: no price)
lines: a tenth (solid) and half (dashed) of the highest excess over 1"""
LEAST_SCALE = 1.001  # of prices, so that rounding shows no colours
READS = {
    "demand": "demand (factor on every arrival rate)", "target": "target utilisation of every unit",
    "delay": "factor on the transfer delay", "cv": "coefficient of variation of stays",
    "soft": "share still admitted while closed", "transfer_weight": "weight of a transfer (patients turned away)",
}  # fmt: skip


def reads(axis: str) -> str:
    """An axis with its unit."""
    return READS.get(axis) or f"staffed beds of {short_name(axis.removeprefix('beds of '))}"


def value_of(point: Mapping[str, Any], axis: str) -> Any:
    """Where a point stands along an axis."""
    if axis.startswith("beds of "):
        return point["beds"][axis.removeprefix("beds of ")]
    return point.get(axis)


def of_first(
    points: Sequence[Mapping[str, Any]], but: Sequence[str], axes: Mapping[str, Sequence[Any]]
) -> list[Any]:
    """The points at the first value of every axis but some."""
    fixed = {axis: values[0] for axis, values in axes.items() if axis not in but}
    return [one for one in points if all(value_of(one, axis) == value for axis, value in fixed.items())]


def held(axes: Mapping[str, Sequence[Any]], but: Sequence[str | None]) -> str:
    """Where the other axes that vary are held, as a second line of a title."""
    others = {axis: values[0] for axis, values in axes.items() if len(values) > 1 and axis not in but}
    said = ", ".join(f"{short_name(axis.replace('_', ' '))} {value:g}" for axis, value in others.items())
    return f"\n(at {said})" if said else ""


def price_surface(document: Mapping[str, Any], ax: Axes, *, across: str, down: str) -> Axes:
    """The price of anarchy over two axes: a heat map, with contours where it is large enough to have any."""
    axes = document["axes"]
    points = of_first(document["points"], (across, down), axes)
    prices = np.full((len(axes[down]), len(axes[across])), np.nan)
    for one in points:
        price = one["price_of_anarchy"]["mean"]
        place = axes[down].index(value_of(one, down)), axes[across].index(value_of(one, across))
        prices[place] = np.nan if price is None else price
    sns.heatmap(
        prices, ax=ax, cmap="cividis_r", mask=np.isnan(prices), vmin=1.0, vmax=np.nanmax(prices, initial=LEAST_SCALE),
        annot=prices.size <= MOST_ANNOTATED, fmt=".3f", annot_kws={"fontsize": 7}, xticklabels=_ticks(axes[across]),
        yticklabels=_ticks(axes[down]), cbar_kws={"label": "price of anarchy (ratio; darker is dearer)"},
    )  # fmt: skip
    ax.set_facecolor("0.85")
    _contours(prices, ax)
    ax.invert_yaxis()
    ax.set(
        xlabel=reads(across),
        ylabel=reads(down),
        title=CONTOURS_READ + held(axes, (across, down)),
    )
    ax.tick_params(axis="y", rotation=0)
    return ax


def _contours(prices: np.ndarray, ax: Axes) -> None:
    known = prices[~np.isnan(prices)]
    if min(prices.shape) < 2 or not known.size or known.max() - 1 < 1e-4:
        return
    step = 1 + (known.max() - 1) * np.array([0.1, 0.5])
    across, down = (np.arange(n) + 0.5 for n in prices.shape[::-1])
    masked = np.ma.masked_invalid(prices)
    lines = ax.contour(across, down, masked, levels=step, colors="black", linewidths=0.9, linestyles=LINES)
    lines.set_path_effects([Stroke(linewidth=2.2, foreground="white"), Normal()])


def _ticks(values: Sequence[float]) -> list[str]:
    return [f"{value:g}" for value in values]


def spread(values: Sequence[Any]) -> list[Any]:
    """At most MOST_LINES of the values, the ends among them."""
    if len(values) <= MOST_LINES:
        return list(values)
    return [values[round(place)] for place in np.linspace(0, len(values) - 1, MOST_LINES)]


def price_slices(document: Mapping[str, Any], ax: Axes, *, along: str, by: str | None) -> Axes:
    """The price along one axis with its bands, a line for some values of another."""
    axes = document["axes"]
    lines = [None] if by is None else spread(axes[by])
    for place, value in enumerate(lines):
        points = of_first(document["points"], (along, *([] if by is None else [by])), axes)
        mine = [one for one in points if by is None or value_of(one, by) == value]
        label = "" if by is None else f"{by.replace('_', ' ')} {value:g}"
        _line(ax, mine, along, place, label)
    ax.axhline(1, color="0.5", linewidth=0.8)
    ax.set(
        xlabel=reads(along), ylabel="price of anarchy (ratio)",
        title="Price of anarchy, with intervals where simulated" + held(axes, (along, by)),
    )  # fmt: skip
    if by is not None:
        ax.legend(fontsize=8)
    return ax


def _line(ax: Axes, points: Sequence[Mapping[str, Any]], along: str, place: int, label: str) -> None:
    colour, marker = COLOURS[place % len(COLOURS)], MARKERS[place % len(MARKERS)]
    at = [value_of(one, along) for one in points]
    mean, low, high = (
        np.array([one["price_of_anarchy"][end] for one in points], float) for end in ("mean", "low", "high")
    )
    ax.fill_between(at, low, high, color=colour, alpha=0.2, linewidth=0)
    ax.plot(at, mean, LINES[place % len(LINES)], marker=marker, markersize=4, color=colour, label=label)


def save_sweep(document: Mapping[str, Any], folder: Path) -> list[Path]:
    """Draws `sweep-surface`, `sweep-slices` and `sweep-weights`, as far as the axes that vary allow."""
    axes = document["axes"]
    varied = [axis for axis in document["varied"] if len(axes[axis]) > 1 and axis != "transfer_weight"]
    written = []
    if len(varied) >= 2:
        down, across = varied[:2]
        figure, ax = plt.subplots(
            figsize=(
                max(6.4, 2.6 + 0.55 * min(len(axes[across]), 30)),
                max(4.0, 2.2 + 0.42 * min(len(axes[down]), 30)),
            )
        )
        price_surface(document, ax, across=across, down=down)
        written += save_figure(figure, folder, "sweep-surface")
    if varied:
        figure, panels = plt.subplots(
            1, min(2, len(varied)), figsize=(5.6 * min(2, len(varied)), 4.2), squeeze=False
        )
        for place, along in enumerate(varied[:2]):
            by = varied[1 - place] if len(varied) > 1 else None
            price_slices(document, panels[0, place], along=along, by=by)
        written += save_figure(figure, folder, "sweep-slices")
    if len(axes.get("transfer_weight", ())) > 1:
        figure, ax = plt.subplots(figsize=(6.4, 4.4))
        price_slices(document, ax, along="transfer_weight", by=varied[0] if varied else None)
        written += save_figure(figure, folder, "sweep-weights")
    return written
