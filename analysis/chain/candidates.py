"""Stays of a few exponential phases that have given moments, in closed form.

Sources, all from memory: Tijms, "Stochastic Models: An Algorithmic Approach" (1994), for two moments;
Johnson & Taaffe, "Matching moments to phase distributions: mixtures of Erlang distributions of common order",
Stochastic Models 5 (1989); Bobbio, Horvath & Telek, "Matching three moments with minimal acyclic phase type
distributions", Stochastic Models 21 (2005), who show that one exponential before or after an Erlang, one of
the two bypassed with some probability, reaches all three moments that any acyclic stay of so many phases can.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Iterator

import numpy as np
from numpy.typing import ArrayLike, NDArray

from analysis.chain.phases import Moments
from sim.durations import Coxian, Duration, Erlang, ErlangPartInDays, Hyperexponential, MixtureInDays

ROUNDING = 1e-8
Coefficients = NDArray[np.float64]


def candidates(target: Moments, most_phases: int) -> Iterator[Duration]:
    """Stays of the target's mean and at most `most_phases` phases, those that meet its other moments among them."""
    mean = target.first
    square, cube = target.second / mean**2 - 1, target.third / mean**3
    yield Erlang.model_construct(family="erlang", mean=mean, stages=most_phases)
    yield from _two_moments(mean, square, most_phases)
    if most_phases >= 2:
        yield from two_phases_in_a_row(target)
    for first in range(1, most_phases):
        for second in range(1, most_phases - first + 1):
            yield from _two_erlangs_in_a_row(mean, square, cube, first, second)
    for stages in range(1, most_phases // 2 + 1):
        yield from _either_of_two_erlangs(mean, square, cube, stages)


def _two_moments(mean: float, square: float, most_phases: int) -> Iterator[Duration]:
    """Of a squared cv: k or k - 1 equal stages below 1 (Tijms 1994), two phases of balanced means above."""
    if square > 1 and most_phases >= 2:
        cv = math.sqrt(square)
        yield Hyperexponential.model_construct(family="hyperexponential", mean=mean, cv=cv)
    stages = math.ceil(1 / square - ROUNDING) if square > 0 else math.inf
    if square <= 1 and stages <= most_phases:
        root = math.sqrt(max(stages * (1 + square) - stages**2 * square, 0.0))
        fewer = max(stages * square - root, 0.0) / (1 + square)
        yield Erlang.model_construct(family="erlang", mean=mean, stages=stages)
        yield _row(mean / (stages - fewer), stages - 1, 1 - fewer, mean / (stages - fewer), 1)


def _row(early: float, first: int, share: float, late: float, second: int) -> Duration:
    """`first` stages of mean `early` days, then with probability `share` another `second` of mean `late`."""
    if first == 0:
        return Erlang.model_construct(family="erlang", mean=late * second, stages=second)
    rates = (float(1 / early),) * first + (float(1 / late),) * second
    goes_on = (1.0,) * (first - 1) + (float(share),) + (1.0,) * (second - 1)
    return Coxian.model_construct(family="coxian", rates=rates, goes_on=goes_on)


def two_phases_in_a_row(moments: Moments) -> Iterator[Duration]:
    """The stays of two phases, the second after the first with some probability, of those three moments.

    With f_n = E[X^n] / n! and phases of means a and b: f_2 = (a + b) f_1 - a b, f_3 = (a + b) f_2 - a b f_1.
    """
    first, second, third = moments.first, moments.second / 2, moments.third / 6
    if abs(second - first**2) < ROUNDING * second:  # as of an exponential stay
        return
    total = (third - first * second) / (second - first**2)
    product = total * first - second
    gap = total**2 - 4 * product
    if gap < 0 or total <= 0 or product <= 0:
        return
    long = (total + math.sqrt(gap)) / 2
    for early, late in ((long, product / long), (product / long, long)):
        if 0 < first - early <= late:
            yield _row(early, 1, (first - early) / late, late, 1)


def _two_erlangs_in_a_row(
    mean: float, square: float, cube: float, first: int, second: int
) -> Iterator[Duration]:
    """Every `_row` of those stages with the three moments given (square: of the cv; cube: E[X^3] / E[X]^3).

    Cumulants of the two parts add up. Those of the second part, in units of the mean, are polynomials of a
    stage's mean x of the first; and a second part of probability p and k stages of mean y has moments
    p k y, p k (k + 1) y^2 and p k (k + 1) (k + 2) y^3, which determines x.
    """
    k = second
    once, variance, skew = (
        [1.0, -first],
        [square, 0.0, -first],
        [cube - 3 * square - 1, 0.0, 0.0, -2.0 * first],
    )
    twice = _sum(variance, _product(once, once))
    thrice = _sum(skew, 3 * _product(once, variance), _product(once, once, once))
    equation = _sum((k + 1) * _product(thrice, once), -(k + 2) * _product(twice, twice))
    for root in np.roots(equation[::-1]):
        early = float(root.real)
        left, spread = np.polyval(once[::-1], early), np.polyval(twice[::-1], early)
        if abs(root.imag) < ROUNDING and early > 0 and left > 0 and spread > 0:
            late = max(spread / (left * (k + 1)), left / k)
            yield _row(mean * early, first, left / (k * late), mean * late, k)


def _sum(*polynomials: ArrayLike) -> Coefficients:
    """Polynomials as coefficients from the constant up, added."""
    total = np.zeros(max(map(np.size, polynomials)))
    for polynomial in polynomials:
        total[: np.size(polynomial)] += polynomial
    return total


def _product(*polynomials: ArrayLike) -> Coefficients:
    return functools.reduce(np.convolve, polynomials)


def _either_of_two_erlangs(mean: float, square: float, cube: float, stages: int) -> Iterator[Duration]:
    """Two Erlang stays of so many stages each, either taken with a probability (Johnson & Taaffe 1989).

    Over the moments of an Erlang stay of mean 1 the three moments become those of a distribution of two
    points, the means of the two, which are the roots of a quadratic.
    """
    second = (1 + square) * stages / (stages + 1)
    third = cube * stages**2 / ((stages + 1) * (stages + 2))
    if second <= 1 + ROUNDING or third <= second**2:
        return
    total = (third - second) / (second - 1)
    gap = math.sqrt(total**2 - 4 * (total - second))
    short, long = (total - second) * 2 / (total + gap), (total + gap) / 2
    weights = {short: (long - 1) / gap, long: (1 - short) / gap}
    parts = tuple(
        ErlangPartInDays.model_construct(family="erlang", mean=mean * points, stages=stages, weight=weight)
        for points, weight in weights.items()
    )
    yield MixtureInDays.model_construct(family="mixture", parts=parts)
