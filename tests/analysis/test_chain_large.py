"""Networks of many units by relaxation: closed forms, the elimination, and answers that must be refused."""

import dataclasses

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.chain import ChainTooLarge, Limits, box, exact, relaxation, solve
from analysis.chain.kernels import cells, grid
from analysis.chain.layout import layout
from analysis.chain.relaxation import Attempt, best_weight
from sim.errors import RunError
from tests.analysis.builders import memoryless
from tests.analysis.test_chain_tables import farthest

RESORTS = ("turned_away", "home_bed", "any_bed")


def network(beds, *, load=0.8, resort="home_bed", stay_days=2.0, factors=None, **rules):
    """Units of these beds whose own patients offer `load` a bed. rules: the same for every unit, or a list."""
    units = []
    for place, b in enumerate(beds):
        factor = factors[place] if factors else 1.0
        more = {key: value[place] if isinstance(value, list) else value for key, value in rules.items()}
        offered = load * b / (stay_days * factor)
        units.append({"name": f"U{place}", "beds": b, "per_day": offered, "stay_factor": factor, **more})
    return memoryless(*units, stay_days=stay_days, diversion={"when_all_closed": resort})


@pytest.fixture
def always_relaxed(monkeypatch):
    monkeypatch.setattr(exact, "ELIMINATED", 0)


def both_ways(scenario):
    """The results by relaxation and by elimination."""
    found = []
    with pytest.MonkeyPatch.context() as patch:
        for most in (0, 10**9):
            patch.setattr(exact, "ELIMINATED", most)
            found.append(solve(scenario, scenario.policy()))
    return found


def erlang(beds, offered):
    """Erlang's distribution of a loss system (Erlang 1917), by his recursion of weights, (beds + 1,)."""
    weights = np.cumprod([1.0, *(offered / np.arange(1, beds + 1))])
    return weights / weights.sum()


# ---- closed forms ----


def test_units_that_never_refer_are_loss_systems_of_their_own():
    """Occupancies, and the joint distribution: a product of Erlang's, each state relative to itself."""
    beds, load = (9, 14, 6, 4), 0.9
    scenario = network(beds, load=load, referral_order=[[]] * 4)
    result = solve(scenario, scenario.policy())
    assert result.states == 10 * 15 * 7 * 5 > exact.ELIMINATED
    joint = np.ones(1)
    for unit, b in zip(result.units.values(), beds, strict=True):
        np.testing.assert_allclose(unit.occupancy, erlang(b, load * b), rtol=1e-11, atol=0)
        assert unit.turned_away_share == pytest.approx(erlang(b, load * b)[-1], rel=1e-11)
        joint = np.multiply.outer(joint, erlang(b, load * b)).ravel()
    whole = box.box_of(scenario, scenario.policy(), layout(scenario, scenario.policy()))
    for method in (relaxation.over_relaxed, relaxation.aggregated):
        attempt = method(whole, whole.reached())
        assert attempt.converged
        np.testing.assert_allclose(attempt.probability, joint, rtol=1e-10, atol=0)


@pytest.mark.parametrize("thresholds", [None, [4, 9, 0]])
def test_full_sharing_is_one_loss_system(thresholds):
    """With any bed as last resort and equal stays only a full network refuses: Erlang's formula of all beds."""
    beds, load = (12, 17, 9), 0.85
    rules = {} if thresholds is None else {"closure_threshold": thresholds}
    scenario = network(beds, load=load, resort="any_bed", **rules)
    result = solve(scenario, scenario.policy())
    total = erlang(sum(beds), load * sum(beds))
    lost = result.network.turned_away_per_day / result.network.arrivals_per_day
    assert result.states == 13 * 18 * 10 > exact.ELIMINATED
    assert lost == pytest.approx(total[-1], rel=1e-11)
    mean = sum(unit.mean_occupied for unit in result.units.values())
    assert mean == pytest.approx(np.arange(39) @ total, rel=1e-12)


def test_units_of_one_kind_are_alike():
    """Five units with cyclic referral and the same rules have the same measures."""
    scenario = network((4,) * 5, closure_threshold=3)
    result = solve(scenario, scenario.policy())
    first, *others = result.units.values()
    assert result.states == 5**5
    for other in others:
        np.testing.assert_allclose(other.occupancy, first.occupancy, rtol=1e-10, atol=0)


# ---- against the elimination ----


