"""The slew laws against their closed forms, against `scipy.integrate.solve_ivp`, and against handbook
values.
"""

import itertools

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.signal import lfilter

from conftest import LONG
from glidesmith import SettingError, Slew
from glidesmith.slew import (
    GLIDE,
    HELD,
    LAWS,
    fill_glide,
    glide_begin,
    glide_hold,
    glide_rate,
    glide_resettle,
    glide_time,
    glide_volts,
)

WITHIN_VOLTS = 1e-9
"""DESIGN's own bound for a law against its closed form and against `solve_ivp`."""

TIMED = [("linear", "fixed"), ("curve", "fixed"), ("curve", "rate"), ("cosine", "fixed"), ("cosine", "rate")]
BY_RATE = [("linear", "rate"), ("rc", "rate"), ("log", "rate"), ("exp", "rate"), ("soft", "rate")]


def printed_form(slew: Slew, origin: float, target: float, elapsed: np.ndarray) -> np.ndarray:
    """The table of laws exactly as it is printed, in extended precision; the oracle of these tests."""
    y0, x = np.longdouble(origin), np.longdouble(target)
    t = np.asarray(elapsed, dtype=np.longdouble)
    side = np.longdouble(slew.rise if x > y0 else slew.fall)
    sign = np.sign(x - y0)
    if side == 0:
        return np.where(t > 0, x, y0)
    duration = side if slew.timing == "fixed" else side * abs(x - y0)
    p = np.minimum(t / duration, 1)
    b, c, k = (np.longdouble(v) for v in (slew.bend, slew.knee, slew.curvature))
    if slew.law == "linear":
        return y0 + (x - y0) * p
    if slew.law == "rc":
        return x + (y0 - x) * np.exp(-t / side)
    if slew.law in ("log", "exp"):
        b = b if slew.law == "log" else -b
        inside = np.exp(b * y0) + sign * b * t / side
        arrived = t >= abs(np.exp(b * x) - np.exp(b * y0)) / abs(b) * side
        return np.where(arrived, x, np.log(np.where(arrived, 1, inside)) / b)
    if slew.law == "soft":
        return x - c * np.arcsinh(np.sinh((x - y0) / c) * np.exp(-t / (c * side)))
    if slew.law == "curve":
        return y0 + (x - y0) * (p if k == 0 else (1 - np.exp(-k * p)) / (1 - np.exp(-k)))
    return y0 + (x - y0) * (1 - np.cos(np.pi * p)) / 2


def random_slew(generator: np.random.Generator, law: str, timing: str) -> Slew:
    rise, fall = 10.0 ** generator.uniform(-4, 0.5, 2)
    return Slew(
        law,
        float(rise),
        float(fall),
        bend=float(10.0 ** generator.uniform(-2, 0.5)),
        knee=float(10.0 ** generator.uniform(-2, 0.3)),
        curvature=float(generator.uniform(-20, 20)),
        timing=timing,
    )


def begun(slew: Slew, origin: float, target: float) -> np.void:
    glide = np.zeros(1, GLIDE)[0]
    glide_begin(glide, slew.record()[0], origin, target)
    return glide


@pytest.mark.parametrize(("law", "timing"), TIMED + BY_RATE)
def test_run_is_the_printed_law_over_random_settings(law, timing):
    generator = np.random.default_rng(20)
    for _ in range(400 if LONG else 60):
        slew = random_slew(generator, law, timing)
        origin, target = generator.uniform(-2, 3, 2)
        rate = int(generator.choice([8_000, 44_100, 48_000, 192_000]))
        lasts = float(begun(slew, origin, target)["lasts"])
        count = int(min(lasts * rate * 1.2 + 10, 4000))
        y = slew.run(np.full(count, target), rate, start=origin)
        expected = printed_form(slew, origin, target, np.arange(count) / rate)
        assert y[0] == origin
        assert np.abs(y - expected).max() < WITHIN_VOLTS, slew


