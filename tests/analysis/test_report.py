"""The report: what it says, that it says no more than the results allow, and that no name can act in it."""

import json
import re
import shutil
import subprocess
import tomllib
from importlib.resources import files
from pathlib import Path

import pytest

from analysis.command.caution import CAUTION
from analysis.command.entry import run
from analysis.report import read_results, report_of, to_html, to_markdown
from analysis.report.contents import SECTIONS
from analysis.report.words import GAP, NEVER_SAID, between, estimate
from sim.errors import RunError, ScenarioError
from tests.analysis.conftest import TWO
from tests.analysis.report_cases import COMMANDS, breaches, page_of, written_results

SNAPSHOTS = Path(__file__).parent / "snapshots"
ORDER = (
    "Question", "Answer", "The network", "Verification", "Equilibria", "What selfish rules cost in patients a year",
    "Over demand and targets", "Targets that align", "Policies side by side",
    "The closure ledger", "Limits and cautions", "Methods with sources", "Provenance",
)  # fmt: skip


@pytest.fixture(scope="module")
def results(tmp_path_factory):
    """A folder of each kind, of the two tiny units."""
    return written_results(tmp_path_factory.mktemp("results"))


@pytest.fixture(scope="module")
def everything(results):
    """The report on all of them."""
    return report_of(read_results(list(results.values())))


@pytest.fixture(scope="module")
def page(everything):
    return to_html(everything)


@pytest.fixture(scope="module")
def told(results):
    """Kind -> both forms of a report on that result alone."""
    return {kind: texts_of([folder]) for kind, folder in results.items()}


def texts_of(folders):
    """Both forms of the report on some folders."""
    report = report_of(read_results(folders))
    return to_html(report), to_markdown(report)


def changed(folder, into, change):
    """A copy of a result whose document is changed by hand."""
    shutil.copytree(folder, into)
    document = json.loads((into / "result.json").read_text(encoding="utf-8"))
    change(document)
    (into / "result.json").write_text(json.dumps(document), encoding="utf-8")
    return into


def plain(html):
    """The page's words."""
    return " ".join(page_of(html).of("body")[0].text.split())


def section(html, anchor):
    """The words of one section."""
    [found] = [one for one in page_of(html).of("section") if one.attributes["id"] == anchor]
    return " ".join(found.text.split())


# ---- what it says ----


def test_the_sections_stand_in_the_boards_order(everything):
    assert tuple(one.title for one in everything.sections) == ORDER
    assert {one.anchor for one in everything.sections} == set(SECTIONS)


@pytest.mark.parametrize("kind", COMMANDS)
def test_every_kind_has_a_report_of_its_own_in_both_forms(told, kind):
    html, markdown = told[kind]
    assert list(breaches(html)) == []
    answers = re.findall(r"^\d\. ", markdown.split("## Answer")[1].split("##")[0], flags=re.M)
    assert len(answers) == 3
    assert CAUTION in plain(html) and CAUTION in markdown


def test_the_phrases_that_are_never_said_are_in_no_report(told, everything, page):
    for text in [page, to_markdown(everything), *(one for both in told.values() for one in both)]:
        assert [phrase for phrase in NEVER_SAID if phrase in text.lower()] == []


def test_the_search_for_phrases_finds_a_planted_one(results, tmp_path):
    def plant(document):
        document["findings"][0]["statement"] = "These thresholds are VALIDATED and there is no difference"

    html, markdown = texts_of([changed(results["ledger"], tmp_path / "planted", plant)])
    for text in (html, markdown):
        assert {phrase for phrase in NEVER_SAID if phrase in text.lower()} == {"validated", "no difference"}


def test_an_exact_answer_is_called_exact_and_has_the_documents_numbers(results, told):
    document = json.loads((results["game-exact"] / "result.json").read_text(encoding="utf-8"))
    said = section(told["game-exact"][0], "answer")
    pure = sum(one["kind"] == "pure" for one in document["equilibria"])
    assert f"{pure} profile" in said and "(exact)" in said
    assert f"{document['lost_per_year']:.1f} (exact) patients a year" in said
    assert f"{document['price_of_anarchy']:.4f} (exact)" in said


def test_a_simulated_game_claims_its_sets_and_no_more(results, told):
    document = json.loads((results["game"] / "result.json").read_text(encoding="utf-8"))
    said = section(told["game"][0], "answer")
    assert f"{document['possible']} of 6 profiles may be equilibria" in said
    lost = document["lost_per_year"]
    assert f"between {lost['low']:.1f} and {lost['high']:.1f} patients a year fewer" in said
    assert "whichever of the possible profiles are the equilibria" in said
    assert "by the estimates" in said and "means of the replications" in said
    assert "(exact)" not in said


