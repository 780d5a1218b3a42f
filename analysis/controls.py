"""Control variates: what chance offered the units is known, and its mean too, so part of the error can be taken away.

Regression on centred controls: the adjusted mean is the intercept, its error has replications - 1 - controls degrees
of freedom and the usual inflation for estimated coefficients. Source: Lavenberg and Welch 1981, "A perspective on the
use of control variables to increase the efficiency of Monte Carlo simulations" (from memory).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from sim.offered import drawn_offer, expected_offer
from sim.scenario import Scenario

LEAST_DEGREES = 5
ROUNDING = 1e-20  # a share of the sum of squares


@dataclass(frozen=True)
class Controls:
    """Control variates less their known means, (replications, controls), without one that others determine."""

    names: tuple[str, ...]
    values: np.ndarray

    @property
    def degrees(self) -> int:
        """Degrees of freedom that are left to every error."""
        return len(self.values) - 1 - len(self.names)

    @cached_property
    def _basis(self) -> np.ndarray:
        """Orthonormal columns that span the constant and the controls, (replications, 1 + controls)."""
        return np.linalg.qr(np.column_stack([np.ones(len(self.values)), self.values]))[0]

    @cached_property
    def weights(self) -> np.ndarray:
        """(replications,), adding up to 1: the adjusted mean of anything is its mean with these weights."""
        design = np.column_stack([np.ones(len(self.values)), self.values])
        return np.linalg.pinv(design)[0]

    def adjust(self, values: np.ndarray, own: np.ndarray | None = None) -> np.ndarray:
        """Values (replications, ...) whose plain mean is the adjusted mean and whose plain error is the proper one.

        Their usual standard error, sd / sqrt(replications), holds the inflation for estimated coefficients; it has
        `degrees` degrees of freedom, one less with `own`: a further control for each value, less its known mean, of
        the same shape. What the controls determine wholly gets its exact mean, without an error.
        """
        flat = np.asarray(values, float).reshape(len(values), -1)
        mean, residual = self._fit(flat)
        factor, degrees = np.square(self.weights).sum(), self.degrees
        if own is not None:
            known, rest = self._fit(np.asarray(own, float).reshape(flat.shape))
            size = np.square(rest).sum(axis=0)
            slope = np.divide((rest * residual).sum(axis=0), size, out=np.zeros(len(size)), where=size > 0)
            mean, residual = mean - slope * known, residual - slope * rest
            factor = factor + np.divide(known**2, size, out=np.zeros(len(size)), where=size > 0)
            degrees -= 1
        spread = np.square(flat - flat.mean(axis=0)).sum(axis=0)
        residual[:, np.square(residual).sum(axis=0) <= ROUNDING * np.maximum(spread, mean**2)] = 0
        n = len(flat)
        scale = np.sqrt(n * (n - 1) * factor / degrees)
        return (mean + scale * residual).reshape(np.shape(values))

    def _fit(self, flat: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Intercepts and residuals of columns; a constant column is its own mean."""
        mean = np.where(np.ptp(flat, axis=0) > 0, self.weights @ flat, flat[0])
        return mean, flat - self._basis @ (self._basis.T @ flat)


def no_controls(replications: int) -> Controls:
    """No control at all: adjusting is then averaging."""
    return Controls((), np.empty((replications, 0)))


def offered_controls(scenario: Scenario, replications: Sequence[int]) -> Controls | None:
    """Arrivals and offered work by home unit in these replications; None where too few degrees would be left.

    replications: their numbers, in the order of the values to be adjusted.
    """
    names, columns = _candidates(scenario, replications)
    kept = _independent(columns)
    found = Controls(tuple(names[place] for place in kept), columns[:, kept])
    return found if kept and found.degrees >= LEAST_DEGREES else None


def _candidates(scenario: Scenario, replications: Sequence[int]) -> tuple[list[str], np.ndarray]:
    mean = expected_offer(scenario)
    drawn = [drawn_offer(scenario, int(one)) for one in replications]
    units = scenario.unit_names
    names = [f"arrivals of {name}" for name in units] + [f"work offered to {name}" for name in units]
    columns = np.array([[*(one.arrivals - mean.arrivals), *(one.work - mean.work)] for one in drawn])
    return names, columns.reshape(len(drawn), len(names))


def _independent(columns: np.ndarray) -> list[int]:
    """Places of columns that the constant and the columns before them do not determine."""
    kept: list[int] = []
    basis = np.full((len(columns), 1), 1 / np.sqrt(max(1, len(columns))))
    for place, column in enumerate(columns.T):
        if basis.shape[1] >= len(columns):
            break
        rest = column - basis @ (basis.T @ column)
        rest -= basis @ (basis.T @ rest)
        if np.linalg.norm(rest) > 1e-9 * max(np.linalg.norm(column), 1e-300):
            kept.append(place)
            basis = np.column_stack([basis, rest / np.linalg.norm(rest)])
    return kept


def variance_ratio(plain: np.ndarray, adjusted: np.ndarray) -> np.ndarray:
    """How many times smaller the adjusted mean's variance is; NaN where nothing is left of it but rounding."""
    before, after = plain.var(axis=0), adjusted.var(axis=0)
    return np.divide(before, after, out=np.full(np.shape(after), np.nan), where=after > ROUNDING * before)


def controls_document(controls: Controls | None, won: Any) -> dict[str, Any]:
    """What control variates did: which, degrees of freedom left, and the variance ratio won."""
    if controls is None:
        return {"used": False}
    return {
        "used": True,
        "names": list(controls.names),
        "degrees": controls.degrees,
        "variance_ratio": won,
    }
