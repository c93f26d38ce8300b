"""The panel in Debian's Chromium, with a real server and a real session: what it shows and what it moves."""

import re

import numpy as np
import pytest

from browser import CHROMIUM, NEEDED
from conftest import PRESETS
from glidesmith import Slew, load_preset
from glidesmith.panel_guard import Guard
from panels import (
    SAMPLE_RATE,
    browser_for_panels,
    panel_tab,
    served,
    waited_for,
)

try:
    import playwright.sync_api as _  # noqa: F401
except ImportError:
    CHROMIUM = None
pytestmark = pytest.mark.skipif(CHROMIUM is None, reason=NEEDED)

HOSTILE = "<img src=x onerror=\"document.title='taken over'\"></title><script>alert(1)</script> \u202e"


@pytest.fixture(scope="module")
def chromium():
    with browser_for_panels() as found:
        yield found


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    return tmp_path_factory.mktemp("panel")


@pytest.fixture(scope="module")
def running(folder):
    with served(folder) as found:
        yield found


@pytest.fixture
def panel(running):
    """One panel for all tests, brought back to where it began."""
    session = running.session
    for number, name in enumerate(("night-ferry-lead", "winch-constant-rate", "deck-tune"), 1):
        session.load(number, PRESETS / f"{name}.toml")
    session.select(1)
    session.tempo(100)
    session.transpose(0)
    session.level(-30.0)
    session.loop(True)
    session.play()
    running.lines.clear()
    yield running
    assert running.lines == []
    assert running.still_plays()


@pytest.fixture
def tab(chromium, panel):
    with panel_tab(chromium, panel, viewport={"width": 1440, "height": 900}) as found:
        yield found
        assert found.complaints == []
        assert all(
            re.match(rf"(ws|http)://127\.0\.0\.1:{panel.panel.port}/|data:", url) for url in found.requests
        )


def setting(session, key, number=1):
    slot = next(slot for slot in session.state()["slots"] if slot["number"] == number)
    return slot["settings"].get(key)


def becomes(session, key, value, number=1):
    return waited_for(lambda: setting(session, key, number) == pytest.approx(value))


def locator(tab, key):
    return tab.page.locator(f'[id="set-{key}"]')


def text_of(tab, selector, wanted):
    """Wait until an element's text matches, and return it."""
    tab.page.wait_for_function(
        "([where, wanted]) => new RegExp(wanted).test(document.querySelector(where)?.textContent ?? '')",
        arg=[selector, wanted],
    )
    return tab.page.text_content(selector)


# What it shows


def test_all_is_shown_once_it_is_connected(tab, panel):
    assert text_of(tab, "#title", "Night ferry lead")
    assert tab.page.locator(".slot-row").count() == 3
    assert "Winch, constant rate" in tab.page.text_content("#slot-list")
    assert "pitch law linear" in tab.page.text_content("#slot-list")
    assert locator(tab, "pitch.rise").get_attribute("aria-valuetext") == "60 ms"
    assert tab.page.locator('[data-key="pitch.knee"]').get_attribute("class").split() == [
        "setting",
        "number",
        "idle",
    ]
    assert "no effect" in tab.page.text_content('[data-key="pitch.knee"]')
    first = tab.page.text_content("#facts-body tbody tr")
    assert "never" in first
    assert "15 of 28 glides never land" in tab.page.text_content(".facts-summary")
    assert "LUFS" in text_of(tab, "#slot-list", "match [^0]*[0-9.]+ dB")
    text_of(tab, "#meters", r"Momentary−\d+\.\d LUFS")


def test_the_position_goes_on_and_the_curves_are_drawn(tab, panel):
    before = float(text_of(tab, "#position", r"^\d+\.\d+ s$").split()[0])
    tab.page.wait_for_function(
        "(before) => Math.abs(parseFloat(document.getElementById('position').textContent) - before) > 0.3",
        arg=before,
    )
    inked = """(id) => {
      const canvas = document.querySelector(id);
      const data = canvas.getContext('2d').getImageData(0, 0, canvas.width, canvas.height).data;
      const colours = new Set();
      for (let at = 0; at < data.length; at += 4) {
        if (data[at + 3] === 255) colours.add(data.slice(at, at + 3).join());
      }
      return colours.size;
    }"""
    for canvas in ("#ground", "#moving", "#transfer-pitch canvas", "#transfer-gain canvas"):
        assert tab.page.evaluate(inked, canvas) > 1, canvas
    assert re.search(r"pitch [A-G]#?\d", tab.page.text_content("#readout"))


