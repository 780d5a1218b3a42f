"""A study through the command, as an outsider has it: a file, `brimline game ... --json`, and what stands in it."""

from __future__ import annotations

import contextlib
import io
import json
from pathlib import Path
from typing import Any

import numpy as np

from analysis.command.entry import run
from sim.scenario import Scenario
from tests.outside.facts import in_toml
from tests.statistical.core import ALPHA, Bench, Figure, Study, at_least, at_most
from tests.statistical.pool import Experiments

MOST = 100  # commands
REDUCED = 5
REPLICATIONS = 20


def write(scenario: Scenario, path: Path) -> None:
    """The scenario as a file."""
    plain = scenario.model_dump(mode="json", by_alias=True, exclude_none=True, exclude_defaults=True)
    path.write_text("\n".join(f"{key} = {in_toml(value)}" for key, value in plain.items()), encoding="utf-8")


def game(path: Path, *options: object) -> dict[str, Any]:
    """The document of one command."""
    out, err = io.StringIO(), io.StringIO()
    with contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
        status = run(["game", str(path), "--json", "--workers", "1", *map(str, options)])
    if status:
        raise RuntimeError(err.getvalue())
    return json.loads(out.getvalue())


def profiles(document: dict[str, Any]) -> set[tuple[int, ...]]:
    """The listed equilibria, as thresholds."""
    return {tuple(one["thresholds"].values()) for one in document["equilibria"]}


def confirmed(document: dict[str, Any]) -> set[tuple[int, ...]]:
    """The confirmed ones, possible or not."""
    listed = [one["thresholds"] for one in document["equilibria"] if one["verdict"] == "confirmed"]
    others = [one.get("thresholds", one) for one in document["confirmed_only"]]
    return {tuple(one.values()) for one in listed + others}


def command_study(bench: Bench) -> list[Figure]:
    """Seeds of its own for each command: what is listed holds the equilibria of `--exact`, what is confirmed is within
    epsilon, and the price lies in its interval."""
    path = bench.folder / "contested.toml"
    bench.folder.mkdir(parents=True, exist_ok=True)
    write(bench.truth("contested").scenario, path)
    exact = game(path, "--exact")
    truth, price = profiles(exact), exact["price_of_anarchy"]
    regret = bench.truth("contested").regret
    count = MOST if bench.effort.pool else REDUCED
    held, wrong, priced = [], [], []
    for seed in range(1000, 1000 + count):
        found = game(path, "--replications", REPLICATIONS, "--seed", seed, "--engine", "compiled")
        held.append(truth <= profiles(found))
        wrong.append(any(regret[cell] > found["epsilon"]["value"] for cell in confirmed(found)))
        band = found["price_of_anarchy"]
        priced.append(band["low"] is None or band["low"] - 1e-12 <= price <= band["high"] + 1e-12)
    sample = Experiments(np.empty((count, 0)), float(count))
    return [
        at_least("every equilibrium is listed", float(np.mean(held)), 1 - ALPHA, sample),
        at_most("a confirmed one is none", float(np.mean(wrong)), ALPHA, sample),
        at_least("the price of anarchy is in its interval", float(np.mean(priced)), 1 - ALPHA, sample),
    ]


STUDIES = [Study("command-contested-20", "R = 20, `game --json`", command_study)]
