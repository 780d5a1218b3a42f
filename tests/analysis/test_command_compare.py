"""`compare` and `ledger` as a user meets them: documents, texts, files, faults, and going on from a store."""

from __future__ import annotations

import json

import pytest

from tests.analysis.conftest import TWO, written

MORE_BEDS = """
[[policies]]
name = "a bed more"
beds = { A = 3 }
"""
QUICK = ("--replications", 6, "--engine", "reference")


@pytest.fixture
def policies(tmp_path):
    """The two tiny units with one more policy, which has beds of its own."""
    return written(tmp_path / "policies.toml", TWO + MORE_BEDS)


def test_the_document_of_a_comparison(call, policies):
    status, found = call("compare", policies, *QUICK)
    assert status == 0 and found["simultaneous"] is True and found["replications"] == 6
    assert [one["name"] for one in found["policies"]] == ["as in the file", "early", "a bed more"]
    first = found["policies"][0]
    assert set(first["units"]) == {"A", "B=b"} and {"mean", "low", "high"} <= set(
        first["network"]["transfers_per_day"]
    )
    assert found["policies"][2]["beds"] == {"A": 3, "B=b": 3}
    pairs = [(one["policy"], one["against"]) for one in found["differences"]]
    assert list(dict.fromkeys(pairs)) == [
        ("early", "as in the file"), ("a bed more", "as in the file"), ("a bed more", "early")
    ]  # fmt: skip
    assert all(
        {"where", "measure", "mean", "low", "high", "verdict"} <= set(one) for one in found["differences"]
    )
    assert {one["home"] for one in found["by_home"]} == {"A", "B=b"}
    assert found["selection"] is None and found["worst_year"] is None and found["input_uncertainty"] is None


def test_a_difference_is_that_of_the_levels_and_a_year_is_365_days(call, policies):
    _, found = call("compare", policies, *QUICK)
    level = {one["name"]: one["network"]["turned_away_per_day"]["mean"] for one in found["policies"]}
    [one] = [
        one for one in found["differences"]
        if (one["policy"], one["against"], one["where"], one["measure"])
        == ("early", "as in the file", "network", "turned_away_per_day")
    ]  # fmt: skip
    assert one["mean"] == pytest.approx(level["early"] - level["as in the file"])
    assert one["a_year"]["mean"] == pytest.approx(365 * one["mean"])


def test_the_same_command_gives_the_same_bits(call, policies):
    assert call("compare", policies, *QUICK) == call("compare", policies, *QUICK)


def test_a_policy_simulated_alone_is_the_policy_compared(call, policies):
    """`--policy` takes the beds of the row too."""
    _, alone = call("simulate", policies, "--policy", "a bed more", *QUICK)
    _, found = call("compare", policies, *QUICK)
    assert alone["network"]["turned_away_per_day"] == found["policies"][2]["network"]["turned_away_per_day"]


def test_the_text_never_claims_that_there_is_no_difference(show, policies):
    status, out, _ = show("compare", policies, *QUICK, "--policies", "nobody closes early,early")
    assert status == 0
    assert "cannot be told apart" in out and "no difference" not in out.lower()
    assert '"as in the file" and "nobody closes early" are the same rules in this network' in out
    assert "For planning only" in out


def test_a_selection_goes_on_until_it_is_made(call, policies):
    status, found = call(
        "compare", policies, *QUICK, "--policies", "early", "--difference", 20, "--first-stage", 8
    )
    chosen = found["selection"]
    assert status == 0 and chosen["selected"] == "as in the file" and chosen["replications"] >= 8
    assert chosen["still_in"] == ["as in the file"] and set(chosen["two_stage_replications"]) == {
        "as in the file",
        "early",
    }


def test_a_selection_says_when_its_budget_is_spent(call, policies):
    status, found = call(
        "compare", policies, *QUICK, "--policies", "nobody closes early", "--difference", 0.001, "--most", 25
    )
    assert status == 0
    assert found["selection"]["selected"] == "as in the file", (
        "of policies that are one and the same any will do"
    )
    _, found = call(
        "compare", policies, *QUICK, "--policies", "a bed more,early", "--difference", 1e-6, "--most", 25
    )
    assert found["selection"]["selected"] is None and found["selection"]["replications"] == 25
    assert "Not decided after 25 replications" in found["selection"]["statement"]


def test_years(call, show, policies):
    _, found = call("compare", policies, *QUICK, "--policies", "early", "--years", 4)
    worst = found["worst_year"]
    assert worst["years"] == 4 and len(worst["rows"]) == 2 * 2 * 3
    assert all("36 are needed" in one["bad_year"]["reason"] for one in worst["rows"])
    total, *homes = [one["mean_year"] for one in worst["rows"][:3]]
    assert total == pytest.approx(sum(homes))
    assert "give --years" in show("compare", policies, *QUICK)[1]


