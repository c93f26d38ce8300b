"""The page in Debian's Chromium, from disk and with the network refused: what it plays, shows and saves."""

import json
from io import BytesIO
from pathlib import Path

import numpy as np
import pytest
import soundfile
from scipy.stats import binomtest

from browser import CANDIDATES, CHROMIUM, NEEDED, browser, decoded, example_set, opened
from glidesmith.page import write_page
from glidesmith.sheets import read_sheet

try:
    import playwright.sync_api as _  # noqa: F401
except ImportError:
    CHROMIUM = None
pytestmark = pytest.mark.skipif(CHROMIUM is None, reason=NEEDED)

SAMPLE_RATE = 48_000
LEVEL = 10.0 ** (-20.0 / 20.0)
SWITCH_S, SEAM_S, AHEAD_S = 0.010, 0.005, 0.030
SETTLED_S = 1.2  # the level's own fade in, with a time constant of 0.1 s, is under 1e-5 then
LABELS = list(CANDIDATES)
SCRIPT_TITLE = "<script>document.title = 'taken over'</script><b>ferry</b>"


@pytest.fixture(scope="module")
def chromium():
    with browser() as found:
        yield found


@pytest.fixture(scope="module")
def example():
    return example_set(SAMPLE_RATE)


@pytest.fixture(scope="module")
def page(example, tmp_path_factory) -> Path:
    path = tmp_path_factory.mktemp("page") / "index.html"
    write_page(path, *example[:2])
    return path


@pytest.fixture(scope="module")
def tones(example):
    """A sine for each candidate, as FLAC: a click of -80 dB would stand out."""
    clips = []
    for index, candidate in enumerate(example[0]["candidates"]):
        time = np.arange(candidate["frames"]) / SAMPLE_RATE
        tone = np.round((0.2 - 0.04 * index) * np.sin(2 * np.pi * (200.0 + 31.0 * index) * time) * 2**23)
        file = BytesIO()
        soundfile.write(file, tone.astype(np.int32) << 8, SAMPLE_RATE, subtype="PCM_24", format="FLAC")
        clips.append(file.getvalue())
    return clips


@pytest.fixture(scope="module")
def tone_page(example, tones, tmp_path_factory) -> Path:
    path = tmp_path_factory.mktemp("tones") / "index.html"
    write_page(path, example[0], tones)
    return path


@pytest.fixture
def tab(chromium, page):
    with opened(chromium, page) as found:
        yield found
        assert found.complaints == []
        assert found.requests == [page.as_uri()]


def ramp(times, start_s, lasts_s=SWITCH_S):
    return np.clip((times - start_s) / lasts_s, 0.0, 1.0)


def at_position(clips, index, positions):
    """A clip's samples at positions in seconds; silence past its end and before its start."""
    places = np.round(positions * SAMPLE_RATE).astype(int)
    clip = clips[index]
    return np.where((places >= 0) & (places < clip.size), clip[np.clip(places, 0, clip.size - 1)], 0.0)


# Sound


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


def test_playing_begins_low_and_fades_in(chromium, tone_page, tones):
    clip = decoded(tones[0])
    with opened(chromium, tone_page, offline_s=1.5) as tab:
        tab.page.click("#play")
        output, _ = tab.perform([])
    times = np.arange(output.size) / SAMPLE_RATE
    faded = LEVEL * (1.0 - np.exp(-times / 0.1)) * ramp(times, AHEAD_S)
    away = times > AHEAD_S + SWITCH_S
    expected = faded * at_position([clip], 0, times - AHEAD_S)
    np.testing.assert_allclose(output[away], expected[away], atol=1e-4)
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


# Keys and pointers


def chosen(tab):
    return tab.page.eval_on_selector_all(
        "#candidates input", "(all) => all.findIndex((each) => each.checked)"
    )


def test_keys_choose_candidates_and_say_so(tab):
    for key, index in (("3", 2), ("ArrowRight", 0), ("ArrowLeft", 2), ("2", 1), ("9", 1)):
        tab.page.keyboard.press(key)
        assert chosen(tab) == index
        assert LABELS[index] in tab.page.inner_text("#status")


