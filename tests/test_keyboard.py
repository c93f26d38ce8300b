"""Last-note priority, moment by moment."""

from fractions import Fraction

from glidesmith.keyboard import KeyChange, key_changes
from glidesmith.phrase import Note


def changes(*spans):
    """What sounds when notes (start, end) are played, in tenths of a second."""
    notes = [Note(Fraction(a, 10), Fraction(b, 10), 60 + i, 1.0) for i, (a, b) in enumerate(spans)]
    return [(float(c.time * 10), c.note, c.kind) for c in key_changes(notes)]


def test_one_note_is_pressed_and_released():
    assert changes((0, 5)) == [(0, 0, "press"), (5, 0, "release")]


def test_an_overlapping_note_is_legato():
    assert changes((0, 5), (3, 8)) == [(0, 0, "press"), (3, 1, "legato"), (8, 1, "release")]


def test_abutting_notes_do_not_overlap_although_0_1_and_0_2_exceed_0_3():
    assert changes((1, 3), (3, 6)) == [(1, 0, "press"), (3, 1, "press"), (6, 1, "release")]


def test_releasing_returns_to_the_latest_key_still_held():
    assert changes((0, 9), (2, 8), (4, 6)) == [
        (0, 0, "press"),
        (2, 1, "legato"),
        (4, 2, "legato"),
        (6, 1, "return"),
        (8, 0, "return"),
        (9, 0, "release"),
    ]


def test_releasing_a_key_that_does_not_sound_changes_nothing():
    assert changes((0, 4), (2, 8)) == [(0, 0, "press"), (2, 1, "legato"), (8, 1, "release")]
    assert changes((0, 9), (2, 4), (3, 6)) == [
        (0, 0, "press"),
        (2, 1, "legato"),
        (3, 2, "legato"),
        (6, 0, "return"),
        (9, 0, "release"),
    ]


def test_of_two_presses_at_one_moment_the_later_listed_wins():
    assert changes((0, 5), (0, 5)) == [(0, 1, "press"), (5, 1, "release")]
    assert changes((0, 5), (0, 3)) == [(0, 1, "press"), (3, 0, "return"), (5, 0, "release")]


def test_at_one_moment_releases_come_before_presses():
    assert changes((0, 9), (1, 4), (4, 6)) == [
        (0, 0, "press"),
        (1, 1, "legato"),
        (4, 2, "legato"),
        (6, 0, "return"),
        (9, 0, "release"),
    ]


def test_the_listing_need_not_be_in_order_of_time():
    assert changes((4, 6), (0, 2)) == [(0, 1, "press"), (2, 1, "release"), (4, 0, "press"), (6, 0, "release")]


def test_ten_thousand_keys_held_at_once_are_let_go_in_order_of_pressing():
    count = 10_000
    notes = [Note(Fraction(i), Fraction(count + i), 60, 1.0) for i in range(count)]
    found = list(key_changes(notes))
    assert [c.note for c in found[:count]] == list(range(count))
    assert len(found) == count + 1
    assert found[-1] == KeyChange(Fraction(2 * count - 1), count - 1, "release")


def test_a_change_is_a_plain_record():
    assert next(key_changes([Note(Fraction(1), Fraction(2), 60, 1.0)])) == KeyChange(Fraction(1), 0, "press")
