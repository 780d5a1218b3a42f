"""Tables of two units solved together: against each cell solved alone, 50 digits, and what is known otherwise.

The reference for rare events is a dense solve with 50 digits (mpmath) of the transitions that `network_chain`
builds, which are themselves held against a second construction in `test_chain_random`.
"""

import itertools
from pathlib import Path

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis import exact_tables
from analysis.chain import OutOfScope, kernels, solve, solve_table, solved_together, table
from analysis.chain.limits import DEFAULT, Limits
from analysis.chain.network_states import network_chain
from sim.kernel_cache import digest_of
from sim.scenario import Scenario

RESORTS = ("turned_away", "home_bed", "any_bed")
NEGLIGIBLE = 1e-280


def network(*, units=({}, {}), beds=(3, 4), per_day=(0.9, 1.4), mean_days=2.0, resort="home_bed"):
    """Two units, A and B, each with a group of its own where `per_day` says so."""
    rows = [{"name": name, "beds": b, **more} for name, b, more in zip("AB", beds, units, strict=True)]
    stay = {"family": "exponential", "mean_days": mean_days}
    groups = [
        {"group": home, "home": home, "per_day": rate, "stay": stay}
        for home, rate in zip("AB", per_day, strict=True)
        if rate
    ]
    described = {"schema": 1, "units": rows, "patients": groups, "diversion": {"when_all_closed": resort}}
    return Scenario.model_validate(described)


def every_policy(scenario, first=0):
    """All closure thresholds of both units; incoming ones follow where they do in the file."""
    ranges = [range(first, unit.beds + 1) for unit in scenario.units]
    return [scenario.policy().with_thresholds({"A": a, "B": b}) for a, b in itertools.product(*ranges)]


def numbers(result):
    """Every measure of a result in one row, those without a value as -1, and the number of states."""
    units = (one.to_dict().values() for one in result.units.values())
    values = [np.atleast_1d(-1.0 if value is None else value) for unit in units for value in unit]
    network = [vars(result.network)[key] for key in sorted(vars(result.network))]
    return np.concatenate([*values, network, [result.states]])


def farthest(result, alone):
    """The largest difference of any measure, relative to itself."""
    one, other = numbers(result), numbers(alone)
    return float(np.max(np.abs(one - other) / np.maximum(np.abs(other), NEGLIGIBLE)))


def agree(scenario, policies):
    """The largest difference of any cell solved together from the same cell solved alone."""
    together = solved_together(scenario, policies)
    assert sorted(together) == list(range(len(policies)))
    for cell, policy in enumerate(policies):
        assert together[cell].thresholds == policy.thresholds
        assert together[cell].scenario == scenario.title
    return max(farthest(together[cell], solve(scenario, policy)) for cell, policy in enumerate(policies))


@pytest.mark.parametrize("resort", RESORTS)
def test_a_whole_table(resort):
    scenario = network(beds=(5, 7), per_day=(1.6, 2.4), resort=resort)
    assert agree(scenario, every_policy(scenario)) < 1e-12


@pytest.mark.parametrize("resort", RESORTS)
@pytest.mark.parametrize("incoming", [(0, None), (2, 1), (None, 3)])
def test_incoming_thresholds_that_do_not_follow(resort, incoming):
    units = [{"incoming_threshold": m} if m is not None else {} for m in incoming]
    scenario = network(units=units, beds=(4, 3), resort=resort)
    assert agree(scenario, every_policy(scenario)) < 1e-12


def test_incoming_thresholds_as_strategies_of_their_own():
    scenario = network(beds=(4, 3))
    base = scenario.policy()
    policies = [
        base.with_thresholds({"A": k, "B": 2}).with_rule("incoming_threshold", {"A": m})
        for k, m in itertools.product(range(5), range(5))
    ]
    assert agree(scenario, policies) < 1e-12


@st.composite
def unit_rules(draw, other):
    rules = {"admit_while_closed": draw(st.sampled_from([0.0, 0.0, 1e-6, 0.35, 1.0]))}
    rules["stay_factor"] = draw(st.sampled_from([1.0, 0.05, 20.0]))
    if draw(st.booleans()):
        rules["incoming_threshold"] = draw(st.integers(0, 2))
    if draw(st.booleans()):
        rules["referral_order"] = draw(st.sampled_from([[], [other]]))
    return rules


@st.composite
def networks(draw):
    per_day = draw(st.sampled_from([(0.9, 1.4), (0.0, 2.0), (3.0, 0.0), (1e-5, 0.5), (40.0, 1e-3)]))
    units = [draw(unit_rules(other)) for other in "BA"]
    for home, rate in enumerate(per_day):
        if rate == 0 and units[1 - home].get("referral_order") == []:
            del units[1 - home]["referral_order"]  # a unit that nobody can come to is a fault of the file
    beds = draw(st.sampled_from([(2, 2), (2, 5), (4, 3), (6, 2)]))
    return network(units=units, beds=beds, per_day=per_day, resort=draw(st.sampled_from(RESORTS)))


