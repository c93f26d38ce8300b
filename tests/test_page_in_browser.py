"""The comparison page in Debian's Chromium, from disk, the network refused: what it shows and takes."""

# ruff: noqa: F401, F811 - fixtures are imported, and asked for by name

import json
from pathlib import Path

import pytest

from browser import Tab, opened
from glidesmith.page import write_page
from pages import (
    LABELS,
    SAMPLE_RATE,
    begin,
    chosen,
    chromium,
    example,
    held_tab,
    in_chromium,
    page,
    position,
    redrawn,
    tab,
)

pytestmark = in_chromium

SCRIPT_TITLE = "<script>document.title = 'taken over'</script><b>ferry</b>"


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


def test_labels_of_pitches_are_whole_however_close_one_zooms(tab):
    """Also on the pitch's twin; the names are longest between sharp notes and below octave 0."""
    cut = """() => [...document.querySelectorAll("#graph .axis, #transfer .axis.end")]
      .filter((each) => each.getBBox().x < 0).map((each) => each.textContent)"""
    seen = set()
    for _ in range(12):
        assert tab.page.evaluate(cut) == []
        seen.update(tab.page.locator("#graph .axis.end").all_text_contents())
        tab.page.click("text=Pitch closer")
        redrawn(tab)
    assert any("#" in text and "\u2212" in text for text in seen)


def test_zooming_keeps_the_chosen_pitch_in_view(tab):
    """The line of the chosen candidate passes between the lane's borders at the play position."""
    box = tab.page.locator("#graph").bounding_box()
    inside = """() => {
      const line = document.querySelector("#graph .line.chosen");
      const lane = document.querySelector("#graph .lane").getBBox();
      const mark = document.querySelector("#graph .play-mark").getAttribute("d");
      const at = Number(/M([0-9.]+) 0V/.exec(mark)[1]);
      for (let way = 0; way <= line.getTotalLength(); way += 0.5) {
        const { x, y } = line.getPointAtLength(way);
        if (Math.abs(x - at) < 2 && y >= lane.y && y <= lane.y + lane.height) return true;
      }
      return false;
    }"""
    for part, candidate in ((0.12, "1"), (0.62, "3"), (0.9, "2")):
        tab.page.click("text=Show all")
        tab.page.mouse.click(box["x"] + 46 + part * (box["width"] - 58), box["y"] + 100)
        tab.page.keyboard.press(candidate)
        for step in ["Pitch closer"] * 5 + ["Closer"] * 3 + ["Pitch wider"] * 2:
            tab.page.click(f"#zoom >> text='{step}'")
            redrawn(tab)
            assert tab.page.evaluate(inside), (part, step)


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
    assert position(tab) == pytest.approx(glide["start_s"] - 0.1, abs=0.001)


def test_the_player_stays_at_hand_where_it_is_scrolled_away(chromium, page):
    screen = {"viewport": {"width": 360, "height": 740}, "reduced_motion": "reduce"}
    with opened(chromium, page, held=True, **screen) as tab:
        bar = tab.page.locator("#bar")
        bar.wait_for(state="hidden")
        tab.page.locator(".go").first.click()
        bar.wait_for(state="visible")
        place = bar.bounding_box()
        assert place["y"] + place["height"] == pytest.approx(740, abs=1)
        assert place["height"] < 130
        tab.page.click("#bar-play")
        assert tab.page.inner_text("#bar-play") == tab.page.text_content("#play") == "Pause"
        tab.page.click("#bar-candidates button >> nth=2")
        assert chosen(tab) == 2
        assert tab.page.get_attribute("#bar-candidates button >> nth=2", "aria-pressed") == "true"
        assert LABELS[2] in tab.page.inner_text("#bar-name")
        # What has the focus is not under the bar (WCAG 2.2, 2.4.11).
        tab.page.locator("#excerpt-end").evaluate("(each) => each.scrollIntoView({ block: 'end' })")
        field = tab.page.locator("#excerpt-end").bounding_box()
        assert field["y"] + field["height"] <= bar.bounding_box()["y"]
        tab.page.locator("#level").focus()
        tab.page.locator("#play").scroll_into_view_if_needed()
        bar.wait_for(state="hidden")
        begin(tab)
        tab.page.mouse.wheel(0, 2000)
        redrawn(tab)
        assert not bar.is_visible()
        assert tab.complaints == []


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
    assert "made 3.2 dB quieter to match" in tab.page.inner_text("#candidates")
    assert "pitch.glide" not in text  # the same in all


