"""The command line: what each command prints for other programs, how options combine, and the exit status.

Outside scripts read these documents, so their keys are held here one by one.
"""

import csv
import json
from pathlib import Path
from statistics import fmean

import pytest

from sim import reference

UNIT = {
    "utilisation", "mean_occupied", "full_fraction", "closed_fraction", "closed_with_free_bed_fraction",
    "occupancy", "admissions_per_day", "diverted_out_per_day", "diverted_in_per_day", "turned_away_per_day",
    "moved_share", "turned_away_share",
}  # fmt: skip
NETWORK = {"throughput_per_day", "transfers_per_day", "turned_away_per_day"}


# ---- exact ----


def test_exact_gives_bare_numbers(call, two):
    status, document = call("exact", two)
    assert status == 0
    assert {"scenario", "thresholds", "units", "network", "states"} <= set(document)
    assert document["scenario"] == "Two tiny units (invented)" and document["states"] == 3 * 4
    assert document["thresholds"] == {"A": 2, "B=b": 3}
    for name, beds in (("A", 2), ("B=b", 3)):
        unit = document["units"][name]
        assert set(unit) >= UNIT and len(unit["occupancy"]) == beds + 1
        assert sum(unit["occupancy"]) == pytest.approx(1)
        assert all(isinstance(unit[measure], float) for measure in UNIT - {"occupancy"})
    assert set(document["network"]) >= NETWORK


def test_exact_refuses_what_it_does_not_cover_with_every_reason(call, delayed):
    status, document = call("exact", delayed)
    assert status == 2 and set(document) == {"reasons"}
    assert len(document["reasons"]) == 1 and "delay" in document["reasons"][0]


def test_the_exponential_counterpart_is_covered(call, two, delayed):
    status, document = call("exact", delayed, "--exponential")
    assert status == 0
    assert document["units"] == call("exact", two)[1]["units"]


# ---- simulate ----


def test_simulate_gives_the_same_tree_with_intervals(call, two):
    status, document = call("simulate", two)
    exact = call("exact", two)[1]
    assert status == 0
    assert {"replications", "confidence", "seed", "engine", "record_hash"} <= set(document)
    assert (document["replications"], document["confidence"], document["seed"]) == (4, 0.95, 5)
    assert document["thresholds"] == exact["thresholds"]
    assert list(document["units"]) == list(exact["units"])
    for name, unit in document["units"].items():
        assert set(unit) == set(exact["units"][name])
        assert len(unit["occupancy"]) == len(exact["units"][name]["occupancy"])
        numbers = [unit[measure] for measure in unit if measure != "occupancy"] + unit["occupancy"]
        assert all(number["low"] <= number["mean"] <= number["high"] for number in numbers)
        assert all(set(number) == {"mean", "low", "high"} for number in numbers)
    assert set(document["network"]) == set(exact["network"])


def test_a_seed_gives_the_same_numbers_again_and_another_seed_others(call, two):
    first, again, other = (call("simulate", two, *seed)[1] for seed in ([], ["--seed", 5], ["--seed", 6]))
    assert first == again
    assert first["record_hash"] != other["record_hash"]


def test_worker_processes_change_nothing(call, two):
    one, several = (call("simulate", two, "--workers", count)[1] for count in (1, 2))
    assert one == several


def test_one_replication_gives_no_intervals_and_says_why(call, two):
    status, document = call("simulate", two, "--replications", 1)
    utilisation = document["units"]["A"]["utilisation"]
    assert status == 0
    assert utilisation["low"] is None and utilisation["high"] is None
    assert utilisation["reason"] == "one replication gives no interval"