def test_keys_do_nothing_in_fields_or_when_switched_off(tab):
    tab.page.focus("#loop-start")
    tab.page.keyboard.press("2")
    assert chosen(tab) == 0
    tab.page.uncheck("#single-keys")
    tab.page.locator("#single-keys").blur()
    tab.page.keyboard.press("2")
    assert chosen(tab) == 0


def test_every_control_is_reached_by_tab_and_has_a_name(tab):
    reached = set()
    for _ in range(120):
        tab.page.keyboard.press("Tab")
        reached.add(tab.page.evaluate("[...document.querySelectorAll('*')].indexOf(document.activeElement)"))
    controls = tab.page.evaluate(
        """() => [...document.querySelectorAll("button, select, input, summary, [tabindex='0']")]
          .filter((each) => each.checkVisibility() && !each.disabled)
          .filter((each) => each.type !== "radio" || each.checked)
          .map((each) => [[...document.querySelectorAll("*")].indexOf(each), each.outerHTML.slice(0, 80)])"""
    )
    assert len(controls) > 30
    assert [text for place, text in controls if place not in reached] == []
    session = tab.page.context.new_cdp_session(tab.page)
    nodes = session.send("Accessibility.getFullAXTree")["nodes"]
    interactive = {"button", "checkbox", "radio", "slider", "spinbutton", "combobox", "textbox", "group"}
    shown = [(node["role"]["value"], node.get("name", {})) for node in nodes if not node["ignored"]]
    named = [(role, name) for role, name in shown if role in interactive]
    assert len(named) > 30
    unnamed = [role for role, name in named if not name.get("value")]
    assert set(unnamed) <= {"group"}  # a `details` element


def view(tab):
    """The times at both ends of the curves' axis, as labelled."""
    texts = tab.page.locator("#graph .axis.middle").all_text_contents()
    return float(texts[0].split()[0]), float(texts[-1].split()[0])


def redrawn(tab):
    tab.page.evaluate("() => new Promise((done) => requestAnimationFrame(() => requestAnimationFrame(done)))")


def test_the_curves_zoom_and_move_by_keys_wheel_and_buttons(tab):
    whole = view(tab)
    assert whole[0] == 0.0
    tab.page.focus("#graph")
    for _ in range(4):
        tab.page.keyboard.press("+")
    redrawn(tab)
    closer = view(tab)
    assert closer[1] - closer[0] < 0.4 * (whole[1] - whole[0])
    tab.page.keyboard.press("ArrowRight")
    redrawn(tab)
    assert view(tab)[1] > closer[1]
    tab.page.keyboard.press("0")
    redrawn(tab)
    assert view(tab) == whole
    box = tab.page.locator("#graph").bounding_box()
    tab.page.mouse.move(box["x"] + 0.5 * box["width"], box["y"] + 100)
    tab.page.mouse.wheel(0, -600)
    redrawn(tab)
    turned = view(tab)
    assert turned[1] - turned[0] < whole[1] - whole[0]
    tab.page.click("text=Show all")
    redrawn(tab)
    assert view(tab) == whole


def test_dragging_along_the_ruler_loops_and_clicking_moves_the_position(tab):
    box = tab.page.locator("#graph").bounding_box()
    tab.page.mouse.move(box["x"] + 200, box["y"] + 8)
    tab.page.mouse.down()
    tab.page.mouse.move(box["x"] + 300, box["y"] + 8)
    tab.page.mouse.up()
    assert tab.page.is_checked("#loop")
    length = float(tab.page.get_attribute("#excerpt-end", "max"))
    seconds = length / (box["width"] - 46 - 12)
    assert float(tab.page.input_value("#loop-start")) == pytest.approx(seconds * (200 - 46), abs=2 * seconds)
    assert float(tab.page.input_value("#loop-end")) == pytest.approx(seconds * (300 - 46), abs=2 * seconds)
    tab.page.mouse.click(box["x"] + 250, box["y"] + 100)
    shown = float(tab.page.inner_text("#position").split()[0])
    assert shown == pytest.approx(seconds * (250 - 46), abs=2 * seconds)


