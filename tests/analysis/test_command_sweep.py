"""`sweep` and `align` as a user meets them: documents, texts, files, faults, Ctrl-C, and going on from a store."""

from __future__ import annotations

import csv
import json
from dataclasses import replace

import pytest

from analysis.command import running
from analysis.figures_sweep import save_sweep
from tests.analysis.conftest import BEYOND_THE_CHAIN, TWO, written

QUICK = ("--replications", 10, "--engine", "compiled")
DEMANDS = ("--demand", "0.9:1.3:2")
CELLS, REPLICATIONS, NETWORKS = 2 * 3, 10, 2
EXACT = ("price_of_anarchy", "price_of_stability", "lost_per_year")


def computed(call, *arguments):
    status, found = call(*arguments)
    assert status == 0
    return found["computed"], found["reused"]


def test_one_simulation_a_demand_serves_every_target_goal_welfare_and_weight(call, delayed, tmp_path):
    """The number of runs is cells x replications x demands, whatever is read from them."""
    runs, keep = CELLS * REPLICATIONS * NETWORKS, ("--out", tmp_path / "out")
    sweep = ("sweep", delayed, *QUICK, *DEMANDS, *keep)
    assert computed(call, *sweep, "--target", "0.4:0.8:5") == (runs, 0)
    assert computed(call, *sweep, "--target", "0.3:0.9:13", "--transfer-weight", "0:1:3") == (0, runs)
    goals = '\n[game]\ngoal = { kind = "turned_away" }\nwelfare = { kind = "loss", transfer_weight = 0.2 }\n'
    other = written(tmp_path / "other.toml", TWO + BEYOND_THE_CHAIN + goals)
    assert computed(call, "sweep", other, *QUICK, *DEMANDS, *keep) == (0, runs)
    assert computed(call, "align", delayed, *QUICK, *DEMANDS, *keep, "--target", "0.4:0.6:3") == (0, runs)
    assert computed(call, *sweep, "--target", "0.5", "--delay", "0.5:1:2", "--simulate") == (runs, runs)
    status, verified = call("results", "verify", tmp_path / "out")
    assert status == 0 and verified["agrees"] and verified["not_computed"] == 0


def test_a_simulated_point_is_what_game_says(call, delayed):
    _, swept = call("sweep", delayed, *QUICK, *DEMANDS, "--target", "0.5:0.6:2")
    _, game = call("game", delayed, *QUICK, "--demand", 1.3, "--target", 0.6)
    point = swept["points"][-1]
    assert (point["demand"], point["target"], point["method"]) == (1.3, 0.6, "simulated")
    for name in EXACT:
        assert point[name] == game[name]
    assert point["equilibria"]["possible"] == len(game["equilibria"])
    assert point["turning_weight"] == game["transfer_weight_at_which_the_verdict_turns"]


def test_an_exact_point_is_what_game_says(call, two):
    _, swept = call("sweep", two, *DEMANDS, "--target", "0.5:0.6:2")
    _, game = call("game", two, "--exact", "--demand", 1.3, "--target", 0.6)
    point = swept["points"][-1]
    assert point["method"] == "exact" and swept["replications"] is None
    for name in EXACT:
        assert point[name] == dict.fromkeys(("mean", "low", "high"), game[name])
    assert point["equilibria"] == {"count": len(game["equilibria"])}
    assert point["optimum"]["thresholds"] == game["optimum"]["thresholds"][0]


def test_a_soft_closure_and_beds_are_what_a_file_would_say(call, two, tmp_path):
    _, swept = call("sweep", two, "--beds", "A=3", "--soft", "0.25")
    text = TWO.replace("beds = 2\n", "beds = 3\nadmit_while_closed = 0.25\n")
    text = text.replace("target_utilisation = 0.6", "admit_while_closed = 0.25\ntarget_utilisation = 0.6")
    _, game = call("game", written(tmp_path / "more.toml", text), "--exact")
    assert swept["points"][0]["lost_per_year"]["mean"] == game["lost_per_year"]
    assert swept["points"][0]["beds"] == {"A": 3}