def test_what_is_equal_what_limits_and_what_warns_is_said(chromium, example, tmp_path):
    data = json.loads(json.dumps(example[0]))
    data["equal"].update(
        {"mode": "landing", "interval_semitones": 7.0, "from": "D3"}, up_s=0.296, down_s=0.444
    )
    data["loudness"] = {"common_lufs": -25.3, "target_lufs": -23.0, "limited_by": LABELS[1], "gated": False}
    data["loudness"]["metered_s"] = 0.72
    data["candidates"][2]["differs"] = ["D3 to C4 (+10): lands after 115 ms, the preset never"]
    data["candidates"][2]["warnings"] = ["the fall is cut off"]
    path = tmp_path / "index.html"
    write_page(path, data, example[1])
    with opened(chromium, path) as tab:
        text = tab.page.inner_text("#figures-body")
        assert tab.complaints == []
    for words in (
        "7 semitones from D3 takes equally long to land", "296 ms up, 444 ms down",
        data["candidates"][2]["differs"][0], "−25.3 LUFS",
        "without the gate, by their energy over the same 720 ms", "the fall is cut off",
        f"the true peak of {LABELS[1]} would pass −1 dBTP",
    ):  # fmt: skip
        assert words in text


def test_a_pitch_that_is_still_on_its_way_from_earlier_glides_is_said_so(chromium, example, tmp_path):
    data = json.loads(json.dumps(example[0]))
    for facts in (candidate["facts"] for candidate in data["candidates"]):
        for glide in facts["glides"]:
            glide.update(landing_s=0.01, short_by_cents=0.0)
    for candidate, short in zip(data["candidates"], (1294.0, 90.0, 0.0), strict=True):
        candidate["facts"]["glides"][2].update(landing_s=None, short_by_cents=short, interval_semitones=-1.0)
    path = tmp_path / "index.html"
    write_page(path, data, example[1])
    with opened(chromium, path) as tab:
        lines = tab.page.locator("#figures-body ul.plain").first.locator("li").all_inner_texts()
    assert "1294 cents away" in lines[0]
    assert "still on its way from earlier glides" in lines[0]
    assert "90 cents away" in lines[1]
    assert "earlier glides" not in lines[1] + lines[2]


def test_fields_and_choices_have_names_that_tell_them_apart(tab):
    names = [f"{what} {side}, in seconds" for what in ("Loop", "Excerpt") for side in ("from", "to")]
    names += ["Glides: in which order", "Gates: in which order", "Show which glides", "Show which gates"]
    for name in names:
        assert tab.page.get_by_label(name, exact=True).count() == 1, name


def test_keys_are_not_shown_where_they_do_nothing(held_tab):
    begin(held_tab)
    assert held_tab.page.locator(".clip kbd:visible, .answers kbd:visible").count() == 5
    held_tab.page.click("#give-up")
    held_tab.page.uncheck("#single-keys")
    begin(held_tab)
    assert held_tab.page.locator(".clip kbd:visible, .answers kbd:visible").count() == 0


# Long phrases


@pytest.fixture(scope="module")
def long_page(example, tmp_path_factory) -> Path:
    """Facts and curves of 3000 notes in the time of the example: all gates agree, most glides don't."""
    data = json.loads(json.dumps(example[0]))
    frames = data["candidates"][0]["frames"]
    length_s = frames / data["sample_rate"]
    for number, candidate in enumerate(data["candidates"]):
        glide, gate = candidate["facts"]["glides"][0], candidate["facts"]["gates"][0]
        times = [length_s * k / 3000 for k in range(3000)]
        candidate["facts"]["glides"] = [
            {**glide, "start_s": time, "landing_s": 1e-3 * (number + 1) * (k % 7)}
            for k, time in enumerate(times)
        ]
        same = {**gate, "attack_10_90_s": 0.01, "peak_loss_db": 0.0, "gap_db": None, "edge_click": False}
        candidate["facts"]["gates"] = [{**same, "start_s": time} for time in times]
        candidate["curves"]["pitch"] = [[time, (k * 37 % 24 - 12) / 12] for k, time in enumerate(times)]
    path = tmp_path_factory.mktemp("long") / "index.html"
    write_page(path, data, example[1])
    return path


def test_rows_of_a_long_phrase_are_made_when_they_are_asked_for(chromium, long_page):
    with opened(chromium, long_page) as tab:
        tables = tab.page.locator("table.compared tbody")
        assert [tables.nth(place).locator("tr").count() for place in (0, 1)] == [8, 8]
        assert "the first 8" in tab.page.locator("select", has_text="all 3000 gates").inner_text()
        assert tab.page.evaluate("document.querySelectorAll('*').length") < 2500
        tab.page.locator("select", has_text="all 3000 gates").select_option("3000")
        assert [tables.nth(place).locator("tr").count() for place in (0, 1)] == [8, 3000]
        assert tab.complaints == []


LINE = "document.querySelector('#graph .line.chosen').getAttribute('d').slice(1).split('L')"