@pytest.mark.parametrize("resort", RESORTS)
def test_equal_to_the_elimination(resort):
    rules = {
        "closure_threshold": [7, 5, 9],
        "incoming_threshold": [5, 5, 4],
        "admit_while_closed": [0.0, 0.2, 0.0],
    }
    one, other = both_ways(network((8, 7, 9), resort=resort, **rules))
    assert farthest(one, other) < 1e-10


@pytest.mark.parametrize("factors", [[1.0, 0.02, 30.0], [1.0, 1.0, 100.0], [50.0, 50.0, 0.5]])
def test_stiff_rates(factors):
    """Discharge rates from a hundred a day to one in two hundred days."""
    one, other = both_ways(network((7, 6, 8), load=0.9, factors=factors, closure_threshold=[6, 6, 7]))
    assert farthest(one, other) < 1e-9


@pytest.mark.parametrize("load", [1e-6, 0.02, 4.0, 300.0])
def test_idle_and_crowded_networks(load):
    one, other = both_ways(network((5, 6, 4), load=load, closure_threshold=[4, 6, 3]))
    assert farthest(one, other) < 1e-9


@st.composite
def networks(draw):
    """Three or four small units; some without patients of their own."""
    number = draw(st.integers(3, 4))
    names = [f"U{place}" for place in range(number)]
    units = []
    for place, name in enumerate(names):
        beds = draw(st.integers(1, 4))
        own = draw(st.integers(0, beds))
        unit = {"name": name, "beds": beds, "closure_threshold": own}
        unit["incoming_threshold"] = draw(st.integers(0, own))
        unit["admit_while_closed"] = draw(st.sampled_from([0.0, 0.0, 0.3, 1.0]))
        unit["stay_factor"] = draw(st.sampled_from([1.0, 1.0, 0.1, 7.0]))
        unit["per_day"] = draw(st.sampled_from([0.0, 0.4, 2.0, 9.0])) if place else 1.3
        units.append(unit)
    return memoryless(*units, stay_days=1.5, diversion={"when_all_closed": draw(st.sampled_from(RESORTS))})


@given(networks())
@settings(max_examples=60, derandomize=True, deadline=None)
def test_random_networks(scenario):
    one, other = both_ways(scenario)
    assert farthest(one, other) < 1e-9


# ---- states that are reached ----


def walked(sizes, codes, births):
    """States reached from the empty one, by walking from each to its neighbours."""
    ahead, found = [(0,) * len(sizes)], set()
    while ahead:
        loads = ahead.pop()
        if loads in found:
            continue
        found.add(loads)
        number = sum(codes[unit, load] for unit, load in enumerate(loads))
        for unit, load in enumerate(loads):
            if load > 0:
                ahead.append((*loads[:unit], load - 1, *loads[unit + 1 :]))
            if births[unit, number] > 0 and load + 1 < sizes[unit]:
                ahead.append((*loads[:unit], load + 1, *loads[unit + 1 :]))
    return found


@pytest.mark.parametrize("seed", range(12))
def test_reached_states_against_a_walk(seed):
    """Random admissions, most of them impossible, over boxes with four doors for each unit."""
    rng = np.random.default_rng(seed)
    sizes = np.array([6, 5, 7] if seed % 2 else [9, 8])
    codes = np.zeros((len(sizes), sizes.max()), dtype=np.int64)
    for unit, size in enumerate(sizes):
        codes[unit, :size] = np.sort(rng.integers(0, 4, size)) * 4 ** (len(sizes) - 1 - unit)
    births = (rng.random((len(sizes), 4 ** len(sizes))) < rng.uniform(0.3, 0.9)).astype(float)
    found = walked(sizes, codes, births)
    reached = grid.reachable(sizes, codes, births).reshape(sizes)
    assert set(zip(*map(np.ndarray.tolist, np.nonzero(reached)), strict=True)) == found
    if len(sizes) == 2:
        level_doors, doors = codes[0, : sizes[0]] // 4, codes[1, : sizes[1]]
        passing, local = (of_unit.reshape(4, 4)[:, doors] for of_unit in births)
        inside = np.arange(sizes[1]) + 1 < sizes[1]
        assert cells.count(level_doors, passing, local * inside) == len(found)


# ---- the choice, its limits, and certificates ----


