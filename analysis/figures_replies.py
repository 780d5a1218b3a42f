"""Pictures of what selfish rules cost over the weight of a transfer, and of best replies that cross at equilibria."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from matplotlib.axes import Axes
from matplotlib.ticker import MaxNLocator

from analysis.beyond_pure import Beyond
from analysis.figures import plt, save_figure, short_name

BLUE, ORANGE = "#0072B2", "#D55E00"  # told apart by colour-blind readers, and of different greys


def replies(found: Beyond, ax: Axes) -> Axes:
    """Both players' best replies over the other's threshold, with sets that may hold them; they cross at equilibria.

    The first player's replies run from left to right (its threshold is on the horizontal axis), the second's upwards.
    """
    game, bands = found.game, found.bands
    assert bands is not None
    names = [short_name(name) for name in game.table.profiles.players]
    across, up = (np.array(mine, float) for mine in game.table.profiles.plain().values())
    _sets(
        ax,
        np.argwhere(bands.possible[0]),
        across,
        up,
        "_",
        BLUE,
        f"possible best replies of {names[0]}",
        game.is_exact,
    )
    _sets(
        ax,
        np.argwhere(bands.possible[1]),
        across,
        up,
        "|",
        ORANGE,
        f"possible best replies of {names[1]}",
        game.is_exact,
    )
    first, second = (bands.estimated[player].argmax(axis=player) for player in (0, 1))
    label = "best reply" if game.is_exact else "estimated best reply"
    ax.plot(
        across[first], up, color=BLUE, linestyle="-", marker="o", markersize=5, label=f"{label} of {names[0]}"
    )
    ax.plot(across, up[second], color=ORANGE, linestyle="--", marker="s", markersize=5, markerfacecolor="white",
            label=f"{label} of {names[1]}")  # fmt: skip
    met = np.array([one.profile for one in game.equilibria]).reshape(-1, 2)
    said = "equilibrium" if game.is_exact else "possible equilibrium"
    ax.scatter(across[met[:, 0]], up[met[:, 1]], marker="D", s=90, facecolors="none", edgecolors="black",
               linewidths=1.5, label=said, zorder=4)  # fmt: skip
    ax.set(
        title="Best replies cross at equilibria",
        xlabel=f"closure threshold of {names[0]} (beds)", ylabel=f"closure threshold of {names[1]} (beds)",
    )  # fmt: skip
    for axis in (ax.xaxis, ax.yaxis):
        axis.set_major_locator(MaxNLocator(integer=True))
    ax.grid(color="0.9")
    ax.legend(loc="upper center", bbox_to_anchor=(0.5, -0.14), ncols=2, frameon=False, fontsize=8)
    return ax


def _sets(
    ax: Axes,
    cells: np.ndarray,
    across: np.ndarray,
    up: np.ndarray,
    marker: str,
    colour: str,
    label: str,
    exact: bool,
) -> None:
    """A dash in every cell whose strategy may be a best reply; an exact table needs none."""
    if not exact:
        ax.scatter(across[cells[:, 0]], up[cells[:, 1]], marker=marker, s=160, color=colour, alpha=0.6, linewidths=2.2,
                   label=label, zorder=1)  # fmt: skip


def price_curve(found: Beyond, ax: Axes) -> Axes:
    """The loss a year at the worst equilibrium beyond the least loss, over the weight of a transfer."""
    rows = found.study.over_weights
    weights = np.array([row.weight for row in rows])
    mean, low, high = (
        np.array(
            [
                np.nan if getattr(row.lost_per_year, end) is None else getattr(row.lost_per_year, end)
                for row in rows
            ]
        )
        for end in ("mean", "low", "high")
    )
    if not np.isnan(low).all():
        ax.fill_between(weights, low, high, color=BLUE, alpha=0.25, hatch="//", edgecolor=BLUE, linewidth=0,
                        label=f"{100 * found.game.confidence:g} % band at each weight")  # fmt: skip
    ax.plot(weights, mean, color="black", marker="o", markersize=4,
            label="exact" if found.game.is_exact else "estimated table")  # fmt: skip
    turning = found.game.turning
    if turning.weight is not None and turning.weight <= weights[-1]:
        ax.axvline(turning.weight, color=ORANGE, linestyle="--", label="verdict turns")
    ax.set(
        title="What selfish rules cost if transfers count", xlim=(weights[0], 1.02 * weights[-1]), ylim=(0, None),
        xlabel="weight of a transfer (patients turned away)", ylabel="loss forgone at the worst equilibrium (a year)",
    )  # fmt: skip
    ax.legend(fontsize=8, frameon=False)
    return ax


def save_replies(found: Beyond, folder: Path) -> list[Path]:
    """Draws `replies.png` and `.svg`."""
    figure, ax = plt.subplots(figsize=(7, 6.5))
    replies(found, ax)
    return save_figure(figure, folder, "replies")


def save_price_curve(found: Beyond, folder: Path) -> list[Path]:
    """Draws `price-over-weights.png` and `.svg`."""
    figure, ax = plt.subplots(figsize=(6.5, 4.5))
    price_curve(found, ax)
    return save_figure(figure, folder, "price-over-weights")
