"""`brimline game --exact`: table or search, how that is chosen and shown, and what a search's document says."""

import json

import pytest

from analysis.command import game_search
from tests.analysis.builders import no_constants


def equilibria(document):
    return [one["thresholds"] for one in document["equilibria"]]


@pytest.fixture
def wide(three):
    """Three units with every threshold allowed: 2 x 3 x 2 cells."""
    with open(three, encoding="utf-8") as file:
        text = file.read().partition("[game]")[0]
    with open(three, "w", encoding="utf-8") as file:
        file.write(text)
    return three


# ---- the choice ----


def test_a_small_table_is_used_and_said_so(call, wide):
    status, document = call("game", wide, "--exact")
    assert (
        status == 0 and document["search"]["method"] == "table" and document["search"]["chosen_by"] == "cost"
    )
    assert (
        document["search"]["cells"] == 12 and document["search"]["states_per_cell"] == 36
    )  # 3 x 4 x 3 beds + 1
    assert document["search"]["seconds_per_cell"] is None
    assert document["structure"]["complete"] and "walks" not in document


def test_a_table_too_dear_is_searched_instead(call, wide, monkeypatch):
    monkeypatch.setattr(game_search, "QUICK", 0)
    cheap = call("game", wide, "--exact")[1]
    monkeypatch.setattr(game_search, "TABLE_SECONDS", 0.0)
    dear = call("game", wide, "--exact")[1]
    assert [one["search"]["method"] for one in (cheap, dear)] == ["table", "best_reply"]
    for one in (cheap, dear):
        assert one["search"]["chosen_by"] == "cost" and one["search"]["seconds_per_cell"] > 0
        assert "12 cells of at most 36 states" in one["search"]["reads"]


def test_a_table_of_too_many_cells_is_searched_instead_unless_asked_for(call, wide, monkeypatch):
    monkeypatch.setattr("analysis.payoffs.MOST_CELLS", 11)
    status, document = call("game", wide, "--exact")
    assert status == 0 and document["search"]["method"] == "best_reply"
    status, document = call("game", wide, "--exact", "--search", "table")
    assert status == 2 and document["faults"][0]["key"] == "game.strategies"


def test_the_choice_can_be_overridden_and_finds_the_same_ends(call, wide):
    table, search = (call("game", wide, "--exact", "--search", how)[1] for how in ("table", "best_reply"))
    for document, method in ((table, "table"), (search, "best_reply")):
        assert document["search"]["method"] == method and document["search"]["chosen_by"] == "--search"
    assert search["bracket"]["shown"]
    assert search["bracket"]["least"] == table["structure"]["least_equilibrium"]
    assert search["bracket"]["greatest"] == table["structure"]["greatest_equilibrium"]
    assert set(map(str, equilibria(search))) <= set(map(str, equilibria(table)))


def test_a_search_tells_of_fitted_stays_as_a_table_does(call, show, wide):
    with open(wide, encoding="utf-8") as file:
        text = file.read()
    assert 'family = "exponential", mean_days = 2.0' in text
    gamma = text.replace(
        'family = "exponential", mean_days = 2.0', 'family = "gamma", mean_days = 2.0, cv = 1.3', 1
    )
    with open(wide, "w", encoding="utf-8") as file:
        file.write(gamma)
    options = ("game", wide, "--exact", "--phase-fit", 2)
    searched, whole = (call(*options, "--search", search)[1] for search in ("best_reply", "table"))
    assert len(whole["phase_fit"]) == 1 and searched["phase_fit"] == whole["phase_fit"]
    assert "largest distance" in show(*options, "--search", "best_reply")[1]


@pytest.mark.parametrize("how", [["--search", "table"], ["--search", "best_reply", "--replications", "2"]])
def test_search_is_for_the_exact_chain_only(call, two, how):
    status, document = call("game", two, *how)
    assert status == 2 and document["faults"][0]["key"] == "--search"


def test_an_unknown_search_is_a_fault(call, two):
    status, document = call("game", two, "--exact", "--search", "nearby")
    assert status == 2 and document["faults"][0]["key"] == "--search"


@pytest.mark.parametrize("search", [[], ["--search", "best_reply"]])
def test_what_the_chain_refuses_a_search_refuses_too(call, delayed, search):
    status, document = call("game", delayed, "--exact", *search)
    assert status == 2 and set(document) == {"reasons"}


def test_a_squared_goal_is_refused_before_any_search(call, wide):
    with open(wide, "a", encoding="utf-8") as file:
        file.write(
            '\n[game]\ngoal = { kind = "target_utilisation", shape = "squared", judged_over_days = 28 }\n'
        )
    status, document = call("game", wide, "--exact", "--search", "best_reply")
    assert status == 2 and document["faults"][0]["key"] == "game.goal.shape"


# ---- the document ----


