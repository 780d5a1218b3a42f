"""Figures of the written report: drawn from documents alone, and set as inline SVG that asks for nothing outside."""

from __future__ import annotations

import io
import re
from collections.abc import Callable, Mapping, Sequence
from typing import Any
from xml.etree import ElementTree

import matplotlib
import numpy as np
import seaborn as sns
from matplotlib import pyplot as plt
from matplotlib.axes import Axes

from analysis.figures import short_name

SVG, XLINK = "http://www.w3.org/2000/svg", "{http://www.w3.org/1999/xlink}href"
MOST_CELLS_DRAWN = 2_000  # beyond, a heat map is one picture within the SVG
MARKS = {  # verdict -> marker, face, words
    "exact": ("D", "white", "equilibrium (exact)"),
    "confirmed": ("D", "white", "possible and confirmed"),
    "possible": ("s", "none", "possible, not confirmed"),
    "estimated": ("^", "white", "of the estimated table only"),
}
ElementTree.register_namespace("", SVG)


def occupancy(levels: Sequence[Any], ax: Axes, *, unit: str, closes_at: int | None = None) -> Axes:
    """The share of time with so many beds occupied: bars, with intervals where the numbers have them.

    levels: a number or `{"mean", "low", "high"}` for 0 beds, 1 bed and so on. closes_at: the closure threshold.
    """
    mean, low, high = (np.array([_end(one, key) for one in levels], float) for key in ("mean", "low", "high"))
    beds = np.arange(len(levels))
    ax.bar(beds, mean, width=0.85, color="0.75", edgecolor="0.4", linewidth=0.6, label="share of time")
    if not np.array_equal(low, high):
        ax.errorbar(beds, mean, yerr=[mean - low, high - mean], fmt="none", ecolor="black", elinewidth=1, capsize=2,
                    label="interval")  # fmt: skip
    if closes_at is not None:
        ax.axvline(
            closes_at - 0.5, color="black", linestyle="--", linewidth=1.2, label=f"closes at {closes_at}"
        )
    ax.xaxis.get_major_locator().set_params(integer=True)
    ax.set(title=short_name(unit), xlabel="occupied beds", ylabel="share of time", ylim=(0, None))
    ax.legend(fontsize=8)
    return ax


def _end(one: Any, key: str) -> float:
    if not isinstance(one, Mapping):
        return one
    return one["mean"] if one[key] is None else one[key]


def payoff_map(document: Mapping[str, Any], ax: Axes, *, player: str) -> Axes:
    """One player's payoffs over both players' strategies, with its best responses and every listed equilibrium."""
    players, strategies = document["players"], document["strategies"]
    values = np.array([[_end(cell, "mean") for cell in row] for row in document["payoffs"][player]], float)
    labels = [[_label(one) for one in strategies[who]] for who in players]
    sns.heatmap(
        values, ax=ax, cmap="cividis_r" if document["sense"] == "cost" else "cividis", xticklabels=labels[1],
        yticklabels=labels[0], rasterized=values.size > MOST_CELLS_DRAWN,
        cbar_kws={"label": f"payoff ({document['sense']})"},
    )  # fmt: skip
    ax.invert_yaxis()
    _mark(ax, list(_best(document, player)), "o", "none", f"best response of {short_name(player)}", 44)
    for verdict, (marker, face, words) in MARKS.items():
        _mark(ax, list(_listed(document, verdict)), marker, face, words, 62)
    ax.set(
        title=f"What {short_name(player)} {'pays' if document['sense'] == 'cost' else 'gains'}",
        xlabel=f"strategy of {short_name(players[1])}",
        ylabel=f"strategy of {short_name(players[0])}",
    )
    ax.tick_params(axis="y", rotation=0)
    ax.legend(loc="upper center", bbox_to_anchor=(0.5, -0.16), ncols=2, frameon=False, fontsize=8)
    return ax


def can_be_mapped(document: Mapping[str, Any]) -> bool:
    """Whether the document holds a whole table of two players."""
    return len(document["players"]) == 2 and all(document.get(key) for key in ("payoffs", "strategies"))


def _label(strategy: Any) -> str:
    if isinstance(strategy, Mapping):
        return " ".join(_label(one) for one in strategy.values())[:12]
    return f"{strategy:g}" if isinstance(strategy, float) else str(strategy)[:12]