def test_the_shown_position_is_the_decks_own(tab, panel):
    """What is shown lies behind what was made by the way to the eye, never before it."""
    session = panel.session
    for _ in range(5):
        before = session.deck.state()
        shown = float(tab.page.text_content("#position").split()[0])
        after = session.deck.state()
        loop = session.state()["phrase"]["loop_s"]
        made = (before.position / SAMPLE_RATE, after.position / SAMPLE_RATE)
        behind = (made[1] - shown) % loop
        assert behind < 1.5 or behind > loop - 0.02
        tab.page.wait_for_timeout(50)


def test_each_law_has_the_picture_of_its_own_curve(tab, panel):
    """The pictures' points against the engine's closed forms, to their rounding: a tenth of a pixel."""
    spans = {
        "linear": 1.0, "rc": 4.0, "log": np.expm1(1.0), "exp": -np.expm1(-1.0), "soft": 1.3, "curve": 1.0,
        "cosine": 1.0,
    }  # fmt: skip
    rate, across = 20_000, np.linspace(0.0, 1.35, 41)
    for law, span in spans.items():
        path = tab.page.locator(f'[data-key="pitch.law"] input[value="{law}"] + svg .law-line').get_attribute(
            "d"
        )
        points = np.array([[float(n) for n in pair.split()] for pair in path[1:].split("L")])
        assert points.shape == (82, 2)
        slew = Slew(law=law, rise=1.0, fall=1.0)
        start = 0.0
        for half, target in ((points[:41], 1.0), (points[41:], 0.0)):
            course = slew.run(np.full(int(1.35 * span * rate) + 2, target), sample_rate=rate, start=start)
            volts = np.interp(span * across, np.arange(course.size) / rate, course)
            assert np.abs(half[:, 1] - (30.0 - 26.0 * volts)).max() < 0.06, law
            start = volts[-1]
        assert np.abs(points[:41, 0] - (2.0 + 58.0 * across / 2.7)).max() < 0.06


def test_names_from_files_are_text(chromium, tmp_path):
    text = (
        (PRESETS / "night-ferry-lead.toml").read_text().replace("../shared", str(PRESETS.parent / "shared"))
    )
    title = HOSTILE.replace('"', '\\"')
    (tmp_path / "hostile.toml").write_text(re.sub(r"title = .*", lambda _: f'title = "{title}"', text))
    with served(tmp_path) as found:
        found.session.load(1, tmp_path / "hostile.toml")
        with panel_tab(chromium, found) as tab:
            assert text_of(tab, "#title", "onerror") == HOSTILE
            assert tab.page.locator("img").count() == 0
            assert tab.page.title() == f"{' '.join(HOSTILE.split())}, live".strip()
            assert tab.complaints == []


@pytest.mark.parametrize("width", [1440, 1000, 640, 360])
def test_nothing_is_wider_than_the_window(tab, panel, width):
    tab.page.set_viewport_size({"width": width, "height": 800})
    assert tab.page.evaluate("document.documentElement.scrollWidth") <= width


def test_everything_has_a_name_and_is_reached_by_the_keyboard(tab, panel):
    nameless = tab.page.evaluate(
        """() => [...document.querySelectorAll("button, input, select, [role=meter], [role=img], [role$=up]")]
          .filter((part) => part.checkVisibility({ visibilityProperty: true }))
          .filter((part) => !(part.getAttribute("aria-label") || part.labels?.length
            || document.getElementById(part.getAttribute("aria-labelledby"))
            || (part.matches("button") && part.textContent.trim())))
          .map((part) => part.outerHTML)"""
    )
    assert nameless == []
    focusable = tab.page.evaluate(
        "() => [...document.querySelectorAll('button, input, select')].every((part) => part.tabIndex >= 0)"
    )
    assert focusable
    assert tab.page.locator("[aria-live=polite], [role=alert], [role=status]").count() == 2