def test_a_line_has_as_many_points_as_can_be_seen(chromium, long_page, example):
    """Far off the lowest and the highest of each column of pixels; close up every one, as it is."""
    with opened(chromium, long_page, viewport={"width": 700, "height": 800}) as tab:
        redrawn(tab)
        far = [tuple(map(float, point.split())) for point in tab.page.evaluate(LINE)]
        width = tab.page.locator("#graph").bounding_box()["width"]
        assert len(far) <= 2 * width
        lane = tab.page.evaluate(
            "(({ y, height }) => [y, height])(document.querySelector('#graph .lane').getBBox())"
        )
        heights = [up for _, up in far]
        whole = 26 / 12  # octaves that the lane shows: 23 semitones, and 1.5 on both sides
        assert max(heights) - min(heights) == pytest.approx(23 / 12 / whole * lane[1], abs=1.0)
        for _ in range(12):
            tab.page.click("text=Closer")
        redrawn(tab)
        near = tab.page.evaluate(LINE)
        length_s = example[0]["candidates"][0]["frames"] / SAMPLE_RATE
        assert len(near) == pytest.approx(3000 * 1.6**-12, abs=4)
        assert length_s > 1.0


def test_what_moves_while_it_plays_does_not_touch_the_lines(chromium, long_page):
    """A mark among the lines would have them all painted again with each frame."""
    with opened(chromium, long_page) as tab:
        changed = """() => { window.touched = 0;
          for (const svg of document.querySelectorAll("#graph > svg:not(.layer), #transfer svg:not(.layer)"))
            new MutationObserver((all) => { touched += all.length; })
              .observe(svg, { subtree: true, childList: true, attributes: true }); }"""
        redrawn(tab)
        tab.page.evaluate(changed)
        tab.page.click("#play")
        tab.wait_for_position(0.3)
        marks = tab.page.eval_on_selector_all(".layer .play-mark, .layer .dot", "(all) => all.length")
        assert marks == 3
        assert tab.page.evaluate("touched") == 0


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


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_lines_stand_out_from_what_they_are_drawn_on(chromium, page, scheme):
    """At least 3:1, on the page and in the plot (WCAG 2.2, success criterion 1.4.11)."""
    names = ["--paper", "--plot", *(f"--ink-{number}" for number in range(5))]
    with opened(chromium, page, color_scheme=scheme) as tab:
        colours = tab.page.evaluate(
            """(names) => names.map((name) =>
              getComputedStyle(document.documentElement).getPropertyValue(name).trim())""",
            names,
        )
    paper, plot, *inks = map(luminance, colours)
    for ground in (paper, plot):
        for number, ink in enumerate(inks):
            low, high = sorted((ground, ink))
            assert (high + 0.05) / (low + 0.05) >= 3.0, number


def luminance(colour):
    """Relative luminance of #rrggbb (WCAG 2.2, definition)."""
    parts = [int(colour[place : place + 2], 16) / 255 for place in (1, 3, 5)]
    linear = [part / 12.92 if part <= 0.04045 else ((part + 0.055) / 1.055) ** 2.4 for part in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def test_long_labels_fit_a_narrow_screen(chromium, example, tmp_path):
    data = json.loads(json.dumps(example[0]))
    for number, candidate in enumerate(data["candidates"]):
        candidate["label"] = f"{number} " + 14 * "rising "
    data["candidates"][0]["label"] = 100 * "m"
    path = tmp_path / "index.html"
    write_page(path, data, example[1])
    with opened(chromium, path, viewport={"width": 360, "height": 800}) as tab:
        assert tab.page.evaluate("document.documentElement.scrollWidth") <= 360
        for field in ("#first", "#second"):
            box = tab.page.locator(field).bounding_box()
            assert box["width"] > 100
            assert box["x"] + box["width"] <= 360


def test_each_candidates_line_differs_from_its_neighbours_in_colour_and_in_dashes(tab):
    """Colours of Okabe and Ito, "Color universal design", 2008 (from memory)."""
    looks = tab.page.eval_on_selector_all(
        "#candidates .line",
        "(all) => all.map((each) => [getComputedStyle(each).stroke, each.getAttribute('stroke-dasharray')])",
    )
    assert [colour for colour, _ in looks] == ["rgb(0, 114, 178)", "rgb(213, 94, 0)", "rgb(0, 158, 115)"]
    assert len({dashes for _, dashes in looks}) == len(looks)


def test_in_print_all_rows_are_there_and_the_controls_are_not(tab):
    rows = tab.page.locator("table.compared").first.locator("tbody tr:visible")
    tab.page.evaluate("dispatchEvent(new Event('beforeprint'))")
    assert rows.count() == 28
    tab.page.evaluate("dispatchEvent(new Event('afterprint'))")
    assert rows.count() == 8
    tab.page.emulate_media(media="print", color_scheme="dark")
    redrawn(tab)
    assert rows.count() == 28
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
