"""The main job with real lengths of stay: 1,313 patients in intensive care (see `real_stays.py`).

Numbers without another source were measured apart from this project. False alarms: fewer than 20 facts, 1 in
100,000 for the file (see `facts.py`). Planted errors: rows taken for patients (the mean stay 8 % too short),
and the longest stay dropped.
"""

from __future__ import annotations

import json
from itertools import product

import numpy as np
import pytest
from scipy import stats

from analysis.command.entry import run
from sim.intake import draw_intake
from sim.lowering import plan_intake
from sim.scenario import read_scenario
from tests.outside import real_stays
from tests.outside.facts import FALSE_ALARM, differs
from tests.outside.teletraffic import erlang_b

BEDS, LOADS, TARGETS = {"Ellerbeck": 8, "Thornholme": 6}, {"Ellerbeck": 6.0, "Thornholme": 4.0}, (0.7, 0.65)
CHOICES = {"Ellerbeck": [5, 8], "Thornholme": [3, 6]}
SCENARIO = """
schema = 1
title = "Two invented units with real stays"
[run]
seed = 1605
warm_up_days = 728
measured_days = 1456
replications = 30
[diversion]
when_all_closed = "turned_away"
[game]
strategies = {{ Ellerbeck = {{ values = [5, 8] }}, Thornholme = {{ values = [3, 6] }} }}
"""
UNIT = """
[[units]]
name = "{name}"
beds = {beds}
target_utilisation = {target}
[[patients]]
group = "{name} patients"
home = "{name}"
per_day = {per_day!r}
stay = {{ family = "empirical", file = "stays.csv", column = "days" }}
"""


@pytest.fixture(scope="session")
def rows(request, tmp_path_factory):
    """The data as they are; kept between runs in pytest's cache, which git ignores."""
    cache = getattr(request.config, "cache", None)
    try:
        folder = tmp_path_factory.mktemp("stays") if cache is None else cache.mkdir("real-stays")
        return real_stays.read_rows(real_stays.fetch(folder))
    except real_stays.Unavailable as reason:
        pytest.skip(f"real stays are not at hand: {reason}")


@pytest.fixture(scope="session")
def patients(rows):
    """One row a patient."""
    return real_stays.by_patient(rows)


@pytest.fixture(scope="session")
def stays(patients):
    """Lengths of stay in days, (1313,)."""
    return patients["stop"].to_numpy()


def written(folder, values, mean):
    """A scenario with these stays whose offered loads are the round ones where their mean is `mean`."""
    (folder / "stays.csv").write_text("\n".join(["days", *(f"{value:g}" for value in values)]))
    units = [
        UNIT.format(name=name, beds=beds, target=target, per_day=float(LOADS[name] / mean))
        for (name, beds), target in zip(BEDS.items(), TARGETS, strict=True)
    ]
    (folder / "real.toml").write_text(SCENARIO.format() + "".join(units))
    return folder / "real.toml"


@pytest.fixture
def scenario(tmp_path, stays):
    """The scenario file, with the stays beside it."""
    return written(tmp_path, stays, stays.mean())


@pytest.fixture
def command(capsys):
    """Runs a command line and reads its JSON."""

    def json_of(*arguments):
        status = run([*map(str, arguments), "--json"])
        printed = capsys.readouterr()
        assert status == 0, printed.err
        return json.loads(printed.out)

    return json_of


