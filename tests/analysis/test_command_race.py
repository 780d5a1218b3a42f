"""`brimline game --race`: its document, bounds of every kind, stopped and continued, interrupted."""

import signal
from datetime import UTC, datetime
from pathlib import Path

import pytest

from analysis.command.deadline import Clock, deadline_of
from analysis.raced_game import Racing

RACE = ("--replications", 40, "--race")
CHANGING = {"computed", "reused", "engine", "engine_choice"}  # the engine by what is left to run and its pace


def without(document, *names):
    return {key: value for key, value in document.items() if key not in CHANGING.union(names)}


def test_a_race_tells_its_looks_and_what_each_cell_got(call, two):
    status, document = call("game", two, *RACE, "--epsilon", 0.05)
    told = document["racing"]
    assert status == 0 and document["race_choice"]["chosen_by"] == "--race"
    assert [look["replications"] for look in told["looks"]] == [10, 20, 40][: len(told["looks"])]
    got = [count for row in told["replications"] for count in row]
    assert told["runs"] == sum(got) and max(got) == document["replications"]
    assert told["runs_of_full_table"] == 6 * max(got) and told["saved"] == 6 * max(got) / sum(got)
    for payoffs in document["payoffs"].values():
        assert [cell["replications"] for row in payoffs for cell in row] == got
        assert all(cell["low"] <= cell["mean"] <= cell["high"] for row in payoffs for cell in row)
    assert document["possible"] == len(document["equilibria"]) == told["looks"][-1]["possible"]
    assert len(document["undecided"]) == told["undecided"]
    assert (told["stopped_by"] == "decided") == (told["undecided"] == 0)


def test_every_true_equilibrium_is_among_the_possible_ones(call, two):
    """Against the exact chain; a race misses one with probability .025 at most, the seed is fixed."""
    exact = [one["thresholds"] for one in call("game", two, "--exact")[1]["equilibria"]]
    raced = call("game", two, *RACE, "--replications", 80)[1]
    assert exact and all(one in [listed["thresholds"] for listed in raced["equilibria"]] for one in exact)


def test_at_one_look_a_race_is_the_whole_table_at_the_looks_level(call, two):
    """Payoffs and optimum are those of the table of ten replications; only the sets spend less."""
    whole = call("game", two, "--replications", 10, "--no-race")[1]
    raced = call("game", two, "--replications", 10, "--race")[1]
    for payoffs in raced["payoffs"].values():
        for row in payoffs:
            assert [cell.pop("replications") for cell in row] == [10] * len(row)
    for same in ("payoffs", "optimum", "best_responses", "record_hash", "controls", "players"):
        assert raced[same] == whole[same]
    assert raced["possible"] >= whole["possible"]


def test_a_race_stopped_by_its_budget_goes_on_from_the_store(call, two, tmp_path):
    fresh = call("game", two, *RACE, "--epsilon", 1e-4)[1]
    for budget in (45, 27):
        status, part = call(
            "game", two, *RACE, "--epsilon", 1e-4, "--budget", budget, "--out", tmp_path / "kept"
        )
        assert (status, part["computed"], part["racing"]["stopped_by"]) == (0, budget, "budget")
    status, whole = call("game", two, *RACE, "--epsilon", 1e-4, "--out", tmp_path / "kept")
    assert status == 0 and whole["reused"] == 72
    assert without(whole) == without(fresh)


def test_a_raced_store_is_complete_once_all_is_decided_and_serves_the_whole_table(call, two, tmp_path):
    raced = call("game", two, *RACE, "--out", tmp_path)[1]
    assert raced["racing"]["stopped_by"] in ("decided", "replications")
    assert call("results", "show", tmp_path)[1]["complete"]
    after = call("game", two, "--replications", 40, "--no-race", "--out", tmp_path)[1]
    plain = call("game", two, "--replications", 40, "--no-race")[1]
    assert after["reused"] > 0 and without(after) == without(plain)


def test_before_its_first_look_nothing_is_decided(call, show, two):
    status, document = call("game", two, "--replications", 40, "--budget", 31)
    for one in document["equilibria"]:
        assert all(
            regret["high"] is None and "no look" in regret["reason"] for regret in one["regret"].values()
        )
    assert status == 0 and document["replications"] == 5 and document["confirmed"] == 0
    assert document["possible"] == len(document["undecided"]) == 6
    assert document["price_of_anarchy"]["low"] is None and document["price_of_anarchy"]["reason"]
    assert (document["racing"]["looks"], document["racing"]["saved"]) == ([], None)
    status, _, error = show("game", two, "--replications", 40, "--budget", 3)
    assert status == 1 and "at least 1" in error


