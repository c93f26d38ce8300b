"""The benchmarks run, small; what they measure is for people to read and decides nothing here."""

import subprocess
import sys
from pathlib import Path

import pytest

BENCHMARKS = Path(__file__).resolve().parent / "benchmarks"


@pytest.mark.parametrize(
    "name", ["voice", "slew", "memory", "loudness", "comparison", "batch", "cluster", "panel", "live"]
)
def test_a_benchmark_prints_its_ratios(name):
    done = subprocess.run(
        [sys.executable, str(BENCHMARKS), name, "--runs", "1", "--scale", "0.02"],
        capture_output=True,
        text=True,
    )
    assert done.returncode == 0, done.stderr
    assert " / " in done.stdout or "install" in done.stdout


def test_an_unknown_benchmark_is_named_with_those_there_are():
    done = subprocess.run([sys.executable, str(BENCHMARKS), "speed"], capture_output=True, text=True)
    assert done.returncode == 2
    assert "voice" in done.stderr