class TestFetching:
    """Only what cannot be had is skipped; what is wrong is a failure."""

    def test_other_content_under_the_right_name_fails(self, tmp_path, monkeypatch):
        def served_wrongly(*command, folder=None):
            if "download" in command:
                (folder / "wrong.deb").write_bytes(b"something else")
            return f"Candidate: {real_stays.VERSION}"

        monkeypatch.setattr(real_stays, "_call", served_wrongly)
        monkeypatch.setattr(real_stays.shutil, "which", str)
        with pytest.raises(AssertionError, match="wrong.deb"):
            real_stays.fetch(tmp_path)

    @pytest.mark.parametrize(
        ("said", "reason"), [("Candidate: 9.9-1", "9.9-1 is served"), ("", "no package list")]
    )
    def test_another_version_or_none_is_unavailable(self, tmp_path, monkeypatch, said, reason):
        monkeypatch.setattr(real_stays, "_call", lambda *command, folder=None: said)
        monkeypatch.setattr(real_stays.shutil, "which", str)
        with pytest.raises(real_stays.Unavailable, match=reason):
            real_stays.fetch(tmp_path)

    def test_no_apt_is_unavailable(self, tmp_path, monkeypatch):
        monkeypatch.setattr(real_stays.shutil, "which", lambda tool: None)
        with pytest.raises(real_stays.Unavailable, match="apt-get"):
            real_stays.fetch(tmp_path)


class TestTheDataThemselves:
    def test_as_its_help_page_describes_it(self, rows):
        """1,421 observations; whoever had stayed at least a day; death or discharge alive as the end."""
        assert len(rows) == 1421
        assert rows["stop"].min() == 1
        assert set(rows["event"]) == {2, 3}

    def test_rows_of_a_patient_follow_each_other(self, rows):
        ordered = rows.sort_values(["id", "start"])
        again = ordered["id"].eq(ordered["id"].shift())
        assert again.sum() == 1421 - 1313
        assert (ordered["start"] == ordered["stop"].shift().where(again, 0.0)).all()

    def test_patients_and_how_their_stays_ended(self, patients):
        censored = patients["status"] == 0
        assert len(patients) == 1313
        assert censored.sum() == 21
        assert (patients["stop"] == patients["adm.cens.exit"])[censored].all()
        assert patients["event"][~censored].value_counts().to_dict() == {3: 1145, 2: 147}

    def test_lengths_of_stay(self, stays):
        assert stays.mean() == pytest.approx(14.56, abs=0.005)
        assert stays.std() / stays.mean() == pytest.approx(1.27, abs=0.005)
        assert stats.skew(stays) == pytest.approx(11.6, abs=0.05)
        assert np.quantile(stays, [0.25, 0.5, 0.75, 0.9, 0.95, 0.99]).tolist() == [5, 9, 18, 33, 43, 70]
        assert (stays.min(), np.sort(stays)[-2], stays.max()) == (1, 96, 460)
        assert (stays == np.round(stays)).all()


class TestTheEmpiricalFamily:
    def test_quantile_mean_and_cv(self, scenario, stays):
        family, n = read_scenario(scenario).patients[0].stay.distribution(), len(stays)
        u = np.concatenate([(np.arange(n) + 0.5) / n, [1e-9, 0.1, 1 / 3, 0.5, 0.999, 1 - 1e-9]])
        ordered = sorted(stays)
        assert family.quantile(u).tolist() == [ordered[int(n * one)] for one in u]
        assert (family.mean(), family.cv()) == pytest.approx(
            (stays.mean(), stays.std() / stays.mean()), rel=1e-12
        )

    def misfit(self, scenario, stays):
        """Whether the stays drawn in 150 replications are too far from the data (chi-squared)."""
        plan = plan_intake(read_scenario(scenario))
        drawn = np.concatenate([draw_intake(plan, number).drawn_stay for number in range(150)])
        lengths, times = np.unique(stays, return_counts=True)
        assert np.isin(drawn, lengths).all()
        seen = np.array([(drawn == length).sum() for length in lengths])
        return stats.chisquare(seen, times / times.sum() * len(drawn)).pvalue < FALSE_ALARM

    def test_drawn_stays_are_distributed_as_the_data(self, scenario, stays):
        assert not self.misfit(scenario, stays)

    def test_a_dropped_stay_is_found_out(self, tmp_path, stays):
        assert self.misfit(written(tmp_path, stays[stays < 460], stays.mean()), stays)


def little_gaps(document, mean_stay):
    """Occupied beds minus admissions a day times mean stay, over all units, of each replication."""
    units = [one["units"].values() for one in document["per_replication"]]
    owed = [
        sum(unit["mean_occupied"] - unit["admissions_per_day"] * mean_stay for unit in each) for each in units
    ]
    return np.array(owed)