def test_what_a_folder_holds_goes_on_and_can_be_verified(call, policies, tmp_path):
    folder = tmp_path / "out"
    arguments = ("compare", policies, *QUICK, "--out", folder, "--years", 3)
    _, first = call(*arguments)
    pictures = {path.name: path.read_bytes() for path in folder.glob("comparison-*")}
    assert len(pictures) == 6 and first["computed"] == 3 * 6 + 3 * 3 and first["reused"] == 0
    assert (
        json.loads((folder / "result.json").read_text(encoding="utf-8"))["critical_value"]
        == first["critical_value"]
    )
    _, second = call(*arguments)
    assert second["computed"] == 0 and second["record_hash"] == first["record_hash"]
    assert {path.name: path.read_bytes() for path in folder.glob("comparison-*")} == pictures
    status, verified = call("results", "verify", folder)
    assert status == 0 and verified["agrees"] and verified["checked"] == 20 and verified["not_computed"] == 0


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (("--policies", "earli"), "did you mean `early`?"),
        (("--policies", "optimum", "--game", "nowhere"), "must be a folder that is there"),
        (("--policy", "early"), "--policies (with an s)"),
        (("--difference", "0"), "--difference"),
        (("--input-uncertainty", "100"), "needs stays or delays taken from records"),
        (("--input-uncertainty", "10"), "--input-uncertainty"),
    ],
)
def test_faults(show, policies, arguments, said):
    status, out, err = show("compare", policies, *QUICK, *arguments)
    assert status == 2 and out == "" and said in err


def test_one_replication_compares_nothing(show, policies):
    status, _, err = show("compare", policies, "--replications", 1)
    assert status == 1 and "at least 2 are needed" in err


def test_recorded_stays_get_their_share(call, tmp_path):
    text = TWO.replace(
        'family = "exponential", mean_days = 2.0', 'family = "empirical", file = "s.csv", column = "d"'
    )
    (tmp_path / "s.csv").write_text("d\n0.5\n1\n2\n3\n4\n", encoding="utf-8")
    path = written(tmp_path / "recorded.toml", text)
    status, found = call("compare", path, *QUICK, "--input-uncertainty", 100, "--runs-each", 2)
    shares = [one["input_share"] for one in found["input_uncertainty"]["rows"]]
    assert status == 0 and found["input_uncertainty"]["resamples"] == 100
    assert len(shares) == 2 * 3 + 3 and all(0 <= one <= 1 for one in shares)
    assert max(shares) > 0.5, "five records are hardly any"


# ---- the ledger ----


def test_the_document_of_a_ledger(call, two, tmp_path):
    folder = tmp_path / "ledger"
    status, found = call("ledger", two, *QUICK, "--policy", "early", "--out", folder, "--traced", 2)
    assert (
        status == 0
        and found["closes_early"] == {"A": True, "B=b": True}
        and found["traced_replications"] == 2
    )
    assert len(found["matrix"]) == 2 * 2 * 3 and found["simultaneous"] is True
    assert {one["counted"] for one in found["matrix"]} == {"turned away", "moved"}
    assert {path.name for path in folder.glob("ledger.*")} == {"ledger.png", "ledger.svg"}
    assert call("results", "verify", folder)[1]["agrees"]


def test_what_is_displaced_adds_up_to_what_it_costs(call, two):
    """All replications traced: more turned away in the matrix is displaced to less displaced from being turned away."""
    _, found = call("ledger", two, *QUICK, "--policy", "early", "--traced", 6)
    for cost in found["matrix"]:
        if cost["counted"] == "turned away" and cost["home"] != "network":
            rows = [
                one
                for one in found["displaced"]
                if (one["closes"], one["home"]) == (cost["closes"], cost["home"])
            ]
            net = sum(
                one["a_year"] * ((one["now"] == "turned away") - (one["without"] == "turned away"))
                for one in rows
            )
            assert net == pytest.approx(cost["a_year"]["mean"])


def test_an_episode(call, two):
    status, found = call("ledger", two, *QUICK, "--policy", "early", "--episode", 2, "--unit", "A")
    one = found["episode"]
    assert status == 0 and one["number"] == 2 and one["of"] > 2 and one["from_day"] < one["until_day"]
    assert all(patient["arrival_days"] >= one["from_day"] for patient in one["displaced"])


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (("--episode", "1"), "--episode N needs --unit"),
        (("--unit", "A"), "needs --episode"),
        (("--unit", "AA", "--episode", "1"), "did you mean `A`?"),
        (("--unit", "A", "--episode", "999999"), "must be one of the"),
    ],
)
def test_faults_of_a_ledger(show, two, arguments, said):
    status, _, err = show("ledger", two, *QUICK, *arguments)
    assert status == 2 and said in err


def test_where_nobody_closes_early_there_is_nothing_to_reckon(show, two):
    status, out, _ = show("ledger", two, *QUICK)
    assert status == 0 and "No unit closes early under these rules" in out and "For planning only" in out
