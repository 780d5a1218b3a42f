"""A sweep as a document, with what it says in words; its rows as CSV."""

from __future__ import annotations

import csv
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

from analysis.goals import goal_of, welfare_of
from analysis.settings import Grid
from analysis.sweeping import EXACT, SIMULATED, Network, Point, point_document, with_target

POINTWISE = (
    "Each interval holds at its own point, whichever of the possible profiles are the equilibria; over a whole grid "
    "some intervals miss. `align` makes one statement that holds over targets and demands together."
)
NOT_EXACT_PLACES = (
    "What happens at simulated points is a mean without an interval; `game` shows any one point in full."
)


def sweep_document(grid: Grid, networks: Sequence[Network], points: Sequence[Point]) -> dict[str, Any]:
    """Plain values, without NaN. networks: all that were asked for; points: those that are finished."""
    found = [point_document(point) for point in points]
    first = networks[0]
    target = grid.targets[0]
    return {
        "axes": axes_document(grid),
        "varied": varied(grid),
        "goal": goal_of(with_target(first.scenario, target)).reads,
        "welfare": welfare_words(grid, first),
        "networks": [
            one.setting.to_dict() | {"method": one.method, "why": one.why, "cells": one.profiles.cells}
            for one in networks
        ],
        "methods": list(method_sentences(networks, len(grid.targets) * len(grid.weights))),
        "points": found,
        "points_asked_for": grid.points,
        "findings": list(
            _findings(found, "patients a year" if _in_patients(grid, first) else "a year of that loss")
        ),
        "notes": [POINTWISE, NOT_EXACT_PLACES] if any(one["method"] == SIMULATED for one in found) else [],
    }


def axes_document(grid: Grid) -> dict[str, Any]:
    """The values along every axis that is not as in the file."""
    axes: dict[str, Any] = {"demand": list(grid.demands)}
    axes |= {
        "target": list(grid.targets),
        "delay": list(grid.delays),
        "cv": list(grid.cvs),
        "soft": list(grid.softs),
        "transfer_weight": list(grid.weights),
    }
    axes |= {f"beds of {name}": list(counts) for name, counts in grid.beds}
    return {name: values for name, values in axes.items() if values != [None]}


def varied(grid: Grid) -> list[str]:
    """The axes with more than one value, or the demand where there is none."""
    return [name for name, values in axes_document(grid).items() if len(values) > 1] or ["demand"]


def welfare_words(grid: Grid, network: Network) -> str:
    """What the network values, in words."""
    if grid.weights != (None,):
        return "patients turned away a day + weight x transfers a day, over the weights of the sweep"
    return welfare_of(network.scenario).reads


def method_sentences(networks: Sequence[Network], readings: int) -> Iterator[str]:
    """Which networks are exact, which are simulated, and why. readings: points that share one network."""
    for method, verb in ((EXACT, "solved by the exact chain"), (SIMULATED, "simulated")):
        mine = [one for one in networks if one.method == method]
        if mine:
            plural = "network is" if len(mine) == 1 else "networks are"
            yield f"{len(mine)} {plural} {verb} ({_why(mine)}), once each; {readings} points are read from every one."


def _why(networks: Sequence[Network]) -> str:
    """The first reason, and how many more there are."""
    whys = list(dict.fromkeys(why for one in networks for why in one.whys))
    more = f"; and {len(whys) - 1} more, in --json" if len(whys) > 1 else ""
    return whys[0] + more


def _in_patients(grid: Grid, network: Network) -> bool:
    return grid.weights == (None,) and welfare_of(network.scenario).kind == "throughput"


def _findings(points: Sequence[Mapping[str, Any]], unit: str) -> Iterator[str]:
    """The highest price, and where it is 1 throughout. unit: of the welfare forgone."""
    priced = [one for one in points if _price(one) is not None]
    if not priced:
        yield "No point has a price of anarchy (see the reasons in --json)"
        return
    worst = max(priced, key=lambda one: _price(one) or 0.0)
    yield f"The highest price of anarchy is {_price(worst):.4f}, at {where(worst)}" + _ends(
        worst["price_of_anarchy"]
    )
    lost = worst["lost_per_year"]["mean"]
    if lost is not None:
        yield f"There the worst equilibrium costs the network {lost:.1f} {unit}"
    none = sum(
        one["price_of_anarchy"]["high"] is not None and one["price_of_anarchy"]["high"] < 1.00005
        for one in points
    )
    yield f"At {none} of {len(points)} points the price of anarchy is 1.0000 as far as can be told"  # fmt: skip


def _price(one: Mapping[str, Any]) -> float | None:
    return one["price_of_anarchy"]["mean"]


def _ends(price: Mapping[str, Any]) -> str:
    if price["low"] is None or price["low"] == price["high"]:
        return ""
    return f" ({price['low']:.4f} to {price['high']:.4f})"


def where(one: Mapping[str, Any]) -> str:
    """A point in words."""
    parts = [f"demand x {one['demand']:g}"]
    for key in ("target", "delay", "cv", "soft", "transfer_weight"):
        if one.get(key) is not None:
            parts.append(f"{key.replace('_', ' ')} {one[key]:g}")
    parts += [f"{beds} beds in {unit}" for unit, beds in one.get("beds", {}).items()]
    return ", ".join(parts)


def write_rows(path: Path, rows: Sequence[Mapping[str, Any]]) -> None:
    """A CSV file in UTF-8 with every column of any row; an empty field where there is no value."""
    columns = list(dict.fromkeys(key for row in rows for key in row))
    with path.open("w", encoding="utf-8", newline="") as opened:
        writer = csv.DictWriter(opened, columns, restval="")
        writer.writeheader()
        writer.writerows(rows)
