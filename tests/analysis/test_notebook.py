"""A notebook's steps give the numbers of the commands to the last bit, quietly, and results show themselves safely."""

from __future__ import annotations

import dataclasses
import html
import json
import math
import re

import pytest

import analysis.figures  # noqa: F401 - so that its settings are made before a notebook's figure brings back its own
from analysis.caution import CAUTION
from analysis.command.entry import run as command
from analysis.notebook import BrimlineError, Network, RunError, ScenarioError, read
from sim import reference, replicate
from tests.analysis.conftest import TWO, written

HOSTILE = '<script>alert("x")</script>&amp;'
ANYWAY = {
    "engine_choice",
    "structure",
    "search",
}  # a command's own; `engine` is asserted apart


def said_by(call, *arguments):
    status, document = call(*arguments)
    assert status == 0
    return {key: value for key, value in document.items() if key not in ANYWAY}


def plain(result):
    document = json.loads(json.dumps(result.to_dict(), allow_nan=False))
    return {key: value for key, value in document.items() if key not in ANYWAY}


# ---- the same numbers ----


def test_a_simulation_is_the_commands(two, call):
    network = read(two).with_demand(1.1).with_thresholds({"B=b": 2})
    options = ["--demand", "1.1", "--threshold", "B=b=2", "--replications", "7", "--seed", "0"]
    assert plain(network.simulate(replications=7, seed=0)) == said_by(call, "simulate", two, *options)


def test_an_exact_result_is_the_commands(two, call):
    assert plain(read(two).with_policy("early").exact()) == said_by(call, "exact", two, "--policy", "early")


def test_an_agreement_is_the_commands(two, call):
    found = read(two).verify(replications=20, confidence=0.95)
    assert plain(found) == said_by(call, "verify", two, "--replications", "20", "--confidence", "0.95")
    assert found.agrees and found.document["false_alarm_rate"] == pytest.approx(0.05)


def test_a_wrong_engine_is_caught_in_a_notebook_too(two, monkeypatch):
    """Every unit closes a bed too early: `agrees` must be able to be false."""
    sound = reference.run_table

    def closing_too_early(network, rules, intake):
        lower = [dataclasses.replace(one, own_closes=one.own_closes - 1) for one in rules]
        return sound(network, lower, intake)

    monkeypatch.setattr(reference, "run_table", closing_too_early)
    assert not read(two).verify(replications=30, engine="reference").agrees


@pytest.mark.parametrize("controls", [True, False])
def test_a_game_is_the_commands(two, call, controls):
    options = [
        "--target",
        "0.5",
        "--replications",
        "12",
        *([] if controls else ["--no-controls"]),
        "--dynamics",
    ]
    found = read(two).with_target(0.5).game(replications=12, controls=controls, dynamics=True)
    assert plain(found) == said_by(call, "game", two, *options)


def test_an_exact_game_is_the_commands(delayed, call):
    found = read(delayed).exponential().game(exact=True)
    assert plain(found) == said_by(call, "game", delayed, "--exponential", "--exact")


def test_a_raced_game_is_the_commands(two, call, tmp_path):
    """Also where it goes on from what another race left, and where the command goes on from that."""
    asked = {"race": True, "epsilon": 0.05, "out": tmp_path / "kept"}
    options = ["--race", "--epsilon", "0.05"]
    read(two).game(replications=10, **asked)
    found = read(two).game(replications=40, **asked)
    fresh = said_by(call, "game", two, *options, "--replications", "40")
    kept = {"computed", "reused", "engine"}
    assert {k: v for k, v in plain(found).items() if k not in kept} == {
        k: v for k, v in fresh.items() if k not in kept
    }
    whole = plain(read(two).game(replications=40, race=True, epsilon=0.05))
    assert whole | {"engine": None} == fresh | {"engine": None}  # by the pace at the moment
    assert found.document["reused"] == 60 and fresh["racing"]["looks"]
    again = said_by(call, *found.provenance["command"][1:])
    assert again["computed"] == 0 and again["payoffs"] == fresh["payoffs"]
    assert command(["results", "verify", str(tmp_path / "kept")]) == 0
    assert len(found.to_frame()) == 6 and "at most 40 replications" in repr(found) + found._repr_html_()
    assert html.escape(fresh["racing"]["reads"][0]) in found._repr_html_()


