"""Mixed equilibria: games with known answers, certificates, and what a search must admit."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from analysis import mixed
from analysis.equilibria import mixed_regrets, pure_equilibria, regrets
from analysis.mixed import mixed_equilibria, reduced, scaled
from analysis.supports import count_supports, supports
from tests.analysis.builders import table


def firsts(search):
    """The first strategy's probability of each player, by equilibrium."""
    return sorted(tuple(round(float(mine[0]), 9) for mine in one.mix) for one in search.equilibria)


def pure_firsts(payoffs):
    return sorted(tuple(1.0 - k for k in profile) for profile in pure_equilibria(payoffs, "gain"))


PENNIES = np.array([[[1, -1], [-1, 1]], [[-1, 1], [1, -1]]], float)


def test_matching_pennies_has_one_equilibrium_and_it_mixes_evenly():
    """Textbook game: (1/2, 1/2) each, value 0; no pure equilibrium."""
    found = mixed_equilibria(PENNIES, "gain")
    assert pure_equilibria(PENNIES, "gain") == [] and firsts(found) == [(0.5, 0.5)]
    assert found.method.startswith("enumeration of all") and not found.may_be_incomplete


def test_battle_of_the_sexes():
    """Nau, Gomez-Canovas and Hansen 2004, "On the geometry of Nash equilibria and correlated equilibria", IJGT, section
    3: payoffs (3,2), (0,0), (0,0), (2,3) (game read in a copy of its data; mix computed): 3/5 and 2/5, pays 6/5."""
    payoffs = np.array([[[3, 0], [0, 2]], [[2, 0], [0, 3]]], float)
    found = mixed_equilibria(payoffs, "gain")
    assert pure_firsts(payoffs) == [(0, 0), (1, 1)]
    assert firsts(found) == [(0.6, 0.4)] and not found.equilibria[0].in_continuum
    mine, theirs = found.equilibria[0].mix
    assert mine @ payoffs[0] @ theirs == pytest.approx(6 / 5) == mine @ payoffs[1] @ theirs


def nine():
    payoffs = np.zeros((3, 2, 2, 2))
    payoffs[:, 0, 0, 0], payoffs[:, 1, 1, 0] = (9, 8, 12), (9, 8, 2)
    payoffs[:, 0, 1, 1], payoffs[:, 1, 0, 1] = (3, 4, 6), (3, 4, 4)
    return payoffs


def test_all_nine_equilibria_of_a_game_of_three():
    """McKelvey and McLennan 1996, "Computation of equilibria in finite games" (game and "nine" read second-hand; the
    probabilities computed)."""
    found = firsts(mixed_equilibria(nine(), "gain"))
    third, wanted = 1 / 3, []
    wanted += [(0.5, 0.5, 1), (0, third, third), (0.25, 1, 0.25), (0.5, third, 0.25), (0.25, 0.5, third)]
    assert found == sorted(tuple(round(p, 9) for p in one) for one in wanted)
    assert pure_firsts(nine()) == [(0, 0, 1), (0, 1, 0), (1, 0, 0), (1, 1, 1)]


def test_a_game_of_three_whose_only_equilibrium_is_irrational():
    """Nau et al. 2004 (as above), section 4 (game read; numbers computed to 12 digits)."""
    rows = [(3, 0, 2), (0, 1, 0), (0, 2, 0), (1, 0, 0), (1, 0, 0), (0, 3, 0), (0, 1, 0), (2, 0, 3)]
    payoffs = table(
        (2, 2, 2), lambda a, b, c: rows[a + 2 * b + 4 * c]
    )  # the first player's number runs fastest
    root = math.sqrt(601)
    found = mixed_equilibria(payoffs, "gain")
    assert pure_equilibria(payoffs, "gain") == [] and len(found.equilibria) == 1
    wanted = ((53 - root) / 46, (root - 13) / 24, (root - 23) / 4)
    assert firsts(found)[0] == pytest.approx(wanted, abs=1e-9)


def with_a_continuum():
    """A game of our own with the continuum that Nau et al. 2004, section 5, report: x1 = 3(x2 - 1)/(x2 - 3), x3 = 1/4.

    The gains of the first strategies are (4 x3 - 1)(1 - 2 x2), (4 x3 - 1)(1 - 2 x1) and -(x1 x2 - 3 x1 - 3 x2 + 3).
    """

    def paid(*profile):
        x, y, z = (1 - k for k in profile)
        gains = (4 * z - 1) * (1 - 2 * y), (4 * z - 1) * (1 - 2 * x), -(x * y - 3 * x - 3 * y + 3)
        return [gain * first for gain, first in zip(gains, (x, y, z), strict=True)]

    return table((2, 2, 2), paid)