def test_a_searchs_numbers_are_those_of_the_table_and_its_bounds_are_called_so(call, wide):
    options = ("--exact", "--target", 0.3, "--demand", 2)
    table = call("game", wide, *options)[1]
    search = call("game", wide, *options, "--search", "best_reply")[1]
    strategies = table["strategies"]
    for cell in search["visited"]:
        for player, payoff in cell["payoffs"].items():
            expected = table["payoffs"][player]
            for name, threshold in cell["thresholds"].items():
                expected = expected[strategies[name].index(threshold)]
            assert payoff == pytest.approx(expected, abs=1e-12)
    assert search["payoffs"] is None and search["payoffs_reason"]
    assert 1 < search["price_of_anarchy"] <= table["price_of_anarchy"] + 1e-12
    assert search["lost_per_year"] <= table["lost_per_year"] + 1e-9
    assert search["bounds"] == {"price_of_anarchy": "lower bound", "lost_per_year": "lower bound"}
    assert search["price_of_stability"] is None and "price_of_stability" in search["reason"]
    assert "best visited" in search["optimum"]["is"]
    for one in search["equilibria"]:
        assert one["verdict"] == "exact" and max(one["regret"].values()) <= search["tolerance"]
    for player, replies in search["best_responses"].items():
        assert all(reply in table["best_responses"][player] for reply in replies)
    assert all(one["bound"] == "lower bound" for one in search["structure"]["at_tolerances"])


def test_a_claim_from_visited_cells_names_those_that_were_not(call, wide):
    document = call("game", wide, "--exact", "--search", "best_reply")[1]
    unseen = document["structure"]["of_cells"] - document["structure"]["cells"]
    assert unseen > 0 and document["structure"]["cells"] == len(document["visited"])
    assert f"if the {unseen} cells not visited behave as these do" in document["bracket"]["reads"]
    assert not document["structure"]["pure_equilibrium_must_exist"]


def test_the_structure_of_a_table_holds_its_evidence(call, two):
    structure = call("game", two, "--exact")[1]["structure"]
    assert structure["single_crossing"] and structure["pure_equilibrium_must_exist"]
    assert structure["own"]["comparisons"] == 3 + 4 and structure["others"]["comparisons"] == 3 + 4
    least = structure["own"]["least"]
    (player,) = (name for name in least["to"] if least["to"][name] != least["from"][name])
    assert player == least["player"] and least["change"] > structure["tolerance"]
    ends = [
        call("exact", two, *(f"--threshold={name}={k}" for name, k in least[end].items()))[1]["units"][player]
        for end in ("from", "to")
    ]
    assert ends[1]["utilisation"] - ends[0]["utilisation"] == pytest.approx(least["change"], abs=1e-12)
    assert [one["tolerance"] for one in structure["at_tolerances"]] == [0, 1e-9, 1e-6, 1e-4, 1e-3]


def test_an_own_plateau_is_told_and_voids_the_promise(call, two):
    """C has no patients of its own and takes nobody else's, so its threshold does nothing: 2 x 3 steps stand still."""
    with open(two, encoding="utf-8") as file:
        text = file.read()
    idle = '\n[[units]]\nname = "C"\nbeds = 2\nincoming_threshold = 0\ntarget_utilisation = 0.4\n'
    with open(two, "w", encoding="utf-8") as file:
        file.write(text + idle + '\n[diversion]\nwhen_all_closed = "turned_away"\n')
    table = call("game", two, "--exact")[1]["structure"]
    assert table["own"]["level"] == 6 and not table["single_crossing"]
    assert {step["player"] for step in table["own"]["failing"]} == {"C"}
    search = call("game", two, "--exact", "--search", "best_reply")[1]
    assert not search["bracket"]["shown"] and "is not shown" in search["bracket"]["reads"]


# ---- shown, written, interrupted ----


def test_a_person_is_told_the_choice_the_bracket_and_the_bounds(show, wide):
    status, text, _ = show("game", wide, "--exact", "--search", "best_reply")
    assert status == 0
    for said in ("Best-reply search as asked: 12 cells", "bracket every pure equilibrium", "lower bound",
                 "best visited", "Structure, from", "Topkis 1979"):  # fmt: skip
        assert said in text
    status, text, _ = show("game", wide, "--exact")
    assert (
        status == 0 and "Full table, for it is small" in text and "so a pure equilibrium must exist" in text
    )


def test_a_search_is_written_like_a_table(call, wide, tmp_path):
    folder = tmp_path / "out"
    document = call("game", wide, "--exact", "--search", "best_reply", "--out", folder)[1]
    kept = json.loads((folder / "result.json").read_text(encoding="utf-8"), parse_constant=no_constants)
    assert kept == document and (folder / "provenance.json").exists()
    header, *rows = (folder / "table.csv").read_text(encoding="utf-8").splitlines()
    assert header.startswith("threshold A,payoff A,regret A,") and len(rows) == len(document["visited"])


def test_an_interrupted_search_hands_over_what_it_knows(call, wide, monkeypatch):
    from analysis.search import chain_solver

    def until_five(*arguments):
        solver, done = chain_solver(*arguments), []

        def solved(wanted):
            for units in solver(wanted):
                if len(done) == 5:
                    raise KeyboardInterrupt
                done.append(units)
                yield units

        return solved

    monkeypatch.setattr("analysis.search.chain_solver", until_five)
    status, document = call("game", wide, "--exact", "--search", "best_reply")
    assert status == 130 and document["stopped"] == "interrupted" and document["interrupted"]
    assert len(document["visited"]) == 5
    assert not document["bracket"]["shown"]