class TestTheMainJob:
    def test_check_reads_the_stays_and_the_offered_load(self, scenario, command, stays):
        document = command("check", scenario)
        for name, load in LOADS.items():
            assert document["units"][name]["offered_load_beds"] == pytest.approx(load, rel=1e-9)
            group = document["patients"][f"{name} patients"]
            assert group["mean_days"] == pytest.approx(stays.mean(), rel=1e-12)
            assert group["cv"] == pytest.approx(stays.std() / stays.mean(), rel=1e-12)
            assert group["median_days"] == 9

    def test_simulated_use_is_the_offered_load_that_was_not_turned_away(self, scenario, command, stays):
        """Little's law; and two units that help each other freely are one of 14 beds (Erlang 1917)."""
        document = command("simulate", scenario, "--per-replication", "--workers", 1)
        assert not differs(little_gaps(document, stays.mean()))
        refused = erlang_b(sum(BEDS.values()), sum(LOADS.values()))
        runs = [one["network"] for one in document["per_replication"]]
        beyond = [one["turned_away_per_day"] - refused * one["arrivals_per_day"] for one in runs]
        assert not differs(np.array(beyond))
        units = [one["units"] for one in document["per_replication"]]
        occupied = np.array(
            [sum(one[name]["utilisation"] * beds for name, beds in BEDS.items()) for one in units]
        )
        assert not differs(occupied, sum(LOADS.values()) * (1 - refused))
        assert differs(occupied, sum(LOADS.values()))

    def test_rows_taken_for_patients_are_found_out(self, tmp_path, command, rows, stays):
        pieces = (rows["stop"] - rows["start"]).to_numpy()
        assert pieces.mean() < 0.93 * stays.mean()
        document = command(
            "simulate", written(tmp_path, pieces, stays.mean()), "--per-replication", "--workers", 1
        )
        assert differs(little_gaps(document, stays.mean()))

    def test_a_small_game_is_the_one_that_the_simulations_make(self, scenario, command):
        """Payoffs, equilibria and optimum reckoned again by hand from one simulation a cell."""
        few = ("--replications", 6, "--workers", 1)
        cells = list(product(*CHOICES.values()))
        costs, treated = {}, {}
        for cell in cells:
            rules = [
                part for name, k in zip(BEDS, cell, strict=True) for part in ("--threshold", f"{name}={k}")
            ]
            document = command("simulate", scenario, *rules, *few)
            use = [document["units"][name]["utilisation"]["mean"] for name in BEDS]
            costs[cell] = [abs(one - target) for one, target in zip(use, TARGETS, strict=True)]
            treated[cell] = document["network"]["throughput_per_day"]["mean"]
        game = command("game", scenario, *few)
        for player, name in enumerate(BEDS):
            payoffs = [one["mean"] for row in game["payoffs"][name] for one in row]
            assert payoffs == pytest.approx([costs[cell][player] for cell in cells], abs=1e-12)
        listed = {
            tuple(one["thresholds"].values()): one for one in game["equilibria"] if one["kind"] == "pure"
        }
        assert {cell for cell in cells if max(regrets(cell, costs)) == 0} <= listed.keys()  # Nash 1950
        for cell, one in listed.items():
            assert [one["regret"][name]["mean"] for name in BEDS] == pytest.approx(
                regrets(cell, costs), abs=1e-12
            )
        best = max(treated.values())
        assert {tuple(one.values()) for one in game["optimum"]["thresholds"]} == {
            cell for cell in cells if treated[cell] >= best - 1e-12
        }
        assert game["optimum"]["welfare"]["mean"] == pytest.approx(best, rel=1e-12)


def regrets(cell, costs):
    """The most that each player could save by another threshold of their own alone."""
    saved = []
    for player, choices in enumerate(CHOICES.values()):
        others = [
            tuple(choice if place == player else k for place, k in enumerate(cell)) for choice in choices
        ]
        saved.append(costs[cell][player] - min(costs[other][player] for other in others))
    return saved