def test_a_race_is_chosen_as_the_command_chooses(two, call, monkeypatch):
    monkeypatch.setattr("analysis.race_job.QUICK", 0)
    monkeypatch.setattr("analysis.race_job.TABLE_SECONDS", 0.0)
    raced, table = read(two).game(replications=20), read(two).game(replications=20, race=False)
    told = said_by(call, "game", two, "--replications", "20")
    assert raced.document["race_choice"]["race"] and raced.document["race_choice"]["chosen_by"] == "cost"
    assert raced.document["payoffs"] == told["payoffs"] and raced.document["racing"] == told["racing"]
    assert plain(table) == said_by(call, "game", two, "--replications", "20", "--no-race")
    assert raced.provenance["command"][-1] == "--race" and table.provenance["command"][-1] == "--no-race"


def test_a_comparison_is_the_commands(two, call):
    names = ["early", "no sharing"]
    options = [part for name in names for part in ("--policies", name)]
    found = read(two).compare(names, replications=12)
    assert plain(found) == said_by(call, "compare", two, *options, "--replications", "12")


def test_workers_and_the_order_of_changes_make_no_difference(two):
    one = read(two).with_demand(0.9).with_target(0.6).game(replications=4, workers=2, engine="reference")
    other = read(two).with_target(0.6).with_demand(0.9).game(replications=4, workers=1, engine="compiled")
    assert one.document["payoffs"] == other.document["payoffs"]
    assert one.document["record_hash"] == other.document["record_hash"]


def test_the_command_line_that_a_result_names_gives_it_again(two, call):
    result = read(two).with_thresholds({"A": 1}).exponential().simulate(replications=3, confidence=0.9)
    _, *arguments = result.provenance["command"]
    assert said_by(call, *arguments) == plain(result)


# ---- kept runs ----


def test_runs_are_kept_and_the_commands_can_go_on_from_them(two, call, tmp_path):
    out = tmp_path / "kept"
    network = read(two)
    first = network.simulate(replications=3, out=out)
    second = network.simulate(replications=5, out=out)
    assert (first.document["computed"], first.document["reused"]) == (3, 0)
    assert (second.document["computed"], second.document["reused"]) == (2, 3)
    assert second.document["units"] == network.simulate(replications=5).document["units"]
    document = said_by(call, "simulate", two, "--replications", "6", "--out", out)
    assert (document["computed"], document["reused"]) == (1, 5)


def test_what_a_notebook_kept_is_verified_and_repeated_by_the_commands(two, tmp_path, capsys):
    out = tmp_path / "kept"
    read(two).game(replications=2, out=out)
    read(two).compare(["early"], replications=2, out=out)
    assert command(["results", "verify", str(out)]) == 0
    assert "12 rows computed again, 0 differ" in capsys.readouterr().out
    assert command(["results", "repeat", str(out)]) == 0
    assert "4 runs compared, 0 differ, 0 were not there before" in capsys.readouterr().out


def test_a_saved_result_is_what_the_command_writes(two, call, tmp_path):
    result = read(two).simulate(replications=3)
    assert result.save(tmp_path / "new" / "saved") == tmp_path / "new" / "saved"
    said_by(call, "simulate", two, "--replications", "3", "--out", tmp_path / "commands")
    saved, commands = (
        [json.loads((tmp_path / folder / name).read_text()) for name in ("result.json", "provenance.json")]
        for folder in ("new/saved", "commands")
    )
    assert saved[0]["units"] == commands[0]["units"] and saved[0]["record_hash"] == commands[0]["record_hash"]
    assert saved[1].keys() == commands[1].keys() and saved[1]["scenario"] == commands[1]["scenario"]
    with pytest.raises(ScenarioError, match="must not hold a result already"):
        result.save(tmp_path / "commands")
    with pytest.raises(ScenarioError, match="must be a folder that can be written"):
        result.save(two)


def test_an_interrupt_leaves_what_was_run(two, tmp_path):
    def stop_after_two(label, done, total):
        if done == 2:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        read(two).simulate(
            replications=5, out=tmp_path, workers=1, engine="reference", progress=stop_after_two
        )
    again = read(two).simulate(replications=5, out=tmp_path)
    assert again.document["reused"] >= 2
    assert again.document["units"] == read(two).simulate(replications=5).document["units"]


# ---- frames ----


def test_a_frame_has_a_row_for_each_measure_and_its_interval(two):
    result = read(two).simulate()
    frame = result.to_frame()
    assert list(frame.columns) == ["where", "measure", "mean", "low", "high"]
    assert set(frame["where"]) == {"A", "B=b", "network"} and not frame.duplicated(["where", "measure"]).any()
    row = frame.set_index(["where", "measure"]).loc["B=b", "utilisation"]
    assert dict(row) == result.document["units"]["B=b"]["utilisation"]
    assert (frame["low"] <= frame["mean"]).all() and (frame["mean"] <= frame["high"]).all()
    assert result.occupancy().groupby("where")["mean"].sum().round(9).tolist() == [1.0, 1.0]