# Moving settings


def test_arrow_keys_move_finely_and_coarsely(tab, panel):
    locator(tab, "pitch.rise").focus()
    steps = {}
    for key in ("ArrowRight", "Shift+ArrowRight", "PageUp"):
        before = setting(panel.session, "pitch.rise")
        tab.page.keyboard.press(key)
        assert waited_for(lambda before=before: setting(panel.session, "pitch.rise") > before)
        steps[key] = setting(panel.session, "pitch.rise") / before
    assert 1.0 < steps["Shift+ArrowRight"] < 1.02 < steps["ArrowRight"] < 1.1 < steps["PageUp"] < 2.0
    tab.page.keyboard.press("Home")
    assert becomes(panel.session, "pitch.rise", 0.0)
    tab.page.keyboard.press("ArrowLeft")
    tab.page.keyboard.press("ArrowUp")
    assert becomes(panel.session, "pitch.rise", 0.0005)
    tab.page.keyboard.press("ArrowDown")
    assert becomes(panel.session, "pitch.rise", 0.0)
    tab.page.keyboard.press("End")
    assert becomes(panel.session, "pitch.rise", 60.0)
    locator(tab, "pitch.steps_per_octave").focus()
    tab.page.keyboard.press("Shift+ArrowUp")
    assert becomes(panel.session, "pitch.steps_per_octave", 1)


TYPED = [
    ("pitch.rise", "80 ms", 0.08),
    ("pitch.rise", "95", 0.095),
    ("pitch.rise", "1,5 s", 1.5),
    ("pitch.rise", "2", 2.0),
    ("pitch.rise", "0", 0.0),
    ("gain.fall", "250us", 0.00025),
    ("oscillator.level_db", "-18.5", -18.5),
    ("oscillator.level_db", "\u22126 dB", -6.0),
    ("pitch.curvature", "-4", -4.0),
    ("envelope.sustain", ".25", 0.25),
    ("tuning.a4_hz", "442 Hz", 442.0),
]


def test_values_are_typed_with_and_without_units(tab, panel):
    """A bare number has the unit that stood there: what was typed after seconds is in seconds."""
    for key, typed, value in TYPED:
        field = tab.page.locator(f'[data-key="{key}"] input[type=text]')
        field.fill(typed)
        field.press("Enter")
        assert becomes(panel.session, key, value), (key, typed)
        tab.page.wait_for_function(
            """([id, value]) => {
              const slider = document.getElementById(id);
              const text = slider.getAttribute("aria-valuetext");
              return text === slider.parentElement.querySelector("[type=text]").value && text !== value;
            }""",
            arg=[f"set-{key}", typed if " " not in typed else ""],
        )


def test_the_arrow_keys_work_in_a_field_too(tab, panel):
    field = tab.page.locator('[data-key="pitch.rise"] input[type=text]')
    field.press("ArrowUp")
    assert waited_for(lambda: setting(panel.session, "pitch.rise") > 0.06)
    field.press("PageDown")
    assert waited_for(lambda: setting(panel.session, "pitch.rise") < 0.06)
    assert float(field.input_value().split()[0]) < 60


def test_a_value_against_its_rule_is_said_beside_its_field(tab, panel):
    field = tab.page.locator('[data-key="pitch.rise"] input[type=text]')
    field.fill("soon")
    field.press("Enter")
    assert "must be a time" in text_of(tab, '[data-key="pitch.rise"] .note', "must be")
    assert field.get_attribute("aria-invalid") == "true"
    assert setting(panel.session, "pitch.rise") == 0.06
    field.fill("70 ms")
    field.press("Enter")
    assert becomes(panel.session, "pitch.rise", 0.07)
    assert tab.page.text_content('[data-key="pitch.rise"] .note') == ""