def _best(document: Mapping[str, Any], player: str) -> Any:
    """(row, column) of every best response of the player."""
    own = document["players"].index(player)
    [other] = [who for who in document["players"] if who != player]
    rows, columns = document["strategies"][player], document["strategies"][other]
    for reply in document["best_responses"][player]:
        across = columns.index(reply["others"][other])
        yield from (
            (rows.index(one), across) if own == 0 else (across, rows.index(one)) for one in reply["best"]
        )


def _listed(document: Mapping[str, Any], verdict: str) -> Any:
    """(row, column) of the pure equilibria of a verdict."""
    for one in document["equilibria"]:
        chosen = one.get("strategies") or one.get("thresholds") or {}
        if (
            one.get("verdict") == verdict
            and one.get("kind") == "pure"
            and set(document["players"]) <= set(chosen)
        ):
            yield tuple(document["strategies"][who].index(chosen[who]) for who in document["players"])


def _mark(
    ax: Axes, cells: Sequence[tuple[int, int]], marker: str, face: str, label: str, size: float
) -> None:
    if cells:
        at = np.array(cells) + 0.5
        ax.scatter(at[:, 1], at[:, 0], marker=marker, s=size, facecolors=face, edgecolors="black", linewidths=1.3,
                   label=label, zorder=3)  # fmt: skip


def outcomes(rows: Mapping[str, tuple[float, float]], ax: Axes) -> Axes:
    """Patients turned away and moved in a year, side by side for each profile. rows: name -> (turned away, moved)."""
    at = np.arange(len(rows))
    for place, (words, colour, hatch) in enumerate((("turned away", "0.35", ""), ("moved", "0.85", "//"))):
        numbers = [both[place] for both in rows.values()]
        bars = ax.barh(at - 0.2 + 0.4 * place, numbers, height=0.38, color=colour, edgecolor="black", hatch=hatch,
                       linewidth=0.8, label=words)  # fmt: skip
        ax.bar_label(bars, fmt="%.1f", padding=3, fontsize=8)
    ax.set_yticks(at, list(rows))
    ax.invert_yaxis()
    ax.margins(x=0.12)
    ax.set(xlabel="patients a year, all homes", title="Turned away and moved")
    ax.legend(fontsize=8, loc="upper center", bbox_to_anchor=(0.5, -0.2), ncols=2, frameon=False)
    return ax


def best_replies(document: Mapping[str, Any], ax: Axes) -> Axes:
    """Two players' best replies over the other's threshold, with sets that may hold them; they cross at equilibria.

    The first player's threshold is on the horizontal axis.
    """
    players, strategies = document["players"], document["strategies"]
    for own, (marker, dash, line, face) in enumerate((("o", "_", "-", "black"), ("s", "|", "--", "white"))):
        who, other = players[own], players[1 - own]
        pairs = [
            (one["others"][other], reply)
            for one in document["best_responses"][who]
            for reply in one["best"][:1]
        ]
        said = document["possible_best_responses"][who]["replies"]
        sets = [
            (one["others"][other], reply)
            for one in said
            for reply in one["possible"]
            if document.get("possible")
        ]
        ends = slice(None, None, -1 if own == 0 else 1)
        if sets:
            ax.plot(*zip(*(pair[ends] for pair in sets), strict=True), dash, color="0.55", markersize=11,
                    markeredgewidth=2, label=f"possible best replies of {short_name(who)}")  # fmt: skip
        ax.plot(*zip(*(pair[ends] for pair in pairs), strict=True), line, marker=marker, markersize=5, color="black",
                markerfacecolor=face, linewidth=1, label=f"best reply of {short_name(who)}")  # fmt: skip
    met = [strategies_of for verdict in MARKS for strategies_of in _listed(document, verdict)]
    at = [(strategies[players[0]][row], strategies[players[1]][column]) for row, column in met]
    if at:
        ax.plot(*zip(*at, strict=True), "D", markersize=10, markerfacecolor="none", markeredgecolor="black",
                linestyle="", label="listed equilibrium")  # fmt: skip
    for axis, who in ((ax.xaxis, players[0]), (ax.yaxis, players[1])):
        axis.get_major_locator().set_params(integer=True)
        axis.set_label_text(f"closure threshold of {short_name(who)} (beds)")
    ax.grid(color="0.9")
    ax.set_title("Best replies")
    ax.legend(loc="upper center", bbox_to_anchor=(0.5, -0.14), ncols=2, frameon=False, fontsize=8)
    return ax


