"""Traces: every double reads back, whatever the block size, in bounded memory."""

import csv
import tracemalloc
from fractions import Fraction
from types import SimpleNamespace

import numpy as np
import pytest

from glidesmith.errors import OutputError, SettingError
from glidesmith.trace import COLUMNS, HeldSignals, TraceWriter, write_trace

RATE = 48_000


def signals(rows=40_000, seed=2):
    """Columns as they occur: steps, moving curves, curves that come to rest, and extreme numbers."""
    generator = np.random.default_rng(seed)
    target = np.repeat(generator.integers(-24, 24, rows // 1000 + 1) / 12, 1000)[:rows]
    pitch = generator.standard_normal(rows)
    gate = np.repeat(generator.integers(0, 2, rows // 500 + 1).astype(float), 500)[:rows]
    gate[:4] = [0.0, -0.0, -0.0, 0.0][:rows]
    control = np.where(gate > 0, generator.random(rows), 0.0)
    gain = generator.standard_normal(rows) * 10.0 ** generator.integers(-320, 300, rows)
    gain[:6] = [0.0, -0.0, -0.0, 5e-324, np.nextafter(1, 2), -1e300][:rows]
    return target, pitch, gate, control, gain


def test_the_header_names_the_six_columns(tmp_path):
    write_trace(tmp_path / "t.csv", RATE, *signals(10))
    first = (tmp_path / "t.csv").read_text().splitlines()[0]
    assert first == "time_s,target_volts,pitch_volts,gate,gain_control,gain"
    assert tuple(first.split(",")) == COLUMNS


def test_every_double_reads_back_bit_for_bit(tmp_path):
    columns = signals()
    write_trace(tmp_path / "t.csv", RATE, *columns)
    with (tmp_path / "t.csv").open(newline="") as file:
        rows = list(csv.reader(file))[1:]
    found = np.array([[float(text) for text in row] for row in rows])
    wanted = np.column_stack([np.arange(40_000) / RATE, *columns])
    np.testing.assert_array_equal(found.view(np.int64), wanted.view(np.int64))


@pytest.mark.parametrize("block", [1, 7, 509, 20_000])
def test_the_file_does_not_depend_on_the_block_size(tmp_path, block):
    columns = signals(20_000 if block > 1 else 2000)
    write_trace(tmp_path / "whole.csv", RATE, *columns)
    with TraceWriter(tmp_path / "parts.csv", RATE) as writer:
        for start in range(0, len(columns[0]), block):
            writer.write(*(column[start : start + block] for column in columns))
    assert (tmp_path / "parts.csv").read_bytes() == (tmp_path / "whole.csv").read_bytes()
    assert writer.rows == len(columns[0])


def test_no_rows_are_a_header_alone(tmp_path):
    write_trace(tmp_path / "t.csv", RATE, *signals(0))
    assert (tmp_path / "t.csv").read_text() == ",".join(COLUMNS) + "\n"


def test_columns_that_are_not_next_to_each_other_in_memory_are_fine(tmp_path):
    table = np.random.default_rng(1).random((50, 5))
    write_trace(tmp_path / "t.csv", RATE, *table.T)
    found = np.loadtxt(tmp_path / "t.csv", delimiter=",", skiprows=1)
    np.testing.assert_array_equal(found[:, 1:], table)


def test_columns_of_unequal_lengths_are_refused_and_nothing_is_left(tmp_path):
    columns = [*signals(10)[:4], np.zeros(9)]
    with pytest.raises(ValueError, match="unequal"):
        write_trace(tmp_path / "t.csv", RATE, *columns)
    assert list(tmp_path.iterdir()) == []


def test_memory_does_not_grow_with_the_length(tmp_path):
    columns = signals(16_384)

    def peak(blocks):
        tracemalloc.start()
        try:
            with TraceWriter(tmp_path / "t.csv", RATE) as writer:
                for _ in range(blocks):
                    writer.write(*columns)
            return tracemalloc.get_traced_memory()[1]
        finally:
            tracemalloc.stop()

    assert peak(6) < 1.2 * peak(2)


def test_a_missing_folder_is_told(tmp_path):
    with pytest.raises(OutputError, match="does not exist"):
        write_trace(tmp_path / "missing" / "t.csv", RATE, *signals(10))


def test_a_rate_of_nothing_is_refused(tmp_path):
    with pytest.raises(SettingError, match="sample rate"):
        TraceWriter(tmp_path / "t.csv", 0)


def test_what_was_there_stays_when_writing_fails(tmp_path):
    (tmp_path / "t.csv").write_text("old")

    def fail_on_the_way():
        with TraceWriter(tmp_path / "t.csv", RATE) as writer:
            writer.write(*signals(10))
            raise RuntimeError("of the test")

    with pytest.raises(RuntimeError, match="of the test"):
        fail_on_the_way()
    assert (tmp_path / "t.csv").read_text() == "old"
    assert [path.name for path in tmp_path.iterdir()] == ["t.csv"]


def changes(*rows, **names):
    return tuple(SimpleNamespace(time=Fraction(time), **{names["of"]: value}) for time, value in rows)


def test_held_signals_are_those_in_force_at_each_sample():
    """Against a walk through the changes, in exact fractions, sample by sample."""
    pitch = changes(("1/10", 0.5), ("1/5", -1.0), ("1/5", 2.0), ("2001/10000", 0.25), of="volts")
    gate = changes(("1/10", 1.0), ("7501/50000", 0.0), ("1/5", 0.7), ("3/10", 0.0), of="level")
    program = SimpleNamespace(pitch_changes=pitch, gate_changes=gate, sample_rate=1000)
    held = HeldSignals(program)

    def in_force(events, name, before):
        values = []
        for sample in range(400):
            past = [getattr(event, name) for event in events if event.time <= Fraction(sample, 1000)]
            values.append(past[-1] if past else before)
        return values

    np.testing.assert_array_equal(held.target_volts(0, 400), in_force(pitch, "volts", 0.5))
    np.testing.assert_array_equal(held.gate(0, 400), in_force(gate, "level", 0.0))
    np.testing.assert_array_equal(held.gate(123, 77), held.gate(0, 400)[123:200])