def test_a_simulated_game_tells_how_much_epsilon_allows_and_whether_prices_exist(results, told):
    document = json.loads((results["game"] / "result.json").read_text(encoding="utf-8"))
    said = [one["statement"] for one in document["findings"]]
    carried = [one for one in said if one.startswith("Epsilon is ") or "hese prices " in one]
    assert carried and all(one in told["game"][0] for one in carried)


def test_one_replication_decides_nothing(told):
    said = section(told["game-once"][0], "answer")
    assert "cannot decide" in said and "No statement on what selfish rules cost" in said


def test_a_search_gives_bounds_and_says_so(told):
    html = told["search"][0]
    assert "at least" in section(html, "answer") and "lower bound" in section(html, "answer")
    assert "what it did not visit it does not exclude" in section(html, "equilibria")


def test_a_ratio_never_stands_without_refusals_transfers_and_closed_time(told):
    for kind in ("game", "game-exact", "search"):
        said = section(told[kind][0], "cost")
        assert all(
            words in said for words in ("turned away", "moved", "closed with a free bed", "price of anarchy")
        )
        assert "nobody should ever close early" in said and "price of that rule is transfers" in said


def test_another_welfare_is_not_told_that_nobody_should_close(tmp_path):
    weighed = TWO + '\n[game]\nwelfare = { kind = "loss", transfer_weight = 0.5 }\n'
    folders = written_results(tmp_path, weighed, ("game-exact",))
    html = texts_of(list(folders.values()))[0]
    assert "nobody should ever close early" not in html
    assert "a year of (patients turned away + 0.5 x transfers) more" in section(html, "answer")


def test_verification_that_fails_is_not_called_agreement(results, told, tmp_path):
    def plant(document):
        document["agrees"] = document["measures"][0]["agrees"] = False

    html = texts_of([changed(results["verify"], tmp_path / "off", plant)])[0]
    assert "DISAGREES with the exact chain in 1 of" in section(html, "answer")
    assert "agrees with the exact chain in all" not in plain(html)
    assert "agrees with the exact chain in all" in plain(told["verify"][0])


def test_the_verified_measures_stand_in_the_table_but_levels_that_agree(results, told, tmp_path):
    document = json.loads((results["verify"] / "result.json").read_text(encoding="utf-8"))
    levels = [one for one in document["measures"] if one["measure"].startswith("occupancy ")]
    assert all(one["agrees"] for one in levels) and levels

    def rows(markdown):
        lines = markdown.split("## Verification")[1].split("\n## ")[0].splitlines()
        return [line for line in lines if line.startswith("|")][2:]

    def plant(document):
        first = next(one for one in document["measures"] if one["measure"].startswith("occupancy "))
        first["agrees"], first["z"] = False, 9.0

    assert len(rows(told["verify"][1])) == len(document["measures"]) - len(levels)
    wrong = rows(texts_of([changed(results["verify"], tmp_path / "wrong", plant)])[1])
    assert len(wrong) == len(document["measures"]) - len(levels) + 1
    assert sum("DISAGREES" in row for row in wrong) == 1


def test_interrupted_and_failed_runs_are_told(results, tmp_path):
    def plant(document):
        document["interrupted"], document["failed"] = True, [{"replication": 3}]

    said = section(texts_of([changed(results["simulate"], tmp_path / "cut", plant)])[0], "limits")
    assert "was interrupted" in said and "1 run failed" in said


def test_several_scenarios_are_told_apart(results, tmp_path):
    other = written_results(tmp_path, TWO.replace("Two tiny units", "Two more units"), ("exact",))
    html = texts_of([results["exact"], other["exact"]])[0]
    assert "scenario 1: Two tiny units (invented); scenario 2: Two more units (invented)" in plain(html)
    assert "Result “exact”, scenario 1" in plain(html) and "Result “exact (2)”, scenario 2" in plain(html)
    assert "numbers of different scenarios are not paired" in plain(html)