def test_a_glide_in_the_table_is_shown_and_looped(tab, example):
    name = tab.page.locator(".go").first.inner_text()
    tab.page.locator(".go").first.click()
    redrawn(tab)
    row = tab.page.inner_text("tbody tr")
    glides = example[0]["candidates"][0]["facts"]["glides"]
    [glide] = [each for each in glides if f"{each['start_s']:.3f}" in row]
    assert f"{glide['from']} → {glide['to']}" == name
    assert float(tab.page.input_value("#loop-start")) == pytest.approx(glide["start_s"] - 0.1, abs=0.001)
    assert view(tab)[0] > glide["start_s"] - 0.5


# Figures


def test_figures_are_the_facts_with_the_largest_differences_first(tab, example):
    facts = [candidate["facts"] for candidate in example[0]["candidates"]]
    rows = tab.page.locator("table.compared").first.locator("tbody tr:visible").all_inner_texts()
    assert len(rows) == 8
    assert all("lands or never" in row.replace("\u00a0", " ") for row in rows)
    for number, each in enumerate(facts):
        never = sum(glide["landing_s"] is None for glide in each["glides"])
        line = tab.page.locator("#figures-body ul.plain li").nth(number).inner_text()
        assert f"{never} of {len(each['glides'])} glides never land" in line
    tab.page.locator("select", has_text="largest differences first").first.select_option("time")
    tab.page.locator("select", has_text="all 28 glides").select_option("28")
    rows = tab.page.locator("table.compared").first.locator("tbody tr:visible")
    assert rows.count() == len(facts[0]["glides"])
    for row, *glides in zip(rows.all(), *(each["glides"] for each in facts), strict=True):
        cells = row.locator("td").all_inner_texts()
        for cell, glide in zip(cells[:3], glides, strict=True):
            assert f"{int(100 * glide['in_tune_fraction'] + 1e-9)} % in tune" in cell
            assert ("never" in cell) == (glide["landing_s"] is None)


def test_gates_settings_and_loudness_are_told(tab):
    text = tab.page.inner_text("#figures-body")
    for words in ("edge clicks", "pitch.law", "cosine", "−23.00 LUFS", "−3.2 dB", "none was rescaled"):
        assert words in text
    assert "pitch.glide" not in text  # the same in all


def test_what_is_equal_what_limits_and_what_warns_is_said(chromium, example, tmp_path):
    data = json.loads(json.dumps(example[0]))
    data["equal"].update(
        {"mode": "landing", "interval_semitones": 7.0, "from": "D3"}, up_s=0.296, down_s=0.444
    )
    data["loudness"] = {"common_lufs": -25.3, "target_lufs": -23.0, "limited_by": LABELS[1], "gated": False}
    data["candidates"][2]["differs"] = ["D3 to C4 (+10): lands after 115 ms, the preset never"]
    data["candidates"][2]["warnings"] = ["the fall is cut off"]
    path = tmp_path / "index.html"
    write_page(path, data, example[1])
    with opened(chromium, path) as tab:
        text = tab.page.inner_text("#figures-body")
        assert tab.complaints == []
    for words in (
        "7 semitones from D3 takes equally long to land", "296 ms up, 444 ms down",
        data["candidates"][2]["differs"][0], "−25.3 LUFS", "ungated", "the fall is cut off",
        f"the true peak of {LABELS[1]} would pass −1 dBTP",
    ):  # fmt: skip
        assert words in text


# Safety and looks


