"""Ledger, sweep, align and report from Python: the numbers of the commands to the last bit, frames, faults."""

from __future__ import annotations

import html
import json
import re

import pytest

from analysis.caution import CAUTION
from analysis.notebook import Network, RunError, ScenarioError, read, report
from sim import replicate
from tests.analysis.conftest import TWO, written

HOSTILE = '<script>alert("x")</script>&amp;'
QUICK = ("--replications", "6")


def said_by(call, *arguments):
    status, document = call(*arguments)
    assert status == 0
    return {key: value for key, value in document.items() if key not in ("engine", "engine_choice")}


def plain(result):
    document = json.loads(json.dumps(result.to_dict(), allow_nan=False))
    return {key: value for key, value in document.items() if key not in ("engine", "engine_choice")}


def repeated(result, call):
    """What the command line that the result names gives."""
    _, *arguments = result.provenance["command"]
    return said_by(call, *arguments)


# ---- the same numbers ----


def test_a_ledger_is_the_commands(two, call):
    found = read(two).with_policy("early").ledger(replications=6, traced=2)
    options = ["--policy", "early", *QUICK, "--traced", "2"]
    assert plain(found) == said_by(call, "ledger", two, *options) == repeated(found, call)


@pytest.mark.parametrize("method", [None, "simulated"])
def test_a_sweep_is_the_commands(two, call, method):
    """By cost these networks are solved exactly; both ways of filling are held against the command."""
    found = read(two).sweep(
        demand=(0.9, 1.3, 2), target=(0.5, 0.6, 2), beds={"A": (2, 3)}, transfer_weight=0.5, method=method,
        replications=6,
    )  # fmt: skip
    options = [
        "--demand",
        "0.9:1.3:2",
        "--target",
        "0.5:0.6:2",
        "--beds",
        "A=2:3",
        "--transfer-weight",
        "0.5",
    ]
    options += [] if method is None else ["--simulate"]
    assert plain(found) == said_by(call, "sweep", two, *options, *QUICK) == repeated(found, call)
    assert {one["method"] for one in found.document["points"]} == {method or "exact"}


def test_a_sweep_of_what_the_chain_cannot_solve_is_the_commands(delayed, call):
    found = read(delayed).with_thresholds({"A": 1}).sweep(
        delay=(0.5, 1, 2), target=0.6, epsilon=0.02, controls=False, replications=12
    )  # fmt: skip
    options = ["--delay", "0.5:1:2", "--target", "0.6", "--epsilon", "0.02", "--no-controls"]
    expected = said_by(call, "sweep", delayed, "--threshold", "A=1", *options, "--replications", "12")
    assert plain(found) == expected == repeated(found, call)
    assert {one["method"] for one in found.document["points"]} == {"simulated"}


def test_an_alignment_is_the_commands(delayed, call):
    """One row is simulated, the exponential counterpart beside it is exact."""
    found = read(delayed).align(demand=(0.9, 1.1, 2), target=(0.4, 0.8, 3), delta=25, replications=6)
    options = ["--demand", "0.9:1.1:2", "--target", "0.4:0.8:3", "--delta", "25", *QUICK]
    assert plain(found) == said_by(call, "align", delayed, *options) == repeated(found, call)
    assert len(found.document["rows"]) == 2


def test_an_alignment_by_unit_and_the_defaults_are_the_commands(two, call):
    by_unit = read(two).align(target=(0.4, 0.6, 2), per_unit=True, method="exact")
    assert plain(by_unit) == said_by(
        call, "align", two, "--target", "0.4:0.6:2", "--per-unit", "--exact"
    ) == repeated(by_unit, call)  # fmt: skip
    assert plain(read(two).align()) == said_by(call, "align", two)


def test_a_report_is_the_commands(two, call, tmp_path):
    """Of what a notebook saved, word for word."""
    read(two).game(exact=True).save(tmp_path / "game")
    read(two).ledger(replications=3).save(tmp_path / "ledger")
    folders = [tmp_path / "game", tmp_path / "ledger"]
    (tmp_path / "commands").mkdir()
    for name in ("report.html", "report.md"):
        said = said_by(call, "report", *folders, "--out", tmp_path / "commands" / name, "--json")
        mine = report(folders, tmp_path / name)
        assert mine.kinds == {"game": "game", "ledger": "ledger"} and len(mine.answer) == 3
        assert said == mine.to_dict() | {"written": [str(tmp_path / "commands" / name)]}
        assert (tmp_path / name).read_bytes() == (tmp_path / "commands" / name).read_bytes()
    assert html.escape(CAUTION) in mine._repr_html_()


# ---- kept runs ----


def test_a_sweep_keeps_its_runs_and_the_command_goes_on_from_them(delayed, call, tmp_path):
    out = tmp_path / "kept"
    found = read(delayed).sweep(demand=(0.9, 1.1, 2), replications=3, out=out)
    assert (found.document["computed"], found.document["reused"]) == (36, 0)
    document = said_by(call, "sweep", delayed, "--demand", "0.9:1.1:2", "--replications", "4", "--out", out)
    assert (document["computed"], document["reused"]) == (12, 36)
    status, verified = call("results", "verify", out)
    assert status == 0 and verified["agrees"]