def test_numbers_carry_their_interval_or_why_there_is_none():
    assert estimate(0.12345, 3) == "0.123 (exact)"
    assert estimate({"mean": 2.0, "low": 1.0, "high": 3.0}) == "2.0 (1.0 to 3.0)"
    assert (
        estimate({"mean": 2.0, "low": None, "high": None, "reason": "one run"})
        == "2.0 (no interval: one run)"
    )
    assert estimate({"mean": None, "low": None, "high": None, "reason": "none"}) == "not known: none"
    assert estimate({"mean": 2.0, "low": 1.5, "high": None}) == "2.0 (1.5 or more)"
    assert estimate(None) == "not known"
    assert estimate({"mean": -0.0001, "low": -0.01, "high": 0.01}) == "0.0 (0.0 to 0.0)"
    assert between({"mean": 2.0, "low": None, "high": 3.0}) is None
    assert between({"mean": 2.0, "low": 1.0, "high": 3.0}) == "between 1.0 and 3.0"


def test_what_only_the_analyst_knows_is_a_gap(page):
    gaps = [one.text for one in page_of(page).of("span") if one.attributes.get("class") == "gap"]
    assert len(gaps) >= 8 and all(GAP in one or one.startswith(GAP) for one in gaps)


def test_the_methods_hold_every_item(page):
    terms = [one.text for one in page_of(page).of("dt")]
    numbers = [one.split()[0] for one in terms if one[0].isdigit()]
    assert numbers == ["1.1", "1.2", "1.3", "2.1", "2.2", "2.3", "2.4", "2.5", "3.1", "3.2", "3.3", "3.4", "4.1", "4.2",
                       "4.3", "5.1", "5.2", "5.3", "5.4", "6"]  # fmt: skip
    assert "Monks" in page and "Karnon" in page


def test_the_provenance_repeats_each_result(results, page):
    said = section(page, "origin")
    for folder in results.values():
        origin = json.loads((folder / "provenance.json").read_text(encoding="utf-8"))
        assert origin["command"][1] in said and origin["scenario"]["sha256"] in said
    text = next(one.text for one in page_of(page).of("pre") if "schema = 1" in one.text)
    assert tomllib.loads(text) == tomllib.loads(TWO)


# ---- sweeps and aligning targets ----


def document_of(folder):
    return json.loads((folder / "result.json").read_text(encoding="utf-8"))


@pytest.mark.parametrize("kind", ["sweep", "sweep-simulated"])
def test_a_sweep_gives_every_dear_point_with_its_price(results, told, kind):
    document = document_of(results[kind])
    said = told[kind][1].split("## Over demand and targets")[1].split("\n## ")[0]
    assert all(f"{finding}." in said for finding in document["findings"])
    dear = [one for one in document["points"] if (one["price_of_anarchy"]["high"] or 9) >= 1.00005]
    assert dear
    left = len(document["points"]) - len(dear)
    assert (f"in points.csv: {left} point" in said) == (left > 0)
    for one in dear:
        price = one["price_of_anarchy"]
        if price["mean"] is None:
            continue
        ends = f"{price['low']:.4f} to {price['high']:.4f}" if kind == "sweep-simulated" else "exact"
        assert f"target {one['target']:g}" in said and f"{price['mean']:.4f} ({ends})" in said
    basis = "Every number is exact" if kind == "sweep" else "10 replications, intervals at 95 %"
    assert basis in said


@pytest.mark.parametrize("kind", ["align", "align-simulated"])
def test_an_alignment_stands_beside_the_busiest_unit_and_is_no_advice_to_run_fuller(results, told, kind):
    document = document_of(results[kind])
    html = told[kind][0]
    said = section(html, "align")
    assert all(statement.rstrip(".") in said for statement in document["statements"])
    for row in document["rows"]:
        busiest = row["busiest_when_nobody_closes_early"]
        assert f"{100 * busiest['utilisation']:.1f} % occupied" in said
        if row["target"] is not None:
            assert f"the lowest target, {row['target']:g}, is to be read beside the busiest unit" in said
            assert f"{busiest['utilisation']:.3f} ({busiest['unit']}" in said
    assert kind == "align-simulated" or document["rows"][0]["target"] == 0.6
    assert "not a reason to run fuller" in said and "patients whose transfer is a risk" in said
    assert ("Every number is exact" in said) == (kind == "align")


def test_the_lists_of_a_sweep_and_an_alignment_must_be_whole(results, tmp_path):
    for kind, key in (("sweep", "methods"), ("align", "statements")):
        folder = changed(results[kind], tmp_path / kind, lambda document, key=key: document.pop(key))
        with pytest.raises(RunError, match="run its command again"):
            texts_of([folder])


# ---- what a run and a game add ----