def test_a_slider_that_is_dragged_makes_one_step_of_undo(tab, panel):
    locator(tab, "pitch.fall").scroll_into_view_if_needed()
    box = locator(tab, "pitch.fall").bounding_box()
    middle = box["y"] + box["height"] / 2
    tab.page.mouse.move(box["x"] + box["width"] * 0.4, middle)
    tab.page.mouse.down()
    for part in (0.5, 0.6, 0.7, 0.8):
        tab.page.mouse.move(box["x"] + box["width"] * part, middle)
    tab.page.mouse.up()
    assert waited_for(lambda: setting(panel.session, "pitch.fall") > 1.0)
    tab.page.keyboard.press("Control+z")
    assert becomes(panel.session, "pitch.fall", 0.09)
    tab.page.keyboard.press("Control+Shift+z")
    assert waited_for(lambda: setting(panel.session, "pitch.fall") > 1.0)
    tab.page.click("#undo")
    assert becomes(panel.session, "pitch.fall", 0.09)


def test_a_setting_is_reset(tab, panel):
    field = tab.page.locator('[data-key="pitch.rise"] input[type=text]')
    field.fill("1 s")
    field.press("Enter")
    assert becomes(panel.session, "pitch.rise", 1.0)
    tab.page.click('[data-key="pitch.rise"] .reset')
    assert becomes(panel.session, "pitch.rise", 0.06)
    tab.page.click('[data-key="pitch.glide"] .reset')
    assert waited_for(lambda: setting(panel.session, "pitch.glide") == "always")


def test_a_law_is_chosen_and_what_counts_then_is_marked(tab, panel):
    tab.page.click('[data-key="pitch.law"] label:has([value=soft])')
    assert waited_for(lambda: setting(panel.session, "pitch.law") == "soft")
    tab.page.wait_for_selector('[data-key="pitch.knee"]:not(.idle)')
    tab.page.wait_for_selector('[data-key="pitch.bend"].idle')
    tab.page.click('[data-key="pitch.timing"] label:has([value=fixed])')
    assert "soft law can't have it" in text_of(tab, '[data-key="pitch.timing"] .note', "fixed")
    assert tab.page.is_checked('[data-key="pitch.timing"] [value=rate]')


def test_optional_tables_are_turned_on_and_off(tab, panel):
    assert not tab.page.is_visible('[data-key="drone.note"]')
    tab.page.check('[aria-labelledby="table-drone"][type=checkbox]')
    tab.page.wait_for_selector('[data-key="drone.note"]', state="visible")
    note = tab.page.locator('[data-key="drone.note"] input')
    note.fill("G2")
    note.press("Enter")
    assert waited_for(lambda: setting(panel.session, "drone.note") == "G2")
    note.press("ArrowUp")
    assert waited_for(lambda: setting(panel.session, "drone.note") == "G#2")
    tab.page.uncheck('[aria-labelledby="table-drone"][type=checkbox]')
    assert waited_for(lambda: setting(panel.session, "drone.note") is None)


def test_the_facts_follow_and_say_what_changed(tab, panel):
    tab.page.wait_for_timeout(1600)  # the move before has settled
    field = tab.page.locator('[data-key="pitch.fall"] input[type=text]')
    field.fill("5 ms")
    field.press("Enter")
    summary = text_of(tab, ".facts-summary", "changed with the last move")
    assert re.search(r"\d+ glides changed", summary)
    assert "was never" in tab.page.text_content("#facts-body")


# Slots and transport


def test_slots_are_on_number_keys(tab, panel):
    state = panel.session.state
    tab.page.keyboard.press("2")
    assert waited_for(lambda: state()["current"] == 2)
    text_of(tab, "#settings-heading", "slot 2")
    assert tab.page.locator('.slot-row[aria-pressed="true"] kbd').text_content() == "2"
    tab.page.keyboard.press("Shift+Digit3")
    assert waited_for(lambda: state()["waiting_slot"] == 3)
    text_of(tab, "#slot-list", "comes at the loop’s start")
    tab.page.keyboard.press("7")
    tab.page.click("#slot-buttons button:nth-child(1)")
    assert waited_for(lambda: state()["current"] == 1)
    field = tab.page.locator('[data-key="pitch.rise"] input[type=text]')
    field.press("2")
    tab.page.wait_for_timeout(100)
    assert state()["current"] == 1


def test_a_slot_that_is_chosen_for_the_loops_start_comes_there(tab, panel):
    tab.page.click("#when label:has([value=loop])")
    panel.session.tempo(400)
    tab.page.keyboard.press("2")
    assert waited_for(lambda: panel.session.state()["current"] == 2)


