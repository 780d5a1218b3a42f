"""How the loss against central control splits: fixed thresholds on one side, selfishness on the other."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from typing import Any

from analysis.anarchy import DAYS_A_YEAR, NO_EQUILIBRIUM
from analysis.control.display import rule_maps
from analysis.control.rule import ControlResult
from analysis.control.solver import RELATIVE, Bounds
from analysis.games import GameAnalysis
from sim.errors import RunError


@dataclass(frozen=True)
class Comparison:
    """The welfare a day from central control down to the worst equilibrium, and what each step costs.

    control: bounds of the best welfare. best_static: of all profiles. best_equilibrium, worst_equilibrium:
    None where no equilibrium is listed. static_thresholds: what control gains over the best static profile,
    a day. selfishness: what that gains over the worst equilibrium, a day; None without an equilibrium.
    """

    result: ControlResult
    control: Bounds
    best_static: float
    best_equilibrium: float | None
    worst_equilibrium: float | None
    static_thresholds: Bounds
    selfishness: float | None

    def to_dict(self) -> dict[str, Any]:
        """The `control` object of the game's document."""
        problem = self.result.problem
        return {
            "welfare": self.control.to_dict(),
            "relative_tolerance": RELATIVE,
            "states": problem.states,
            "best_static_welfare": self.best_static,
            "best_equilibrium_welfare": self.best_equilibrium,
            "worst_equilibrium_welfare": self.worst_equilibrium,
            "static_thresholds": _a_day_and_a_year(self.static_thresholds),
            "selfishness": _a_day_and_a_year(self.selfishness),
            **({"reason": f"selfishness: {NO_EQUILIBRIUM}"} if self.selfishness is None else {}),
            "outcome": dataclasses.asdict(self.result.outcome),
            "maps": [one.to_dict() for one in rule_maps(self.result)],
        }


def compared(result: ControlResult, game: GameAnalysis) -> Comparison:
    """Central control beside the exact game of the same scenario and policy.

    Raises RunError where a profile beats the upper bound of control, which no sound answer can.
    """
    welfare, sense = game.table.welfare, game.table.welfare_goal.sense
    sign = 1.0 if sense == "gain" else -1.0
    static = float(welfare.max() if sense == "gain" else welfare.min())
    extremes = (game.cost.best, game.cost.worst)
    best, worst = (None if one is None else float(welfare[one]) for one in extremes)
    forgone = sorted(sign * (end - static) for end in (result.welfare.low, result.welfare.high))
    if forgone[1] < -RELATIVE * result.problem.arrivals_per_day:
        raise RunError(
            f"fixed thresholds beat the best rule of control by {-forgone[1]:.1e} a day; please report this scenario"
        )
    # Every profile is a rule that the controller could follow, so what it forgoes is never below 0.
    return Comparison(
        result, result.welfare, static, best, worst,
        static_thresholds=Bounds(max(0.0, forgone[0]), max(0.0, forgone[1])),
        selfishness=None if worst is None else sign * (static - worst) + 0.0,  # no minus before a 0
    )  # fmt: skip


def _a_day_and_a_year(loss: Bounds | float | None) -> dict[str, Any] | None:
    if loss is None:
        return None
    if isinstance(loss, Bounds):
        yearly = Bounds(DAYS_A_YEAR * loss.low, DAYS_A_YEAR * loss.high)
        return {"per_day": loss.to_dict(), "per_year": yearly.to_dict()}
    return {"per_day": loss, "per_year": DAYS_A_YEAR * loss}
