"""What the comparison page plays, sample by sample, in Debian's Chromium."""

# ruff: noqa: F401, F811 - fixtures are imported, and asked for by name

import numpy as np
import pytest

from browser import decoded, opened
from pages import (
    AHEAD_S,
    LEVEL,
    SAMPLE_RATE,
    SEAM_S,
    SETTLED_S,
    SWITCH_S,
    at_position,
    begin,
    chosen,
    chromium,
    example,
    held_tab,
    in_chromium,
    page,
    play_a_loop,
    position,
    ramp,
    redrawn,
    tab,
    tone_page,
    tones,
)

pytestmark = in_chromium


def test_switching_keeps_the_position_and_leaves_no_gap(chromium, page, example):
    """The output is, sample for sample, one clip before, a straight fade of 10 ms, the other clip after."""
    clips = [decoded(flac) for flac in example[1]]
    with opened(chromium, page, offline_s=5) as tab:
        tab.page.click("#play")
        output, seen = tab.perform([(1.5, "2"), (2.5, "3"), (3.5, "ArrowRight")])
        assert tab.complaints == []
    times = np.arange(output.size) / SAMPLE_RATE
    positions = times - AHEAD_S
    expected = at_position(clips, 0, positions)
    for (pressed_s, _, _), index in zip(seen, (1, 2, 0), strict=True):
        new = ramp(times, round((pressed_s + AHEAD_S) * SAMPLE_RATE) / SAMPLE_RATE)
        expected = (1.0 - new) * expected + new * at_position(clips, index, positions)
    settled = times > SETTLED_S
    np.testing.assert_allclose(output[settled], LEVEL * expected[settled], atol=2e-6)
    assert np.abs(expected).max() > 0.1
    # The position shown: of the clock, and the same before and after (5 ms asked, 1 ms shown).
    np.testing.assert_allclose(seen[:, 1], seen[:, 0] - AHEAD_S, atol=0.0011)
    np.testing.assert_allclose(seen[:, 2], seen[:, 1], atol=0.0011)


def test_playing_rises_from_silence_within_a_switch(chromium, tone_page, tones):
    clip = decoded(tones[0])
    with opened(chromium, tone_page, offline_s=1.5) as tab:
        tab.page.click("#play")
        output, _ = tab.perform([])
    times = np.arange(output.size) / SAMPLE_RATE
    away = times > AHEAD_S + SWITCH_S
    expected = LEVEL * at_position([clip], 0, times - AHEAD_S)
    np.testing.assert_allclose(output[away], expected[away], atol=2e-6)
    assert np.abs(np.diff(output)).max() < 1.1 * LEVEL * 0.2 * 2 * np.pi * 200.0 / SAMPLE_RATE


PRESSES = {
    "keys faster than a switch takes": [(1.5 + 0.004 * n, "123"[n % 3]) for n in range(24)],
    "pause and play": [(1.5, " "), (1.8, " "), (1.805, " "), (1.9, " ")],
    "steps back and on": [(1.5, "shift ArrowRight"), (1.504, "shift ArrowLeft"), (1.7, "Home"), (1.9, "2")],
    "a loop set while playing": [(1.5, "["), (1.9, "]"), (2.4, "3"), (2.6, "l")],
}


@pytest.mark.parametrize("presses", PRESSES.values(), ids=PRESSES)
def test_nothing_that_is_pressed_clicks(chromium, tone_page, tones, presses):
    """No sample moves by more than the steepest sum of the tones and of fades of 5 ms between them."""
    with opened(chromium, tone_page, offline_s=4) as tab:
        tab.page.click("#play")
        output, _ = tab.perform(presses)
        assert tab.complaints == []
    clips = [decoded(tone) for tone in tones]
    steepest = max(np.abs(np.diff(clip)).max() for clip in clips)
    fade = sum(np.abs(clip).max() for clip in clips) / (SEAM_S * SAMPLE_RATE)
    assert np.abs(np.diff(output)).max() < LEVEL * (steepest + fade)
    assert np.abs(output[-SAMPLE_RATE:]).max() > 0.5 * LEVEL * 0.1