def test_transport_tempo_and_transposition(tab, panel):
    state = panel.session.state
    tab.page.keyboard.press("Space")
    assert waited_for(lambda: state()["playing"] == "stopped")
    text_of(tab, "#play", "Play")
    tab.page.click("#play")
    assert waited_for(lambda: state()["playing"] == "phrase")
    text_of(tab, "#play", "Stop")
    tab.page.keyboard.press("Space")
    assert waited_for(lambda: state()["playing"] == "stopped")
    tab.page.keyboard.press("b")
    assert waited_for(lambda: not state()["loop"])
    tab.page.check("#loop")
    assert waited_for(lambda: state()["loop"])
    tab.page.fill("#tempo-text", "75 %")
    tab.page.press("#tempo-text", "Enter")
    assert waited_for(lambda: state()["tempo_percent"] == 75)
    text_of(tab, "#tempo-bpm", "72 beats a minute")
    tab.page.focus("#tempo")
    tab.page.keyboard.press("ArrowRight")
    assert waited_for(lambda: state()["tempo_percent"] > 75)
    tab.page.fill("#transpose", "-5")
    assert waited_for(lambda: state()["transpose"] == -5)
    tab.page.focus("#level")
    tab.page.keyboard.press("ArrowLeft")
    assert waited_for(lambda: state()["level_db"] == -30.5)
    tab.page.uncheck("#match")
    assert waited_for(lambda: not state()["match"])
    tab.page.check("#match")
    panel.session.play()


def test_the_phrase_is_chosen(tab, panel):
    tab.page.wait_for_selector("#phrase-file option:nth-child(3)", state="attached")
    options = tab.page.eval_on_selector_all("#phrase-file option", "all => all.map(one => one.value)")
    [path] = [value for value in options if value.endswith("far-lighthouse.toml")]
    tab.page.select_option("#phrase-file", path)
    assert waited_for(lambda: panel.session.state()["phrase"]["path"] == path)
    text_of(tab, "#phrase-file option", "playing")


def test_silence_is_one_key_away_even_in_a_field(tab, panel):
    tab.page.keyboard.down("a")
    assert waited_for(lambda: panel.session.state()["playing"] == "keys")
    tab.page.focus('[data-key="pitch.rise"] input[type=text]')
    tab.page.keyboard.press("Escape")
    assert waited_for(lambda: panel.session.state()["playing"] == "stopped")
    assert tab.page.locator('.note-button[aria-pressed="true"]').count() == 0


def test_a_key_that_is_held_on_a_button_or_alone_acts_once(tab, panel, monkeypatch):
    calls = []
    for name in ("play", "stop", "panic", "select"):
        act = getattr(panel.session, name)
        monkeypatch.setattr(
            panel.session, name, lambda *a, _act=act, _name=name: calls.append(_name) or _act(*a)
        )
    tab.page.focus("#play")
    for key, does in (("Enter", ("play", "stop")), ("Escape", ("panic",)), ("1", ("select",))):
        calls.clear()
        for _ in range(5):
            tab.page.keyboard.down(key)  # all but the first are repeats
        tab.page.keyboard.up(key)
        assert waited_for(lambda: calls)
        tab.page.wait_for_timeout(100)
        assert len(calls) == 1
        assert calls[0] in does


def test_held_notes_are_forgotten_where_the_transport_takes_over(tab, panel):
    pressed = tab.page.locator('.note-button[aria-pressed="true"]')
    tab.page.keyboard.down("a")
    assert waited_for(lambda: panel.session.state()["playing"] == "keys")
    assert pressed.count() == 1
    tab.page.keyboard.press("Space")
    # A start or, where the page was told of the keys only after it, a stop: both take the keys away.
    assert waited_for(lambda: panel.session.state()["playing"] != "keys")
    assert pressed.count() == 0
    tab.page.keyboard.up("a")
    tab.page.keyboard.press("Escape")


# Notes


def pitches(session, cursor):
    rows = session.deck.rows(cursor)[1]
    return 60.0 + 12.0 * rows["pitch_volts"], rows["gate"], 60.0 + 12.0 * rows["target_volts"]


