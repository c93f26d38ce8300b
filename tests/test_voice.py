"""The whole chain.

The same bits however it is run, the same voltages at every rate, and finite whatever the settings.
"""

import itertools
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from conftest import LONG
from glidesmith import SettingError, render
from glidesmith.program import compile_program
from glidesmith.slew import LAWS
from glidesmith.voice import Traces, Voice
from making import make_phrase, make_preset, random_phrase

ENVELOPE = {"attack": 0.02, "decay": 0.1, "sustain": 0.6, "release": 0.15}
VARIED = {
    "rc saw": make_preset(),
    "linear pulse, enveloped": make_preset(
        oscillator={"wave": "pulse", "width": 0.2},
        pitch={"law": "linear", "rise": 0.2, "fall": 0.0},
        gain={"law": "rc", "rise": 0.01, "fall": 0.03},
        envelope=ENVELOPE,
    ),
    "log triangle, decibel, drone": make_preset(
        oscillator={"wave": "triangle"},
        pitch={"law": "log", "rise": 0.1, "fall": 0.05, "bend": 2.0},
        amplifier={"law": "decibel", "velocity_db": 12.0},
        drone={"note": "A3"},
    ),
    "exp sine, steps": make_preset(
        oscillator={"wave": "sine"},
        pitch={"law": "exp", "rise": 0.3, "fall": 0.2, "steps_per_octave": 7},
    ),
    "soft, converter": make_preset(
        pitch={"law": "soft", "rise": 0.05, "fall": 0.1},
        converter={"bits": 8, "span_volts": 12.0, "rate_hz": 333.0},
    ),
    "curve, overlap": make_preset(
        pitch={"law": "curve", "rise": 0.1, "fall": 0.2, "curvature": 4.0, "glide": "overlap"},
        gain={"law": "cosine", "rise": 0.01, "fall": 0.1},
    ),
    "cosine, fast": make_preset(
        pitch={"law": "cosine", "rise": 0.0005, "fall": 0.001, "timing": "rate"},
        tuning={"scale_error_cents_per_octave": -7.0},
        envelope={**ENVELOPE, "shape": "rc", "retrigger": True},
        gain={"law": "soft", "rise": 0.003, "fall": 0.01},
    ),
}


def played(program, block):
    """Audio and traces, made ``block`` samples at a time."""
    voice = Voice(program)
    out = np.empty(program.length, np.float32)
    traces = Traces(*(np.empty(program.length) for _ in range(3)))
    for first in range(0, program.length, block):
        part = slice(first, min(first + block, program.length))
        voice.play(out[part], Traces(*(t[part] for t in traces)))
    return out.tobytes(), *(t.tobytes() for t in traces)


@pytest.mark.parametrize("name", VARIED)
def test_every_block_size_gives_the_same_bits(name):
    program = compile_program(VARIED[name], random_phrase(1.5, seed=3), 44_100)
    whole = played(program, program.length)
    for block in (1, 7, 64, 509):
        assert played(program, block) == whole, block


@pytest.mark.parametrize("name", VARIED)
def test_nothing_to_play_and_blocks_of_nothing_are_harmless(name):
    program = compile_program(VARIED[name], random_phrase(0.2, seed=4), 44_100)
    voice = Voice(program)
    voice.play(np.empty(0, np.float32))
    assert voice.sample == 0


def test_one_and_eight_threads_and_later_runs_give_the_same_bits():
    phrase = random_phrase(2.0, seed=5)
    alone = [render(preset, phrase).audio.tobytes() for preset in VARIED.values()]
    assert [render(preset, phrase).audio.tobytes() for preset in VARIED.values()] == alone
    with ThreadPoolExecutor(8) as pool:
        for _ in range(3):
            assert list(pool.map(lambda p: render(p, phrase).audio.tobytes(), VARIED.values())) == alone


