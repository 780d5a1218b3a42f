"""The figures of a notebook: whole matplotlib Figures that leave the notebook's own settings as they were."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from typing import Any

import matplotlib
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from analysis.games import GameAnalysis

AS_WRITTEN = {"text.parse_math": False}  # a $ in a unit's name is a $


@contextmanager
def _undisturbed() -> Iterator[None]:
    """The rooms of figures choose a backend for files when they are loaded; a chosen one comes back."""
    before = matplotlib.get_backend(auto_select=False)
    with matplotlib.rc_context():
        matplotlib.rcParams.update(AS_WRITTEN)
        try:
            yield
        finally:
            if before is not None:
                matplotlib.use(before)


def _figure(width: float, height: float) -> Figure:
    figure = Figure(figsize=(width, height), layout="constrained")
    FigureCanvasAgg(figure)
    return figure


def payoff_figure(game: GameAnalysis) -> Figure:
    """Both players' payoffs, side by side."""
    with _undisturbed():
        from analysis.figures import payoff_heat_map

        rows, columns = game.table.profiles.shape
        figure = _figure(2 * (2.6 + 0.36 * min(columns, 40)), 2.4 + 0.32 * min(rows, 40))
        for player, ax in enumerate(figure.subplots(1, 2)):
            payoff_heat_map(game, ax, player=player)
    return figure


def agreement_figure(document: Mapping[str, Any]) -> Figure:
    """Every z, and each unit's occupancy."""
    with _undisturbed():
        from analysis.figures import verification_occupancy, verification_z

        units = list(dict.fromkeys(one["where"] for one in document["measures"] if one["where"] != "network"))
        tested = sum(one["z"] is not None for one in document["measures"])
        figure = _figure(12, max(4.5, 0.17 * tested + 1, 2.6 * len(units)))
        grid = figure.add_gridspec(len(units), 2, width_ratios=(1.1, 1))
        verification_z(document, figure.add_subplot(grid[:, 0]))
        for place, unit in enumerate(units):
            verification_occupancy(document, figure.add_subplot(grid[place, 1]), where=unit)
    return figure


def comparison_figure(document: Mapping[str, Any]) -> Figure:
    """Differences in patients turned away and transferred a year, with their bands."""
    with _undisturbed():
        from analysis.figures_policies import MOST_ROWS, difference_forest

        pairs = min(MOST_ROWS, len({(one["policy"], one["against"]) for one in document["differences"]}))
        figure = _figure(11, 1.8 + 0.45 * max(1, pairs))
        shown = {"turned_away_per_day": "turned away", "transfers_per_day": "transfers"}
        for ax, (measure, reads) in zip(figure.subplots(1, 2, sharey=True), shown.items(), strict=True):
            difference_forest(document, ax, measure=measure, reads=reads)
    return figure