def test_overlapping_keys_glide_and_parted_keys_do_not(tab, panel):
    """The preset glides on overlapping notes only; an octave lies six keys along a row."""
    session = panel.session
    keyboard = tab.page.keyboard
    keyboard.down("a")
    assert waited_for(lambda: session.state()["playing"] == "keys")
    start = session.deck.rows(0)[0]
    keyboard.down("j")
    assert waited_for(lambda: abs(pitches(session, start)[0][-1:] - 60.0).min(initial=99) < 0.05)
    volts, gates, targets = pitches(session, start)
    assert set(np.unique(targets).round(3)) <= {48.0, 60.0}
    assert ((volts > 49.0) & (volts < 59.0)).sum() > 5
    assert gates.min() > 0.1
    keyboard.up("j")
    assert waited_for(lambda: abs(pitches(session, start)[0][-1:] - 48.0).min(initial=99) < 0.05)
    keyboard.up("a")
    assert waited_for(lambda: not session.deck.rows(0)[1]["gate"][-50:].any())
    start = session.deck.rows(0)[0]
    keyboard.press("j")
    keyboard.down("w")
    assert waited_for(lambda: (pitches(session, start)[2][-1:].round(3) == 49.0).any())
    keyboard.up("w")
    volts = pitches(session, start)[0]
    assert not ((volts > 49.1) & (volts < 59.9)).any()


def test_octaves_are_shifted_and_fields_play_nothing(tab, panel):
    session = panel.session
    tab.page.keyboard.press("Period")
    text_of(tab, "#note-state", "from C4 on")
    tab.page.click("#octave-up")
    text_of(tab, "#note-state", "from C5 on")
    start = session.deck.rows(0)[0]
    tab.page.keyboard.press("s")
    assert waited_for(lambda: (pitches(session, start)[2].round(3) == 74.0).any())
    session.play()
    assert waited_for(lambda: session.state()["playing"] == "phrase")
    field = tab.page.locator("#save-path")
    field.fill("")
    field.press_sequentially("asdf ")
    tab.page.wait_for_timeout(100)
    assert session.state()["playing"] == "phrase"
    assert field.input_value() == "asdf "
    tab.page.uncheck("#single-keys")
    tab.page.keyboard.press("s")
    tab.page.keyboard.press("2")
    tab.page.wait_for_timeout(100)
    assert session.state()["playing"] == "phrase"
    assert session.state()["current"] == 1


def test_note_buttons_play_for_as_long_as_they_are_pressed(tab, panel):
    session = panel.session
    button = tab.page.locator(".note-button", has_text=re.compile("^F#3"))
    button.scroll_into_view_if_needed()
    box = button.bounding_box()
    start = session.deck.rows(0)[0]
    tab.page.mouse.move(box["x"] + 8, box["y"] + 8)
    tab.page.mouse.down()
    assert waited_for(lambda: session.state()["playing"] == "keys")
    assert button.get_attribute("aria-pressed") == "true"
    tab.page.mouse.up()
    assert waited_for(lambda: not session.deck.rows(0)[1]["gate"][-50:].any())
    assert 54.0 in pitches(session, start)[2].round(3)
    button.focus()
    tab.page.keyboard.down("Enter")
    assert waited_for(lambda: session.deck.rows(0)[1]["gate"][-1] > 0)
    tab.page.keyboard.up("Enter")
    assert waited_for(lambda: not session.deck.rows(0)[1]["gate"][-50:].any())


def test_keys_come_up_when_the_window_is_left(tab, panel):
    session = panel.session
    tab.page.keyboard.down("a")
    assert waited_for(
        lambda: session.state()["playing"] == "keys" and session.deck.rows(0)[1]["gate"][-1] > 0
    )
    tab.page.evaluate("window.dispatchEvent(new Event('blur'))")
    assert waited_for(lambda: not session.deck.rows(0)[1]["gate"][-50:].any())


# Files