@given(networks())
@settings(max_examples=60, derandomize=True, deadline=None)
def test_random_networks(scenario):
    assert agree(scenario, every_policy(scenario)) < 1e-11


# ---- rare events ----


def fifty_digits(moves):
    """The stationary distribution by a dense solve with 50 digits."""
    with mpmath.workdps(50):
        matrix = mpmath.zeros(moves.states)
        for origin, target, rate in zip(moves.origin, moves.target, moves.rate, strict=True):
            matrix[int(target), int(origin)] += mpmath.mpf(float(rate))
            matrix[int(origin), int(origin)] -= mpmath.mpf(float(rate))
        for state in range(moves.states):
            matrix[0, state] = 1
        right = mpmath.zeros(moves.states, 1)
        right[0] = 1
        return np.array([float(value) for value in mpmath.lu_solve(matrix, right)])


def occupancies_by_fifty_digits(scenario, policy):
    chain = network_chain(scenario, policy, DEFAULT)
    probability = fifty_digits(chain.moves)
    for view in chain.units:
        yield np.bincount(view.load, weights=probability, minlength=view.layout.beds + 1)


@pytest.mark.parametrize("resort", RESORTS)
@pytest.mark.parametrize(
    ("per_day", "factors"),
    [((1e-3, 3.0), (1.0, 0.01)), ((200.0, 1e-5), (0.01, 40.0)), ((1e-5, 2e-5), (1.0, 9.0))],
)
def test_rare_events_to_fifty_digits(resort, per_day, factors):
    """Occupancies down to 1e-30 and below, each relative to itself."""
    units = [{"stay_factor": factors[0], "admit_while_closed": 1e-5}, {"stay_factor": factors[1]}]
    scenario = network(units=units, beds=(3, 4), per_day=per_day, mean_days=1.0, resort=resort)
    policies = every_policy(scenario)[::4]
    found = solved_together(scenario, policies)
    least = 1.0
    for cell, policy in enumerate(policies):
        for name, exact in zip("AB", occupancies_by_fifty_digits(scenario, policy), strict=True):
            np.testing.assert_allclose(found[cell].units[name].occupancy, exact, rtol=1e-12, atol=0)
            least = min(least, exact[exact > 0].min())
    assert least < 1e-9


def test_weights_beyond_the_range_of_a_float():
    """Two closed worlds of 180 beds, almost empty: probabilities from Erlang's formula down to 1e-300."""
    units = [{"referral_order": []}, {"referral_order": []}]
    scenario = network(units=units, beds=(180, 2), per_day=(0.02, 1.0), mean_days=1.0)
    ((_, result),) = solved_together(scenario, [scenario.policy()]).items()
    with mpmath.workdps(50):
        weights = [mpmath.mpf(0.02) ** n / mpmath.factorial(n) for n in range(181)]
        erlang = np.array([float(weight / sum(weights)) for weight in weights])
    likely = erlang > 1e-290
    np.testing.assert_allclose(result.units["A"].occupancy[likely], erlang[likely], rtol=1e-11, atol=0)
    assert likely.sum() < 180


# ---- what is not solved together, and certificates ----


def with_stays(mean_of_a, mean_of_b, **rules):
    """Two units of 3 beds whose patients stay differently long."""
    groups = [
        {"group": home, "home": home, "per_day": 1.0, "stay": {"family": "exponential", "mean_days": mean}}
        for home, mean in (("A", mean_of_a), ("B", mean_of_b))
    ]
    units = [{"name": name, "beds": 3, **rules} for name in "AB"]
    return Scenario.model_validate({"schema": 1, "units": units, "patients": groups})


def test_what_has_no_such_structure_is_left_to_be_solved_alone():
    two = network()
    gap = network(units=[{"reopening_gap": 2}, {}])
    rates = with_stays(1.0, 2.0)
    groups = [
        {"group": "A", "home": "A", "per_day": 1.0, "stay": {"family": "exponential", "mean_days": 1.0}}
    ]
    units = [{"name": name, "beds": 2} for name in "ABC"]
    three = Scenario.model_validate({"schema": 1, "units": units, "patients": groups})
    assert solved_together(two, []) == {}
    assert solved_together(two, every_policy(two), limits=Limits(bytes=100)) == {}
    for scenario in (gap, rates, three):
        policy = scenario.policy()
        assert solved_together(scenario, [policy]) == {}
        assert farthest(solve_table(scenario, [policy])[0], solve(scenario, policy)) == 0.0


def test_few_cells_of_a_large_network_are_left_to_relaxation():
    """A line of passages costs more than a few relaxations; a whole line is worth it."""
    scenario = network(beds=(48, 50), per_day=(15.0, 17.0))
    line = [scenario.policy().with_thresholds({"A": 44, "B": k}) for k in range(20, 51)]
    assert solved_together(scenario, line[-1:]) == {}
    together = solved_together(scenario, line)
    assert len(together) == 31
    assert farthest(together[30], solve(scenario, line[-1])) < 1e-9