def test_a_title_that_is_a_script_stays_text(chromium, example, tmp_path):
    data = json.loads(json.dumps(example[0]))
    data["title"] = data["phrase"]["title"] = SCRIPT_TITLE
    data["candidates"][0].update(label=SCRIPT_TITLE, file=SCRIPT_TITLE)
    path = tmp_path / "index.html"
    write_page(path, data, example[1])
    with opened(chromium, path) as tab:
        assert tab.page.inner_text("h1") == SCRIPT_TITLE
        assert tab.page.title() == SCRIPT_TITLE
        assert SCRIPT_TITLE in tab.page.inner_text("#candidates")
        assert tab.page.locator("h1 b, #candidates b").count() == 0
        assert tab.complaints == []


def test_nothing_else_runs_even_if_it_gets_in(tab):
    """The policy refuses a script that is put into the page, and a request to anywhere."""
    refused = tab.page.evaluate(
        """() => new Promise((done) => {
          const refused = [];
          document.addEventListener("securitypolicyviolation", (event) => {
            refused.push(event.effectiveDirective);
            if (refused.length === 2) done(refused.sort());
          });
          const script = document.createElement("script");
          script.textContent = "window.takenOver = true";
          document.body.append(script);
          fetch("https://ferry.invalid/").catch(() => {});
        })"""
    )
    assert refused == ["connect-src", "script-src-elem"]
    assert tab.page.evaluate("window.takenOver === undefined")
    assert all("Content Security Policy" in complaint for complaint in tab.complaints)
    tab.complaints.clear()
    tab.requests[:] = [url for url in tab.requests if url.startswith("file:")]


# WCAG 2.2, 1.4.3: text 4.5 to 1, 3 to 1 where it is large.
CONTRAST = """() => {
  const parsed = (text) => {
    const [red, green, blue, alpha = 1] = text.match(/[0-9.]+/g).map(Number);
    return { alpha, light: [red, green, blue].map((c) => c / 255)
      .map((c) => (c <= 0.04045 ? c / 12.92 : ((c + 0.055) / 1.055) ** 2.4))
      .reduce((sum, c, i) => sum + c * [0.2126, 0.7152, 0.0722][i], 0) };
  };
  const behind = (each) => {
    for (; each; each = each.parentElement) {
      const found = parsed(getComputedStyle(each).backgroundColor);
      if (found.alpha === 1) return found.light;
    }
  };
  const walker = document.createTreeWalker(document.body, NodeFilter.SHOW_TEXT);
  const poor = [];
  let count = 0;
  while (walker.nextNode()) {
    const each = walker.currentNode.parentElement;
    if (!walker.currentNode.textContent.trim() || !each.checkVisibility()) continue;
    if (each.closest("svg, script, option")) continue;
    const style = getComputedStyle(each);
    const [one, other] = [parsed(style.color).light, behind(each)].sort((a, b) => b - a);
    const ratio = (one + 0.05) / (other + 0.05);
    count += 1;
    const least = parseFloat(style.fontSize) >= 24 ? 3 : 4.5;
    if (ratio < least) poor.push([each.textContent.slice(0, 40), ratio]);
  }
  return [count, poor];
}"""


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("width", [320, 390, 1280])
def test_it_fits_every_width_and_is_readable_in_both_schemes(chromium, page, scheme, width):
    with opened(chromium, page, color_scheme=scheme, viewport={"width": width, "height": 800}) as tab:
        assert tab.page.evaluate("document.documentElement.scrollWidth") <= width
        count, poor = tab.page.evaluate(CONTRAST)
        assert count > 150
        assert poor == []
        paper = tab.page.evaluate("getComputedStyle(document.documentElement).backgroundColor")
        assert paper == {"light": "rgb(243, 244, 239)", "dark": "rgb(18, 24, 27)"}[scheme]
        assert tab.complaints == []


def test_each_candidates_line_differs_from_its_neighbours_in_colour_and_in_dashes(tab):
    """Colours of Okabe and Ito, "Color universal design", 2008 (from memory)."""
    looks = tab.page.eval_on_selector_all(
        "#candidates .line",
        "(all) => all.map((each) => [getComputedStyle(each).stroke, each.getAttribute('stroke-dasharray')])",
    )
    assert [colour for colour, _ in looks] == ["rgb(0, 114, 178)", "rgb(213, 94, 0)", "rgb(0, 158, 115)"]
    assert len({dashes for _, dashes in looks}) == len(looks)