def test_a_continuum_is_flagged_and_its_points_lie_on_the_known_curve():
    payoffs = with_a_continuum()
    found = mixed_equilibria(payoffs, "gain")
    assert pure_firsts(payoffs) == [(0, 0, 0), (0, 1, 1), (1, 0, 1)]
    inside = [one for one in found.equilibria if all(0 < p < 1 for p in (mine[0] for mine in one.mix))]
    assert inside and all(one.in_continuum for one in inside)
    for one in inside:
        x, y, z = (float(mine[0]) for mine in one.mix)
        assert z == pytest.approx(0.25) and x == pytest.approx(3 * (y - 1) / (y - 3))
    assert any("continuum" in note for note in found.notes)
    alone = [
        one
        for one in found.equilibria
        if np.allclose(one.mix, 0.5 * np.ones((3, 2)) * [[1], [1], [0]] + [[0, 0], [0, 0], [0, 1]])
    ]
    assert [one.in_continuum for one in alone] == [False]  # (1/2, 1/2, 0) stands by itself


def test_two_equilibria_with_one_mix_in_common_span_a_continuum():
    """By hand: the row player is indifferent throughout, the column player prefers as the rows say."""
    payoffs = np.array([[[1, 1], [1, 1]], [[1, 0], [0, 1]]], float)
    found = mixed_equilibria(payoffs, "gain")
    assert found.equilibria and all(one.in_continuum for one in found.equilibria)
    assert found.may_be_incomplete  # the row player's payoffs tie


def test_three_matching_pennies():
    """Jordan 1993, "Three problems in learning mixed-strategy Nash equilibria" (from memory): only (1/2, 1/2, 1/2).

    1 wants to match 2, 2 to match 3, 3 to differ from 1.
    """
    payoffs = table((2, 2, 2), lambda a, b, c: (float(a == b), float(b == c), float(c != a)))
    found = mixed_equilibria(payoffs, "gain")
    assert pure_equilibria(payoffs, "gain") == [] and firsts(found) == [(0.5, 0.5, 0.5)]


def cournot(intercept, quantities, cost=0):
    def paid(*profile):
        mine = [quantities[k] for k in profile]
        price = max(intercept - sum(mine), 0)
        return [(price - cost) * q for q in mine]

    return table((len(quantities),) * 2, paid)


@pytest.mark.parametrize(
    ("intercept", "cost", "step", "wanted"),
    [
        (120, 0, 1, {(40, 40), (39, 41), (41, 39), (119, 119), (119, 120), (120, 119), (120, 120)}),
        (100, 10, 1, {(30, 30), (29, 31), (31, 29)}),
        (120, 0, 10, {(40, 40), (30, 50), (50, 30), (110, 110), (110, 120), (120, 110), (120, 120)}),
    ],
)
def test_a_grid_adds_ties_to_cournots_duopoly(intercept, cost, step, wanted):
    """Cournot 1838; the continuous game has (40, 40), or (30, 30), alone. Computed: the grid adds its neighbours, and
    at no cost also quantities so large that the price is nought whatever one does."""
    quantities = range(0, 121, step)
    payoffs = cournot(intercept, quantities, cost)
    found = {tuple(quantities[k] for k in one) for one in pure_equilibria(payoffs, "gain")}
    assert found == wanted
    search = mixed_equilibria(payoffs, "gain")
    assert search.may_be_incomplete and any("tie" in note for note in search.notes)
    assert all(one.regret.max() <= 1e-4 for one in search.equilibria)


def test_cournots_joint_optimum_is_nine_eighths_of_the_equilibrium():
    payoffs = cournot(120, range(121))
    together = payoffs.sum(axis=0)
    assert (together.max(), together[40, 40]) == (3600, 3200)


def test_minimum_effort_has_seven_strict_equilibria():
    """Van Huyck, Battalio and Beil 1990, "Tacit coordination games" (from memory): pays .20 min - .10 own + .60."""
    payoffs = table((7, 7), lambda a, b: [0.2 * (min(a, b) + 1) - 0.1 * (k + 1) + 0.6 for k in (a, b)])
    pure = pure_equilibria(payoffs, "gain")
    assert pure == [(k, k) for k in range(7)]
    assert [payoffs[0][one] for one in pure] == pytest.approx([0.7 + 0.1 * k for k in range(7)])
    assert payoffs[0].max() / payoffs[0][0, 0] == pytest.approx(13 / 7)
    found = mixed_equilibria(payoffs, "gain")
    # by hand: of the efforts mixed, all but the least must be reached half the time, so there are two, half each
    assert len(found.equilibria) == 7 * 6 / 2
    assert all(sorted(mine)[-2:] == pytest.approx([0.5, 0.5]) for one in found.equilibria for mine in one.mix)
    assert all(one.regret.max() < 1e-9 for one in found.equilibria)


def test_the_prisoners_dilemma_mixes_nothing():
    """Costs (4, 4) both defect, (2, 2) both cooperate, (1, 5), (5, 1) (textbook; price of anarchy 2)."""
    costs = np.array([[[2, 5], [1, 4]], [[2, 1], [5, 4]]], float)
    assert pure_equilibria(costs, "cost") == [(1, 1)]
    found = mixed_equilibria(costs, "cost")
    assert found.equilibria == () and found.method.startswith("none needed")