def test_precision_batch_means_and_an_episode_are_told(results, told):
    reached = document_of(results["precise"])["precision"]
    said = section(told["precise"][0], "network")
    assert f"at most {100 * reached['relative']:g} % of the estimate" in said
    assert all(f"{100 * one['relative']:.2f} %" in said for one in reached["measures"] if one["relative"])
    batches = document_of(results["once"])["batch_means"]
    said = section(told["once"][0], "network")
    assert (batches["reason"] if batches["batches"] is None else f"{batches['batches']} batches") in said
    episode = document_of(results["ledger"])["episode"]
    said = section(told["ledger"][0], "ledger")
    assert f"Closing {episode['number']} of {episode['of']} in replication 0" in said
    assert f"{len(episode['displaced'])} patient" in said


def test_refusals_and_transfers_of_a_simulated_game_have_intervals(results, told):
    document = document_of(results["game"])
    said = section(told["game"][0], "cost")
    network = document["optimum"]["network"]
    for rate in ("turned_away_per_day", "transfers_per_day"):
        low, high = (365 * network[rate][end] for end in ("low", "high"))
        assert f"({low:,.1f} to {high:,.1f})" in said
    assert "network" not in document_of(results["game-exact"])["optimum"]


def test_best_replies_and_the_curve_over_weights_are_drawn(told):
    for kind in ("game", "game-exact"):
        titles = [one.text for one in page_of(told[kind][0]).of("title")]
        assert "Best replies, which cross at equilibria" in titles
        assert "What selfish rules cost over the weight of a transfer" in titles
    assert "possible best reply" in section(told["game"][0], "equilibria")


# ---- the same bytes, and a form that is kept ----


def test_the_same_results_give_the_same_bytes(results, told):
    for kind in ("game", "simulate", "ledger"):
        assert texts_of([results[kind]]) == told[kind]


def test_the_markdown_of_a_small_exact_game_is_as_kept():
    """Where words are changed on purpose, write the new text over the file."""
    kept = (SNAPSHOTS / "tiny-game.md").read_text(encoding="utf-8")
    assert to_markdown(report_of(read_results([SNAPSHOTS / "tiny-game"]))) == kept


# ---- the page ----


def test_the_page_is_sound(page):
    assert list(breaches(page)) == []
    assert len(page_of(page).of("svg")) >= 12


@pytest.mark.parametrize(
    ("before", "after"),
    [
        ("</main>", '<img src="https://example.org/a.png"></main>'),
        ("</main>", "<script>alert(1)</script></main>"),
        ('<p class="lead">', '<p class="lead" style="color:red">'),
        ('lang="en"', ""),
        ('role="img"', 'role="presentation"'),
        ("<h3>", "<h1>again</h1><h3>"),
        ('id="question"', 'id="answer"'),
        ('tabindex="0"', ""),
        ("body { margin", "body { background: url(x); margin"),
    ],
)
def test_the_check_of_pages_finds_what_is_planted(page, before, after):
    assert before in page
    assert list(breaches(page.replace(before, after, 1)))


def test_colours_can_be_told_apart():
    """The contrast of every pair of text and ground in the style sheet, by the WCAG 2 formula (from memory)."""
    sheet = files("analysis.report").joinpath("templates/page.css").read_text(encoding="utf-8")
    pairs = set()
    for rule in re.findall(r"\{([^{}]*)\}", sheet):
        text, ground = (re.findall(rf"(?<![\w-]){key}: (#\w{{6}})", rule) for key in ("color", "background"))
        pairs |= {(one, (ground or ["#ffffff"])[0]) for one in text or (["#1a1a1a"] if ground else [])}
    assert len(pairs) >= 6
    assert {pair: contrast(*pair) for pair in pairs if contrast(*pair) < 4.5} == {}
    assert contrast("#000000", "#ffffff") == pytest.approx(21) and contrast("#999999", "#ffffff") < 4.5


def contrast(one, other):
    def luminance(colour):
        parts = (int(colour[place : place + 2], 16) / 255 for place in (1, 3, 5))
        linear = [part / 12.92 if part <= 0.04045 else ((part + 0.055) / 1.055) ** 2.4 for part in parts]
        return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]

    darker, lighter = sorted(map(luminance, (one, other)))
    return (lighter + 0.05) / (darker + 0.05)