def test_raw_measures_of_each_replication_average_to_the_means(call, two):
    _, document = call("simulate", two, "--per-replication")
    each = document["per_replication"]
    assert [one["replication"] for one in each] == [0, 1, 2, 3]
    assert all(len(one[hashed]) == 64 for one in each for hashed in ("record_hash", "intake_hash"))
    for measure in ("utilisation", "admissions_per_day"):
        mean = fmean(one["units"]["B=b"][measure] for one in each)
        assert document["units"]["B=b"][measure]["mean"] == pytest.approx(mean)
    mean = fmean(one["network"]["throughput_per_day"] for one in each)
    assert document["network"]["throughput_per_day"]["mean"] == pytest.approx(mean)


def rows_of(path):
    with path.open(newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file))


def test_trace_and_intake_let_an_outsider_follow_one_replication(call, two, tmp_path):
    trace, intake = tmp_path / "trace.csv", tmp_path / "intake.csv"
    options = ("--trace", trace, "--intake-out", intake, "--replication", 2, "--replications", 3)
    status, document = call("simulate", two, *options, "--per-replication")
    events, patients = rows_of(trace), rows_of(intake)
    assert status == 0
    assert list(events[0]) == ["time", "kind", "patient", "unit"]
    assert [float(event["time"]) for event in events] == sorted(float(event["time"]) for event in events)
    arrivals = [event for event in events if event["kind"] == "arrival"]
    assert [event["time"] for event in arrivals] == [patient["arrival_days"] for patient in patients]
    assert {event["unit"] for event in events} == {"A", "B=b"}
    assert {patient["home"] for patient in patients} == {"A", "B=b"}
    admitted = sum(1 for event in events if event["kind"] == "admission" and float(event["time"]) >= 14)
    counted = document["per_replication"][2]["network"]["throughput_per_day"] * 56
    assert admitted == round(counted)


# ---- verify ----


def test_verify_lists_every_measure_with_its_z(call, two):
    status, document = call("verify", two, "--replications", 6)
    assert status == 0 and document["agrees"] is True
    assert (document["false_alarm_rate"], document["confidence"], document["replications"]) == (0.01, 0.99, 6)
    assert {"A", "B=b", "network"} == {one["where"] for one in document["measures"]}
    for one in document["measures"]:
        assert {"where", "measure", "exact", "mean", "low", "high", "z"} <= set(one)
    assert any(one["measure"].startswith("occupancy") for one in document["measures"])


@pytest.mark.parametrize("option", [("--false-alarm-rate", 0.2), ("--confidence", 0.8)])
def test_verify_takes_another_false_alarm_rate(call, two, option):
    _, document = call("verify", two, "--replications", 6, *option)
    assert document["false_alarm_rate"] == pytest.approx(0.2)


def test_verify_needs_some_replications_and_the_chain(call, two, delayed):
    status, document = call("verify", two)
    assert status == 2 and document["faults"][0]["key"] == "run.replications"
    assert call("verify", delayed, "--replications", 6)[0] == 2


# ---- check ----


def test_check_reads_the_scenario_back(call, two):
    status, document = call("check", two)
    assert status == 0 and document["faults"] == []
    assert document["units"]["A"]["offered_load_beds"] == pytest.approx(0.7 * 2.0)
    assert document["patients"]["B emergencies"]["mean_days"] == 2.0
    assert document["game"]["cells"] == 2 * 3 and document["game"]["runs"] == 2 * 3 * 4
    assert document["exact_chain"] == {
        "in_scope": True, "reasons": [], "states": 12, "too_large": False
    }  # fmt: skip
    assert document["expected"]["game_seconds"] > 0


def test_check_reports_every_fault_with_its_line(call, show, tmp_path):
    faulty = tmp_path / "faulty.toml"
    text = 'schema = 1\n[[units]]\nname = "A"\nbeds = 0\nclosure_treshold = 3\n[[patients]]\ngroup = "g"\n'
    faulty.write_text(text + 'home = "Z"\nper_day = 1.0\nstay = { family = "exponential", mean_days = 1 }\n')
    status, document = call("check", faulty)
    assert status == 2 and set(document) == {"faults"}
    assert all(set(fault) == {"line", "key", "rule", "value", "remedy"} for fault in document["faults"])
    assert [(fault["line"], fault["key"]) for fault in document["faults"]] == [
        (4, "units.A.beds"),
        (5, "units.A.closure_treshold"),
        (8, "patients.g.home"),
    ]
    assert "closure_threshold" in document["faults"][1]["remedy"]
    status, out, err = show("check", faulty)
    assert status == 2 and out == "" and err.startswith(f"{faulty}:4: units.A.beds: ")