# ---- certificates and safeguards ----


def test_the_mixed_predicate_is_the_pure_one_at_pure_profiles():
    payoffs = np.random.default_rng(1).normal(size=(3, 2, 3, 4))
    for profile in [(0, 0, 0), (1, 2, 3), (0, 1, 2)]:
        mix = tuple(np.eye(n)[k] for n, k in zip((2, 3, 4), profile, strict=True))
        assert mixed_regrets(payoffs, "cost", mix) == pytest.approx(
            regrets(payoffs, "cost")[(slice(None), *profile)]
        )


def test_a_solver_that_returns_what_is_no_equilibrium_is_not_believed(monkeypatch):
    """The planted error: a mix of the wrong shares."""
    wrong = (np.array([0.6, 0.4]), np.array([0.5, 0.5]))
    monkeypatch.setattr(mixed, "_two_players", lambda costs: ([wrong], "planted", []))
    assert mixed_equilibria(PENNIES, "gain").equilibria == ()


def test_duplicates_are_merged_and_dominated_strategies_left_out():
    costs = np.array([[[1, 4, 1], [3, 2, 3], [9, 9, 9]], [[5, 1, 5], [1, 5, 1], [0, 0, 0]]], float)
    assert [mine.tolist() for mine in reduced(scaled(costs))] == [[0, 1], [0, 1]]
    found = mixed_equilibria(costs, "cost")
    assert len(found.equilibria) == 1
    assert found.equilibria[0].mix[0].tolist() == pytest.approx([0.5, 0.5, 0])
    assert found.equilibria[0].mix[1].tolist() == pytest.approx([0.5, 0.5, 0])


@pytest.mark.parametrize("scale", [1e-7, 1e6])
def test_the_size_of_payoffs_changes_nothing(scale):
    found = mixed_equilibria(scale * PENNIES + 5 * scale, "gain")
    assert firsts(found) == [(0.5, 0.5)]


def test_a_table_too_large_says_what_was_not_tried():
    rng = np.random.default_rng(2)
    two = mixed_equilibria(rng.random((2, 40, 50)), "gain")
    three = mixed_equilibria(rng.random((3, 6, 6, 6)), "gain")
    for found in (two, three):
        assert found.may_be_incomplete and any("strategies" in note for note in found.notes)
    assert three.equilibria == () and three.method == "not tried"


@pytest.mark.parametrize("shape", [(5, 5), (4, 7)])
def test_two_methods_that_share_no_code_agree(shape):
    """Against QuantEcon's enumeration of vertices by convex hulls, on games without ties. It compiles once."""
    payoffs = np.random.default_rng(5).random((2, *shape))
    found = mixed_equilibria(payoffs, "gain").equilibria
    other = [mix for mix in mixed._by_vertices(mixed.scaled(-payoffs)) if max(map(max, mix)) < 1]
    assert len(found) == len(other) > 0
    for mix in other:
        assert any(np.allclose(np.concatenate(mix), np.concatenate(one.mix)) for one in found)


def test_a_simplicial_search_gives_one_equilibrium_where_supports_are_too_many(monkeypatch):
    """Jordan's game again (as above). Compiles once on a machine."""
    monkeypatch.setattr(mixed, "MOST_SUPPORTS", 1)
    payoffs = table((2, 2, 2), lambda a, b, c: (float(a == b), float(b == c), float(c != a)))
    found = mixed_equilibria(payoffs, "gain")
    assert found.method.startswith("simplicial") and firsts(found) == [(0.5, 0.5, 0.5)]


def test_beyond_all_supports_vertices_are_added(monkeypatch):
    payoffs = np.random.default_rng(5).random((2, 5, 5))
    wanted = mixed_equilibria(payoffs, "gain").equilibria
    monkeypatch.setattr(mixed, "MOST_SYSTEMS", 150)  # pairs only
    monkeypatch.setattr(mixed, "_by_vertices", lambda costs: [one.mix for one in wanted])
    found = mixed_equilibria(payoffs, "gain")
    assert found.method.startswith("vertex") and len(found.equilibria) == len(wanted)


@settings(max_examples=30, deadline=None)
@given(arrays(float, (2, 3, 3), elements=st.integers(0, 4).map(float)))
def test_every_listed_mix_is_an_equilibrium_and_there_is_always_one(payoffs):
    """Nash 1951: a finite game has an equilibrium; ties abound here."""
    found = mixed_equilibria(payoffs, "gain")
    assert all(mixed_regrets(payoffs, "gain", one.mix).max() <= 1e-8 for one in found.equilibria)
    assert all(abs(mine.sum() - 1) < 1e-12 for one in found.equilibria for mine in one.mix)
    assert found.equilibria or pure_equilibria(payoffs, "gain")


def test_supports_are_counted_and_listed_alike():
    assert count_supports((3, 2), 2) == 6 * 3
    assert len(list(supports((3, 2), 2))) == 6 * 3 - 3 * 2  # but for the pure ones