def test_in_print_all_rows_are_there_and_the_controls_are_not(tab):
    tab.page.emulate_media(media="print", color_scheme="dark")
    assert tab.page.locator("table.compared").first.locator("tbody tr:visible").count() == 28
    for part in ("#transport", "#blind", "#level-sheet"):
        assert not tab.page.is_visible(part)
    assert tab.page.evaluate("getComputedStyle(document.documentElement).color") == "rgb(0, 0, 0)"


def test_the_position_moves_seldom_where_motion_is_not_wanted(chromium, page):
    with opened(chromium, page, reduced_motion="reduce") as tab:
        tab.page.click("#play")
        tab.wait_for_position(0.5)
        changes = tab.page.evaluate(
            """() => new Promise((done) => {
              let [count, frames] = [0, 0];
              const shown = document.getElementById("position");
              new MutationObserver(() => { count += 1; }).observe(shown, { childList: true });
              const frame = () => {
                frames += 1;
                if (frames < 60) requestAnimationFrame(frame);
                else done([count, frames]);
              };
              frame();
            })"""
        )
        assert changes[0] < changes[1] / 4


# Blind listening


def begin(tab, kind="abx", trials=5, listener="Ines"):
    tab.page.fill("#listener", listener)
    tab.page.check(f"#kind-{kind}")
    if kind == "abx":
        tab.page.fill("#trials", str(trials))
    tab.page.click("#blind-form button[type=submit]")
    assert tab.page.is_visible("#trial")


def saved(tab, within="#result"):
    """The sheet that is downloaded, accepted by what adds sheets up, and the name offered for its file."""
    with tab.page.expect_download() as download:
        tab.page.locator(f"{within} .save").last.click()
    path = Path(download.value.path())
    sheet = json.loads(path.read_text())
    read = read_sheet(path)
    assert (read.listener, read.finished) == (sheet["listener"], sheet["finished"])
    return sheet, download.value.suggested_filename


def test_an_abx_round_end_to_end(tab, example):
    begin(tab, trials=12)
    for trial in range(12):
        assert tab.page.inner_text("#trial") == f"Trial {trial + 1} of 12"
        tab.page.keyboard.press("1")  # not before X was heard
        assert tab.page.inner_text("#trial") == f"Trial {trial + 1} of 12"
        for key in "abx":
            tab.page.keyboard.press(key)
        tab.page.keyboard.press("1" if trial % 2 else "2")
    sheet, name = saved(tab)
    assert name.startswith("abx-ines-")
    assert name.endswith(".json")
    candidates = {each["settings_sha256"]: each["label"] for each in example[0]["candidates"]}
    assert set(sheet) == {
        "kind", "version", "set", "listener", "made", "test", "pair", "labels", "trials_planned", "trials",
        "correct", "finished", "probability", "excerpt_s",
    }  # fmt: skip
    expected = {
        "kind": "glidesmith listening sheet",
        "version": 1,
        "set": example[0]["set"],
        "listener": "Ines",
    }
    expected |= {"test": "abx", "finished": True, "trials_planned": 12, "excerpt_s": sheet["excerpt_s"]}
    assert expected.items() <= sheet.items()
    assert [candidates[digest] for digest in sheet["pair"]] == sheet["labels"]
    assert set(sheet["labels"]) == set(LABELS[:2])
    assert [trial["answer"] for trial in sheet["trials"]] == [1, 0] * 6
    assert all(trial["x"] in (0, 1) and trial["seconds"] >= 0.0 for trial in sheet["trials"])
    assert sheet["correct"] == sum(trial["x"] == trial["answer"] for trial in sheet["trials"])
    by_chance = binomtest(sheet["correct"], 12, 0.5, "greater").pvalue
    assert sheet["probability"] == pytest.approx(by_chance, rel=1e-12)
    assert f"{sheet['correct']} of 12 right" in tab.page.inner_text("#result")


