"""What `game --exact --control` adds: the best rule that sees the whole network, beside the game."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

from analysis.command.options import Request
from analysis.command.output import put_grid, put_table, put_text

FILE = "control.csv"
COLUMNS_AT_ONCE = 40
YARDSTICK = (
    "Central control is a yardstick: it sees every bed, decides for every home and knows the stated welfare only. "
    "Which patients it turns away although a bed is free is a consequence of that welfare, not advice."
)


def best_rule(request: Request, exact: bool) -> Any:
    """The best rule of the request's scenario; ScenarioError without `--exact`."""
    from analysis.control import best_control
    from analysis.goals import welfare_of
    from sim.errors import Fault, ScenarioError

    if not exact:
        rule, remedy = "needs --exact", "add --exact, or drop --control"
        fault = Fault(None, "--control", rule, "got a simulated game", remedy)
        raise ScenarioError([fault], request.scenario.source.file)
    return best_control(request.scenario, request.policy, welfare_of(request.scenario))


def beside(best: Any, analysis: Any) -> dict[str, Any]:
    """The `control` object of the game's document."""
    from analysis.control import compared

    return compared(best, analysis).to_dict()


def write_rule(best: Any, folder: Path) -> None:
    """Writes the rule state by state, `control.csv`."""
    from analysis.control.display import rule_frame

    rule_frame(best).to_csv(folder / FILE, index=False)


def show_control(document: dict[str, Any]) -> None:
    """The control object for a person: the welfares, how the loss splits, what comes with it, and the rule."""
    control = document["control"]
    put_text("", f"Central control ({control['states']} states). {YARDSTICK}")
    put_table("Welfare", ("rule", "a day"), _welfares(control))
    what = "patients" if document["welfare"]["kind"] == "throughput" else "loss"
    put_table("Forgone to central control", ("by", f"{what} a day", f"{what} a year"), list(_split(control)))
    _show_outcome(control["outcome"])
    for one in control["maps"]:
        _show_map(one, list(control["outcome"]["utilisation"]))
    if not control["maps"]:
        put_text(f"The rule is no grid of two numbers here; --out writes it to {FILE}, a row a state.", "")


def _welfares(control: dict[str, Any]) -> list[tuple[str, Any]]:
    return [
        ("best rule that sees the whole network", _between(control["welfare"])),
        ("best fixed thresholds", _six(control["best_static_welfare"])),
        ("best equilibrium", _six(control["best_equilibrium_welfare"])),
        ("worst equilibrium", _six(control["worst_equilibrium_welfare"])),
    ]


def _split(control: dict[str, Any]) -> Iterator[tuple[str, str, str]]:
    static, selfish = control["static_thresholds"], control["selfishness"]
    yield (
        "fixed thresholds: the best against control",
        *(_between(static[per]) for per in ("per_day", "per_year")),
    )
    if selfish is None:
        yield (control["reason"], "-", "-")
    else:
        yield (
            "selfishness: the worst equilibrium against the best",
            _six(selfish["per_day"]),
            _six(selfish["per_year"]),
        )


def _between(bounds: dict[str, float]) -> str:
    """Bounds as one number where they agree in the digits shown."""
    low, high = _six(bounds["low"]), _six(bounds["high"])
    return low if low == high else f"{low} to {high}"


def _six(value: float | None) -> str:
    return "-" if value is None else f"{value:.6f}"


def _show_outcome(outcome: dict[str, Any]) -> None:
    parts = (
        "turned_away_per_day",
        "refused_with_free_bed_per_day",
        "diverted_out_per_day",
        "utilisation",
    )
    put_table(
        "What comes with the best rule (a day; by home population, utilisation by unit)",
        ("home or unit", "turned away", "of these with a bed free in reach", "moved", "utilisation"),
        [(name, *(outcome[part].get(name) for part in parts)) for name in outcome["utilisation"]],
    )


def _show_map(one: dict[str, Any], units: list[str]) -> None:
    letters = ", ".join(f"{letter} {meaning}" for letter, meaning in one["letters"].items())
    for first in range(0, len(one["rows"][0]), COLUMNS_AT_ONCE):
        rows = [row[first : first + COLUMNS_AT_ONCE] for row in one["rows"]]
        put_grid(
            f"Best rule for {', '.join(one['groups'])} (home {one['home']}): {letters}\n"
            f"down: occupied beds of {units[0]}; across: of {units[1]}",
            ["", *map(str, range(first, first + len(rows[0])))],
            [[str(occupied), *row] for occupied, row in enumerate(rows)],
        )