@pytest.mark.parametrize(("law", "timing"), BY_RATE)
def test_run_is_what_solve_ivp_makes_of_the_differential_equation(law, timing):
    generator = np.random.default_rng(21)

    rates = {
        "linear": lambda y, short, slew: np.sign(short),
        "rc": lambda y, short, slew: short,
        "log": lambda y, short, slew: np.sign(short) * np.exp(-slew.bend * y),
        "exp": lambda y, short, slew: np.sign(short) * np.exp(slew.bend * y),
        "soft": lambda y, short, slew: np.tanh(short / slew.knee),
    }

    def slope(_, y, x, slew, side):
        return rates[law](y, x - y, slew) / side

    for _ in range(60 if LONG else 12):
        slew = random_slew(generator, law, timing)
        origin, target = generator.uniform(-2, 3, 2)
        side = slew.rise if target > origin else slew.fall
        lasts = float(begun(slew, origin, target)["lasts"])
        times = np.linspace(0, 0.9 * min(lasts, 8 * side), 50)
        solved = solve_ivp(
            slope,
            (0, times[-1]),
            [origin],
            "DOP853",
            times,
            args=(target, slew, side),
            rtol=1e-12,
            atol=1e-13,
        )
        glide = begun(slew, origin, target)
        assert np.abs([glide_volts(glide, t) for t in times] - solved.y[0]).max() < WITHIN_VOLTS, slew