@pytest.mark.parametrize("law", LAWS)
def test_a_phrase_gives_the_same_voltages_at_44_1_48_and_96_khz(law):
    """DESIGN section 4.

    To 1e-9 V for pitch and for gain without an envelope, where instants coincide (every 1/300 s).
    """
    preset = make_preset(
        pitch={"law": law, "rise": 0.13, "fall": 0.07, "curvature": 3.0},
        gain={"law": law, "rise": 0.03, "fall": 0.05, "curvature": -3.0},
        amplifier={"velocity_db": 20.0},
    )
    phrase = random_phrase(6.0, seed=6)
    pitch, gain = [], []
    for rate in (44_100, 48_000, 96_000):
        rendering = render(preset, phrase, rate, trace=True)
        pitch.append(rendering.pitch_volts[:: rate // 300][:1800])
        gain.append(rendering.gain_control[:: rate // 300][:1800])
    assert np.ptp(pitch, axis=0).max() < 1e-9
    assert np.ptp(gain, axis=0).max() < 1e-9
    assert np.ptp(pitch) > 1


@pytest.mark.parametrize("law", ["linear", "rc", "log", "exp", "soft"])
@pytest.mark.parametrize("shape", ["linear", "rc"])
def test_an_enveloped_gain_agrees_with_solve_ivp_at_any_rate(law, shape):
    """DESIGN section 4: to 1e-6. One gate, piece by piece, at four rates."""
    attack, decay, sustain, release, held = 0.03, 0.08, 0.5, 0.12, 0.3
    side = {"linear": 0.06, "rc": 0.02, "log": 0.05, "exp": 0.08, "soft": 0.05}[law]
    preset = make_preset(
        gain={"law": law, "rise": side, "fall": 1.7 * side, "knee": 0.2},
        envelope={"attack": attack, "decay": decay, "sustain": sustain, "release": release, "shape": shape},
    )
    bend = (lambda p: p) if shape == "linear" else (lambda p: np.expm1(-5 * p) / np.expm1(-5))

    def target(t):
        if t < attack:
            return bend(t / attack)
        if t < attack + decay:
            return 1 + (sustain - 1) * bend((t - attack) / decay)
        if t < held:
            return sustain
        return sustain * (1 - bend(min((t - held) / release, 1)))

    def slope(t, y):
        short = target(t) - y[0]
        side_t = side if short > 0 else 1.7 * side
        rate = {
            "linear": np.sign(short) if abs(short) > 1e-7 else 1e7 * short,
            "rc": short,
            "log": (np.sign(short) if abs(short) > 1e-7 else 1e7 * short) * np.exp(-y[0]),
            "exp": (np.sign(short) if abs(short) > 1e-7 else 1e7 * short) * np.exp(y[0]),
            "soft": np.tanh(short / 0.2),
        }[law]
        return [rate / side_t]

    times = np.arange(0, 0.5, 1 / 300)
    kinks = [0, attack, attack + decay, held, held + release, 0.5]
    expected, y = np.empty(times.size), 0.0
    for begin, end in itertools.pairwise(kinks):
        with np.errstate(divide="ignore"):  # inside the solver, where a step's error is 0
            solved = solve_ivp(
                slope, (begin, end), [y], "Radau", rtol=1e-9, atol=1e-11, dense_output=True, max_step=2e-3
            )
        inside = (times >= begin) & (times <= end)
        expected[inside] = solved.sol(times[inside])[0]
        y = solved.y[0, -1]
    for rate in (8_100, 44_100, 48_000, 96_000):
        control = render(preset, make_phrase((0, "3/10", 60)), rate, trace=True).gain_control[:: rate // 300]
        count = min(control.size, times.size)
        assert np.abs(control[:count] - expected[:count]).max() < 1e-6, rate


def test_the_value_at_an_event_is_the_value_before_it():
    preset = make_preset(
        pitch={"law": "linear", "rise": 0, "fall": 0}, gain={"law": "linear", "rise": 0, "fall": 0}
    )
    rendering = render(
        preset, make_phrase(("1/1000", "2/1000", 60), ("2/1000", "3/1000", 72)), 48_000, trace=True
    )
    assert rendering.gain[[48, 49, 144]].tolist() == [0.0, 1.0, 1.0]
    assert rendering.pitch_volts[[0, 96, 97]].tolist() == [0.0, 0.0, 1.0]
    assert rendering.audio.size == 145


def test_an_event_between_samples_is_split_there():
    preset = make_preset(pitch={"law": "linear", "rise": 0.1, "fall": 0.1})
    for start in ("1/1000", "100001/100000000", "103/100000"):
        phrase = make_phrase((0, 1, 60), (start, 1, 84))
        volts = render(preset, phrase, 48_000, trace=True).pitch_volts
        at = float(phrase.notes[1].start)
        assert np.allclose(
            volts[:9000], np.clip((np.arange(9000) / 48_000 - at) / 0.1, 0, 2), rtol=0, atol=1e-12
        )


def test_glide_modes():
    phrase = make_phrase((0, 1, 60), (1, 2, 72), ("3/2", "5/2", 67), (3, 4, 60))
    linear = {"law": "linear", "rise": 0.4, "fall": 0.4}
    after = {}
    for mode in ("always", "overlap", "never"):
        volts = render(make_preset(pitch={**linear, "glide": mode}), phrase, 8000, trace=True).pitch_volts
        after[mode] = [volts[8000 * t // 10 + 1] for t in (10, 15, 30)]
    slow = pytest.approx
    assert after["always"] == [slow(0, abs=1e-3), slow(1, abs=1e-3), slow(7 / 12, abs=1e-3)]
    assert after["overlap"] == [1.0, slow(1, abs=1e-3), 0.0]
    assert after["never"] == [1.0, 7 / 12, 0.0]


@pytest.mark.parametrize("mode", ["always", "overlap", "never"])
def test_returning_to_a_held_key_glides_under_always_and_overlap_and_never_retriggers(mode):
    phrase = make_phrase((0, 2, 60), ("1/2", 1, 72))
    preset = make_preset(
        pitch={"law": "linear", "rise": 0.1, "fall": 0.1, "glide": mode},
        envelope={"attack": 0, "decay": 0.1, "sustain": 0.5, "release": 0.1, "retrigger": True},
        gain={"law": "linear", "rise": 0, "fall": 0},
    )
    rendering = render(preset, phrase, 8000, trace=True)
    returning = rendering.pitch_volts[8000 + 1]
    assert returning == 0.0 if mode == "never" else 0.99 < returning < 1.0
    assert rendering.gain_control[4001] > 0.99  # the overlapping note did retrigger
    assert rendering.gain_control[8001] == 0.5


def test_the_first_note_does_not_glide():
    rendering = render(make_preset(), make_phrase((1, 2, 84)), 8000, trace=True)
    assert (rendering.pitch_volts == 2.0).all()


def test_velocity_scales_the_gate_in_decibels():
    phrase = make_phrase((0, 1, 60, 1.0), (2, 3, 60, 0.5), (4, 5, 60, 0.0))
    preset = make_preset(amplifier={"velocity_db": 20.0})
    gain = render(preset, phrase, 8000, trace=True).gain[[4000, 20_000, 36_000]]
    assert 20 * np.log10(gain) == pytest.approx([0, -10, -20], abs=1e-9)


def test_the_converter_is_heard_in_the_pitch_and_held_until_its_tick():
    preset = make_preset(
        pitch={"law": "linear", "rise": 0, "fall": 0},
        converter={"bits": 8, "span_volts": 10.0, "rate_hz": 10.0},
    )
    volts = render(preset, make_phrase((0, 2, 60), ("1/3", 2, 67)), 48_000, trace=True).pitch_volts
    assert volts[19_200] == 0.0
    assert volts[19_201] == round(7 / 12 / (10 / 256)) * 10 / 256


def test_a_glissando_goes_to_the_nearest_step():
    preset = make_preset(pitch={"law": "linear", "rise": 1.0, "fall": 1.0, "steps_per_octave": 5})
    volts = render(preset, make_phrase((0, 2, 60), (0, 2, 60), ("1/2", 2, 72)), 8000, trace=True).pitch_volts
    expected = np.floor(np.clip(np.arange(12_000) / 8000 - 0.5, 0, 1) * 5 + 0.5) / 5
    differing = np.flatnonzero(volts[:12_000] != expected)
    assert differing.size <= 2  # instants that fall on a border, to the last bit
    assert set(np.round(np.unique(volts) * 5, 9)) == {0, 1, 2, 3, 4, 5}


def test_the_drone_is_a_sine_on_its_note_that_fades_in_and_out():
    preset = make_preset(oscillator={"level_db": -60}, drone={"note": "A4", "level_db": -20.0})
    audio = render(preset, make_phrase((0, 2, 60)), 48_000).audio.astype(float)
    steady = audio[4800:-4800]
    spectrum = np.abs(np.fft.rfft(steady * np.hanning(steady.size)))
    assert np.argmax(spectrum) * 48_000 / steady.size == pytest.approx(440, abs=0.5)
    assert np.abs(steady).max() == pytest.approx(0.1, abs=0.003)
    assert abs(audio[0]) < 1e-4
    assert abs(audio[-1]) < 1e-4


def test_tracking_error_stretches_the_scale_about_0_volts():
    preset = make_preset(
        oscillator={"wave": "sine"}, tuning={"scale_error_cents_per_octave": 25.0, "zero_volts": "C4"}
    )
    audio = render(preset, make_phrase((0, 2, 84)), 48_000).audio.astype(float)[4800:90_000]
    crossings = np.flatnonzero((audio[:-1] < 0) & (audio[1:] >= 0))
    exact = crossings - audio[crossings] / (audio[crossings + 1] - audio[crossings])
    hz = 48_000 * (exact.size - 1) / (exact[-1] - exact[0])
    assert 1200 * np.log2(hz / (440 * 2 ** (15 / 12))) == pytest.approx(50, abs=0.01)


def test_a_render_ends_when_the_gain_stays_under_90_db_or_at_the_tail():
    short = render(make_preset(), make_phrase((0, 1, 60)), 48_000, trace=True)
    assert short.audio.size == pytest.approx(48_000 * 1.08, abs=5)
    assert short.gain[-1] >= 10**-4.5 > short.gain[-1] - 1 / (0.08 * 48_000)
    assert not short.warnings
    slow = make_preset(gain={"law": "rc", "rise": 0.01, "fall": 2.0})
    cut = render(slow, make_phrase((0, 1, 60)), 8000, tail_s=0.5)
    assert cut.audio.size == 8001 + 4000
    assert "cut off" in cut.warnings[0]
    assert render(slow, make_phrase((0, 1, 60)), 8000).audio.size == pytest.approx(
        8000 * (1 + 2.0 * np.log(10**4.5)), abs=3
    )


def test_a_render_does_not_end_while_a_slow_slew_still_rises_towards_a_long_release():
    """The gate closes after 1 ms with the gain under -90 dB, and the control goes on rising for seconds."""
    preset = make_preset(
        gain={"law": "linear", "rise": 60.0, "fall": 1.0},
        envelope={"attack": 0.0, "decay": 0.0, "sustain": 1.0, "release": 5.0},
    )
    rendering = render(preset, make_phrase((0, "1/1000", 60)), 8000, trace=True)
    assert rendering.gain[:10].max() < 10**-4.5
    assert rendering.gain.max() == pytest.approx(5.0 / 65.0, rel=1e-3)
    assert rendering.audio.size > 8000 * 4.9


def test_nothing_is_said_to_be_cut_off_where_the_sound_ends_by_itself():
    preset = make_preset(gain={"law": "linear", "rise": 0, "fall": 0})
    assert not render(preset, make_phrase((0, 1, 60)), 8000, tail_s=0).warnings
    enveloped = make_preset(gain={"law": "linear", "rise": 0, "fall": 0}, envelope={**ENVELOPE, "release": 0})
    assert not render(enveloped, make_phrase((0, 1, 60)), 8000, tail_s=0).warnings
    assert render(make_preset(), make_phrase((0, 1, 60)), 8000, tail_s=0.01).warnings


def test_a_gate_that_closes_just_as_the_attack_ends_is_the_same_at_every_rate():
    """Both at 59 ms, which is no exact number; with no decay the level after the attack is another."""
    preset = make_preset(
        gain={"law": "linear", "rise": 0, "fall": 0},
        envelope={"attack": 0.059, "decay": 0.0, "sustain": 0.2, "release": 0.5},
    )
    phrase = make_phrase(("3659/1000", "3718/1000", 60))
    after = []
    for rate in (22_050, 44_100, 48_000, 96_000, 192_000):
        control = render(preset, phrase, rate, trace=True).gain_control
        after.append(np.interp(3.768, np.arange(control.size) / rate, control))
    assert after == pytest.approx([0.9] * 5, abs=1e-6)


def test_whatever_is_no_preset_or_phrase_is_refused_by_name():
    with pytest.raises(SettingError, match="load_preset"):
        render("lead.toml", make_phrase((0, 1, 60)))
    with pytest.raises(SettingError, match="load_phrase"):
        render(make_preset(), None)


def test_clipped_samples_are_counted_held_at_the_ceiling_and_reported():
    loud = make_preset(oscillator={"wave": "pulse", "width": 0.05, "level_db": 0.0})
    rendering = render(loud, make_phrase((0, 1, 48)))
    assert np.abs(rendering.audio).max() == 1.0
    assert rendering.clipped == (np.abs(rendering.audio) == 1.0).sum() > 100
    assert "clipped" in rendering.warnings[0]


@pytest.mark.parametrize("law", LAWS)
def test_extremes_are_finite_and_under_the_ceiling(law):
    """Denormals, silence, T from 0 to 60 s, pitch from -5 V (MIDI note 0) to +7 V (note 127, 0 V at G2)."""
    generator = np.random.default_rng(LAWS.index(law))
    sides = (0.0, 1e-6, 1e-3, 60.0)
    for case in range(24 if LONG else 8):
        rise, fall = generator.choice(sides, 2)
        gain_rise, gain_fall = generator.choice(sides, 2)
        preset = make_preset(
            oscillator={"wave": str(generator.choice(["sine", "triangle", "saw", "pulse"])), "level_db": 0.0},
            pitch={
                "law": law,
                "rise": rise,
                "fall": fall,
                "bend": float(generator.choice([0.01, 10.0])),
                "knee": float(generator.choice([0.001, 2.0])),
                "curvature": float(generator.choice([-20.0, 0.0, 20.0])),
            },
            gain={
                "law": law,
                "rise": gain_rise,
                "fall": gain_fall,
                "bend": float(generator.choice([0.01, 10.0])),
                "knee": float(generator.choice([0.001, 2.0])),
                "curvature": float(generator.choice([-20.0, 20.0])),
            },
            tuning={"zero_volts": "G2" if case % 2 else "C4"},
            **({"envelope": ENVELOPE} if case % 3 and law not in ("curve", "cosine") else {}),
        )
        phrase = make_phrase(
            (0, "1/10", 0), ("1/10", "2/10", 127), ("2/10", "3/10", 1), ("5/10", "6/10", 115)
        )
        rate = int(generator.choice([22_050, 48_000, 192_000]))
        rendering = render(preset, phrase, rate, trace=True, tail_s=0.3)
        for signal in (rendering.audio, rendering.pitch_volts, rendering.gain_control, rendering.gain):
            assert np.isfinite(signal).all()
        assert np.abs(rendering.audio).max() <= 1.0
        assert rendering.pitch_volts.min() >= -5.0
        assert rendering.pitch_volts.max() <= 7.0
        assert rendering.gain.max() <= 1.0
        for signal in (rendering.gain_control, rendering.gain):
            assert not ((signal != 0) & (np.abs(signal) < 1e-300)).any()


def test_silence_stays_silence():
    rendering = render(make_preset(), make_phrase((1, 2, 60)), 48_000)
    assert (rendering.audio[:48_000] == 0.0).all()
    assert not np.signbit(rendering.audio[:48_000]).any()
