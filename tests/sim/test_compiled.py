"""The compiled engine against the reference engine: equal records and equal event logs, to the last bit."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sim import compiled, reference
from sim.compiled import kernel
from sim.compiled.calendar import kind_of, pack, pop_heap, push_heap, sequence_of, unit_of
from sim.compiled.engine import HEAP_ABOVE_BEDS, Table
from sim.intake import draw_intake
from sim.lowering import lower_network, lower_policy, plan_intake
from sim.record import Record
from sim.replicate import TaskSize, replicate
from sim.scenario import parse_scenario, read_scenario
from sim.trace import KINDS, Trace
from sim.workers import local_workers
from tests.builders import FOREVER, A, Case, Patient, intake, network, rules
from tests.strategies import cases, policies

ROOT = Path(__file__).resolve().parents[2]
many = settings(deadline=None, max_examples=400, derandomize=True, database=None)
some = settings(deadline=None, max_examples=60, derandomize=True, database=None)


def assert_equal(first: Record, second: Record) -> None:
    """Every array equal to the last bit."""
    assert first.arrays().keys() == second.arrays().keys()
    for name, array in first.arrays().items():
        np.testing.assert_array_equal(array, second.arrays()[name], err_msg=name)
    assert first.hash == second.hash


@many
@given(cases())
def test_records_and_event_logs_are_equal_on_networks_of_every_kind(case):
    logs = [Trace(), Trace()]
    expected = reference.run(case.network, case.rules, case.intake, trace=logs[0])
    assert_equal(compiled.run(case.network, case.rules, case.intake, trace=logs[1]), expected)
    assert logs[1].events == logs[0].events
    assert_equal(compiled.run(case.network, case.rules, case.intake), expected)  # without a log


@st.composite
def tables(draw: st.DrawFn) -> tuple[Case, list]:
    """A case and a few more policies for its network, review timetables and all."""
    case = draw(cases())
    more = draw(st.lists(policies(case.network, 0.25), min_size=1, max_size=4))
    return case, [case.rules, *more]


@some
@given(tables(), st.sampled_from([1, 2, 3, 7, 64, 1000]))
def test_a_table_is_its_cells_whatever_the_size_of_the_blocks(table, block):
    case, policies = table
    together = compiled.run_table(case.network, policies, case.intake, block=block)
    for by, record in zip(policies, together, strict=True):
        assert_equal(record, reference.run(case.network, by, case.intake))


@some
@given(cases(), st.integers(0, 120))
def test_a_run_that_is_split_and_resumed_is_the_same(case, first):
    table, patients = Table(case.network, [case.rules], case.intake), len(case.intake)
    if first < patients:
        table.advance(0, first, 16) if first else None
        table.advance(first, patients, 16)
    else:
        table.advance(0, patients, 16)
    assert_equal(table.record(0), reference.run(case.network, case.rules, case.intake))


@pytest.mark.parametrize("name", ["two-units", "three-units", "recorded-stays", "exponential"])
def test_demo_networks_give_the_same_bits_with_either_engine(name):
    scenario = read_scenario(ROOT / "scenarios" / f"{name}.toml").with_run(measured_days=364.0)
    lowered = lower_network(scenario), lower_policy(scenario, scenario.policy())
    for replication in range(3):
        drawn = draw_intake(plan_intake(scenario), replication)
        assert_equal(compiled.run(*lowered, drawn), reference.run(*lowered, drawn))


def test_a_large_network_uses_the_heap_and_gives_the_same_bits():
    units = "\n".join(f'[[units]]\nname = "Unit {i}"\nbeds = 45\nclosure_threshold = 40\n' for i in range(4))
    groups = "\n".join(
        f'[[patients]]\ngroup = "g{i}"\nhome = "Unit {i}"\nper_day = 12\n'
        'stay = { family = "gamma", mean_days = 3.5, cv = 1.2 }\n'
        for i in range(4)
    )
    scenario = parse_scenario(
        f"schema = 1\nrun = {{ warm_up_days = 28, measured_days = 84 }}\n{units}{groups}"
    )
    of = lower_network(scenario)
    assert of.beds.sum() > HEAP_ABOVE_BEDS
    by, drawn = lower_policy(scenario, scenario.policy()), draw_intake(plan_intake(scenario), 0)
    assert_equal(compiled.run(of, by, drawn), reference.run(of, by, drawn))


# --- a difference planted in either engine is caught ---------------------------------------------------------------

TIE = Case(  # a discharge and an arrival at one instant, in a unit of one bed
    network([1]), rules(network([1])), intake(Patient(0.0, stay=1.0), Patient(1.0, stay=FOREVER))
)


def test_a_difference_planted_in_the_reference_engine_is_caught(monkeypatch):
    monkeypatch.setattr(reference, "NEW_ARRIVAL", 5)
    with pytest.raises(AssertionError, match="differ|mismatch|not equal"):
        assert_equal(
            compiled.run(TIE.network, TIE.rules, TIE.intake),
            reference.run(TIE.network, TIE.rules, TIE.intake),
        )


def test_a_difference_planted_in_the_compiled_engine_is_caught(monkeypatch):
    """The kernel's own Python is run with the kinds of two events swapped; compiled code cannot be patched."""
    plain = {
        name: getattr(kernel, name).py_func
        for name in vars(kernel)
        if hasattr(getattr(kernel, name), "py_func")
    }
    for name, function in plain.items():
        monkeypatch.setattr(kernel, name, function)
    two = Case(
        network([1, 1]),
        rules(network([1, 1]), own=[0, 1], incoming=[0, 1]),
        intake(Patient(0.0, A, stay=2.0, delay=1.0), Patient(1.0, 1, stay=0.5)),
    )
    expected = reference.run(two.network, two.rules, two.intake)
    assert_equal(compiled.run(two.network, two.rules, two.intake), expected)
    monkeypatch.setattr(kernel, "DISCHARGE", kernel.TRANSFER_ARRIVAL)
    with pytest.raises((AssertionError, IndexError)):
        assert_equal(compiled.run(two.network, two.rules, two.intake), expected)