@pytest.mark.parametrize(("law", "timing"), TIMED + BY_RATE)
def test_a_phrase_of_targets_does_not_depend_on_the_sample_rate(law, timing):
    """44.1, 48 and 96 kHz coincide every 1/300 s; targets change there, in the middle of glides too."""
    generator = np.random.default_rng(22)
    for _ in range(20):
        slew = random_slew(generator, law, timing)
        targets = np.repeat(generator.uniform(-2, 3, 12), 20)
        at_300_hz = [
            slew.run(np.repeat(targets, rate // 300), rate)[:: rate // 300]
            for rate in (44_100, 48_000, 96_000)
        ]
        assert np.ptp(at_300_hz, axis=0).max() < WITHIN_VOLTS, slew


@pytest.mark.parametrize(
    ("slew", "rate"),
    [
        (Slew("log", 60, 60, bend=0.01), 48_000),
        (Slew("exp", 60, 60, bend=0.01), 48_000),
        (Slew("linear", 60, 60), 192_000),
        (Slew("rc", 60, 60), 192_000),
        (Slew("soft", 60, 60, knee=0.001), 48_000),
        (Slew("cosine", 60, 60), 48_000),
    ],
)
def test_a_minute_long_glide_gathers_no_error(slew, rate):
    count = 60 * rate
    y = slew.run(np.full(count, 7.0), rate, start=-5.0)
    places = np.linspace(1, count - 1, 997).astype(int)
    if slew.law == "soft":
        expected = -5.0 + places / rate / 60
    else:
        expected = printed_form(slew, -5.0, 7.0, places / np.longdouble(rate))
    assert np.abs(y[places] - expected).max() < WITHIN_VOLTS


def test_rc_is_a_one_pole_filter_at_audio_rate():
    """The reference delays by the sample that run's timing counts.

    Reference: `scipy.signal.lfilter` with a = exp(−dt/T).
    """
    x = np.random.default_rng(23).standard_normal(48_000)
    for time_constant in (1e-6, 1e-4, 0.01, 3.0):
        a = np.exp(-1 / 48_000 / time_constant)
        filtered = lfilter([1 - a], [1, -a], x)
        y = Slew("rc", time_constant, time_constant).run(x, 48_000)
        assert np.abs(y[1:] - filtered[:-1]).max() < WITHIN_VOLTS


@pytest.mark.parametrize(
    ("rise", "fall"), [(0.002, 0.03), (0.03, 0.002), (0.0, 0.01), (0.01, 0.0), (0.0, 0.0)]
)
def test_rc_with_two_sides_is_the_plain_recurrence(rise, fall):
    x = np.random.default_rng(24).standard_normal(20_000)
    y = Slew("rc", rise, fall).run(x, 48_000, start=0.3)
    expected = [0.3]
    for target in x[:-1]:
        side = rise if target > expected[-1] else fall
        lost = 1.0 - np.exp(-1 / 48_000 / side) if side else 1.0
        expected.append(expected[-1] + (target - expected[-1]) * lost)
    assert np.abs(y - expected).max() < WITHIN_VOLTS


@pytest.mark.parametrize("law", ["linear", "log", "exp", "soft"])
def test_audio_rate_noise_steps_by_the_closed_form_each_sample(law):
    x = np.random.default_rng(25).uniform(-1, 1, 3000)
    slew = Slew(law, 0.003, 0.001, bend=2.0, knee=0.05)
    y = slew.run(x, 44_100)
    for n in range(x.size - 1):
        expected = printed_form(slew, y[n], x[n], np.array([1 / 44_100]))[0]
        assert abs(y[n + 1] - expected) < WITHIN_VOLTS


def test_rc_handbook_percentages():
    """Part of the way after 1 to 5 time constants.

    63.2, 86.5, 95.0, 98.2, 99.3 % (any electronics handbook; from memory).
    """
    y = Slew("rc", 0.1, 0.1).run(np.ones(48_000), 48_000)
    assert np.round(100 * y[[4800, 9600, 14_400, 19_200, 24_000]], 1).tolist() == [
        63.2,
        86.5,
        95.0,
        98.2,
        99.3,
    ]


def test_rc_rise_time_is_2_2_time_constants():
    """10 to 90 % in 2.2 T (handbook, from memory; exactly ln 9)."""
    glide = begun(Slew("rc", 0.1, 0.1), 0.0, 1.0)
    assert round((glide_time(glide, 0.9) - glide_time(glide, 0.1)) / 0.1, 1) == 2.2


def test_rc_rises_concave_down_and_falls_concave_up():
    x = np.repeat([1.0, 0.0], 2000)
    bend = np.diff(Slew("rc", 0.01, 0.01).run(x, 48_000), 2)
    assert bend[:1990].max() < 0 < bend[2010:].min()


def test_a_slewed_square_tends_to_a_triangle():
    """Common practice. A triangle's odd harmonics fall as 1/k² (Fourier series); its even ones are absent."""
    period, cycles = 480, 40
    square = np.tile(np.repeat([1.0, -1.0], period // 2), cycles)
    y = Slew("linear", 1.0, 1.0).run(square, 48_000)
    spectrum = np.abs(np.fft.rfft(y[-period * 20 :]))[::20]
    assert np.allclose(spectrum[[3, 5, 7, 9]] / spectrum[1], 1 / np.array([3, 5, 7, 9]) ** 2, rtol=2e-3)
    assert spectrum[[2, 4, 6]].max() < 1e-9 * spectrum[1]


def test_log_takes_longer_and_exp_shorter_than_linear_from_0_volts_up():
    lasts = [float(begun(Slew(law, 0.1, 0.1), 0.0, 2.0)["lasts"]) for law in ("exp", "linear", "log")]
    assert lasts == sorted(lasts)
    assert lasts[0] < 0.95 * lasts[1] < 0.9 * lasts[2]


@pytest.mark.parametrize("law", ["log", "exp"])
def test_rising_and_falling_are_mirror_images_in_time(law):
    slew = Slew(law, 0.2, 0.2, bend=1.7)
    up, down = begun(slew, -0.5, 1.5), begun(slew, 1.5, -0.5)
    assert up["lasts"] == pytest.approx(down["lasts"], rel=1e-12)
    for part in np.linspace(0, 1, 11):
        mirrored = glide_volts(down, (1 - part) * float(down["lasts"]))
        assert abs(glide_volts(up, part * float(up["lasts"])) - mirrored) < WITHIN_VOLTS


def test_soft_is_straight_far_off_and_lands_with_the_time_constant_c_t():
    slew = Slew("soft", 0.5, 0.5, knee=0.05)
    glide = begun(slew, 0.0, 4.0)
    assert glide_rate(glide, 0.0) == pytest.approx(1 / 0.5, rel=1e-12)
    late = glide_time(glide, 4.0 - 1e-6)
    decay = (4.0 - glide_volts(glide, late)) / (4.0 - glide_volts(glide, late + 0.05 * 0.5))
    assert decay == pytest.approx(np.e, rel=1e-6)


@pytest.mark.parametrize("knee", [0.001, 2.0])
def test_soft_is_safe_at_both_ends_of_its_knee(knee):
    y = Slew("soft", 0.01, 0.01, knee=knee).run(np.full(48_000, 7.0), 48_000, start=-5.0)
    assert np.isfinite(y).all()
    assert (np.diff(y) >= 0).all()
    assert y[-1] <= 7.0


def test_durations_are_what_the_timing_says():
    for law in ("linear", "curve", "cosine"):
        by_rate, fixed = (
            begun(Slew(law, 0.3, 0.3, timing=t, curvature=2.0), 0.0, 2.5) for t in ("rate", "fixed")
        )
        assert by_rate["lasts"] == pytest.approx(0.75)
        assert fixed["lasts"] == pytest.approx(0.3)
    assert [Slew(law, 1, 1).timing for law in ("linear", "curve", "cosine")] == ["rate", "fixed", "fixed"]


def test_duration_is_proportional_to_t_for_every_law():
    for law in LAWS:
        one, three = (begun(Slew(law, 0.1 * f, 1.0, curvature=3), -0.3, 0.9)["lasts"] for f in (1, 3))
        assert three == pytest.approx(3 * one, rel=1e-12)


@pytest.mark.parametrize("law", LAWS)
def test_no_time_is_immediate_on_its_side_only(law):
    slew = Slew(law, 0.0, 0.05)
    y = slew.run(np.repeat([1.0, 0.0], 100), 48_000)
    assert y[0] == 0.0
    assert (y[1:101] == 1.0).all()
    assert 0.0 < y[101] < 1.0


@pytest.mark.parametrize("law", LAWS)
def test_inverse_and_rate_agree_with_the_output(law):
    generator = np.random.default_rng(26)
    for _ in range(50):
        slew = random_slew(generator, law, "fixed" if law in ("curve", "cosine") else "rate")
        origin, target = generator.uniform(-2, 3, 2)
        glide = begun(slew, origin, target)
        reach = min(float(glide["lasts"]), 5 * (slew.rise if target > origin else slew.fall))
        elapsed = generator.uniform(0.05, 0.9) * reach
        volts = glide_volts(glide, elapsed)
        assert glide_volts(glide, glide_time(glide, volts)) == pytest.approx(volts, abs=1e-11)
        assert glide_rate(glide, float(glide["lasts"])) == 0.0
        tick = 1e-5 * reach
        slope = (glide_volts(glide, elapsed + tick) - glide_volts(glide, elapsed - tick)) / (2 * tick)
        assert glide_rate(glide, elapsed) == pytest.approx(slope, rel=1e-5, abs=1e-7 / reach)


@pytest.mark.parametrize("law", LAWS)
def test_inverse_knows_what_is_never_reached(law):
    glide = begun(Slew(law, 0.1, 0.1), 0.0, 1.0)
    assert glide_time(glide, 1.5) == np.inf
    assert glide_time(glide, -0.5) == 0.0
    assert glide_time(glide, 0.0) == 0.0
    assert glide_time(glide, 1.0) == glide["lasts"]
    glide_hold(glide, 2.0)
    assert glide_time(glide, 2.0) == 0.0
    assert glide_time(glide, 2.1) == np.inf


@pytest.mark.parametrize("law", LAWS)
def test_filling_a_stretch_gives_the_bits_of_each_instant(law):
    glide = begun(Slew(law, 0.7, 0.7, curvature=-4.0, bend=0.5), -1.0, 2.0)
    volts, rates = np.zeros(509), np.zeros(509)
    fill_glide(glide, 1000, 0.37, 1 / 48_000, volts, rates)
    for i in range(509):
        elapsed = (1000.0 + i - 0.37) * (1 / 48_000)
        assert volts[i] == glide_volts(glide, elapsed)
        assert rates[i] == pytest.approx(glide_rate(glide, elapsed), rel=1e-14)
    for size in (1, 7, 64):
        for first in range(0, 509 - size, size):
            part, slopes = np.zeros(size), np.zeros(size)
            fill_glide(glide, 1000 + first, 0.37, 1 / 48_000, part, slopes)
            assert (part == volts[first : first + size]).all()
            assert (slopes == rates[first : first + size]).all()


@pytest.mark.parametrize("law", LAWS)
def test_new_settings_in_mid_glide_go_on_from_the_present_output(law):
    before = Slew(law, 0.4, 0.4, curvature=2.0)
    glide = begun(before, 0.0, 2.0)
    elapsed = 0.3 * float(glide["lasts"])
    volts = glide_volts(glide, elapsed)
    for after in (
        Slew("rc", 0.1, 0.1),
        Slew("linear", 0.1, 0.1),
        Slew("cosine", 0.5, 0.5),
        Slew(law, 0.0, 0.0),
    ):
        moved = glide.copy()
        glide_resettle(moved, after.record()[0], elapsed)
        assert moved["target"] == 2.0
        assert glide_volts(moved, 0.0) == pytest.approx(2.0 if after.rise == 0 else volts, abs=1e-15)


@pytest.mark.parametrize(
    ("before", "after"),
    list(itertools.product([("linear", "fixed"), ("curve", "rate"), ("cosine", "fixed")], repeat=2)),
)
def test_a_timed_glide_keeps_the_share_that_was_left_of_its_new_duration(before, after):
    glide = begun(Slew(before[0], 0.4, 0.4, timing=before[1], curvature=1.0), 0.0, 2.0)
    glide_resettle(glide, Slew(after[0], 1.0, 1.0, timing=after[1]).record()[0], 0.25 * float(glide["lasts"]))
    whole = 1.0 if after[1] == "fixed" else 2.0
    assert glide["lasts"] == pytest.approx(0.75 * whole)
    glide_resettle(glide, Slew(after[0], 1.0, 1.0, timing=after[1]).record()[0], 0.5 * float(glide["lasts"]))
    assert glide["lasts"] == pytest.approx(0.375 * whole)


def test_a_glide_that_becomes_timed_has_its_whole_duration():
    glide = begun(Slew("rc", 0.4, 0.4), 0.0, 2.0)
    glide_resettle(glide, Slew("cosine", 0.5, 0.5).record()[0], 0.2)
    assert glide["lasts"] == 0.5


@pytest.mark.parametrize(("law", "timing"), TIMED)
def test_a_timed_glide_starts_afresh_at_each_change(law, timing):
    slew = Slew(law, 0.1, 0.1, timing=timing, curvature=1.5)
    y = slew.run(np.repeat([1.0, 2.0], 2400), 48_000)
    expected = printed_form(slew, y[2400], 2.0, np.arange(1, 2400) / 48_000)
    assert np.abs(y[2401:] - expected).max() < WITHIN_VOLTS


@pytest.mark.parametrize(("law", "timing"), TIMED)
def test_a_timed_law_refuses_a_moving_target_and_says_why(law, timing):
    slew = Slew(law, 0.1, 0.1, timing=timing)
    with pytest.raises(SettingError, match="samples 4 and 5"):
        slew.run([0, 0, 0, 0, 1, 2, 2], 48_000)
    assert slew.run([0, 1, 1, 2, 2, 0, 0], 48_000).shape == (7,)


def test_extremes_stay_finite_and_free_of_denormals():
    for law in LAWS:
        for side in (0.0, 1e-6, 60.0):
            for bend, knee, curvature in itertools.product((0.01, 10.0), (0.001, 2.0), (-20.0, 20.0)):
                slew = Slew(law, side, side, bend, knee, curvature)
                y = slew.run(np.repeat([7.0, -5.0, 0.0], 3000), 48_000, start=-5.0)
                assert np.isfinite(y).all(), slew
                assert y.min() >= -5.0, slew
                assert y.max() <= 7.0, slew
                assert not ((y != 0) & (np.abs(y) < 1e-300)).any(), slew


def test_empty_and_single_signals():
    for law in LAWS:
        slew = Slew(law, 0.1, 0.1)
        assert slew.run([], 48_000).shape == (0,)
        assert slew.run([3.0], 48_000, start=1.25).tolist() == [1.25]


@pytest.mark.parametrize(
    ("settings", "words"),
    [
        ({"law": "rcc"}, "choose one of"),
        ({"rise": -1.0}, "rise"),
        ({"rise": 61.0}, "out of range"),
        ({"fall": 1e-7}, "1e-6"),
        ({"fall": float("nan")}, "fall"),
        ({"rise": "80 mm"}, "80 mm"),
        ({"rise": True}, "give a number"),
        ({"bend": 0.0}, "bend"),
        ({"knee": 3.0}, "knee"),
        ({"curvature": 21}, "curvature"),
        ({"timing": "slow"}, "timing"),
        ({"law": "rc", "timing": "fixed"}, "its rate follows from where the output is"),
    ],
)
def test_settings_without_meaning_are_refused_in_one_line(settings, words):
    with pytest.raises(SettingError, match=words) as caught:
        Slew(**({"law": "linear", "rise": 0.1, "fall": 0.1} | settings))
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (([[1.0]], 48_000), "one row"),
        (([1.0, np.nan], 48_000), r"x\[1\]"),
        (([1.0, np.inf], 48_000), r"within ±1e\+06"),
        (([0.0, 1e308], 48_000), "within"),
        (("abc", 48_000), "no row of numbers"),
        (([1j], 48_000), "no row of numbers"),
        (([1.0], 0), "sample_rate"),
        (([1.0], np.nan), "sample_rate"),
        (([1.0], 48_000, np.inf), "start"),
    ],
)
def test_signals_without_meaning_are_refused(arguments, words):
    with pytest.raises(SettingError, match=words):
        Slew("rc", 0.1, 0.1).run(*arguments)


def test_times_may_have_units():
    assert Slew("rc", "80 ms", "1.2 s") == Slew("rc", 0.08, 1.2)


def test_a_held_glide_says_so():
    glide = begun(Slew("rc", 0.1, 0.1), 1.0, 1.0)
    assert glide["law"] == HELD
    assert glide_rate(glide, 0.0) == 0.0
