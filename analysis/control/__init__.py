"""Central control: the best rule that sees the whole network's state, and what fixed thresholds forgo to it."""

from analysis.control.comparison import Comparison, compared
from analysis.control.rule import ControlResult, best_control
from analysis.control.solver import Bounds

__all__ = ["Bounds", "Comparison", "ControlResult", "best_control", "compared"]
