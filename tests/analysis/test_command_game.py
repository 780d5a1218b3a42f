"""`brimline game`: its document, exact and simulated, for two units and for three, and what it writes."""

import json
from itertools import product
from pathlib import Path

import pytest

from tests.analysis.builders import no_constants

KEYS = {
    "players", "sense", "strategies", "payoffs", "equilibria", "best_responses", "optimum",
    "price_of_anarchy", "price_of_stability", "lost_per_year", "tolerance", "undecided",
}  # fmt: skip


def at(nested, *places):
    for place in places:
        nested = nested[place]
    return nested


def best_by_table(document, player, others):
    """A player's best thresholds against the others', from the payoffs that the document itself lists."""
    players, strategies = document["players"], document["strategies"]
    places = {name: strategies[name].index(threshold) for name, threshold in others.items()}
    payoffs = {}
    for place, threshold in enumerate(strategies[player]):
        number = at(document["payoffs"][player], *({**places, player: place}[name] for name in players))
        payoffs[threshold] = number["mean"] if isinstance(number, dict) else number
    return [k for k, payoff in payoffs.items() if payoff <= min(payoffs.values()) + document["tolerance"]]


def check_replies(document):
    for player in document["players"]:
        others = [name for name in document["players"] if name != player]
        every = [
            dict(zip(others, ks, strict=True)) for ks in product(*(document["strategies"][o] for o in others))
        ]
        replies = document["best_responses"][player]
        assert [reply["others"] for reply in replies] == every
        assert all(reply["best"] == best_by_table(document, player, reply["others"]) for reply in replies)


def check_equilibria(document):
    """Everybody replies best there, and there only: in the table as it stands, where that is estimated."""
    listed = [one["thresholds"] for one in document["equilibria"]]
    listed = document.get("estimated_equilibria", listed)
    every = product(*(document["strategies"][name] for name in document["players"]))
    for profile in (dict(zip(document["players"], ks, strict=True)) for ks in every):
        stable = all(
            profile[player]
            in best_by_table(document, player, {k: v for k, v in profile.items() if k != player})
            for player in document["players"]
        )
        assert (profile in listed) == stable


def test_the_exact_game_has_bare_numbers(call, two):
    status, document = call("game", two, "--exact")
    assert status == 0 and set(document) >= KEYS
    assert document["players"] == ["A", "B=b"] and document["sense"] == "cost"
    assert document["strategies"] == {"A": [1, 2], "B=b": [1, 2, 3]}
    for player in document["players"]:
        assert [len(row) for row in document["payoffs"][player]] == [3, 3]
        assert all(isinstance(number, float) for row in document["payoffs"][player] for number in row)
    for one in document["equilibria"]:
        assert {"thresholds", "kind", "verdict", "regret", "welfare"} <= set(one)
        assert (one["kind"], one["verdict"]) == ("pure", "exact")
        assert set(one["regret"]) == {"A", "B=b"} and max(one["regret"].values()) <= document["tolerance"]
    assert document["price_of_anarchy"] >= document["price_of_stability"] >= 1
    assert document["lost_per_year"] >= 0 and document["undecided"] == [] and document["tolerance"] == 1e-9
    check_replies(document)
    check_equilibria(document)


def test_a_cell_of_the_exact_game_is_what_exact_says_of_those_thresholds(call, two):
    game = call("game", two, "--exact")[1]
    alone = call("exact", two, "--threshold", "A=1", "--threshold", "B=b=3")[1]
    assert game["payoffs"]["A"][0][2] == pytest.approx(abs(alone["units"]["A"]["utilisation"] - 0.5))
    assert game["payoffs"]["B=b"][0][2] == pytest.approx(abs(alone["units"]["B=b"]["utilisation"] - 0.6))


def test_the_optimum_is_the_best_of_all_profiles(call, two):
    game = call("game", two, "--exact")[1]
    welfare = {
        (a, b): call("exact", two, "--threshold", f"A={a}", "--threshold", f"B=b={b}")[1]["network"][
            "throughput_per_day"
        ]
        for a in (1, 2)
        for b in (1, 2, 3)
    }
    best = [key for key, value in welfare.items() if value >= max(welfare.values()) - 1e-9]
    assert [tuple(one.values()) for one in game["optimum"]["thresholds"]] == best
    assert game["optimum"]["welfare"] == pytest.approx(max(welfare.values()))
    worst = min(welfare[tuple(one["thresholds"].values())] for one in game["equilibria"])
    assert game["price_of_anarchy"] == pytest.approx(max(welfare.values()) / worst)