# ---- options ----


@pytest.mark.parametrize(
    ("options", "thresholds"),
    [
        ([], {"A": 2, "B=b": 3}),
        (["--policy", "early"], {"A": 1, "B=b": 2}),
        (["--threshold", "A=0"], {"A": 0, "B=b": 3}),
        (["--threshold", "A=2", "--policy", "early"], {"A": 2, "B=b": 2}),
        (["--threshold", "B=b=1", "--threshold", "A=1"], {"A": 1, "B=b": 1}),
    ],
)
def test_a_threshold_goes_before_a_policy_and_a_policy_before_the_file(call, two, options, thresholds):
    assert call("exact", two, *options)[1]["thresholds"] == thresholds


def test_the_incoming_threshold_follows_unless_it_is_set(call, two):
    units = call("check", two, "--threshold", "A=1", "--incoming", "B=b=1")[1]["units"]
    assert (units["A"]["closure_threshold"], units["A"]["incoming_threshold"]) == (1, 1)
    assert (units["B=b"]["closure_threshold"], units["B=b"]["incoming_threshold"]) == (3, 1)


def test_demand_multiplies_every_arrival_rate(call, two):
    plain, doubled = call("exact", two)[1], call("exact", two, "--demand", 2)[1]
    assert doubled["network"]["arrivals_per_day"] == pytest.approx(2 * plain["network"]["arrivals_per_day"])
    assert doubled["network"]["throughput_per_day"] > plain["network"]["throughput_per_day"]


def test_a_target_holds_for_every_unit(call, two):
    units = call("check", two, "--target", 0.9)[1]["units"]
    assert {unit["target_utilisation"] for unit in units.values()} == {0.9}


def test_confidence_sets_the_width_of_every_interval(call, two):
    narrow, wide = (call("simulate", two, "--confidence", level)[1] for level in (0.8, 0.99))
    for name in ("A", "B=b"):
        low, high = (one["units"][name]["utilisation"] for one in (narrow, wide))
        assert low["mean"] == high["mean"] and low["high"] - low["low"] < high["high"] - high["low"]
    assert wide["confidence"] == 0.99


@pytest.mark.parametrize(
    ("options", "key"),
    [
        (["--threshold", "A"], "--threshold"),
        (["--threshold", "A=3"], "--threshold"),
        (["--threshold", "Z=1"], "--threshold"),
        (["--incoming", "A=-1"], "--incoming"),
        (["--policy", "erly"], "--policy"),
        (["--demand", "0"], "--demand"),
        (["--demand", "nan"], "--demand"),
        (["--target", "1.5"], "--target"),
        (["--replications", "0"], "--replications"),
        (["--confidence", "1"], "--confidence"),
        (["--engine", "magic"], "--engine"),
        (["--nonsense"], "--nonsense"),
    ],
)
def test_a_fault_of_the_command_line_has_status_2_and_names_the_option(call, two, options, key):
    status, document = call("simulate", two, *options)
    assert status == 2
    assert [fault["key"] for fault in document["faults"]] == [key]


def test_several_faults_of_the_command_line_are_told_at_once(call, two):
    _, document = call("exact", two, "--threshold", "Z=1", "--demand", 0, "--target", 2)
    assert {fault["key"] for fault in document["faults"]} == {"--threshold", "--demand", "--target"}


def test_an_unknown_command_is_met_with_the_nearest_one(show, two):
    status, out, err = show("simulat", two)
    assert status == 2 and out == "" and "simulate" in err