def test_moving_the_position_fades_across_without_a_gap(chromium, tone_page, tones):
    clip = decoded(tones[0])
    with opened(chromium, tone_page, offline_s=2.5) as tab:
        tab.page.click("#play")
        output, seen = tab.perform([(1.5, "shift ArrowRight")])
    times = np.arange(output.size) / SAMPLE_RATE
    moved_s = round((seen[0, 0] + AHEAD_S) * SAMPLE_RATE) / SAMPLE_RATE
    new = ramp(times, moved_s)
    before = at_position([clip], 0, times - AHEAD_S)
    after = at_position([clip], 0, seen[0, 0] - AHEAD_S + 0.5 + times - moved_s)
    settled = times > SETTLED_S
    expected = LEVEL * ((1.0 - new) * before + new * after)
    np.testing.assert_allclose(output[settled], expected[settled], atol=2e-6)


def test_a_loop_closes_with_a_short_fade_over_and_over(chromium, tone_page, tones):
    clip = decoded(tones[0])
    start_s, end_s = 2.0, 2.5
    with opened(chromium, tone_page, offline_s=3) as tab:
        tab.page.fill("#loop-start", str(start_s))
        tab.page.fill("#loop-end", str(end_s))
        tab.page.locator("#loop-end").blur()
        assert tab.page.is_checked("#loop")
        tab.page.click("#play")
        output, _ = tab.perform([(1.0, "Shift"), (2.0, "Shift")], wait_ms=250)  # for the page to plan ahead
    times = np.arange(output.size) / SAMPLE_RATE
    expected = np.zeros(output.size)
    for begins_s in np.arange(AHEAD_S, 3.0, end_s - start_s):  # the first with the run: before it is settled
        audible = ramp(times, begins_s, SEAM_S) - ramp(times, begins_s + end_s - start_s, SEAM_S)
        expected += audible * at_position([clip], 0, start_s + times - begins_s)
    settled = times > SETTLED_S
    np.testing.assert_allclose(output[settled], LEVEL * expected[settled], atol=2e-6)


def test_a_live_context_plays_on(tab):
    """The same without the held clock: the position moves on, and stays while another candidate is chosen."""
    tab.page.click("#play")
    tab.wait_for_position(0.2)
    between = tab.page.evaluate(
        """() => {
          const position = () => parseFloat(document.getElementById("position").textContent);
          const before = position();
          document.querySelectorAll("#candidates input")[1].click();
          return [before, position()];
        }"""
    )
    assert 0.0 <= between[1] - between[0] < 0.1
    tab.page.keyboard.press("Space")
    assert tab.page.inner_text("#status").startswith("Paused at ")


# The loop is 1 to 3 s, played for so long before the key is pressed: positions after the step of 0.5 s.
STEPS = [
    (0.2, "Shift+ArrowLeft", 1.0),  # before the loop
    (0.5, "Shift+ArrowLeft", 1.0),  # at its start
    (0.8, "Shift+ArrowLeft", 1.3),
    (1.2, "Shift+ArrowRight", 2.7),
    (1.5, "Shift+ArrowRight", 1.0),  # at its end
    (1.8, "Shift+ArrowRight", 1.0),  # past it
]


@pytest.mark.parametrize(("played_s", "key", "expected_s"), STEPS)
def test_a_step_out_of_a_playing_loop_begins_it_anew(held_tab, played_s, key, expected_s):
    play_a_loop(held_tab, 1.0, 3.0)
    held_tab.page.evaluate("(seconds) => passTime(seconds)", played_s + AHEAD_S)
    held_tab.page.keyboard.press(key)
    assert position(held_tab) == pytest.approx(expected_s, abs=0.0011)
    held_tab.page.evaluate("passTime(0.2)")
    redrawn(held_tab)
    assert position(held_tab) == pytest.approx(expected_s + 0.2 - AHEAD_S, abs=0.0011)