def loss_over_weights(rows: Sequence[Mapping[str, Any]], ax: Axes, *, turning: float | None) -> Axes:
    """The loss a year at the worst equilibrium beyond the least, over the weight of a transfer.

    rows: with `weight` and `lost_per_year`, a number or `{"mean", "low", "high"}`.
    """
    at = [row["weight"] for row in rows]
    mean, low, high = (
        np.array([_end(row["lost_per_year"], key) for row in rows], float) for key in ("mean", "low", "high")
    )
    if not np.array_equal(low, high):
        ax.fill_between(at, low, high, color="0.8", label="interval at each weight")
    ax.plot(at, mean, "-o", color="black", markersize=4, label="loss a year")
    if turning is not None and turning <= at[-1]:
        ax.axvline(turning, color="black", linestyle="--", linewidth=1, label="verdict turns")
    ax.set(title="What selfish rules cost if transfers count", xlabel="weight of a transfer (patients turned away)",
           ylabel="lost a year", ylim=(0, None))  # fmt: skip
    ax.legend(fontsize=8)
    return ax


# ---- inline SVG ----


def inline_svg(
    draw: Callable[[Axes], Any], *, prefix: str, title: str, description: str, size: tuple[float, float]
) -> str:
    """A figure as an SVG element to stand within a page: the same bytes every time, nothing asked from outside.

    draw: gets the axes. prefix: of every id, so that two figures never share one. size: width, height in inches.
    """
    settings = {"svg.fonttype": "none", "svg.hashsalt": f"brimline {prefix}"}
    with matplotlib.rc_context(settings):
        figure, ax = plt.subplots(figsize=size)
        try:
            draw(ax)
            written = io.StringIO()
            figure.savefig(written, format="svg", bbox_inches="tight", metadata={"Date": None})
        finally:
            plt.close(figure)
    return _inline(ElementTree.fromstring(written.getvalue()), prefix, title, description)


def _inline(svg: ElementTree.Element, prefix: str, title: str, description: str) -> str:
    for parent in list(svg.iter()):
        for child in [one for one in parent if one.tag in (f"{{{SVG}}}metadata", f"{{{SVG}}}style")]:
            parent.remove(child)
    for element in svg.iter():
        _own(element, prefix)
    for name, text in (("desc", description), ("title", title)):
        told = ElementTree.Element(f"{{{SVG}}}{name}", {"id": f"{prefix}-{name}"})
        told.text = text
        svg.insert(0, told)
    svg.attrib |= {
        "role": "img", "aria-labelledby": f"{prefix}-title {prefix}-desc", "stroke-linejoin": "round",
        "stroke-linecap": "butt", "focusable": "false",
    }  # fmt: skip
    return ElementTree.tostring(svg, encoding="unicode")


def _own(element: ElementTree.Element, prefix: str) -> None:
    """Ids of this figure's own, and attributes in the place of inline styles, which a strict page refuses."""
    for name, value in _styles(element.attrib.pop("style", "")):
        element.set(name, value)
    if XLINK in element.attrib:
        element.set("href", element.attrib.pop(XLINK))
    for name, value in list(element.attrib.items()):
        if name == "id":
            element.set("id", f"{prefix}-{value}")
        elif name == "href" and value.startswith("#"):
            element.set("href", f"#{prefix}-{value[1:]}")
        elif "url(#" in value:
            element.set(name, value.replace("url(#", f"url(#{prefix}-"))


def _styles(style: str) -> Sequence[tuple[str, str]]:
    """The declarations of an inline style as attributes; a `font` in its parts."""
    pairs = [tuple(part.strip() for part in one.split(":", 1)) for one in style.split(";") if ":" in one]
    attributes: list[tuple[str, str]] = []
    for name, value in pairs:
        if name != "font":
            attributes.append((name, value))
            continue
        size, family = re.search(r"(\d+(?:\.\d+)?px)\s+(.*)", value).groups()
        attributes += [("font-size", size), ("font-family", family)]
        attributes += [("font-weight", "bold")] if re.search(r"\b(bold|[6-9]00)\b", value) else []
    return attributes
