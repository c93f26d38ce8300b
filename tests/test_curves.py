"""Curves for a screen: as fine as the closest zoom shows."""

from fractions import Fraction

import numpy as np
import pytest

from glidesmith import render
from glidesmith.curves import curves
from making import make_phrase, make_preset

PHRASE = make_phrase((Fraction(0), Fraction(1), 48), (Fraction(1), Fraction(10), 60))
LENGTH_S = 12.0


@pytest.mark.parametrize("law", ["rc", "exp", "cosine"])
def test_a_glide_stays_round_at_thirty_times_zoom(law):
    """Of a picture of 1200 pixels by 300, 32 times as near: within a pixel of the render's own course, which
    is told by its trace, counted across or up, whichever is less."""
    preset = make_preset(pitch={"law": law, "rise": 0.06, "fall": 0.06})
    line = np.array(curves(preset, PHRASE, LENGTH_S)["pitch"])
    played = render(preset, PHRASE, trace=True).pitch_volts + (preset.tuning.zero_volts - 60) / 12.0
    times = np.arange(played.size) / 48_000
    near = slice(48_000 - 100, round(1.5 * 48_000))
    up = np.abs(np.interp(times, line[:, 0], line[:, 1]) - played)[near] / (1.0 / (300 * 32))
    slope = np.abs(np.gradient(played, times))[near]
    across = up / (300 * 32) / np.maximum(slope, 1e-9) / (LENGTH_S / (1200 * 32))
    assert np.minimum(up, across).max() < 1.0
    assert len(line) < 400
