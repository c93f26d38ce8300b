"""Orders in errands: of about equal length, none lost, and scheduling a small part of the work."""

import itertools

import pytest

from glidesmith import errands
from glidesmith.errands import Grouping, Pace, errand_length_s
from orders import make_order, make_orders, make_phrase_file


def learnt(**seconds_by_notes):
    """A pace that knows phrases of so many notes, and the phrases."""
    pace, phrases = Pace(), {}
    for name, seconds in seconds_by_notes.items():
        phrases[name] = make_phrase_file(notes=int(name[1:]))
        for _ in range(100):
            pace.learn(make_order(0, phrases[name]), seconds)
    return pace, phrases


def all_taken(grouping, length_s):
    return list(iter(lambda: grouping.take(length_s), []))


def test_every_order_is_in_one_errand_with_its_number():
    orders = list(make_orders(100))
    taken = all_taken(Grouping(iter(orders), Pace()), 0.25)
    assert list(itertools.chain(*taken)) == list(enumerate(orders))


def test_errands_are_as_long_as_they_should_be():
    """Items of 10 ms, errands of a quarter second: 25 to each, the last one shorter."""
    pace, phrases = learnt(n2=0.010)
    taken = all_taken(Grouping(make_orders(60, phrases["n2"]), pace), 0.2501)
    assert [len(entries) for entries in taken] == [25, 25, 10]


def test_long_items_go_alone_and_short_ones_beside_them_together():
    pace, phrases = learnt(n2=0.010, n3=60.0)
    orders = [make_order(0, phrases["n2"]), make_order(1, phrases["n3"]), make_order(2, phrases["n2"])]
    taken = all_taken(Grouping(orders, pace), 0.25)
    assert [[number for number, _ in entries] for entries in taken] == [[0], [1], [2]]


def test_phrases_nobody_has_heard_are_taken_for_the_mean():
    pace, _ = learnt(n2=0.5)
    assert pace.estimate_s(make_order(0, make_phrase_file(notes=5))) == pytest.approx(0.5, rel=0.01)


@pytest.mark.parametrize("threads", [1, 2, 100, 1000])
@pytest.mark.parametrize("item_s", [0.0008, 0.02, 0.7])
def test_scheduling_stays_under_a_twentieth_of_the_work(threads, item_s, monkeypatch):
    """At 1.6 ms a task (measured on one machine), for whoever waits for it and for all workers together.

    The scheduler does one task at a time: it can feed so many threads as an errand is longer than that.
    """
    monkeypatch.setattr(errands, "MOST_ORDERS", 10**6)
    pace, phrases = learnt(n2=item_s)
    length_s = errand_length_s(threads)
    count = max(10, int(20 * length_s / item_s))
    order = make_order(0, phrases["n2"])
    taken = all_taken(Grouping(itertools.repeat(order, count), pace), length_s)
    assert len(taken) * 1.6e-3 <= 0.05 * count * item_s
    whole = [entries for entries in taken[:-1] if entries]
    busiest = threads * 1.6e-3 / min(len(entries) * item_s for entries in whole)
    assert busiest <= 0.5


def test_an_errand_is_never_too_large_to_send(monkeypatch):
    monkeypatch.setattr(errands, "MOST_PHRASE_BYTES", 3_000)
    phrases = [make_phrase_file(notes=20, seconds=0.1 + 0.01 * number) for number in range(12)]
    assert all(900 < len(phrase.data) < 1_500 for phrase in phrases)
    orders = [make_order(number, phrase) for number, phrase in enumerate(phrases)]
    taken = all_taken(Grouping(orders, Pace()), 1000.0)
    for entries in taken:
        assert sum(len(order.phrase.data) for _, order in entries) <= 3_000
    assert max(len(entries) for entries in taken) > 1
    monkeypatch.setattr(errands, "MOST_ORDERS", 3)
    assert [len(entries) for entries in all_taken(Grouping(make_orders(7), Pace()), 1000.0)] == [3, 3, 1]


def test_the_memory_of_a_pace_is_bounded(monkeypatch):
    monkeypatch.setattr(errands, "_MOST_PHRASES", 4)
    pace = Pace()
    for number in range(9):
        pace.learn(make_order(0, make_phrase_file(notes=number + 2)), 0.1)
    assert len(pace._means) == 4