def test_small_chains_are_eliminated_and_others_relaxed(monkeypatch):
    asked = []
    right = exact.relaxed
    monkeypatch.setattr(exact, "relaxed", lambda *arguments: asked.append(1) or right(*arguments))
    small, gap = network((6, 6)), network((12, 12), reopening_gap=2)
    solve(small, small.policy())
    solve(gap, gap.policy())
    assert asked == []
    large = network((12, 12, 12))
    solve(large, large.policy())
    assert asked == [1]


def test_a_box_too_large_is_refused():
    scenario = network((30, 30, 30))
    with pytest.raises(ChainTooLarge, match="29,791 states, the limit is 29,790"):
        solve(scenario, scenario.policy(), limits=Limits(relaxed=29_790))
    with pytest.raises(ChainTooLarge, match="as many as 29,791 states, the limit is 5,000"):
        solve(scenario, scenario.policy(), limits=Limits(relaxed=5_000))


def tilted(box, reached):
    """An answer that is wrong in one unit's load, by a part in 10^9 a bed, and said to have converged.

    Each state's flows balance to within 10^-9 of them: only admissions and discharges tell.
    """
    attempt = relaxation.over_relaxed(box, reached)
    slope = 1 + 1e-9 * np.arange(box.sizes[0])
    probability = (attempt.probability.reshape(box.sizes[0], -1) * slope[:, None]).ravel()
    return Attempt("a planted one", probability / probability.sum(), True)


def spoiled(change):
    def method(box, reached):
        return change(relaxation.over_relaxed(box, reached))

    return method


def scaled(attempt):
    return dataclasses.replace(attempt, probability=2 * attempt.probability)


def one_state(attempt):
    probability = attempt.probability.copy()
    probability[7] *= 1 + 1e-7
    return dataclasses.replace(attempt, probability=probability)


def undefined(attempt):
    return dataclasses.replace(attempt, probability=attempt.probability * np.nan)


def negative(attempt):
    return dataclasses.replace(attempt, probability=-attempt.probability)


def unsure(attempt):
    return dataclasses.replace(attempt, converged=False)


REFUSED = [
    (tilted, "admissions and discharges of U0 differ"),
    (spoiled(scaled), "do not add up to 1"),
    (spoiled(one_state), "into and out of a state differ"),
    (spoiled(undefined), "negative or undefined"),
    (spoiled(negative), "negative or undefined"),
    (spoiled(unsure), "not converged"),
]


@pytest.mark.usefixtures("always_relaxed")
@pytest.mark.parametrize(("method", "complaint"), REFUSED, ids=lambda value: getattr(value, "__name__", None))
def test_a_planted_wrong_answer_is_refused(monkeypatch, method, complaint):
    """By itself, that is; the next method, and at last the elimination where it is not too large, gives the answer."""
    scenario = network((5, 6, 4), closure_threshold=[4, 5, 4])
    right = solve(scenario, scenario.policy())
    monkeypatch.setattr(relaxation, "_methods", lambda box: [method])
    with pytest.raises(RunError, match=complaint):
        solve(scenario, scenario.policy(), limits=Limits(states=1))
    assert farthest(solve(scenario, scenario.policy()), right) < 1e-10
    monkeypatch.setattr(relaxation, "_methods", lambda box: [method, relaxation.over_relaxed])
    assert farthest(solve(scenario, scenario.policy(), limits=Limits(states=1)), right) == 0.0


@pytest.mark.usefixtures("always_relaxed")
def test_methods_that_do_not_converge_give_no_answer(monkeypatch):
    scenario = network((8, 8, 8), load=0.9)
    monkeypatch.setattr(relaxation, "MOST_SWEEPS", 20)
    with pytest.raises(RunError, match="over-relaxation: not converged.*aggregation: not converged"):
        solve(scenario, scenario.policy(), limits=Limits(states=1))


@pytest.mark.parametrize("size", [3, 10, 40])
def test_the_weight_is_youngs(size):
    """The model problem on a line: the Jacobi method's pace is cos h, Gauss-Seidel's its square, h = pi / (size + 1).

    Best weight 2 / (1 + sin h) (Young 1950, from memory).
    """
    step = np.pi / (size + 1)
    assert best_weight(np.cos(step) ** 2, 1.0) == pytest.approx(min(2 / (1 + np.sin(step)), 1.9), rel=1e-12)
    assert best_weight(0.4, 1.5) == 1.5  # already beyond the best
    assert best_weight(1.01, 1.5) == 1.5  # nothing is known while changes grow
