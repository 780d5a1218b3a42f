"""The order of a batch, what its parts share, and the estimate that follows the replies. No process is started."""

import pytest

from analysis.batch import COARSE, RECENT_SECONDS, Batch, Speed, levels
from analysis.command.deadline import BUDGET, TIME, Deadline
from analysis.command.options import request_of
from analysis.command.recorded import policies_of
from analysis.command.rounds import Round, run_rounds, within
from analysis.command.running import Effort
from analysis.plan import Part
from sim.engines import Choice
from sim.replicate import Failure, Pace, Share
from sim.store import Store
from sim.workers import ThisProcess

HERE = Effort(Choice("reference", "small"), Pace(0.001, 0.001), ThisProcess(), 1)


def request(part):
    from analysis.command.entry import brimline

    name, *arguments = part.arguments
    return request_of(brimline.get_command(None, name).make_context(name, arguments).params)


def batch_of(*parts):
    batch = Batch()
    for part in parts:
        made = request(part)
        batch.add(part, made, policies_of(part.analysis, made))
    return batch


@pytest.fixture
def store(tmp_path):
    with Store(tmp_path / "r", write=True) as opened:
        yield opened


def opened(batch, store):
    for stock in batch.stocks:
        stock.open(store, "here")
        stock.pace = HERE.pace
    return batch


def rounds_of(batch):
    for replications, piece in batch.rounds():
        stock = piece.stock
        yield Round(
            stock.scenario, stock.policies, piece.shares(replications), HERE, stock.job, (replications, piece)
        )


def test_targets_and_simulations_share_the_games_runs(two, store):
    """24 different runs, where the parts by themselves ask for 24 + 24 + 4 + 24."""
    batch = opened(
        batch_of(
            *(Part("game", two, target=t) for t in (0.5, 0.6)), Part("simulate", two), Part("game", two)
        ),
        store,
    )
    assert (len(batch.stocks), sum(piece.asked for piece in batch.pieces), batch.asked, batch.missing) == (
        1,
        76,
        24,
        24,
    )
    settled = []
    ended = run_rounds(rounds_of(batch), take=lambda _, reply: settled.extend(reply), deadline=Deadline())
    assert (len(settled), batch.missing, ended.why, store.counts()["rows"]) == (24, 0, None, 24)
    assert [piece.reached for piece in batch.pieces] == [4, 4, 4, 4]


def test_other_demands_and_stays_share_nothing(delayed):
    batch = batch_of(
        *(Part("game", delayed, demand=d, exponential=e) for d in (0.9, 1.1) for e in (False, True))
    )
    assert (len(batch.stocks), batch.asked) == (4, 96)


def test_a_games_policies_that_differ_in_closure_thresholds_only_are_one_game(two):
    batch = batch_of(
        Part("game", two), Part("game", two, policy="early"), Part("simulate", two, policy="early")
    )
    assert [piece.part.analysis for piece in batch.pieces] == ["game", "simulate"]
    assert [(one.policy, other.policy) for one, other in batch.twins] == [("early", None)]


def test_parts_of_other_lengths_ask_for_what_is_wanted_only(two):
    batch = batch_of(Part("game", two, replications=3), Part("simulate", two, replications=30))
    assert batch.asked == 3 * 6 + 27


def test_first_a_coarse_pass_then_rounds_that_double():
    assert list(levels(4)) == [10] and list(levels(10)) == [10]
    assert list(levels(70)) == [10, 20, 40, 80]


def test_the_parts_come_in_order_within_each_round_up_to_their_own_replications(two):
    batch = batch_of(Part("game", two, replications=25), Part("simulate", two, demand=0.9, replications=10))
    order = [(replications, piece.part.analysis) for replications, piece in batch.rounds()]
    assert order == [(10, "game"), (10, "simulate"), (20, "game"), (40, "game")]