def test_which_and_why(call, delayed):
    _, found = call("sweep", delayed, *QUICK, "--delay", "0:1:2")
    assert [one["method"] for one in found["networks"]] == ["exact", "simulated"]
    assert "transfers must take no time" in found["networks"][1]["why"]
    status, refused = call("sweep", delayed, "--exact")
    assert status == 2 and any("transfers must take no time" in reason for reason in refused["reasons"])


def test_files_and_pictures(call, two, tmp_path):
    folder = tmp_path / "out"
    axes = (*DEMANDS, "--target", "0.4:0.6:3", "--transfer-weight", "0:1:3")
    _, found = call("sweep", two, *axes, "--out", folder)
    with (folder / "points.csv").open(encoding="utf-8") as opened:
        rows = list(csv.DictReader(opened))
    assert len(rows) == len(found["points"]) == found["points_asked_for"] == 18
    prices = [one["price_of_anarchy"]["mean"] for one in found["points"]]
    written_ones = [row["price_of_anarchy mean"] for row in rows]
    assert [float(one) if one else None for one in written_ones] == prices
    assert {path.stem for path in folder.glob("sweep-*.png")} == {
        "sweep-surface",
        "sweep-slices",
        "sweep-weights",
    }
    assert json.loads((folder / "result.json").read_text(encoding="utf-8"))["points"] == found["points"]


def test_a_sweep_without_any_price_can_be_drawn(call, two, tmp_path):
    _, found = call("sweep", two, *DEMANDS, "--target", "0.4:0.6:3")
    for one in found["points"]:
        one["price_of_anarchy"] = dict.fromkeys(("mean", "low", "high"))
    assert len(save_sweep(found, tmp_path)) == 4


@pytest.mark.parametrize(
    ("arguments", "keys"),
    [
        (("sweep", "--demand", "0:1:2", "--target", "0.5:2:3", "--threshold", "C=1", "--cv", "1"), 4),
        (("sweep", "--beds", "A=3:1", "--delay", "x", "--exact", "--simulate"), 4),
        (("align", "--delta", "much", "--target", "1.5", "--per-unit"), 2),
        (("align", "--per-unit", "--target", "0.1:0.9:50"), 1),
        (("sweep", "--demand", "0.5:1.5:900", "--beds", "A=1:2"), 1),
    ],
)
def test_faults_come_all_at_once(call, two, arguments, keys):
    command, *rest = arguments
    status, found = call(command, two, *rest)
    assert status == 2 and len(found["faults"]) == keys
    assert all(one["rule"] and one["value"] and one["remedy"] for one in found["faults"])


def test_goals_without_targets(call, tmp_path):
    text = TWO + '\n[game]\ngoal = { kind = "turned_away" }\n'
    path = written(tmp_path / "goals.toml", text)
    assert call("sweep", path)[0] == 0
    for command in ("sweep", "align"):
        status, found = call(command, path, "--target", "0.5")
        assert status == 2 and "goal that uses a target" in found["faults"][0]["rule"]


def test_targets_may_come_from_the_command_line_alone(call, tmp_path):
    text = "\n".join(line for line in TWO.splitlines() if not line.startswith("target_utilisation"))
    path = written(tmp_path / "bare.toml", text)
    status, found = call("sweep", path)
    assert status == 2 and len(found["faults"]) == 2
    assert call("sweep", path, "--target", "0.5:0.6:2")[0] == 0
    assert call("align", path, "--target", "0.5:0.6:2")[0] == 0