def test_the_simulated_game_has_intervals(call, two):
    status, document = call("game", two)
    assert status == 0 and set(document) >= KEYS
    assert {"replications", "confidence", "seed", "engine", "record_hash"} <= set(document)
    numbers = [
        number for player in document["players"] for row in document["payoffs"][player] for number in row
    ]
    numbers += [document[name] for name in ("price_of_anarchy", "price_of_stability", "lost_per_year")]
    numbers += [document["optimum"]["welfare"]]
    for one in document["equilibria"]:
        assert one["verdict"] in ("possible", "confirmed")
        numbers += [one["welfare"], *one["regret"].values()]
    assert document["equilibria"]
    assert all(set(number) == {"mean", "low", "high"} for number in numbers)
    assert all(number["low"] <= number["mean"] <= number["high"] for number in numbers)
    check_replies(document)
    check_equilibria(document)


def test_what_is_undecided_is_what_is_possible_and_not_confirmed(call, two):
    status, document = call("game", two, "--replications", 20, "--epsilon", 0.02)
    assert status == 0 and document["epsilon"] == {"value": 0.02, "origin": "asked for"}
    verdicts = [one["verdict"] for one in document["equilibria"]]
    assert document["possible"] == len(verdicts) and document["confirmed"] == verdicts.count("confirmed")
    undecided = [one["thresholds"] for one in document["equilibria"] if one["verdict"] == "possible"]
    assert [one["thresholds"] for one in document["undecided"]] == undecided
    for one in (*document["undecided"], *document["equilibria"]):
        assert set(one["regret"]) == set(one["years_to_notice"]) == {"A", "B=b"}
    assert document["controls"]["used"] and document["controls"]["degrees"] == 15
    tight = call("game", two, "--replications", 20, "--epsilon", 0)[1]
    assert tight["confirmed"] == 0 and len(tight["undecided"]) == tight["possible"] == document["possible"]
    wide = call("game", two, "--replications", 20, "--epsilon", 1)[1]
    assert wide["undecided"] == [] and {one["verdict"] for one in wide["equilibria"]} == {"confirmed"}


def test_the_default_epsilon_takes_a_manager_ten_years(call, two):
    document = call("game", two, "--replications", 20)[1]
    assert "10 years" in document["epsilon"]["origin"] and document["epsilon"]["value"] > 0


def test_controls_can_be_switched_off_and_are_off_where_replications_are_few(call, two):
    assert call("game", two, "--replications", 20, "--no-controls")[1]["controls"] == {"used": False}
    assert call("game", two, "--replications", 9)[1]["controls"] == {"used": False}


def test_epsilon_is_for_simulation(call, two):
    assert call("game", two, "--exact", "--epsilon", 0.1)[0] == 2


def test_worker_processes_and_order_of_replies_change_nothing(call, two):
    one, several = (call("game", two, "--workers", count)[1] for count in (1, 2))
    assert one == several


def test_one_replication_gives_null_intervals_with_a_reason(call, two):
    status, document = call("game", two, "--replications", 1)
    numbers = [document["payoffs"]["A"][0][0], document["price_of_anarchy"], document["optimum"]["welfare"]]
    numbers += [document["lost_per_year"], document["equilibria"][0]["regret"]["A"]]
    assert status == 0
    for number in numbers:
        assert number["mean"] is not None and number["low"] is None and number["high"] is None
        assert "one replication" in number["reason"]


def test_a_policy_is_the_base_of_every_cell_but_for_the_thresholds(call, two):
    """Its closure thresholds are the strategies' to set; its incoming ones stay, never above them."""
    plain = call("game", two, "--exact")[1]
    assert call("game", two, "--exact", "--policy", "early")[1]["payoffs"] == plain["payoffs"]
    kept_back = call("game", two, "--exact", "--incoming", "A=0")[1]
    assert kept_back["payoffs"] != plain["payoffs"]
    assert kept_back["optimum"]["outcome"]["diverted_out_per_day"]["B=b"] == 0