def test_one_replication_has_means_and_no_ends(two):
    frame = read(two).simulate(replications=1).to_frame()
    assert frame["mean"].notna().all() and frame[["low", "high"]].isna().all(axis=None)


def test_a_games_frames_say_what_its_document_says(two):
    game = read(two).game(exact=True)
    own = game.payoffs("B=b")
    assert own.shape == (3, 2) and own.index.name == "threshold B=b" and own.columns.name == "threshold A"
    assert own.T.to_numpy().tolist() == game.document["payoffs"]["B=b"]
    assert len(game.to_frame()) == 6
    listed = game.equilibria
    assert len(listed) == len(game.document["equilibria"]) > 0
    assert listed["welfare"].tolist() == [one["welfare"] for one in game.document["equilibria"]]
    assert game.prices["mean"][0] == game.document["price_of_anarchy"]


def test_three_players_payoffs_have_the_others_across(three):
    game = read(three).game(exact=True)
    across = game.payoffs("B=b")
    assert across.shape == (2, 4) and across.columns.names == ["threshold A", "threshold C"]
    assert across.loc[3, (1, 2)] == game.document["payoffs"]["B=b"][0][1][1]
    with pytest.raises(ScenarioError, match="must be two for a picture"):
        game.figure()


def test_a_comparisons_frames_say_what_its_document_says(two):
    found = read(two).compare("early", replications=12)
    frame = found.to_frame()
    assert len(frame) == len(found.document["differences"]) > 0
    assert frame.iloc[0]["mean"] == found.document["differences"][0]["mean"]
    levels = found.levels.set_index(["policy", "where", "measure"])["mean"]
    apart = levels["early"] - levels["as in the file"]
    one = frame[frame["measure"] == "transfers_per_day"].iloc[0]
    assert math.isclose(apart[one["where"], "transfers_per_day"], one["mean"], abs_tol=1e-12)
    assert found.could_be_best


# ---- what a notebook shows ----


def results_of(network: Network):
    yield network
    yield network.describe()
    yield network.simulate(replications=3)
    yield network.exact()
    yield network.verify(replications=6)
    yield network.game(replications=3)
    yield network.game(exact=True)
    yield network.compare(["no sharing"], replications=3)


def test_every_result_shows_itself_with_the_caution_and_harms_nobody(tmp_path):
    """Names and titles that are markup are shown as text, in HTML that is whole."""
    text = TWO.replace('"A"', json.dumps(HOSTILE)).replace("A = 1", f"{json.dumps(HOSTILE)} = 1")
    text = text.replace("Two tiny units", HOSTILE.replace('"', "'"))
    for result in results_of(read(written(tmp_path / "hostile.toml", text))):
        shown = result._repr_html_()
        assert html.escape(CAUTION) in shown and html.escape(HOSTILE) in shown
        assert "<script" not in shown and "&amp;lt;" not in shown
        opened, closed = re.findall(r"<(\w+)", shown), re.findall(r"</(\w+)", shown)
        assert sorted(opened) == sorted(closed)
        assert "\n" not in repr(result)


def test_a_planted_name_would_be_seen():
    """The check above can fail: unescaped, the name is a script."""
    assert "<script" in f"<td>{HOSTILE}</td>"


def test_nothing_is_printed(two, capfd):
    for result in results_of(read(two)):
        result._repr_html_()
    assert capfd.readouterr() == ("", "")


def test_progress_counts_every_run(two):
    heard = []
    read(two).game(replications=3, progress=lambda *told: heard.append(told))
    assert heard[0] == ("game", 0, 18) and heard[-1] == ("game", 18, 18)
    assert [done for _, done, _ in heard] == sorted(done for _, done, _ in heard)


def test_failed_runs_are_told_in_the_result(two, monkeypatch):
    sound = replicate._run_cells

    def without_the_second(network, plan, replication, *rest):
        if replication == 1:
            raise ValueError("planted")
        return sound(network, plan, replication, *rest)

    monkeypatch.setattr(replicate, "_run_cells", without_the_second)
    result = read(two).simulate(replications=4, workers=1, engine="reference")
    assert result.document["replications"] == 3 and len(result.document["failed"]) == 1
    assert any("planted" in notice for notice in result.notices) and "1 tasks failed" in result._repr_html_()


def test_advice_is_told_in_the_result(tmp_path):
    short = written(tmp_path / "short.toml", TWO.replace("warm_up_days = 14", "warm_up_days = 1"))
    assert any("warm_up_days is 1" in notice for notice in read(short).simulate(replications=2).notices)