class Watch:
    """A clock that passes an hour at every look."""

    def __init__(self, monkeypatch):
        self.hours = 0.0
        clock = Clock(lambda: 3600 * self.hours, self.now, lambda moment: moment.replace(tzinfo=UTC))
        monkeypatch.setattr("analysis.command.game.deadline_of", lambda *bounds: deadline_of(*bounds, clock))
        look = Racing.look

        def then_wait(racing):
            self.hours += 1
            return look(racing)

        monkeypatch.setattr(Racing, "look", then_wait)

    def now(self):
        return datetime.fromtimestamp(1_800_000_000 + 3600 * self.hours, UTC)  # 08:00 on a day in January


@pytest.mark.parametrize("bound", [("--minutes", 90), ("--hours", 1.5), ("--until", "09:45")])
def test_a_race_ends_when_its_time_is_over(call, two, monkeypatch, bound):
    Watch(monkeypatch)
    status, document = call("game", two, "--replications", 640, "--epsilon", 1e-6, *bound)
    told = document["racing"]
    assert status == 0 and document["race_choice"]["chosen_by"] == bound[0]
    assert (told["stopped_by"], len(told["looks"])) == ("time", 2)
    assert told["undecided"] == len(document["undecided"]) > 0


def test_ctrl_c_leaves_a_valid_result(call, two, monkeypatch):
    look = Racing.look

    def interrupted(racing):
        done = look(racing)
        if len(done.looks) == 2:
            signal.raise_signal(signal.SIGINT)
        return done

    monkeypatch.setattr(Racing, "look", interrupted)
    status, document = call("game", two, "--replications", 640, "--epsilon", 1e-6, "--race")
    assert status == 130 and document["interrupted"]
    assert (document["racing"]["stopped_by"], len(document["racing"]["looks"])) == ("interrupted", 2)


def test_a_race_is_chosen_by_cost(call, two, monkeypatch):
    assert call("game", two, "--replications", 20)[1]["race_choice"]["race"] is False
    monkeypatch.setattr("analysis.race_job.QUICK", 0)
    monkeypatch.setattr("analysis.race_job.TABLE_SECONDS", 0.0)
    chosen = call("game", two, "--replications", 20)[1]
    assert chosen["race_choice"]["race"] and chosen["race_choice"]["chosen_by"] == "cost"
    assert "racing" in chosen and "racing" not in call("game", two, "--replications", 20, "--no-race")[1]


@pytest.mark.parametrize(
    ("options", "named"),
    [
        (("--exact", "--until", "05:00"), "--until"),
        (("--exact", "--race"), "--race"),
        (("--no-race", "--budget", 5), "--budget"),
        (("--race", "--counterpart"), "--race"),
        (("--race", "--replications", 9), "--race: needs at least 10 replications"),
        (("--minutes", 0), "--minutes"),
    ],
)
def test_bounds_without_a_race_are_refused(show, two, options, named):
    status, out, error = show("game", two, *options)
    assert (status, out) == (2, "") and named in error


def test_other_players_goals_and_welfares_can_be_raced(call, three, two, tmp_path):
    """Three players; a squared goal; a loss as welfare, whose mean may be 0."""
    assert call("game", three, *RACE, "--replications", 20, "--dynamics", "--correlated")[0] == 0
    goal = '\n[game]\ngoal = { kind = "target_utilisation", shape = "squared", judged_over_days = 28 }\n'
    text = (
        Path(two).read_text(encoding="utf-8") + goal + 'welfare = { kind = "loss", transfer_weight = 0.3 }\n'
    )
    other = tmp_path / "other.toml"
    other.write_text(text, encoding="utf-8")
    status, document = call("game", other, *RACE)
    assert status == 0 and document["racing"]["looks"] and document["lost_per_year"]["high"] is not None


def test_a_race_keeps_no_more_than_memory_allows(call, show, two, monkeypatch):
    """Six cells of two units take 1,536 bytes a replication here, so that 70,000 bytes hold 40 but not 80."""
    monkeypatch.setattr("analysis.race_job.MOST_BYTES", 70_000)
    status, _, error = show("game", two, "--race", "--replications", 1_000_000, "--epsilon", 1e-9)
    assert status == 0 and "room for 40 replications of a cell" in error


def test_what_a_person_reads(show, two):
    status, text, error = show("game", two, *RACE, "--epsilon", 1e-6)
    assert status == 0 and "Raced in 3 looks, up to 40 replications of a cell" in text
    assert "undecided" in text and "rough guess" in text
    assert "10 replications: " in error and "possible" in error