def test_a_target_and_a_tolerance_change_the_game(call, two):
    plain, lofty = call("game", two, "--exact")[1], call("game", two, "--exact", "--target", 1)[1]
    assert lofty["payoffs"] != plain["payoffs"]
    assert [one["thresholds"] for one in lofty["equilibria"]] == [{"A": 2, "B=b": 3}]  # nobody closes early
    every = call("game", two, "--exact", "--tolerance", 1)[1]
    assert len(every["equilibria"]) == 6 and every["tolerance"] == 1
    assert every["optimum"] == plain["optimum"]


def test_three_units_play_on_three_axes(call, three):
    status, document = call("game", three, "--exact")
    assert status == 0 and document["players"] == ["A", "B=b", "C"]
    assert document["strategies"] == {"A": [1, 2], "B=b": [1, 3], "C": [1, 2]}
    thresholds = ("--threshold", "A=2", "--threshold", "B=b=1", "--threshold", "C=2")
    alone = call("exact", three, *thresholds)[1]["units"]
    for player, target in (("A", 0.5), ("B=b", 0.6), ("C", 0.4)):
        payoff = document["payoffs"][player][1][0][1]
        assert payoff == pytest.approx(abs(alone[player]["utilisation"] - target))
    check_replies(document)
    check_equilibria(document)
    simulated = call("game", three, "--replications", 2)[1]
    assert simulated["payoffs"]["C"][1][0][1].keys() == {"mean", "low", "high"}
    check_replies(simulated)
    check_equilibria(simulated)


def changed(path, addition):
    Path(path).write_text(Path(path).read_text(encoding="utf-8") + addition, encoding="utf-8")


def test_a_loss_is_a_cost_and_names_its_weight(call, two):
    changed(two, '\n[game]\nwelfare = { kind = "loss", transfer_weight = 0.25 }\n')
    document = call("game", two, "--exact")[1]
    outcome = document["optimum"]["outcome"]
    away, moved = (sum(outcome[f"{what}_per_day"].values()) for what in ("turned_away", "diverted_out"))
    assert document["welfare"]["sense"] == "cost"
    assert document["optimum"]["welfare"] == pytest.approx(away + 0.25 * moved)
    assert document["price_of_anarchy"] >= 1


def test_the_squared_goal_is_for_simulation_only(call, two):
    changed(
        two, '\n[game]\ngoal = { kind = "target_utilisation", shape = "squared", judged_over_days = 28 }\n'
    )
    status, document = call("game", two, "--exact")
    assert status == 2 and document["faults"][0]["key"] == "game.goal.shape"
    status, document = call("game", two)
    assert status == 0 and "28 days" in document["goal"]
    assert document["payoffs"]["A"][0][0]["low"] >= 0


def test_a_game_needs_targets(call, two):
    text = Path(two).read_text(encoding="utf-8").replace("target_utilisation = 0.5\n", "")
    Path(two).write_text(text, encoding="utf-8")
    status, document = call("game", two)
    assert status == 2 and [fault["key"] for fault in document["faults"]] == ["units.A.target_utilisation"]
    assert call("game", two, "--target", 0.5, "--exact")[0] == 0


def test_a_scenario_beyond_the_chain_is_refused_with_its_reasons(call, delayed):
    status, document = call("game", delayed, "--exact")
    assert status == 2 and set(document) == {"reasons"}
    assert call("game", delayed, "--exact", "--exponential")[0] == 0


@pytest.mark.parametrize("how", [["--exact"], ["--replications", 5]])
def test_findings_say_the_numbers_of_the_document(call, two, how):
    """With targets far below the load the units close early, which costs the network patients."""
    document = call("game", two, "--target", 0.2, "--demand", 2, *how)[1]
    said = {finding["unit"]: finding for finding in document["findings"] if finding["unit"] != "ratio"}
    ratios = [finding["value"] for finding in document["findings"] if finding["unit"] == "ratio"]
    assert ratios == [document["price_of_anarchy"], document["price_of_stability"]]
    assert said["patients a year"]["value"] == document["lost_per_year"]
    turning = document["transfer_weight_at_which_the_verdict_turns"]["weight"]
    weight = said["patients turned away per transfer"]["value"]
    assert (weight if how == ["--exact"] else weight["mean"]) == turning
    assert f"{turning:.3f}" in said["patients turned away per transfer"]["statement"]
    assert all(
        finding["basis"].startswith("exact" if how == ["--exact"] else "5 paired")
        for finding in said.values()
    )