def test_the_log_sees_a_swap_of_kinds_that_time_averages_do_not():
    """Which of two patients of one instant comes first changes no integral here, but the log."""
    swapped = intake(Patient(1.0, stay=2.0, gate=0.1), Patient(1.0, stay=2.0, gate=0.9))
    logs = [Trace(), Trace()]
    of = network([2])
    first = compiled.run(of, rules(of), swapped, trace=logs[0])
    logs[1].events = [logs[0].events[place] for place in (2, 3, 0, 1, *range(4, len(logs[0].events)))]
    assert logs[0].events != logs[1].events and first.admitted.sum() == 2


# --- the queue -----------------------------------------------------------------------------------------------------


@settings(deadline=None, max_examples=200, derandomize=True, database=None)
@given(
    st.lists(
        st.tuples(st.integers(0, 6), st.sampled_from([10, 20]), st.integers(0, 50)), max_size=60, unique=True
    )
)
def test_the_heap_hands_out_events_by_time_kind_and_sequence(events):
    expected = sorted(events)
    times, keys = np.empty(len(events) + 1), np.empty(len(events) + 1, np.int64)
    for count, (time, kind, sequence) in enumerate(events):
        push_heap(times, keys, count, float(time), pack(kind, sequence, 3))
    found = []
    for count in range(len(events), 0, -1):
        found.append((times[0], kind_of(keys[0]), sequence_of(keys[0])))
        assert unit_of(keys[0]) == 3
        pop_heap(times, keys, count)
    assert found == expected


def test_the_kernel_calls_events_what_the_trace_calls_them():
    names = {
        kernel.ARRIVES: "arrival", kernel.ADMITTED: "admission", kernel.TRANSFERRED: "transfer",
        kernel.IS_TURNED_AWAY: "turned away", kernel.DISCHARGED: "discharge", kernel.REVIEWS: "review",
        kernel.OWN_OPENS: "own gate opens", kernel.OWN_CLOSES_NOW: "own gate closes",
        kernel.INCOMING_OPENS: "incoming gate opens", kernel.INCOMING_CLOSES_NOW: "incoming gate closes",
        kernel.STAFFING_CHANGES: "staffing",
    }  # fmt: skip
    assert [names[place] for place in range(len(KINDS))] == list(KINDS)


