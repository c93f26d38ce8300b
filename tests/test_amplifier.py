"""The amplifier's laws against their formulas in DESIGN's words, evaluated by numpy."""

import numpy as np
import pytest

from glidesmith.amplifier import amplifier_control, amplifier_gain, amplifier_record, fill_gain
from glidesmith.compiled import kernel


@kernel
def _one(amplifier, control):
    return amplifier_gain(amplifier[0], control)


@kernel
def _back(amplifier, gain):
    return amplifier_control(amplifier[0], gain)


def gains(law, range_db, control):
    out = np.empty_like(control)
    fill_gain(amplifier_record(law, range_db)[0], control, out)
    return out


@pytest.mark.parametrize("range_db", [20.0, 60.0, 120.0])
def test_decibel_law_is_its_formula(range_db):
    u = np.linspace(0, 1, 1001)
    expected = np.expm1(range_db * u / 20 * np.log(10)) / np.expm1(range_db / 20 * np.log(10))
    assert np.allclose(gains("decibel", range_db, u), expected, rtol=1e-11, atol=1e-15)


@pytest.mark.parametrize("range_db", [20.0, 60.0, 120.0])
def test_decibel_law_is_silent_at_0_full_at_1_and_even_in_decibels(range_db):
    u = np.array([0.0, 0.8, 0.9, 1.0])
    gain = gains("decibel", range_db, u)
    assert gain[0] == 0.0
    assert gain[3] == pytest.approx(1.0, abs=1e-14)
    if range_db >= 60:
        assert 20 * np.log10(gain[3] / gain[2]) == pytest.approx(range_db / 10, rel=0.01)


def test_linear_law_is_the_control_itself():
    u = np.random.default_rng(1).uniform(0, 1, 100)
    assert (gains("linear", 60.0, u) == u).all()


@pytest.mark.parametrize(("law", "range_db"), [("linear", 60.0), ("decibel", 20.0), ("decibel", 120.0)])
def test_the_inverse_gives_the_control_back(law, range_db):
    amplifier = amplifier_record(law, range_db)
    for u in np.linspace(0, 1, 21):
        gain = _one(amplifier, u)
        assert gain == gains(law, range_db, np.array([u]))[0]
        assert _back(amplifier, gain) == pytest.approx(u, abs=1e-12)