def test_thresholds_beyond_the_beds_are_left_out():
    scenario = network()
    beyond = [scenario.policy().with_thresholds({"A": 4, "B": k}) for k in range(3)]
    assert solved_together(scenario, beyond) == {}
    assert sorted(solved_together(scenario, [*beyond, scenario.policy()])) == [3]


def test_different_stays_that_never_meet_are_solved_together():
    """Where nobody is referred, each unit has one rate although the groups differ."""
    scenario = with_stays(1.0, 3.0, referral_order=[])
    assert agree(scenario, every_policy(scenario)) < 1e-12


def test_a_mixed_table_keeps_its_order(monkeypatch):
    scenario = network()
    policies = every_policy(scenario)
    policies[3] = policies[3].with_rule("reopening_gap", {"A": 2})
    assert sorted(solved_together(scenario, policies)) == [cell for cell in range(20) if cell != 3]
    for policy, result in zip(policies, solve_table(scenario, policies), strict=True):
        assert farthest(result, solve(scenario, policy)) < 1e-12
    monkeypatch.setattr(exact_tables, "WORTH_KERNELS", 0)
    cells = dict(exact_tables.solve_cells(scenario, policies))
    assert sorted(cells) == list(range(20))
    assert [cells[3][0], cells[3][1]] == [solve(scenario, policies[3]).units[name].to_dict() for name in "AB"]


def test_only_a_table_of_some_size_is_worth_the_kernels(monkeypatch):
    """20 cells of 20 states are solved alone, unless that is said to be worth it; the measures are the same."""
    asked = []
    right = exact_tables.solved_together
    monkeypatch.setattr(exact_tables, "solved_together", lambda *given: asked.append(1) or right(*given))
    small = network()
    alone = dict(exact_tables.solve_cells(small, every_policy(small)))
    assert asked == []
    monkeypatch.setattr(exact_tables, "WORTH_KERNELS", 20 * 20)
    together = dict(exact_tables.solve_cells(small, every_policy(small)))
    assert asked == [1] and together.keys() == alone.keys()
    for cell, units in together.items():
        for one, other in zip(units, alone[cell], strict=True):
            assert one["utilisation"] == pytest.approx(other["utilisation"], rel=1e-12)


def test_a_policy_out_of_scope_is_refused():
    scenario = network()
    reviewed = scenario.policy().with_rule("review_hours", {"A": 8.0})
    assert solved_together(scenario, [reviewed]) == {}
    with pytest.raises(OutOfScope, match="review"):
        solve_table(scenario, [reviewed])


def spoiled_lines(monkeypatch, spoil):
    """Lets the first cell of every line be wrong in what `spoil` says of (of_level, of_phase, time, ..., imbalance)."""
    right = table._line

    def wrong(*arguments):
        parts = [part.copy() for part in right(*arguments)]
        spoil(*parts)
        return tuple(parts)

    monkeypatch.setattr(table, "_line", wrong)


def wrong_occupancy(of_level, of_phase, time, states, total, imbalance):
    of_level[0, 1] *= 1 + 1e-6
    of_level[0, 0] -= of_level[0, 1] * 1e-6


def wrong_time(of_level, of_phase, time, states, total, imbalance):
    time[0] *= 1 + 1e-6


def wrong_total(of_level, of_phase, time, states, total, imbalance):
    total[0] = 1 + 1e-6


def unbalanced(of_level, of_phase, time, states, total, imbalance):
    imbalance[0] = 1e-6


def undefined(of_level, of_phase, time, states, total, imbalance):
    imbalance[0] = np.nan


@pytest.mark.parametrize("spoil", [wrong_occupancy, wrong_time, wrong_total, unbalanced, undefined])
def test_a_planted_wrong_cell_is_not_certified_but_solved_alone(monkeypatch, spoil):
    scenario = network()
    policies = every_policy(scenario, first=1)
    spoiled_lines(monkeypatch, spoil)
    together = solved_together(scenario, policies)
    assert len(together) == 12 - 3  # a line for each of A's 3 thresholds, B's 4 within it
    for policy, result in zip(policies, solve_table(scenario, policies), strict=True):
        assert farthest(result, solve(scenario, policy)) < 1e-12


def test_the_comparison_can_see_a_wrong_route(monkeypatch):
    """A planted error in the routes of the tables alone passes every certificate; the comparison shows it."""
    right = table.door_table
    scenario = network(units=[{"admit_while_closed": 0.3}, {}])

    def hard(scenario, policy, shown):
        return right(scenario, policy.with_rule("admit_while_closed", {"A": 0.0}), shown)

    monkeypatch.setattr(table, "door_table", hard)
    assert agree(scenario, every_policy(scenario)) > 1e-3


def test_an_edit_in_any_kernel_gives_another_folder(tmp_path):
    """No stale kernel runs on: the folder of the compiled ones is named by a digest of all their sources."""
    sources = Path(kernels.__file__).parent
    for source in sources.glob("*.py"):
        (tmp_path / source.name).write_bytes(source.read_bytes())
    assert digest_of(tmp_path) == digest_of(sources)
    (tmp_path / "levels.py").write_text("# edited\n")
    assert digest_of(tmp_path) != digest_of(sources)