def test_x_is_what_the_sheet_says_and_switching_to_it_is_through_silence(chromium, tone_page, tones, example):
    """Heard in each of five trials: A, X, B, with a silence before each that is the same for all."""
    digests = [candidate["settings_sha256"] for candidate in example[0]["candidates"]]
    clips = dict(zip(digests, map(decoded, tones), strict=True))
    presses = []
    for trial in range(5):
        start_s = 1.5 + 1.2 * trial
        presses += [(start_s, "a"), (start_s + 0.3, "x"), (start_s + 0.6, "b"), (start_s + 0.9, "1")]
    with opened(chromium, tone_page, offline_s=8) as tab:
        tab.page.click("#play")  # makes the context, so that the level has settled when the round begins
        tab.page.click("#play")
        begin(tab)
        output, seen = tab.perform(presses)
        sheet, _ = saved(tab)
        assert tab.complaints == []
    for trial, told in enumerate(sheet["trials"]):
        begun_s = seen[4 * trial, 0] + AHEAD_S
        for place, slot in ((0, 0), (1, told["x"]), (2, 1)):
            pressed_s = seen[4 * trial + place, 0]
            time = np.arange(round((pressed_s + 0.18) * SAMPLE_RATE), round((pressed_s + 0.28) * SAMPLE_RATE))
            heard = at_position([clips[sheet["pair"][slot]]], 0, time / SAMPLE_RATE - begun_s)
            np.testing.assert_allclose(output[time], LEVEL * heard, atol=1e-5)
            if place:
                silent_s = pressed_s + AHEAD_S + SWITCH_S + np.array([0.001, 0.074])
                assert np.abs(output[slice(*np.round(silent_s * SAMPLE_RATE).astype(int))]).max() == 0.0
    assert {trial["answer"] for trial in sheet["trials"]} == {0}


def test_nothing_tells_which_is_which_during_a_round(tab, example):
    tab.page.click(".go >> nth=0")
    for kind in ("abx", "preference"):
        begin(tab, kind)
        tab.page.keyboard.press("a")
        said = tab.page.evaluate("document.title + document.body.innerText").lower()
        attributes = tab.page.inner_html("#blind").lower()
        for candidate in example[0]["candidates"]:
            digest = candidate["settings_sha256"][:12]
            for secret in (candidate["label"], candidate["file"], digest, "−3.2", "−2.9"):
                assert secret.lower() not in said
                assert secret.lower() not in attributes
        assert "night ferry" not in said
        for part in ("#curves", "#transfer", "#figures", "#listen"):
            assert not tab.page.is_visible(part)
        tab.page.keyboard.press("2")
        tab.page.click("#give-up")
        assert tab.page.is_visible("#curves")
        assert tab.page.title() == example[0]["title"]


def test_a_round_given_up_is_recorded(tab):
    begin(tab, trials=8)
    for key in "xx1":
        tab.page.keyboard.press(key)
    tab.page.keyboard.press("x")
    tab.page.click("#give-up")
    assert "recorded as unfinished" in tab.page.inner_text("#result")
    assert "right" not in tab.page.inner_text("#result")
    sheet, _ = saved(tab)
    assert sheet["finished"] is False
    assert (len(sheet["trials"]), sheet["trials_planned"]) == (1, 8)


def test_a_round_that_the_page_was_left_in_is_recorded(tab, page):
    begin(tab, trials=8)
    for key in "x1x2":
        tab.page.keyboard.press(key)
    tab.page.on("dialog", lambda dialog: dialog.accept())
    tab.page.reload()
    tab.wait_until_ready()
    tab.requests[:] = tab.requests[:1]
    assert "unfinished" in tab.page.inner_text("#record")
    sheet, _ = saved(tab, "#record")
    assert sheet["finished"] is False
    assert len(sheet["trials"]) == 2


