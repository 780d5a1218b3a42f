"""The JSON that outside scripts rely on: every key that was promised is there, in its shape, from every command.

Documents may hold more than is written here, never less. Standard output is one document, with no NaN and no infinity,
and nothing else. The network is invented, and so small that the whole file takes seconds.
"""

from __future__ import annotations

import json
import math

import pytest

from analysis.command.entry import run

UNITS = {"Ashgill": 2, "Norbeck": 3}
SCENARIO = """
schema = 1
title = "Two tiny units (invented)"
run = { seed = 5, warm_up_days = 14, measured_days = 56, replications = 6 }

[[units]]
name = "Ashgill"
beds = 2
target_utilisation = 0.5

[[units]]
name = "Norbeck"
beds = 3
target_utilisation = 0.6

[[patients]]
group = "Ashgill emergencies"
home = "Ashgill"
per_day = 0.7
stay = { family = "exponential", mean_days = 2.0 }

[[patients]]
group = "Norbeck emergencies"
home = "Norbeck"
per_day = 1.1
stay = { family = "exponential", mean_days = 2.0 }

[[policies]]
name = "early"
closure_threshold = { Ashgill = 1, Norbeck = 2 }
"""
COMMANDS = {
    "check": ["check"], "simulate": ["simulate", "--per-replication"], "exact": ["exact"], "verify": ["verify"],
    "game": ["game"], "game exact": ["game", "--exact"], "game raced": ["game", "--race", "--replications", "20"],
    "compare": ["compare"], "ledger": ["ledger", "--traced", "1"],
    "sweep": ["sweep", "--demand", "0.9:1.1:2", "--target", "0.6"],
    "align": ["align", "--target", "0.6:0.8:2", "--demand", "1"],
}  # fmt: skip
PROBABILITIES = (
    "utilisation", "full_fraction", "closed_fraction", "closed_with_free_bed_fraction", "moved_share",
    "turned_away_share",
)  # fmt: skip
RATES = ("admissions_per_day", "diverted_out_per_day", "diverted_in_per_day", "turned_away_per_day")
NETWORK = ("throughput_per_day", "transfers_per_day", "turned_away_per_day")


def strictly(text):
    """One JSON document with no NaN and no infinity; anything else fails."""

    def refuse(name):
        raise ValueError(f"{name} stands in the document")

    return json.loads(text, parse_constant=refuse)


@pytest.fixture(scope="module")
def documents(tmp_path_factory):
    """What every command prints with --json, read strictly; each ran once."""
    path = tmp_path_factory.mktemp("interface") / "s.toml"
    path.write_text(SCENARIO, encoding="utf-8")
    found = {}

    def of(name, capsys):
        if name not in found:
            command, *options = COMMANDS[name]
            assert run([command, str(path), *options, "--workers", "1", "--json"]) == 0
            found[name] = strictly(capsys.readouterr().out)
        return found[name]

    return of


@pytest.fixture
def document(documents, capsys):
    return lambda name: documents(name, capsys)


# ---- shapes ----


def bare(value):
    return isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value)


def estimate(value):
    """`{"mean", "low", "high"}`, in this order of size; a number may be null where a reason is given."""
    if any(value[key] is None for key in ("mean", "low", "high")):
        return bool(value.get("reason"))
    return value["low"] <= value["mean"] <= value["high"]


def check_measures(units, network, shape, mean=lambda value: value):
    """The tree of measures that `exact` and `simulate` share."""
    assert set(units) == set(UNITS)
    for name, measures in units.items():
        assert all(shape(measures[key]) for key in (*PROBABILITIES, *RATES, "mean_occupied")), name
        assert all(0 <= mean(measures[key]) <= 1 for key in PROBABILITIES)
        assert len(measures["occupancy"]) == UNITS[name] + 1 and all(map(shape, measures["occupancy"]))
        assert sum(map(mean, measures["occupancy"])) == pytest.approx(1)
    assert all(shape(network[key]) for key in NETWORK)


def check_differences(rows):
    for row in rows:
        assert all(isinstance(row[key], str) for key in ("policy", "against", "where", "measure"))
        assert estimate(row)


# ---- each command ----


@pytest.mark.parametrize("name", COMMANDS)
def test_one_document_alone_that_names_its_scenario(document, name):
    assert document(name)["title" if name == "check" else "scenario"] == "Two tiny units (invented)"


@pytest.mark.parametrize("planted", ['{"a": NaN}', '{"a": -Infinity}', '{"a": 1} and more', "progress\n{}"])
def test_the_reading_is_strict(planted):
    with pytest.raises(ValueError):
        strictly(planted)


