"""Independent pitch trackers on the rendered audio find each glide where it should be.

Two of them: interpolated zero crossings, and the autocorrelation method of Boersma (1993), "Accurate
short-term analysis of the fundamental frequency", as praat-parselmouth has it. Bounds (the project's own): a
glide's start within 2 ms and its duration within 3 %, for glides of 50 ms and longer on notes from 200 Hz up.
"""

import numpy as np
import parselmouth
import pytest
from scipy.optimize import least_squares

from glidesmith import render
from making import make_phrase, make_preset

START_S = 0.2
WITHIN_START_S = 2e-3
WITHIN_DURATION = 0.03


def by_zero_crossings(audio, sample_rate):
    """Times and frequencies: each cycle from one rising zero crossing to the next, placed at its middle."""
    x = audio.astype(float)
    at = np.flatnonzero((x[:-1] < 0) & (x[1:] >= 0))
    exact = (at - x[at] / (x[at + 1] - x[at])) / sample_rate
    return (exact[1:] + exact[:-1]) / 2, 1 / np.diff(exact)


def by_autocorrelation(audio, sample_rate):
    sound = parselmouth.Sound(audio.astype(float), sample_rate)
    pitch = sound.to_pitch_ac(time_step=0.001, pitch_floor=180.0, pitch_ceiling=2500.0, very_accurate=False)
    hz = pitch.selected_array["frequency"]
    return pitch.xs()[hz > 0], hz[hz > 0]


def glide_course(law, progress):
    """Part of the way at a progress from 0 to 1, as the printed laws have it."""
    p = np.clip(progress, 0, 1)
    if law == "cosine":
        return (1 - np.cos(np.pi * p)) / 2
    if law == "curve":
        return -np.expm1(-3 * p) / -np.expm1(-3)
    return p


def fitted(law, times, hz, low_hz, high_hz, guess_s, window_s):
    """Start and duration of the law's course that fits the tracked pitch best, smoothed as the tracker's
    window does.
    """
    octaves = np.log2(hz / low_hz) / np.log2(high_hz / low_hz)
    spread = np.linspace(-0.5, 0.5, 9) * window_s
    weight = np.hanning(11)[1:-1]
    weight /= weight.sum()

    def off(unknown):
        start, lasts = unknown
        course = glide_course(law, (times[:, None] + spread - start) / lasts) @ weight
        return course - octaves

    return least_squares(off, [START_S, guess_s], loss="soft_l1", f_scale=0.01).x


GLIDES = [
    ("linear", 0.05, 60, 72),
    ("linear", 0.1, 79, 67),
    ("linear", 0.3, 57, 76),
    ("cosine", 0.1, 69, 57),
    ("cosine", 0.25, 60, 67),
    ("curve", 0.15, 60, 84),
]


@pytest.mark.parametrize("wave", ["saw", "sine", "triangle"])
@pytest.mark.parametrize(("law", "lasts_s", "origin", "target"), GLIDES)
@pytest.mark.parametrize("tracker", [by_zero_crossings, by_autocorrelation])
def test_trackers_find_the_start_and_the_duration(tracker, law, lasts_s, origin, target, wave):
    preset = make_preset(
        oscillator={"wave": wave},
        pitch={"law": law, "rise": lasts_s, "fall": lasts_s, "timing": "fixed", "curvature": 3.0},
        gain={"law": "linear", "rise": 0.001, "fall": 0.001},
    )
    phrase = make_phrase((0, 1, origin), ("1/5", 1, target))
    audio = render(preset, phrase, 48_000).audio
    low_hz, high_hz = (440 * 2 ** ((n - 69) / 12) for n in (origin, target))
    assert min(low_hz, high_hz) >= 200
    times, hz = tracker(audio, 48_000)
    inside = (times > 0.05) & (times < 0.9)
    window_s = 3.0 / 180.0 if tracker is by_autocorrelation else 1 / np.sqrt(low_hz * high_hz)
    start, lasts = fitted(law, times[inside], hz[inside], low_hz, high_hz, lasts_s, window_s)
    assert abs(start - START_S) < WITHIN_START_S
    assert abs(lasts / lasts_s - 1) < WITHIN_DURATION


@pytest.mark.parametrize("law", ["rc", "log", "exp", "soft"])
@pytest.mark.parametrize("tracker", [by_zero_crossings, by_autocorrelation])
def test_trackers_see_the_laws_that_go_by_rate(tracker, law):
    """Start and pace of an octave's glide, fitted with the rendered law's printed course."""
    preset = make_preset(
        oscillator={"wave": "saw"},
        pitch={"law": law, "rise": 0.15, "fall": 0.15, "knee": 0.1},
        gain={"law": "linear", "rise": 0.001, "fall": 0.001},
    )
    audio = render(preset, make_phrase((0, 2, 60), ("1/5", 2, 72)), 48_000).audio
    times, hz = tracker(audio, 48_000)
    inside = (times > 0.05) & (times < 1.5)
    volts = np.log2(hz[inside] / (440 * 2 ** (-9 / 12)))
    window_s = 3.0 / 180.0 if tracker is by_autocorrelation else 1 / 370
    spread = np.linspace(-0.5, 0.5, 9) * window_s
    weight = np.hanning(11)[1:-1] / np.hanning(11).sum()

    def course(t, side):
        t = np.maximum(t, 0)
        if law == "rc":
            return -np.expm1(-t / side)
        if law == "log":
            return np.minimum(np.log1p(t / side), 1)
        if law == "exp":
            return np.minimum(-np.log1p(-np.minimum(t / side, 1 - np.exp(-1))), 1)
        return 1 - 0.1 * np.arcsinh(np.sinh(10) * np.exp(-t / (0.1 * side)))

    def off(unknown):
        return course(times[inside][:, None] + spread - unknown[0], unknown[1]) @ weight - volts

    start, side = least_squares(off, [START_S, 0.15], loss="soft_l1", f_scale=0.01).x
    assert abs(start - START_S) < WITHIN_START_S
    assert abs(side / 0.15 - 1) < WITHIN_DURATION