def test_a_preference_round_end_to_end(tab, example):
    begin(tab, "preference")
    count = len(LABELS) * (len(LABELS) - 1) // 2
    for pair in range(count):
        assert tab.page.inner_text("#trial") == f"Pair {pair + 1} of {count}"
        tab.page.keyboard.press("a")
        tab.page.keyboard.press("1")  # not before both were heard
        assert tab.page.inner_text("#trial") == f"Pair {pair + 1} of {count}"
        tab.page.keyboard.press("b")
        tab.page.keyboard.press("120"[pair])
    sheet, name = saved(tab)
    assert name.startswith("preference-ines-")
    assert (sheet["test"], sheet["finished"]) == ("preference", True)
    assert [each["label"] for each in sheet["candidates"]] == LABELS
    digests = [each["settings_sha256"] for each in example[0]["candidates"]]
    assert [each["settings_sha256"] for each in sheet["candidates"]] == digests
    pairs = [(each["first"], each["second"]) for each in sheet["pairs"]]
    assert {frozenset(pair) for pair in pairs} == {frozenset(pair) for pair in ((0, 1), (0, 2), (1, 2))}
    assert [each["preferred"] for each in sheet["pairs"]] == [pairs[0][0], pairs[1][1], None]


def test_orders_are_drawn_anew(chromium, page):
    """Six rounds of each kind: that all were alike would have a chance under 1e-7."""
    with opened(chromium, page) as tab:
        orders, truths = set(), set()
        for _ in range(6):
            begin(tab, "preference")
            for key in "ab1ab1ab1":
                tab.page.keyboard.press(key)
            orders.add(str([(each["first"], each["second"]) for each in saved(tab)[0]["pairs"]]))
            begin(tab, "abx")
            for key in "x1" * 5:
                tab.page.keyboard.press(key)
            truths.update(trial["x"] for trial in saved(tab)[0]["trials"])
        assert len(orders) > 1
        assert truths == {0, 1}


def test_a_round_needs_a_listener_two_candidates_and_an_excerpt(tab):
    def refused():
        tab.page.click("#blind-form button[type=submit]")
        assert not tab.page.is_visible("#trial")
        assert tab.page.evaluate("document.activeElement.getAttribute('aria-invalid')") == "true"
        return tab.page.inner_text("#blind-problem")

    assert "listener's name" in refused()
    tab.page.fill("#listener", "Ines")
    tab.page.select_option("#second", "0")
    assert "two different candidates" in refused()
    tab.page.select_option("#second", "2")
    for trials in ("4", "101", "7.5", ""):
        tab.page.fill("#trials", trials)
        assert "5 to 100 trials" in refused()
    tab.page.fill("#trials", "5")
    tab.page.fill("#excerpt-start", "3.0")
    tab.page.fill("#excerpt-end", "3.1")
    assert "an excerpt of at least 200 ms" in refused()


def test_how_many_must_be_right_is_exact(tab):
    """Every number of trials offered, by scipy; at 95 % also what tables of the sign test print: 9 of 10,
    12 of 16, 15 of 20, 18 of 25, 32 of 50 (from memory)."""
    tab.page.click("text=How many correct answers a given confidence needs")
    rows = tab.page.locator("#needed-table tbody tr").all_inner_texts()
    table = {int(row.split()[0]): row.split()[1:] for row in rows}
    assert {n: int(table[n][0]) for n in (10, 16, 20, 25, 50)} == {10: 9, 16: 12, 20: 15, 25: 18, 50: 32}
    for n in range(5, 101):
        tab.page.fill("#trials", str(n))
        told = tab.page.inner_text("#needed")
        for confidence in (0.95, 0.99, 0.999):
            tails = (binomtest(k, n, 0.5, "greater").pvalue for k in range(n + 1))
            needed = next((k for k, tail in enumerate(tails) if tail <= 1.0 - confidence + 1e-12), None)
            words = f"{needed} for {100 * confidence:g} %"
            assert (needed is None) == (f"for {100 * confidence:g} %" not in told)
            assert needed is None or words in told
            if n in table:
                place = (0.95, 0.99, 0.999).index(confidence)
                assert table[n][place] == ("–" if needed is None else str(needed))