# ---- what is written ----


STORE = {"runs.sqlite", "runs.lock"}


def files_in(folder):
    return {path.relative_to(folder).as_posix() for path in folder.rglob("*") if path.is_file()}


CURVE = {"price-over-weights.png", "price-over-weights.svg"}
PICTURES = CURVE | {
    f"{name}.{ending}" for name in ("payoffs-1", "payoffs-2", "replies") for ending in ("png", "svg")
}


def test_results_are_written_to_a_folder(call, two, tmp_path):
    folder = tmp_path / "out"
    _, document = call("game", two, "--exact", "--out", folder)
    store = {"runs.sqlite", "runs.lock"}
    assert files_in(folder) == {"result.json", "provenance.json", "table.csv"} | store | PICTURES
    kept = json.loads((folder / "result.json").read_text(encoding="utf-8"), parse_constant=no_constants)
    assert kept == document
    origin = json.loads((folder / "provenance.json").read_text(encoding="utf-8"))
    assert origin["seed"] == 5 and origin["scenario"]["text"] == Path(two).read_text(encoding="utf-8")
    assert {"program", "command", "engine", "versions", "machine", "started", "ended"} <= set(origin)
    header, *rows = (folder / "table.csv").read_text(encoding="utf-8").splitlines()
    assert header.startswith("threshold A,threshold B=b,payoff A,regret A,") and len(rows) == 6
    assert (folder / "payoffs-1.png").read_bytes().startswith(b"\x89PNG")
    assert b"<svg" in (folder / "payoffs-2.svg").read_bytes()


def test_a_second_run_keeps_the_earlier_result_and_leaves_other_files_alone(call, two, tmp_path):
    folder = tmp_path / "out"
    folder.mkdir()
    (folder / "notes.txt").write_text("mine")
    first = call("verify", two, "--replications", 5, "--out", folder)[1]
    written = {"result.json", "provenance.json", "verification.png", "verification.svg"}
    assert files_in(folder) == written | {"notes.txt"}
    second = call("exact", two, "--out", folder)[1]
    third = call("simulate", two, "--out", folder)[1]
    now = {"result.json", "provenance.json", "notes.txt"} | STORE
    assert files_in(folder) == now | {f"earlier/1/{name}" for name in written} | {
        f"earlier/2/{name}" for name in ("result.json", "provenance.json")
    }
    for place, document in (("earlier/1", first), ("earlier/2", second), (".", third)):
        assert json.loads((folder / place / "result.json").read_text(encoding="utf-8")) == document


def test_three_units_have_a_table_but_no_pictures_of_two_axes(call, three, tmp_path):
    folder = tmp_path / "out"
    call("game", three, "--replications", 2, "--out", folder)
    assert files_in(folder) == {"result.json", "provenance.json", "table.csv"} | CURVE | STORE
    header = (folder / "table.csv").read_text(encoding="utf-8").splitlines()[0].split(",")
    assert {"threshold C", "payoff C", "payoff C low", "payoff C high", "regret C", "welfare"} <= set(header)


def test_a_folder_that_cannot_be_written_is_told_before_anything_runs(call, two, tmp_path):
    in_the_way = tmp_path / "file"
    in_the_way.write_text("")
    status, document = call("game", two, "--out", in_the_way / "out")
    assert status == 2 and document["faults"][0]["key"] == "--out"


def test_a_trace_may_go_into_the_folder_of_the_results(call, two, tmp_path):
    folder = tmp_path / "out"
    for _ in range(2):
        assert call("simulate", two, "--out", folder, "--trace", folder / "trace.csv")[0] == 0
    assert {"result.json", "trace.csv", "earlier/1/result.json"} <= files_in(folder)