@pytest.mark.parametrize(
    ("clicked_s", "inside"), [(0.3, False), (1.1, True), (2.9, True), (3.1, False), (9, False)]
)
def test_a_click_outside_a_playing_loop_begins_it_anew(held_tab, clicked_s, inside):
    play_a_loop(held_tab, 1.0, 3.0)
    box = held_tab.page.locator("#graph").bounding_box()
    length_s = float(held_tab.page.get_attribute("#excerpt-end", "max"))
    pixels = 46 + clicked_s / length_s * (box["width"] - 46 - 12)
    held_tab.page.mouse.click(box["x"] + pixels, box["y"] + 100)
    assert position(held_tab) == pytest.approx(clicked_s if inside else 1.0, abs=0.03 if inside else 0.0011)
    held_tab.page.keyboard.press("Space")
    assert held_tab.page.inner_text("#play") == "Play"


def test_a_second_press_while_the_audio_starts_takes_the_first_back(held_tab):
    held_tab.page.evaluate(
        "() => { AudioContext.prototype.resume = () => new Promise((done) => { window.resumed = done; }); }"
    )
    held_tab.page.click("#play")
    assert held_tab.page.inner_text("#play") == "Pause"
    held_tab.page.click("#play")
    held_tab.page.evaluate("resumed()")
    assert held_tab.page.inner_text("#play") == "Play"
    held_tab.page.click("#play")
    held_tab.page.evaluate("resumed()")
    assert held_tab.page.inner_text("#status").startswith("Playing")


def test_the_position_is_not_announced_while_it_moves(tab):
    """ARIA 1.2: an `output` and whatever has a status' role is a live region."""
    live = "output:not([aria-live=off]), [role=status], [role=alert], [aria-live]:not([aria-live=off])"
    for place in ("#position", "#bar-position", "#readout"):
        assert tab.page.evaluate(
            "([place, live]) => !document.querySelector(place).closest(live)", [place, live]
        )


def test_what_loop_is_refused_and_what_is_changed_is_said(held_tab):
    page = held_tab.page

    def status():
        return page.inner_text("#status").replace("\u00a0", " ")

    def said(side, text):
        page.fill(f"#loop-{side}", text)
        page.locator(f"#loop-{side}").blur()
        return status()

    assert said("end", "3") == "Loop: 0.000 s to 3.000 s."
    assert said("start", "1") == "Loop: 1.000 s to 3.000 s."
    assert said("start", "") == "Give a time in seconds. The loop stays at 1.000 s to 3.000 s."
    assert page.input_value("#loop-start") == "1.000"
    assert said("end", "0.02").startswith("No loop can end at 0.020 s: a loop lasts at least 50 ms.")
    assert page.input_value("#loop-end") == "3.000"
    assert "No loop can begin at" in said("start", "99")
    assert "The sound ends at" in said("end", "99")
    assert said("start", "4").startswith("Loop: 4.000 s to ")
    assert said("end", "4.01").startswith("Loop: 0.000 s to 4.010 s. Its start went to the beginning")
    assert "Its end went to the end of the sound" in said("start", "5")
    page.locator("body").press("]")
    assert status().startswith("No loop can end at 0.000 s")
    page.keyboard.press("[")
    assert status().startswith("Loop: 0.000 s to ")
    said("start", "3")
    page.keyboard.press("Home")
    page.keyboard.press("Shift+ArrowLeft")
    page.keyboard.press("Shift+ArrowLeft")
    page.keyboard.press("]")
    assert status().startswith("Loop: 0.000 s to 2.000 s. Its start went to the beginning")
    box = page.locator("#graph").bounding_box()
    page.mouse.move(box["x"] + 200, box["y"] + 8)
    page.mouse.down()
    page.mouse.move(box["x"] + 190, box["y"] + 8)
    page.mouse.move(box["x"] + 200.5, box["y"] + 8)
    page.mouse.up()
    assert "That is too short" in page.inner_text("#status")
