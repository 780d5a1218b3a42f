"""The exponential counterpart as a control variate: the same uniforms, exponential quantiles, means from the chain.

Each measure is adjusted by its own value in the counterpart, less the exact one. That costs a second run of every
replication and, beside arrivals and offered work, one degree of freedom. The chain's means are those of the long run:
what is left of the start after the warm-up is a bias here.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.chain import ExactResult
from analysis.confidence import critical_value, ratio_values
from analysis.measures import Measure, Sums, network_sums, unit_sums
from sim.record import Record
from sim.scenario import Scenario


@dataclass(frozen=True)
class Counterpart:
    """Records of the exponential counterpart, one a replication in the order of those adjusted, and exact measures."""

    names: tuple[str, ...]
    days: float
    sums: Sums
    whole: Sums
    exact: dict[str, Any]

    def measure(self, unit: str | None, measure: Measure) -> np.ndarray | None:
        """A measure of a unit (None: of the network) less its exact value, (replications,); None where it has none."""
        part = self.exact["network"] if unit is None else self.exact["units"][unit]
        sums = self.whole if unit is None else self._of(unit)
        value = part[measure.name]
        if value is None or sums[measure.base].sum() <= 0:
            return None
        return ratio_values(sums[measure.total], sums[measure.base]) - value

    def levels(self, unit: str) -> np.ndarray:
        """Shares of time by occupied beds less the exact ones, (levels, replications)."""
        exact = np.array(self.exact["units"][unit]["occupancy"])
        days = self.sums["occupancy_days"][:, self.names.index(unit), : len(exact)]
        return days.T / self.days - exact[:, None]

    def _of(self, unit: str) -> Sums:
        place = self.names.index(unit)
        return {name: values[:, place] for name, values in self.sums.items() if values.ndim == 2}


def counterpart_of(records: Sequence[Record], exact: ExactResult, scenario: Scenario) -> Counterpart:
    """The counterpart from its own records and the chain's result; `scenario` may be either of the two."""
    beds = np.array([unit.beds for unit in scenario.units], float)
    sums = unit_sums(records, beds, scenario.run.measured_days)
    return Counterpart(
        scenario.unit_names, scenario.run.measured_days, sums, network_sums(sums), exact.to_dict()
    )


FALSE_ALARM_RATE = 0.01
_EXACT = {
    "admitted": "admissions_per_day",
    "turned_away": "turned_away_per_day",
    "diverted_out": "diverted_out_per_day",
}


@dataclass(frozen=True)
class TableCounterpart:
    """The counterpart of a whole table. sums: its own, (replications, cells, units). exact: the same sums as the chain
    expects them, (1, cells, units)."""

    sums: Sums
    exact: Sums

    def known(
        self, signed: Callable[[Sums], np.ndarray | None], worth: Callable[[Sums], np.ndarray]
    ) -> tuple[np.ndarray | None, np.ndarray]:
        """What each payoff (None where its goal has no signed form) and each welfare is in the counterpart, less the
        exact value; by replication."""
        mine, value = signed(self.sums), signed(self.exact)
        payoffs = None if mine is None or value is None else mine - value
        return payoffs, worth(self.sums) - worth(self.exact)

    def check(self) -> dict[str, Any]:
        """Every utilisation against the chain, Bonferroni over cells and units that have any spread."""
        off = (self.sums["occupied_days"] - self.exact["occupied_days"]) / self.sums["bed_days"]
        n, spread = len(off), off.std(axis=0, ddof=1)
        tested = spread > 0
        z = np.abs(off.mean(axis=0)[tested]) / spread[tested] * np.sqrt(n)
        critical = critical_value(1 - FALSE_ALARM_RATE, n - 1, comparisons=max(1, z.size))
        return {
            "agrees": bool((z <= critical).all()),
            "measures_tested": int(z.size),
            "largest_z": float(z.max()) if z.size else None,
            "critical_z": critical,
            "false_alarm_rate": FALSE_ALARM_RATE,
        }


def table_counterpart(sums: Sums, units: Sequence[Sequence[Mapping[str, float]]]) -> TableCounterpart:
    """From the counterpart's sums and its exact measures, `units[cell][unit]`."""
    days, beds = sums["days"][:1], sums["bed_days"][:1]
    exact = {name: _table(units, measure) * days for name, measure in _EXACT.items()}
    exact |= {"occupied_days": _table(units, "utilisation") * beds, "bed_days": beds, "days": days}
    return TableCounterpart(sums, exact)


def _table(units: Sequence[Sequence[Mapping[str, float]]], measure: str) -> np.ndarray:
    return np.array([[[unit[measure] for unit in cell] for cell in units]])
