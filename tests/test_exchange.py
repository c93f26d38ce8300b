"""Words and views: what one thread publishes the other sees whole."""

import threading

import numpy as np
from numba import njit

from glidesmith.compiled import kernel
from glidesmith.exchange import (
    load_acquire,
    make_words,
    read_word,
    store_release,
    view_float64,
    view_of,
    write_word,
)

PAIR = np.dtype([("whole", np.int64), ("part", np.float64)], align=True)
view_pairs = view_of(PAIR)


def test_words_keep_their_values_apart():
    words = make_words(5)
    for index in range(5):
        write_word(words, index, -index * (1 << 40))
    assert [read_word(words, index) for index in range(5)] == [-index * (1 << 40) for index in range(5)]


@kernel
def _add_up(address, count):
    pairs = view_pairs(address, count)
    total = 0.0
    for i in range(pairs.size):
        total += pairs[i].whole * pairs[i].part
        pairs[i].whole = 0
    return total


@kernel
def _double(address, count):
    values = view_float64(address, count)
    for i in range(values.size):
        values[i] *= 2.0


def test_a_view_reads_and_writes_the_memory_at_its_address():
    pairs = np.array([(1, 0.5), (2, 0.25), (3, 4.0)], PAIR)
    assert _add_up(pairs[1:].ctypes.data, 2) == 12.5
    assert pairs["whole"].tolist() == [1, 0, 0]
    values = np.arange(4.0)
    _double(values.ctypes.data, 4)
    assert values.tolist() == [0.0, 2.0, 4.0, 6.0]


@kernel
def _publish(words, data, rounds):
    for number in range(1, rounds + 1):
        while load_acquire(words, 1) != number - 1:
            pass
        for i in range(data.size):
            data[i] = number
        store_release(words, 0, number)


@kernel
def _check(words, data, rounds):
    torn = 0
    for number in range(1, rounds + 1):
        while load_acquire(words, 0) != number:
            pass
        for i in range(data.size):
            torn += data[i] != number
        store_release(words, 1, number)
    return torn


def test_what_was_written_before_a_word_is_seen_after_it():
    """Message passing (the litmus test of that name), 20,000 times between two threads."""
    words, data, rounds = make_words(2), np.zeros(64, np.int64), 20_000
    _publish(words, data, 0), _check(words, data, 0)
    writer = threading.Thread(target=_publish, args=(words, data, rounds))
    writer.start()
    assert _check(words, data, rounds) == 0
    writer.join()


def test_the_orders_are_in_the_machine_s_program():
    @njit
    def both(words):
        store_release(words, 0, load_acquire(words, 1))

    both(make_words(2))
    (text,) = both.inspect_llvm().values()
    assert "store atomic" in text
    assert "release" in text
    assert "load atomic" in text
    assert "acquire" in text