# ---- frames and what a notebook shows ----


def test_frames_say_what_the_documents_say(two):
    network = read(two)
    ledger = network.ledger(replications=6)
    frame = ledger.to_frame()
    assert len(frame) == len(ledger.document["matrix"]) > 0
    assert frame.iloc[0]["mean"] == ledger.document["matrix"][0]["a_year"]["mean"]
    assert len(ledger.displaced) == len(ledger.document["displaced"])
    sweep = network.sweep(demand=(0.9, 1.3, 2), target=(0.5, 0.6, 2))
    points = sweep.to_frame()
    assert points[["demand", "target"]].to_numpy().tolist() == [
        [0.9, 0.5],
        [0.9, 0.6],
        [1.3, 0.5],
        [1.3, 0.6],
    ]
    assert points["price_of_anarchy mean"].tolist() == [
        one["price_of_anarchy"]["mean"] for one in sweep.document["points"]
    ]
    found = network.align(target=(0.4, 0.8, 3))
    losses = found.to_frame()
    points = [one for row in found.document["rows"] for one in row["points"]]
    assert losses["target B=b"].tolist() == [one["targets"]["B=b"] for one in points]
    assert losses["mean"].tolist() == [one["lost_per_year"]["mean"] for one in points]
    assert found.lowest.keys() == {row["stays"] for row in found.document["rows"]}


def results_of(network: Network):
    yield network.ledger(replications=3)
    yield network.sweep(demand=(0.9, 1.1, 2), target=0.5, replications=3, method="simulated")
    yield network.align(target=(0.4, 0.6, 2))


def test_every_result_shows_itself_with_the_caution_and_harms_nobody(tmp_path, capfd):
    text = TWO.replace('"A"', json.dumps(HOSTILE)).replace("A = 1", f"{json.dumps(HOSTILE)} = 1")
    text = text.replace("Two tiny units", HOSTILE.replace('"', "'"))
    for result in results_of(read(written(tmp_path / "hostile.toml", text))):
        shown = result._repr_html_()
        assert html.escape(CAUTION) in shown and "&lt;script&gt;" in shown and "<script" not in shown
        opened, closed = re.findall(r"<(\w+)", shown), re.findall(r"</(\w+)", shown)
        assert sorted(opened) == sorted(closed) and "\n" not in repr(result)
    assert capfd.readouterr() == ("", "")


# ---- faults ----


@pytest.mark.parametrize(
    ("step", "keys"),
    [
        (lambda n: n.with_demand(1.1).sweep(demand=(1, 2), method="quick", tolerance=-1),
         {"demand", "method", "tolerance"}),
        (lambda n: n.sweep(demand=(2, 1, 3), target="x", beds={"C": 2}), {"demand", "target", "beds"}),
        (lambda n: n.sweep(delay=(1, 2, 2)), {"delay"}),
        (lambda n: n.sweep(demand="much", replications=0), {"replications"}),
        (lambda n: n.align(target=(0.1, 0.9, 60), per_unit=True, delta="x"), {"per_unit", "delta"}),
        (lambda n: n.align(target=None, demand=[1, 2]), {"demand"}),
        (lambda n: n.ledger(traced=0), {"traced"}),
    ],
)  # fmt: skip
def test_every_fault_is_told_at_once(two, step, keys):
    with pytest.raises(ScenarioError) as told:
        step(read(two))
    assert keys <= {fault.key for fault in told.value.faults}
    assert all(
        fault.rule and fault.value and fault.remedy and "--" not in fault.remedy
        for fault in told.value.faults
    )


def test_a_report_that_cannot_be_written_says_all_of_it(two, tmp_path):
    with pytest.raises(ScenarioError) as told:
        report([two, tmp_path], tmp_path / "nowhere" / "report.html")
    assert len(told.value.faults) == 5 and "path" in {fault.key for fault in told.value.faults}
    read(two).exact().save(tmp_path / "exact")
    with pytest.raises(ScenarioError, match="must not take the place of a result"):
        report(tmp_path / "exact", tmp_path / "exact" / "result.json")


def test_runs_that_all_fail_leave_no_result(two, monkeypatch):
    def broken(*_):
        raise ValueError("planted")

    network, asked = read(two), {"replications": 3, "workers": 1, "engine": "reference"}
    monkeypatch.setattr(replicate, "_run_cells", broken)
    with pytest.raises(RunError, match="0 replications were finished"):
        network.ledger(**asked)
    with pytest.raises(RunError, match="0 replications were finished"):
        network.sweep(method="simulated", **asked)
    with pytest.raises(RunError, match="0 replications were finished"):
        network.align(target=0.5, method="simulated", **asked)
