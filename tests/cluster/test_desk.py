"""The desk alone: which task goes where, with a clock and machines that exist only here."""

from __future__ import annotations

from collections import Counter, deque

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sim.machines.desk import LOST_ALONE, PATIENCE_SECONDS, WINDOW, Desk
from sim.workers import Binding, Reply

OWN, OTHER = "own bits", "other bits"


class Clock:
    now = 0.0

    def __call__(self) -> float:
        return self.now


def tasks(count):
    return [(number, (number,)) for number in range(count)]


def desk_of(count, workers=(("a", OWN),), *, threads=1, binding=None, clock=None):
    desk = Desk(tasks(count), own=OWN, clock=clock or Clock(), binding=binding)
    for address, bits in workers:
        desk.join(address, bits, threads)
    return desk


def blocks(size, bits=None):
    """A binding: `size` consecutive tasks are the blocks of one replication."""
    return lambda key: Binding(key // size, 1, size, bits)


def answer(desk, order):
    return desk.answer(order.number, Reply(order.task[0], order.task[0]))


def keys_of(orders):
    return [order.task[0] for order in orders]


def test_a_worker_has_two_tasks_a_thread_and_late_ones_find_work():
    desk = desk_of(20, threads=2)
    assert len(list(desk.orders())) == WINDOW * 2 and list(desk.orders()) == []
    desk.join("late", OWN, 1)
    assert [order.address for order in desk.orders()] == ["late"] * WINDOW


def test_tasks_are_taken_only_as_workers_have_room():
    taken = []
    source = ((taken.append(number), (number, ()))[1] for number in range(10**9))
    desk = Desk(source, own=OWN, clock=Clock())
    desk.join("a", OWN, 1)
    first, _ = desk.orders()
    answer(desk, first)
    list(desk.orders())
    assert len(taken) == WINDOW + 2  # one is looked at ahead


def test_nothing_to_do_is_finished_without_a_worker():
    assert desk_of(0, workers=()).finished


def test_a_straggler_is_asked_for_again_at_the_end_and_the_first_answer_counts():
    clock = Clock()
    desk = desk_of(3, [("slow", OWN), ("quick", OWN)], clock=clock)
    orders = list(desk.orders())
    slow = [order for order in orders if order.address == "slow"]
    for order in orders:
        if order.address == "quick":
            clock.now += 0.5
            assert keys_of([order]) == [reply.key for reply in answer(desk, order)]
    assert list(desk.orders()) == []  # not late yet
    clock.now = 10.0
    again = list(desk.orders())
    assert {order.address for order in again} == {"quick"} and keys_of(again) == keys_of(slow)[:1]
    assert len(answer(desk, again[0])) == 1
    assert answer(desk, next(order for order in slow if order.task == again[0].task)) == []  # too late
    while not desk.finished:
        clock.now += 10.0
        for order in desk.orders():
            answer(desk, order)


def test_the_tasks_of_a_lost_worker_are_run_again_alone():
    desk = desk_of(4, [("a", OWN)])
    lost = keys_of(desk.orders())
    assert desk.leave("a") == []
    desk.join("b", OWN, 1)
    for key in lost:
        [order] = desk.orders()
        assert order.task[0] == key
        answer(desk, order)
    assert keys_of(desk.orders()) == [2, 3]  # innocent ones go in pairs again


def test_a_task_that_kills_every_worker_is_given_up_and_all_others_are_done():
    desk = desk_of(6, [("w0", OWN), ("steady", OWN)])
    failed, done, deaths = [], [], 0
    for _ in range(50):
        for order in list(desk.orders()):
            if order.task[0] == 3:
                failed += desk.leave(order.address)
                deaths += 1
                desk.join(f"new{deaths}", OWN, 1)
                continue
            done += [reply.key for reply in answer(desk, order)]
        if desk.finished:
            break
    assert desk.finished and sorted(done) == [0, 1, 2, 4, 5]
    assert [reply.key for reply in failed] == [3] and "workers were lost" in failed[0].failure
    assert deaths == 1 + LOST_ALONE


def test_a_scheduler_that_is_lost_casts_no_suspicion():
    desk = desk_of(4)
    first = keys_of(desk.orders())
    desk.leave("a", blame=False)
    desk.join("b", OWN, 1)
    assert keys_of(desk.orders()) == first


def test_the_blocks_of_a_replication_go_to_machines_of_the_same_bits():
    desk = desk_of(30, [("a", OWN), ("b", OTHER)], binding=blocks(3))
    went = {}
    while not desk.finished:
        for order in list(desk.orders()):
            went.setdefault(order.task[0] // 3, set()).add(order.address)
            answer(desk, order)
    assert all(len(machines) == 1 for machines in went.values()) and len(went) == 10
    assert set.union(*went.values()) == {"a", "b"}


def test_other_bits_are_answered_only_as_whole_replications_own_ones_at_once():
    desk = desk_of(3, [("b", OTHER)], binding=blocks(3))
    first, second = desk.orders()
    assert answer(desk, first) == answer(desk, second) == []
    [third] = desk.orders()
    assert sorted(reply.key for reply in answer(desk, third)) == [0, 1, 2] and desk.finished
    desk = desk_of(3, [("a", OWN)], binding=blocks(3))
    assert len(answer(desk, next(desk.orders()))) == 1


def test_a_replication_that_is_cut_short_is_answered_as_far_as_it_was_asked_for():
    desk = desk_of(5, [("b", OTHER)], binding=blocks(3))
    done = []
    while not desk.finished:
        done += [reply.key for order in list(desk.orders()) for reply in answer(desk, order)]
    assert sorted(done) == [0, 1, 2, 3, 4]


def test_a_replication_whose_bits_are_gone_begins_again_whole():
    clock = Clock()
    desk = desk_of(3, [("b", OTHER)], binding=blocks(3), clock=clock)
    answer(desk, next(desk.orders()))
    desk.leave("b")
    desk.join("a", OWN, 1)
    assert list(desk.orders()) == [] and desk.begin_again() == 0  # they may come back
    clock.now = PATIENCE_SECONDS + 1
    assert desk.begin_again() == 1
    done = []
    while not desk.finished:
        done += [reply.key for order in list(desk.orders()) for reply in answer(desk, order)]
    assert sorted(done) == [0, 1, 2]


@pytest.mark.parametrize("size", [1, 3])
def test_what_others_began_waits_for_them_and_is_handed_back_whole_when_they_stay_away(size):
    """Also where one of its tasks has been answered, and where it is of one task only."""
    clock, session = Clock(), {}
    desk = Desk(tasks(size), own=OWN, clock=clock, binding=blocks(size, OTHER), left=session)
    desk.join("a", OWN, 1)
    assert list(desk.orders()) == [] and desk.hand_back() == []
    desk.join("b", OTHER, 1)
    if size > 1:
        answer(desk, next(desk.orders()))
    desk.leave("b")
    clock.now = PATIENCE_SECONDS + 1
    assert desk.begin_again() == 0, "it is not the desk's to begin it again: others hold a part of it"
    handed = desk.hand_back()
    assert sorted(reply.key for reply in handed) == list(range(size)) and desk.finished
    assert all(reply.handed_back and reply.value is None for reply in handed)
    after = Desk(tasks(1), own=OWN, clock=clock, binding=blocks(1, OTHER), left=session, began=0.0)
    after.join("a", OWN, 1)
    list(after.orders())
    assert len(after.hand_back()) == 1, "the next desk of the session need not wait again"


def test_nothing_is_handed_back_while_nobody_is_there_or_its_machines_are():
    clock = Clock()
    desk = desk_of(2, [("a", OWN), ("b", OTHER)], binding=blocks(2, OTHER), clock=clock)
    clock.now = 10 * PATIENCE_SECONDS
    assert {order.address for order in desk.orders()} == {"b"} and desk.hand_back() == []
    desk.leave("a")
    desk.leave("b")
    clock.now = 20 * PATIENCE_SECONDS
    assert desk.hand_back() == [] and not desk.finished


def test_a_desk_that_is_stopped_hands_out_no_more_and_takes_what_is_under_way():
    desk = desk_of(9, [("a", OWN), ("b", OTHER)], binding=blocks(3))
    orders = list(desk.orders())
    answer(desk, next(order for order in orders if order.address == "b"))
    assert desk.stop() == [] and list(desk.orders()) == [] and not desk.finished
    [theirs] = [order for order in orders if order.address == "b"][1:]
    assert len(answer(desk, theirs)) == 2, "a foreign part that gets no more is answered as far as it is"
    mine = [order for order in orders if order.address == "a"]
    assert len(answer(desk, mine[0])) == 1
    desk.leave("a")
    assert desk.finished, "the task of a worker that is lost now is not asked for again"
    waiting = desk_of(3, [], binding=blocks(3))
    assert waiting.stop() == [] and waiting.finished
    held = desk_of(3, [("b", OTHER)], binding=blocks(3))
    answer(held, list(held.orders())[0])
    assert held.stop() == [] and [reply.key for reply in held.give_up()] == [0]


def test_what_was_begun_with_own_bits_waits_for_them_and_is_then_run_here():
    clock = Clock()
    desk = desk_of(2, [("b", OTHER)], binding=blocks(2, OWN), clock=clock)
    assert list(desk.orders()) == [] and desk.to_run_here() is None
    clock.now = PATIENCE_SECONDS + 1
    for key in (0, 1):
        assert desk.to_run_here() == (key, (key,))
        assert [reply.key for reply in desk.ran_here(Reply(key, key))] == [key]
    assert desk.finished


def test_without_any_worker_nothing_is_begun_again_nor_run_here():
    clock = Clock()
    desk = desk_of(2, [("a", OWN)], binding=blocks(2), clock=clock)
    list(desk.orders())
    desk.leave("a")
    clock.now = 10 * PATIENCE_SECONDS
    assert desk.to_run_here() is None and desk.begin_again() == 0


@settings(max_examples=50)
@given(data=st.data(), count=st.integers(0, 25), size=st.integers(1, 4))
def test_whatever_happens_every_task_is_answered_once_and_no_replication_is_mixed(data, count, size):
    """Workers of both bits come, answer, fail and go in any order; then they stay."""
    clock, fresh = Clock(), iter(range(10**6))
    desk = desk_of(count * size, [], binding=blocks(size), clock=clock)
    orders, answered, bits_of, seats = deque(), [], {}, {}

    def join(bits):
        address = f"w{next(fresh)}"
        seats[address] = bits
        desk.join(address, bits, 1)

    def take(replies, bits=None):
        for reply in replies:
            answered.append(reply.key)
            if reply.failure is None:
                bits_of.setdefault(reply.key // size, set()).add(reply.value)

    for _ in range(60):
        clock.now += data.draw(st.sampled_from([0.1, 3.0, 100.0]))
        act = data.draw(st.sampled_from(["join", "leave", "answer", "answer", "broken", "again", "here"]))
        if act == "join" and len(seats) < 5:
            join(data.draw(st.sampled_from([OWN, OTHER])))
        elif act == "leave" and seats:
            address = data.draw(st.sampled_from(sorted(seats)))
            del seats[address]
            take(desk.leave(address))
        elif act in ("answer", "broken") and orders:
            order = orders.popleft()
            if act == "broken":
                take(desk.broken(order.number, "why"))
            elif order.address in seats:
                take(desk.answer(order.number, Reply(order.task[0], seats[order.address])))
        elif act == "again":
            desk.begin_again()
        elif act == "here" and (task := desk.to_run_here()) is not None:
            take(desk.ran_here(Reply(task[0], OWN)))
        orders.extend(desk.orders())
    join(OWN)
    join(OTHER)
    for _ in range(2000):
        if desk.finished:
            break
        clock.now += 1.0
        orders.extend(desk.orders())
        if orders:
            order = orders.popleft()
            if order.address in seats:
                take(desk.answer(order.number, Reply(order.task[0], seats[order.address])))
    assert desk.finished
    assert Counter(answered) == Counter(range(count * size))
    assert all(len(bits) == 1 for bits in bits_of.values())


def test_a_thousand_workers_are_no_burden_in_memory():
    desk = desk_of(5000, [(f"w{number}", OWN) for number in range(1000)])
    orders = list(desk.orders())
    assert len(orders) == WINDOW * 1000 and len({order.address for order in orders}) == 1000
    with pytest.raises(KeyError):
        desk.key_of(10**9)