def test_ctrl_c_keeps_the_finished_points_and_the_same_command_goes_on(call, delayed, tmp_path, monkeypatch):
    arguments = ("sweep", delayed, *QUICK, *DEMANDS, "--target", "0.4:0.6:3", "--out", tmp_path / "out")
    whole, calls = running.run_replications, []

    def then_ctrl_c(request, policies, **rest):
        calls.append(request)
        if len(calls) < NETWORKS:
            return whole(request, policies, **rest)
        ran = whole(request, policies[:2], **rest)  # some runs of the second network, then the signal
        return replace(ran, interrupted=True)

    monkeypatch.setattr(running, "run_replications", then_ctrl_c)
    status, found = call(*arguments)
    assert status == 130 and found["interrupted"] is True
    assert [one["demand"] for one in found["points"]] == [0.9] * 3 and found["points_asked_for"] == 6
    monkeypatch.undo()
    status, again = call(*arguments)
    assert status == 0 and again["points"][:3] == found["points"] and len(again["points"]) == 6
    assert again["reused"] == CELLS * REPLICATIONS + 2 * REPLICATIONS


def test_one_replication_is_not_enough(show, delayed):
    for command in ("sweep", "align"):
        status, out, err = show(command, delayed, "--replications", 1, "--engine", "compiled")
        assert status == 1 and out == "" and "at least 2 are needed" in err


# ---- align ----


def test_the_document_of_an_alignment(call, two, tmp_path):
    folder = tmp_path / "out"
    status, found = call("align", two, "--demand", "1.1:1.3:2", "--target", "0.3:0.6:4", "--out", folder)
    [row] = found["rows"]
    assert status == 0 and row["stays"].startswith("exponential"), "it is its own exponential counterpart"
    assert len(row["points"]) == 4 * 2 and len(row["overview"]) == 4
    verdicts = {"within delta", "beyond delta", "out of reach", "no equilibrium"}
    assert {one["verdict"] for one in row["points"]} <= verdicts
    for one in row["points"]:
        assert {"utilisation", "network_transfers_per_day", "network_turned_away_per_day"} <= set(
            one["optimum"]
        )
    arrivals = {1.1: 1.1 * 1.6, 1.3: 1.3 * 1.6}
    assert row["points"][0]["allowed_per_year"] == pytest.approx(0.005 * 365 * arrivals[1.1])
    assert {path.name for path in folder.glob("align.*")} == {"align.png", "align.svg"}


def test_realistic_and_exponential_stays_stand_side_by_side(call, show, delayed, tmp_path):
    """One unit may be the other's whole answer; both rows always carry what comes with the target."""
    arguments = ("align", delayed, *QUICK, *DEMANDS, "--target", "0.2:0.5:4", "--delta", "400")
    _, found = call(*arguments, "--out", tmp_path / "out")
    realistic, exponential = found["rows"]
    assert realistic["stays"] == "as in the file" and exponential["stays"].startswith("exponential")
    assert {one["method"] for one in realistic["networks"]} == {"simulated"}
    assert {one["method"] for one in exponential["networks"]} == {"exact"}
    assert exponential["target"] == 0.2 and realistic["target"] >= 0.2, "a delta that everything is within"
    assert all(one["worst_equilibrium"] for one in exponential["beside"])
    status, out, _ = show(*arguments)
    assert status == 0 and "optimal occupancy" not in out.lower()
    assert "not a reason to run fuller" in out and "% occupied" in out and "with 95 % confidence" in out
    assert "For planning only" in out
    assert call("results", "verify", tmp_path / "out")[1]["agrees"]


def test_targets_by_unit(call, two):
    _, found = call("align", two, "--per-unit", "--target", "0.3:0.5:3", "--delta", "100")
    [row] = found["rows"]
    assert len(row["points"]) == 9 and row["lowest"] and found["per_unit"] is True
    assert row["transfer_weight_at_which_the_advice_turns"]["weight"] is None


def test_the_text_of_a_sweep(show, two):
    status, out, _ = show("sweep", two, *DEMANDS, "--target", "0.5:0.6:2")
    assert status == 0 and "solved by the exact chain" in out and "For planning only" in out
    assert "The highest price of anarchy is" in out