def test_a_figure_leaves_the_notebooks_settings_alone(two):
    import matplotlib

    network = read(two)
    with matplotlib.rc_context({"text.parse_math": True}):
        matplotlib.use("svg")
        pictures = [network.game(exact=True).figure(), network.verify(replications=6).figure()]
        pictures.append(network.compare(["early"], replications=3).figure())
        assert matplotlib.rcParams["text.parse_math"] and matplotlib.get_backend() == "svg"
    matplotlib.use("agg")
    assert [len(one.axes) for one in pictures] == [4, 3, 2]


# ---- faults ----


def test_every_fault_is_told_at_once(two):
    with pytest.raises(ScenarioError) as told:
        read(two).simulate(replications=0, seed=-1, confidence=math.nan, engine="quick", workers=1.5, out=two)
    assert [fault.key for fault in told.value.faults] == [
        "seed", "replications", "workers", "confidence", "engine", "out",
    ]  # fmt: skip
    assert all(fault.rule and fault.value and fault.remedy for fault in told.value.faults)


@pytest.mark.parametrize(
    ("change", "key", "said"),
    [
        (lambda n: n.with_demand(0), "demand", "must be from"),
        (lambda n: n.with_demand("much"), "demand", "must be a number"),
        (lambda n: n.with_target(math.nan), "target", "must be above 0"),
        (lambda n: n.with_policy("erly"), "policy", "did you mean `early`"),
        (lambda n: n.with_policy(3), "policy", "must be a name"),
        (lambda n: n.with_thresholds({"A": 3}), "threshold", "must not be above the unit's beds"),
        (lambda n: n.with_incoming({"C": 1}), "incoming", "must name a unit"),
        (lambda n: n.with_policy("early").compare(), "policy", "name the policy in compare"),
        (lambda n: n.compare(["x"]), "policies", "must name a policy"),
        (lambda n: n.verify(replications=2), "run.replications", "at least 5"),
        (lambda n: n.verify(false_alarm_rate=0), "false_alarm_rate", "must be above 0 and at most 0.5"),
        (lambda n: n.verify(out="x"), "out", "are not kept"),
        (lambda n: n.game(exact=True, epsilon=0.1), "epsilon", "must not stand beside"),
        (lambda n: n.game(exact=True, race=False), "race", "must not stand beside"),
        (lambda n: n.game(race=True, replications=9), "race", "needs at least 10 replications"),
        (lambda n: n.game(tolerance=-1), "tolerance", "must be 0 or more"),
        (lambda n: n.game(exact=True, out="x"), "out", "keeps no exact cells"),
        (lambda n: n.game(exact=True).payoffs("Aa"), "player", "must name a player"),
    ],
)  # fmt: skip
def test_a_fault_names_its_key_rule_and_remedy(two, change, key, said):
    with pytest.raises(ScenarioError, match=re.escape(said)) as told:
        change(read(two))
    assert key in {fault.key for fault in told.value.faults}


def test_a_faulty_file_tells_all_of_its_faults(tmp_path):
    path = written(tmp_path / "bad.toml", TWO.replace("beds = 2", "beds = -2").replace("seed = 5", "sed = 5"))
    with pytest.raises(ScenarioError) as told:
        read(path)
    assert len(told.value.faults) == 2 and all(path in line for line in str(told.value).splitlines())


def test_a_notebook_shows_faults_and_no_traceback(delayed):
    with pytest.raises(BrimlineError) as told:
        read(delayed).exact()
    first, *reasons = told.value._render_traceback_()
    assert first == "OutOfScope:" and any("diversion.delay" in reason for reason in reasons)


def test_an_unknown_option_is_refused(two):
    with pytest.raises(TypeError, match="replicatons"):
        read(two).simulate(replicatons=3)


def test_runs_that_all_fail_leave_no_result(two, monkeypatch):
    def broken(*_):
        raise ValueError("planted")

    network = read(two)
    asked = {"replications": 3, "workers": 1, "engine": "reference"}
    network.simulate(**asked)  # which does not fail
    monkeypatch.setattr(replicate, "_run_cells", broken)
    with pytest.raises(RunError, match="0 replications were finished"):
        network.simulate(**asked)
    with pytest.raises(RunError, match="0 replications were finished"):
        network.game(**asked)


def test_results_are_frozen(two):
    network = read(two)
    with pytest.raises(dataclasses.FrozenInstanceError):
        network.file = "other.toml"
    result = network.exact()
    result.to_dict()["units"].clear()
    assert result.document["units"]