# --- bits ----------------------------------------------------------------------------------------------------------

PROBE = """
from sim.provenance import fingerprint
from sim.replicate import replicate
from sim.scenario import read_scenario
scenario = read_scenario("scenarios/exponential.toml").with_run(measured_days=91.0)
[runs] = replicate(scenario, [scenario.policy()], [0], engine="compiled")
print(fingerprint()["probe_intake"], runs[0].intake_hash, runs[0].record.hash)
"""


def probe(python: str = sys.executable, **environment: str) -> list[str]:
    """Hashes from a fresh interpreter: of the fingerprint's probe, of an intake, of a record."""
    done = subprocess.run(
        [python, "-c", PROBE],
        cwd=ROOT,
        env=os.environ | environment,
        capture_output=True,
        text=True,
        check=True,
    )
    return done.stdout.split()


def test_the_same_seed_gives_the_same_hashes_in_a_fresh_process():
    assert probe() == probe()


@pytest.mark.parametrize("version", ["3.11", "3.12", "3.13", "3.14"])
def test_the_same_seed_gives_the_same_hashes_on_every_python_at_hand(version):
    other = shutil.which(f"python{version}")
    if other is None or version == f"{sys.version_info.major}.{sys.version_info.minor}":
        pytest.skip(f"no other Python {version} on the path")
    wanted = "import numba, pydantic, scipy, simpy, numpy; print(numpy.__version__, scipy.__version__)"
    versions = [
        subprocess.run([python, "-c", wanted], capture_output=True, text=True).stdout.split()
        for python in (sys.executable, other)
    ]
    if versions[0] != versions[1]:
        pytest.skip(f"Python {version} has not the same numpy and scipy; put a prepared one on the path")
    assert probe(other) == probe()


def test_another_instruction_set_changes_the_fingerprint():
    """numpy's exp, log and power give other last bits on other processors; the fingerprint must tell them apart."""
    found = np.show_config(mode="dicts")["SIMD Extensions"].get("found", [])
    if not found:
        pytest.skip(
            "numpy found nothing above the baseline here, so there is no other instruction set to try"
        )
    plain = probe()
    assert probe(NPY_DISABLE_CPU_FEATURES=" ".join(found))[0] != plain[0]


def test_kernels_compile_without_a_folder_to_keep_them(tmp_path):
    """Where no cache can be written the engine still runs, and gives the same bits."""
    nowhere = tmp_path / "file"
    nowhere.write_text("a file stands where the folder should be")
    assert probe(BRIMLINE_CACHE_DIR=str(nowhere)) == probe()


def test_an_edit_in_any_kernel_file_gives_another_cache_folder(monkeypatch, tmp_path):
    from sim.compiled import cache

    before = cache.kernel_digest()
    for source in Path(cache.__file__).parent.glob("*.py"):
        (tmp_path / source.name).write_bytes(source.read_bytes())
    monkeypatch.setattr(cache, "__file__", str(tmp_path / "cache.py"))
    cache.kernel_digest.cache_clear()
    assert cache.kernel_digest() == before
    (tmp_path / "calendar.py").write_text("# edited\n")
    cache.kernel_digest.cache_clear()
    assert cache.kernel_digest() != before
    monkeypatch.undo()
    cache.kernel_digest.cache_clear()


@pytest.mark.parametrize("count", [1, 2])
@pytest.mark.parametrize("size", [TaskSize(), TaskSize(3, 2), TaskSize(1, 1)])
def test_workers_and_tasks_change_no_bit(count, size):
    scenario = read_scenario(ROOT / "scenarios" / "two-units.toml").with_run(
        warm_up_days=14.0, measured_days=91.0
    )
    policies = [scenario.policy().with_thresholds({"Ashgill": k, "Norbeck": k}) for k in (0, 5, 12)]

    def hashes(engine, **how):
        replies = replicate(scenario, policies, range(4), engine=engine, **how)
        return {(run.replication, run.cell): run.record.hash for runs in replies for run in runs}

    expected = hashes("reference")
    assert len(expected) == 12
    assert hashes("compiled", workers=local_workers(count), task_size=size) == expected