def test_saving_copying_and_capturing(tab, panel, folder):
    tab.page.select_option("#copy-to", "4")
    tab.page.click("#copy-form button")
    assert waited_for(lambda: len(panel.session.state()["slots"]) == 4)
    tab.page.wait_for_selector(".slot-row:nth-child(4)")
    tab.page.fill("#save-path", str(folder / "saved.toml"))
    tab.page.click("#save-form button")
    text_of(tab, "#status", "Saved")
    assert load_preset(folder / "saved.toml").title == "Night ferry lead"
    tab.page.fill("#capture-path", "heard.wav")
    tab.page.keyboard.press("Tab")
    tab.page.click("#capture")
    text_of(tab, "#capture-text", r"[1-9]\.\d s captured")
    tab.page.locator("h1").click()
    tab.page.keyboard.press("c")
    text_of(tab, "#status", "Captured .*heard.wav")
    assert (folder / "heard.wav").stat().st_size > 4 * SAMPLE_RATE
    panel.session.undo()


def test_a_path_outside_is_said_and_nothing_written(chromium, tmp_path):
    inside = tmp_path / "inside"
    inside.mkdir()
    with served(inside) as found, panel_tab(chromium, found) as tab:
        tab.page.fill("#capture-path", "../outside.wav")
        tab.page.click("#capture")
        assert "outside the folders" in text_of(tab, "#problem", "outside")
        assert list(tmp_path.iterdir()) == [inside]
        assert len(found.lines) == 1
        assert tab.complaints == []


# Coming and going


def test_two_panels_at_once_show_the_same(chromium, panel):
    with panel_tab(chromium, panel) as one, panel_tab(chromium, panel) as other:
        one.page.keyboard.press("3")
        text_of(other, "#settings-heading", "slot 3")
        other.page.click('[data-key="pitch.law"] label:has([value=linear])')
        one.page.wait_for_selector('[data-key="pitch.law"] [value=linear]:checked', state="attached")
        assert one.complaints == other.complaints == []


def test_a_reloaded_page_finds_all_as_it_was(tab, panel):
    tab.page.keyboard.press("2")
    text_of(tab, "#settings-heading", "slot 2")
    tab.page.reload()
    text_of(tab, "#settings-heading", "slot 2")
    tab.page.wait_for_selector("#facts-body tbody tr")
    assert tab.complaints == []


def test_a_lost_link_is_told_and_found_again(tab, panel):
    tab.page.keyboard.down("a")
    assert waited_for(lambda: panel.session.state()["playing"] == "keys")
    own = panel.panel._guard
    panel.panel._guard = Guard(panel.panel.port)  # with another token: the socket can't be opened for now
    panel.panel._loop.call_soon_threadsafe(panel.panel._room.send_away)
    text_of(tab, "#status", "not reached")
    assert tab.page.locator("body.lost").count() == 1
    assert waited_for(lambda: not panel.session.deck.rows(0)[1]["gate"][-50:].any())
    panel.session.select(2)
    panel.panel._guard = own
    tab.page.wait_for_selector("body:not(.lost)")
    text_of(tab, "#settings-heading", "slot 2")
    tab.page.keyboard.up("a")
    tab.page.keyboard.press("1")
    assert waited_for(lambda: panel.session.state()["current"] == 1)
    tab.complaints.clear()
    panel.lines.clear()


# Sound through the browser


@pytest.fixture
def listening(chromium, tmp_path):
    """A panel without a sound card, its tab, and the session; the sound is not yet asked for."""
    with served(tmp_path, by_browser=True) as found, panel_tab(chromium, found) as tab:
        yield found, tab
        assert tab.complaints == []
        assert found.lines == []


def test_nothing_sounds_before_a_click_and_then_the_browser_drives(listening):
    found, tab = listening
    deck = found.session.deck
    tab.page.keyboard.press("Space")
    tab.page.wait_for_timeout(300)
    assert deck.sample == 0
    text_of(tab, "#listen-text", "No sound card")
    tab.page.click("#listen")
    text_of(tab, "#listen", "Stop listening")
    assert waited_for(lambda: deck.sample > SAMPLE_RATE)
    assert waited_for(lambda: found.session.state()["playing"] == "phrase")
    text_of(tab, "#position", r"^([1-9]|0\.[5-9])")
    assert 0.0 < found.sound.latency_s < 1.5
    tab.page.keyboard.press("2")  # the button that was clicked keeps no keys
    assert waited_for(lambda: found.session.state()["current"] == 2)
    tab.page.click("#listen")
    text_of(tab, "#listen", "Listen here")
    assert waited_for(lambda: found.sound.listener is None)
    made = deck.sample
    tab.page.wait_for_timeout(200)
    assert deck.sample == made


