"""The stationary distribution of a banded chain without a single subtraction.

Grassmann, Taksar & Heyman, "Regenerative analysis and steady state distributions for Markov chains",
Operations Research 33 (1985): states are eliminated one after another, and the rate out of a state is the sum
of its rates to those that remain, never a difference. So every probability, however small, is right in its
leading digits. States go in blocks here, so that most of the work is matrix products.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

LARGEST_BLOCK = 32


@dataclass(frozen=True)
class Transitions:
    """The moves of a chain: from state `origin` to state `target` at `rate` a day, shape (moves,) each.

    Pairs may repeat; their rates add up. states: the number of states.
    """

    origin: NDArray[np.int64]
    target: NDArray[np.int64]
    rate: NDArray[np.float64]
    states: int


@dataclass(frozen=True)
class Band:
    """The window of states below each block that its elimination touches.

    starts: first state of each block. lowest: lowest state in each block's window.
    """

    starts: NDArray[np.int64]
    lowest: NDArray[np.int64]
    states: int

    @property
    def ends(self) -> NDArray[np.int64]:
        """The state after the last one of each block."""
        return np.append(self.starts[1:], self.states)

    @property
    def width(self) -> int:
        """The half bandwidth: how far apart two states of one window can be."""
        return int((self.ends - 1 - self.lowest).max())

    @property
    def work(self) -> float:
        """Multiply-adds of the elimination."""
        window = (self.ends - self.lowest).astype(float)
        return float((window**2 * (self.ends - self.starts)).sum())

    @property
    def bytes(self) -> int:
        """Memory of the band."""
        return 8 * self.states * (2 * self.width + 1)


def band_of(moves: Transitions) -> Band:
    """The band of a chain in the order of its states."""
    reach = _lowest_reach(moves)
    width = int((np.arange(moves.states) - reach).max())
    starts = np.arange(0, moves.states, min(max(width // 24, 1), LARGEST_BLOCK))
    return Band(starts, reach[starts], moves.states)


def _lowest_reach(moves: Transitions) -> NDArray[np.int64]:
    """For each state, the lowest state that it, or any later one, exchanges patients with."""
    lowest = np.arange(moves.states)
    np.minimum.at(lowest, np.maximum(moves.origin, moves.target), np.minimum(moves.origin, moves.target))
    return np.minimum.accumulate(lowest[::-1])[::-1]


def stationary(moves: Transitions, band: Band) -> NDArray[np.float64]:
    """The stationary probabilities of an irreducible chain, shape (states,).

    moves: its transitions, none from a state to itself. band: `band_of(moves)`.
    """
    if moves.states == 1:
        return np.ones(1)
    matrix = _skewed(moves, band.width)
    for start, end, lowest in reversed(list(zip(band.starts, band.ends, band.lowest, strict=True))):
        _eliminate(matrix, start, end, lowest)
    return _substitute(matrix, band)


def _skewed(moves: Transitions, width: int) -> NDArray[np.float64]:
    """The rates as a (states, states) view of a band; entries beyond `width` off the diagonal alias others.

    Row i of the band holds columns i - width to i + width. A row stride of twice the width, one less than the
    band's, puts each column under itself, so that any window near the diagonal is an ordinary matrix.
    """
    place = moves.origin * (2 * width) + moves.target + width
    band = np.bincount(place, weights=moves.rate, minlength=moves.states * (2 * width + 1))
    shape, step = (moves.states, moves.states), band.itemsize
    return np.lib.stride_tricks.as_strided(band[width:], shape, (2 * width * step, step))


def _eliminate(matrix: NDArray[np.float64], start: int, end: int, lowest: int) -> None:
    """Eliminates states end - 1 down to start (state 0 remains).

    A column then holds the days spent in its state, per day in a lower one, on excursions upwards from there.
    """
    for state in range(end - 1, max(start, 1) - 1, -1):
        onward, into = matrix[state, lowest:state], matrix[lowest:state, state]
        into /= onward.sum()
        if state > start:
            inside, below = slice(start, state), start - lowest
            matrix[inside, lowest:state] += np.multiply.outer(into[below:], onward)
            matrix[lowest:start, inside] += np.multiply.outer(into[:below], onward[below:])
    if start > lowest:
        rest, block = slice(lowest, start), slice(start, end)
        matrix[rest, rest] += matrix[rest, block] @ matrix[block, rest]


def _substitute(matrix: NDArray[np.float64], band: Band) -> NDArray[np.float64]:
    """Puts the states back in order, each from those below it, with powers of two kept apart where needed."""
    weight, power = np.zeros(band.states), np.zeros(band.states, dtype=np.int64)
    weight[0] = 1.0
    lowest = np.repeat(band.lowest, band.ends - band.starts)
    for state in range(1, band.states):
        low, power[state] = lowest[state], power[state - 1]
        weight[state] = weight[low:state] @ matrix[low:state, state]
        if not 1e-150 < weight[state] < 1e150:
            _rescale(weight[low : state + 1], power[low : state + 1])
    weight = np.ldexp(weight, power - (power + np.frexp(weight)[1])[weight > 0].max())
    return weight / weight.sum()


def _rescale(weight: NDArray[np.float64], power: NDArray[np.int64]) -> None:
    """Brings the largest weight of a window near 1; later states see this window only, in one scale."""
    shift = int(np.frexp(weight.max())[1])
    weight[:] = np.ldexp(weight, -shift)
    power += shift