def test_whenever_it_stops_every_part_has_its_share(two, store):
    """Two tables of 6 cells, 40 replications: after 20 x 12 runs both have 20, not one of them 40."""
    batch = opened(batch_of(*(Part("game", two, demand=d, replications=40) for d in (0.9, 1.1))), store)
    ended = run_rounds(rounds_of(batch), take=lambda *_: None, deadline=Deadline(budget=240))
    assert ([piece.reached for piece in batch.pieces], ended.why) == ([20, 20], BUDGET)
    assert batch.missing == 240 and COARSE == 10


@pytest.mark.parametrize("budget", [1, 7, 59, 61])
def test_a_budget_is_kept_to_the_run(two, store, budget):
    batch = opened(batch_of(Part("game", two, replications=40)), store)
    ended = run_rounds(rounds_of(batch), take=lambda *_: None, deadline=Deadline(budget=budget))
    assert (store.counts()["rows"], ended.why) == (budget, BUDGET)


def test_a_bound_that_leaves_nothing_undone_is_not_why_it_ended(two, store):
    batch = opened(batch_of(Part("game", two)), store)
    ended = run_rounds(rounds_of(batch), take=lambda *_: None, deadline=Deadline(budget=24))
    assert (ended.why, batch.missing) == (None, 0)


def test_time_that_is_over_stops_the_handing_out(two, store):
    batch, deadline = opened(batch_of(Part("game", two, replications=40)), store), Deadline(seconds=3600)

    def take(_, reply):
        if store.counts()["rows"] >= 12:
            deadline._length = 0.0  # as if an hour had passed

    ended = run_rounds(rounds_of(batch), take=take, deadline=deadline)
    assert ended.why == TIME and 12 <= store.counts()["rows"] < 240
    assert batch.missing == 240 - store.counts()["rows"]


def test_a_run_that_fails_is_not_tried_again_in_the_next_round(two, store):
    batch = opened(batch_of(Part("game", two, replications=20)), store)
    [piece] = batch.pieces
    piece.job.keep(Failure(5, 3, (2, 4), "Traceback\nMemoryError: planted"), "reference")
    asked = piece.shares(20)
    assert sum(len(share.cells) * len(share.replications) for share in asked) == 118
    assert batch.missing == 120, "it is missing all the same"


def test_what_a_budget_leaves_of_shares():
    shares = [Share((0, 1, 2), (0, 1)), Share((5,), (2, 3))]
    sizes = {
        most: [(one.cells, one.replications) for one in within(shares, most)] for most in (1, 3, 4, 7, 99)
    }
    assert sizes == {
        1: [((0,), (0,))], 3: [((0, 1, 2), (0,))], 4: [((0, 1, 2), (0,)), ((0,), (1,))],
        7: [((0, 1, 2), (0, 1)), ((5,), (2,))], 99: [((0, 1, 2), (0, 1)), ((5,), (2, 3))],
    }  # fmt: skip


def test_the_estimate_is_the_trials_until_replies_tell_more_and_then_follows_the_late_ones():
    speed = Speed()
    assert speed.seconds_for(100.0, 0.0, 4) == 25.0 and speed.runs_per_second(0.0) is None
    speed.add(50.0, 1, 1.0)  # after workers have taken 50 s to start, which tell nothing
    for second in range(1, 11):
        speed.add(50.0 + second, 8, 2.0)  # twice as much work a second as one worker of the trial
    assert speed.runs_per_second(60.0) == 8.0
    assert speed.seconds_for(100.0, 60.0, 4) == 50.0
    for second in range(11, 200):
        speed.add(50.0 + second, 1, 0.25)  # the machine has become eight times slower
    assert speed.seconds_for(100.0, 249.0, 4) == pytest.approx(400.0, rel=0.02)
    assert speed.seconds_for(100.0, 249.0 + 2 * RECENT_SECONDS, 4) is None
    assert speed.seconds_for(0.0, 249.0 + 2 * RECENT_SECONDS, 4) == 0.0