def test_the_browser_asks_for_no_more_than_it_plays(listening):
    """Made is what was played and one buffer: the page's clock of sound paces the deck."""
    found, tab = listening
    tab.page.click("#listen")
    tab.page.keyboard.press("Space")
    deck = found.session.deck
    assert waited_for(lambda: deck.sample > SAMPLE_RATE)
    begun, began = deck.sample, tab.page.evaluate("performance.now() / 1000")
    assert waited_for(lambda: deck.sample > begun + 2 * SAMPLE_RATE)
    made, seconds = (deck.sample - begun) / SAMPLE_RATE, tab.page.evaluate("performance.now() / 1000") - began
    assert made < seconds + 0.7


def test_a_second_panel_looks_on_and_may_take_over(listening, chromium):
    found, tab = listening
    tab.page.click("#listen")
    tab.page.keyboard.press("Space")
    text_of(tab, "#position", r"^([1-9]|0\.[5-9])")
    with panel_tab(chromium, found) as other:
        text_of(other, "#listen-text", "Another panel")
        text_of(other, "#position", r"^[1-9]")
        other.page.click("#listen")
        text_of(other, "#listen", "Stop listening")
        text_of(tab, "#listen", "Listen here instead")
        made = found.session.deck.sample
        assert waited_for(lambda: found.session.deck.sample > made + SAMPLE_RATE)
        assert other.complaints == []
    text_of(tab, "#listen-text", "No sound card")


PLAYED = """async ([script, samples, first, enough, more]) => {
  const context = new OfflineAudioContext(1, 128 * 40, 48000);
  await context.audioWorklet.addModule(script);
  const node = new AudioWorkletNode(context, "player", { numberOfInputs: 0, outputChannelCount: [1] });
  node.connect(context.destination);
  const reports = [];
  node.port.onmessage = ({ data }) => reports.push(data);
  const send = (begin, end) =>
    node.port.postMessage({ first: first + begin, samples: Float32Array.from(samples.slice(begin, end)) });
  node.port.postMessage({ enough });
  send(0, 100);
  send(100, samples.length - more);
  await new Promise((done) => setTimeout(done, 200));
  context.suspend(128 * 30 / 48000).then(async () => {
    send(samples.length - more, samples.length);
    await new Promise((done) => setTimeout(done, 200));
    context.resume();
  });
  const output = [...(await context.startRendering()).getChannelData(0)];
  await new Promise((done) => setTimeout(done, 50));
  return { output, reports };
}"""


def test_the_player_gives_out_the_very_samples_and_fades_where_it_runs_dry(listening):
    """By blocks of 128: it waits for enough, rises over 128 samples, is exact, and goes down before a gap."""
    found, tab = listening
    generator = np.random.default_rng(4)
    samples = generator.uniform(-0.5, 0.5, 128 * 16).astype(np.float32)
    more = 128 * 6
    script = f"player.js?token={found.token}"
    found_by = tab.page.evaluate(PLAYED, [script, samples.tolist(), 5000, 512, more])
    output = np.array(found_by["output"], np.float32)
    rising = np.arange(1, 129, dtype=np.float32) / 128
    begin = int(np.flatnonzero(output)[0])
    assert begin % 128 == 0
    sounding = output[begin : begin + 128 * 10]
    assert np.allclose(sounding[:128], samples[:128] * rising, atol=1e-6)
    assert np.array_equal(sounding[128 : 128 * 9], samples[128 : 128 * 9])
    assert np.allclose(sounding[128 * 9 :], samples[128 * 9 : 128 * 10] * (1 - rising), atol=1e-6)
    assert not output[begin + 128 * 10 : 128 * 30].any()
    again = output[128 * 30 :]
    at = int(np.flatnonzero(again)[0])
    assert np.allclose(again[at : at + 128], samples[128 * 10 : 128 * 11] * rising, atol=1e-6)
    assert np.array_equal(again[at + 128 : at + 128 * 5], samples[128 * 11 : 128 * 15])
    assert found_by["reports"][-1]["starved"] == 2
    assert found_by["reports"][-1]["played"] == 5000 + samples.size