def test_exact(document):
    found = document("exact")
    assert found["thresholds"] == UNITS and found["states"] == 12
    check_measures(found["units"], found["network"], bare)


def test_simulate(document):
    found = document("simulate")
    check_measures(found["units"], found["network"], estimate, lambda value: value["mean"])
    assert (found["replications"], found["confidence"], found["seed"]) == (6, 0.95, 5)
    assert found["engine"] in ("compiled", "reference") and len(found["record_hash"]) == 64
    assert found["thresholds"] == UNITS
    each = found["per_replication"]
    assert len(each) == 6 and all(len(one["record_hash"]) == len(one["intake_hash"]) == 64 for one in each)


def test_verify(document):
    found = document("verify")
    assert found["agrees"] is True and found["replications"] == 6
    assert 0 < found["false_alarm_rate"] < 1 and 0 < found["confidence"] < 1
    for row in found["measures"]:
        assert isinstance(row["where"], str) and isinstance(row["measure"], str)
        assert all(bare(row[key]) for key in ("exact", "mean", "low", "high", "z"))
    assert {row["where"] for row in found["measures"]} == {*UNITS, "network"}


@pytest.mark.parametrize("name", ["game", "game raced", "game exact"])
def test_game(document, name):
    found = document(name)
    exact = name == "game exact"
    shape = bare if exact else estimate
    assert found["players"] == list(UNITS) and found["sense"] in ("cost", "gain")
    assert found["strategies"] == {"Ashgill": [1, 2], "Norbeck": [1, 2, 3]}
    for player in UNITS:
        rows = found["payoffs"][player]
        assert [len(row) for row in rows] == [3, 3] and all(shape(cell) for row in rows for cell in row)
        for row in found["best_responses"][player]:
            assert set(row["others"]) == set(UNITS) - {player} and row["best"]
            assert set(row["best"]) <= set(found["strategies"][player])
    assert found["equilibria"]
    for one in found["equilibria"]:
        assert set(one["thresholds"]) == set(UNITS) and one["kind"] in ("pure", "mixed")
        assert one["verdict"] in (("exact",) if exact else ("estimated", "possible", "confirmed"))
        assert set(one["regret"]) == set(UNITS) and shape(one["welfare"])
        for regret in one["regret"].values():
            assert bare(regret) if exact else regret["mean"] <= regret["high"]
    assert found["optimum"]["thresholds"] and shape(found["optimum"]["welfare"])
    assert all(set(tie) == set(UNITS) for tie in found["optimum"]["thresholds"])
    for key in ("price_of_anarchy", "price_of_stability", "lost_per_year"):
        assert shape(found[key]), key
    assert bare(found["tolerance"]) and isinstance(found["undecided"], list)


def test_compare(document):
    found = document("compare")
    assert found["simultaneous"] is True
    assert [one["name"] for one in found["policies"]] == ["as in the file", "early"]
    for one in found["policies"]:
        check_measures(one["units"], one["network"], estimate, lambda value: value["mean"])
    assert found["differences"]
    check_differences(found["differences"])


def test_commands_that_have_no_promise_of_their_own_have_rows_and_provenance_of_numbers(document):
    assert document("ledger")["matrix"] and document("ledger")["simultaneous"] is True
    assert len(document("sweep")["points"]) == 2 and document("sweep")["axes"]
    assert document("align")["rows"] and document("align")["statements"]


# ---- faults ----


@pytest.mark.parametrize(
    "command", ["check", "simulate", "exact", "verify", "game", "compare", "ledger", "align"]
)
def test_faults_have_their_five_keys(command, tmp_path, capsys):
    path = tmp_path / "s.toml"
    path.write_text(
        SCENARIO.replace("beds = 2", "beds = 0").replace('home = "Norbeck"', 'home = "X"'), "utf-8"
    )
    assert run([command, str(path), "--json"]) == 2
    captured = capsys.readouterr()
    found = strictly(captured.out)
    assert len(found["faults"]) == 2 and len(captured.err.splitlines()) == 2
    for fault in found["faults"]:
        assert set(fault) >= {"line", "key", "rule", "value", "remedy"} and isinstance(fault["line"], int)


@pytest.mark.parametrize("arguments", [["exact"], ["verify"], ["game", "--exact"]])
def test_out_of_the_chains_scope_gives_reasons(arguments, tmp_path, capsys):
    path = tmp_path / "s.toml"
    path.write_text(SCENARIO.replace("beds = 2", "beds = 2\nreview_hours = 8"), encoding="utf-8")
    command, *options = arguments
    assert run([command, str(path), *options, "--json"]) == 2
    found = strictly(capsys.readouterr().out)
    assert list(found) == ["reasons"] and all("review_hours" in reason for reason in found["reasons"])