def test_the_templates_are_part_of_the_package():
    """The wheel takes whole packages; what git leaves out of them it leaves out too."""
    root = Path(__file__).resolve().parents[2]
    built = tomllib.loads((root / "pyproject.toml").read_text(encoding="utf-8"))["tool"]["hatch"]["build"]
    assert built["targets"]["wheel"] == {"packages": ["sim", "analysis"]}
    names = {one.name for one in files("analysis.report").joinpath("templates").iterdir()}
    assert {"page.html", "page.css"} <= names
    left_out = subprocess.run(
        ["git", "-C", str(root), "check-ignore", *(f"analysis/report/templates/{one}" for one in names)],
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert left_out.stdout == ""


# ---- faults ----


def test_every_fault_of_every_folder_is_told_at_once(results, tmp_path, capsys):
    (tmp_path / "empty").mkdir()
    (tmp_path / "broken").mkdir()
    (tmp_path / "broken" / "result.json").write_text("{", encoding="utf-8")
    shutil.copytree(results["exact"], tmp_path / "unknown")
    (tmp_path / "unknown" / "result.json").write_text('{"weather": 1}', encoding="utf-8")
    folders = [str(tmp_path / one) for one in ("empty", "broken", "unknown", "nowhere")]
    status = run(["report", *folders, folders[0], "--out", str(tmp_path / "no" / "report.html"), "--json"])
    printed = capsys.readouterr()
    faults = json.loads(printed.out)["faults"]
    assert status == 2 and not list(tmp_path.glob("*.html"))
    said = [f"{one['key']}: {one['rule']}: {one['value']}" for one in faults]
    for place in ("empty/result.json", "broken/result.json", "unknown/result.json", "nowhere/result.json"):
        assert any(place in one for one in said), place
    assert any(one.startswith("RESULTS: must be given once") for one in said)
    assert any(one.startswith("--out: must be in a folder") for one in said)
    assert any("weather" in one for one in said)
    assert "Traceback" not in printed.err and len(printed.err.splitlines()) == len(faults)


def test_results_that_contradict_each_other_are_refused(results, tmp_path):
    def plant(document):
        document["network"]["throughput_per_day"] += 1

    other = changed(results["exact"], tmp_path / "other", plant)
    with pytest.raises(ScenarioError, match="contradict"):
        read_results([results["exact"], other])
    same = shutil.copytree(results["exact"], tmp_path / "same")
    assert len(read_results([results["exact"], same])) == 2


def test_a_damaged_document_is_named_with_the_remedy(results, tmp_path, capsys):
    folder = changed(
        results["verify"], tmp_path / "damaged", lambda document: document.pop("false_alarm_rate")
    )
    assert run(["report", str(folder), "--out", str(tmp_path / "a.html")]) == 1
    said = capsys.readouterr().err
    assert "false_alarm_rate" in said and "run its command again" in said and "unexpectedly" not in said
    assert not (tmp_path / "a.html").exists()


def test_a_folder_of_results_stands_for_what_it_holds(results):
    [folder] = {one.parent for one in results.values()}
    assert {one.label for one in read_results([folder])} == set(COMMANDS)


def test_no_result_is_written_over(results, capsys):
    folder = results["exact"]
    before = (folder / "result.json").read_bytes()
    assert run(["report", str(folder), "--out", str(folder / "result.json")]) == 2
    assert (folder / "result.json").read_bytes() == before


def test_the_command_writes_the_form_that_is_asked_for(results, tmp_path, capsys):
    folder = str(results["exact"])
    assert run(["report", folder, "--out", str(tmp_path / "a.html")]) == 0
    assert CAUTION in " ".join(capsys.readouterr().out.split())
    assert run(["report", folder, "--out", str(tmp_path / "a.md")]) == 0
    assert run(["report", folder, "--format", "md", "--out", str(tmp_path / "b.txt")]) == 0
    assert (tmp_path / "a.html").read_text(encoding="utf-8").startswith("<!doctype html>")
    assert (tmp_path / "a.md").read_bytes() == (tmp_path / "b.txt").read_bytes()
    assert run(["report", folder, "--format", "md", "--pdf", "--out", str(tmp_path / "c.md")]) == 2


def test_a_pdf_without_a_browser_is_refused_in_plain_words(results, tmp_path, monkeypatch, capsys):
    monkeypatch.setenv("BRIMLINE_CHROMIUM", str(tmp_path / "nothing"))
    assert run(["report", str(results["exact"]), "--pdf", "--out", str(tmp_path / "a.html")]) == 1
    said = capsys.readouterr().err
    assert "installed Chromium" in said and "BRIMLINE_CHROMIUM" in said
    assert (tmp_path / "a.html").exists() and not (tmp_path / "a.pdf").exists()