def test_help_and_version_are_not_failures(show):
    status, out, _ = show("--help")
    assert status == 0
    assert all(command in out for command in ("check", "simulate", "exact", "verify", "game"))


# ---- failures and interruption ----


def breaking(monkeypatch, at, error):
    """Makes the engine raise on its `at`-th intake, however often it is tried; trial runs are not counted."""
    engine, met = reference.run, []

    def run_or_break(network, rules, intake, **trace):
        if network.edges[-1] == 70:
            if intake.hash not in met:
                met.append(intake.hash)
            if met.index(intake.hash) == at - 1:
                raise error
        return engine(network, rules, intake, **trace)

    monkeypatch.setattr(reference, "run", run_or_break)


def test_a_failed_replication_costs_itself_only_and_is_told(call, two, monkeypatch):
    breaking(monkeypatch, 2, ZeroDivisionError("planted"))
    status, document = call("simulate", two, "--workers", 1, "--engine", "reference")
    assert status == 1 and document["replications"] == 3
    assert [(one["seed"], one["replication"]) for one in document["failed"]] == [(5, 1)]
    assert "planted" in document["failed"][0]["traceback"]


def test_an_interrupted_run_hands_over_what_it_has(call, two, monkeypatch):
    breaking(monkeypatch, 3, KeyboardInterrupt())
    status, document = call("simulate", two, "--workers", 1, "--engine", "reference")
    assert status == 130 and document["interrupted"] is True and document["replications"] == 2


@pytest.mark.parametrize(
    ("error", "expected", "said"),
    [(KeyboardInterrupt(), 130, "interrupted"), (ZeroDivisionError("planted"), 1, "at least 1 are needed")],
)
def test_where_nothing_was_finished_nothing_is_shown(show, two, monkeypatch, error, expected, said):
    breaking(monkeypatch, 1, error)
    once = ("--replications", 1, "--workers", 1, "--engine", "reference", "--json")
    status, out, err = show("simulate", two, *once)
    assert (status, out) == (expected, "") and said in err


def test_too_few_replications_left_to_verify_is_told_apart_from_disagreement(show, two, monkeypatch):
    breaking(monkeypatch, 3, ZeroDivisionError("planted"))
    status, out, err = show(
        "verify", two, "--replications", 5, "--workers", 1, "--engine", "reference", "--json"
    )
    assert (status, out) == (1, "") and "at least 5 are needed" in err


# ---- for people ----


@pytest.mark.parametrize("command", ["check", "simulate", "exact", "game", "verify"])
def test_a_person_reads_tables_and_the_caution(show, two, command):
    status, out, _ = show(command, two, "--replications", 5)
    assert status == 0
    assert "For planning only" in out and "nan" not in out.lower()
    with pytest.raises(json.JSONDecodeError):
        json.loads(out)


@pytest.mark.filterwarnings("ignore:Glyph")
@pytest.mark.parametrize(
    "name", [r"$\frac{$", "<script>alert('x')</script>", "[bold]A[/red]", "مستشفى %s {}", "x" * 200]
)
def test_a_hostile_name_is_harmless_in_tables_and_pictures(show, two, tmp_path, name):
    """Mathematical, HTML and console markup, right-to-left text and format signs are only letters of a name."""
    quoted = json.dumps(name, ensure_ascii=False)
    text = Path(two).read_text(encoding="utf-8").replace('"A"', quoted).replace("{ A =", "{ " + quoted + " =")
    hostile = tmp_path / "hostile.toml"
    hostile.write_text(text, encoding="utf-8")
    for command in ("check", "simulate", "verify", "game"):
        status, out, err = show(command, hostile, "--replications", 5, "--out", tmp_path / command)
        assert status == 0, err
        assert "unexpectedly" not in err
        if len(name) < 30:
            assert name in out
    document = json.loads((tmp_path / "game" / "result.json").read_text(encoding="utf-8"))
    assert document["players"][0] == name
