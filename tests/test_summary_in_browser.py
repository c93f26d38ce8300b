"""The summary in Debian's Chromium, from disk and with the network refused: order, search, keys and sound."""

from contextlib import contextmanager
from urllib.parse import unquote_to_bytes, urlsplit

import numpy as np
import pytest
import soundfile

from browser import CHROMIUM, NEEDED, Tab, browser
from glidesmith.summary import write_summary
from records import make_record, make_records

try:
    import playwright.sync_api as _  # noqa: F401
except ImportError:
    CHROMIUM = None
pytestmark = pytest.mark.skipif(CHROMIUM is None, reason=NEEDED)

SCRIPT = "<script>document.title = 'taken over'</script><b>ferry</b>"
AWKWARD = "deck/50% louder? #2 & café.wav"
SECONDS = 2.0
PATIENCE = 1500


def never(*short_by_cents):
    return [
        {"note": note, "from": "D3", "to": "A3", "short_by_cents": short}
        for note, short in enumerate(short_by_cents)
    ]


RECORDS = [
    make_record("deck/take-2.wav", lufs=-20.0, gain_db=1.0),
    make_record("deck/take-10.wav", lufs=-30.0, gain_db=-1.0, phrase="fog.mid"),
    make_record("clips.wav", title="The night watch", clipped=1_200, lufs=-10.0),
    make_record("clicks.wav", edge_clicks=3, lufs=None),
    make_record("far/once.wav", never_lands=never(12.0), varied={"pitch.law": "rc"}),
    make_record("far/twice.wav", never_lands=never(20.0, 66.0), warnings=[SCRIPT]),
    make_record(AWKWARD, preset=SCRIPT),
]
WORST_FIRST = ["far/twice", "far/once", "clicks", "clips", AWKWARD[:-4], "deck/take-2", "deck/take-10"]
"""After the faults, what has warnings; then by name, as people count."""


@pytest.fixture(scope="module")
def chromium():
    with browser() as found:
        yield found


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    place = tmp_path_factory.mktemp("batch")
    time = np.arange(int(SECONDS * 48_000)) / 48_000
    for record in RECORDS:
        path = place / record["item"]
        path.parent.mkdir(exist_ok=True)
        if path.name != "clips.wav":
            soundfile.write(path, 0.1 * np.sin(2.0 * np.pi * 220.0 * time), 48_000, subtype="PCM_24")
    write_summary(place / "summary.html", RECORDS, [f"{SCRIPT}.toml: is no preset"], title=SCRIPT)
    return place


@contextmanager
def tab_on(chromium, path, **settings):
    context = chromium.new_context(**settings)
    try:
        context.set_offline(True)
        tab = Tab(context.new_page())
        tab.page.goto(path.as_uri())
        tab.page.wait_for_selector("#rows tr")
        yield tab
    finally:
        context.close()


@pytest.fixture
def tab(chromium, folder):
    with tab_on(chromium, folder / "summary.html") as found:
        yield found
        assert found.complaints == []
        assert found.requests[0] == (folder / "summary.html").as_uri()
        assert all(urlsplit(url).scheme == "file" for url in found.requests)


@pytest.fixture(scope="module")
def many(tmp_path_factory):
    path = tmp_path_factory.mktemp("many") / "summary.html"
    write_summary(path, make_records(10_000))
    return path


def items(tab):
    return tab.page.locator("#rows .item a").all_inner_texts()


def sort_by(tab, words):
    tab.page.get_by_role("button", name=words, exact=True).click()


def sorted_heads(tab):
    heads = tab.page.locator("#heads th[aria-sort]")
    return [(head.inner_text().split("\n")[0], head.get_attribute("aria-sort")) for head in heads.all()]


def wait_for(tab, condition):
    """Wait until an expression holds; the page's policy lets no text be looked at as code while waiting.

    What never comes is given up after long enough, so that a test fails instead of hanging.
    """
    looking = f"""new Promise((done) => {{
      let looks = 0;
      const again = () => (++looks > {PATIENCE} ? done(false) : setTimeout(look, 20));
      const look = () => ({condition} ? done(true) : again());
      look();
    }})"""
    assert tab.page.evaluate(looking), f"never came: {condition}"


def move(tab, slider, value):
    tab.page.locator(slider).evaluate(
        "(slider, value) => { slider.value = value; slider.dispatchEvent(new Event('input')); }", value
    )


def test_what_never_lands_comes_first_then_what_clicks_and_clips(tab):
    assert items(tab) == WORST_FIRST
    assert sorted_heads(tab) == []
    assert "2 A" not in items(tab)
    row = tab.page.locator("#rows tr").first
    assert row.locator("td").first.inner_text().split("\n") == ["2", "D3 → A3, 66 cents short"]
    heading = tab.page.locator("#subtitle").inner_text()
    assert heading == "7 items, 14.0 s of sound. 2 never land, 1 clicks, 1 clips."


def test_a_head_sorts_one_way_then_the_other_and_figures_that_are_missing_stay_last(tab):
    sort_by(tab, "Loudness")
    falling = items(tab)
    assert sorted_heads(tab) == [("Loudness", "descending")]
    assert (falling[:2], falling[-2:]) == (["clips", "deck/take-2"], ["deck/take-10", "clicks"])
    sort_by(tab, "Loudness")
    assert sorted_heads(tab) == [("Loudness", "ascending")]
    rising = items(tab)
    assert (rising[0], rising[-2:]) == ("deck/take-10", ["clips", "clicks"])
    sort_by(tab, "Item")
    assert (
        items(tab) == sorted(items(tab), key=lambda name: (len(name) > 11, name)) or items(tab)[0] == "clicks"
    )
    assert items(tab).index("deck/take-2") < items(tab).index("deck/take-10")
    tab.page.click("#worst")
    assert items(tab) == WORST_FIRST


def test_the_keyboard_alone_sorts_and_finds(tab):
    page = tab.page
    page.keyboard.press("Tab")
    assert page.evaluate("document.activeElement.className") == "skip"
    page.keyboard.press("Enter")
    page.keyboard.press("Tab")
    assert page.evaluate("document.activeElement.id") == "filter"
    page.keyboard.type("deck/take")
    assert items(tab) == ["deck/take-2", "deck/take-10"]
    assert page.locator("#count").inner_text() == "2 of 7 rows"
    page.locator(".sort", has_text="Gain").focus()
    page.keyboard.press("Enter")
    page.keyboard.press("Space")
    assert items(tab) == ["deck/take-10", "deck/take-2"]


@pytest.mark.parametrize(
    ("words", "found"),
    [
        ("night watch", ["clips"]),
        ("FOG.mid", ["deck/take-10"]),
        ("pitch.law rc", ["far/once"]),
        ("taken over", ["far/twice", AWKWARD[:-4]]),
        ("siren", []),
    ],
)
def test_it_finds_phrases_settings_presets_and_warnings(tab, words, found):
    tab.page.fill("#filter", words)
    assert items(tab) == found


def test_it_shows_one_kind(tab):
    for kind, found in (
        ("never", WORST_FIRST[:2]),
        ("clicks", ["clicks"]),
        ("clips", ["clips"]),
        ("warned", ["far/twice"]),
    ):
        tab.page.select_option("#kind", kind)
        assert items(tab) == found


def test_text_from_files_stays_text(tab):
    page = tab.page
    assert page.title() == SCRIPT
    assert page.locator("#title").inner_text() == SCRIPT
    assert page.locator("#failures li").inner_text() == f"{SCRIPT}.toml: is no preset"
    page.locator("#rows details summary").first.click()
    assert page.locator("#rows details li").first.inner_text() == SCRIPT
    assert page.locator("main b:text-is('ferry')").count() == 0


def test_a_row_plays_its_own_file_whatever_its_name(tab, folder):
    row = tab.page.locator("#rows tr", has_text="louder?")
    row.locator(".player").click()
    wait_for(tab, "document.getElementById('seek').value > 0.2")
    assert row.locator(".player").get_attribute("aria-pressed") == "true"
    assert tab.page.locator("#playing").inner_text() == AWKWARD
    asked = unquote_to_bytes(urlsplit(tab.requests[1]).path)
    assert asked == bytes(folder / AWKWARD)
    tab.page.locator("#play").click()
    wait_for(tab, "document.getElementById('play').textContent === 'Play'")
    assert row.locator(".player").get_attribute("aria-pressed") == "false"


def test_its_link_leads_to_the_file(tab, folder):
    link = tab.page.locator("#rows a", has_text="louder?")
    address = link.evaluate("(link) => link.href")
    assert unquote_to_bytes(urlsplit(address).path) == bytes(folder / AWKWARD)


def test_only_one_row_plays_and_it_can_go_on_to_the_next(tab):
    players = tab.page.locator("#rows .player")
    players.nth(0).click()
    wait_for(tab, "document.getElementById('seek').value > 0")
    players.nth(1).click()
    wait_for(tab, "document.querySelectorAll('.player')[1].getAttribute('aria-pressed') === 'true'")
    assert tab.page.locator(".player[aria-pressed=true]").count() == 1
    tab.page.check("#go-on")
    move(tab, "#seek", 1.9)
    wait_for(tab, "document.querySelectorAll('.player')[2].getAttribute('aria-pressed') === 'true'")
    assert tab.page.locator("#playing").inner_text() == "clicks.wav"


def test_it_starts_quiet_and_silence_is_silence(chromium, folder):
    """A level of -20 dB is a tenth; the slider's end is nothing at all."""
    spy = "window.Audio = class extends Audio { constructor() { super(); window.heard = this; } };"
    context = chromium.new_context()
    context.add_init_script(spy)
    page = context.new_page()
    page.goto((folder / "summary.html").as_uri())
    volumes = []
    for level in (None, -6, -60):
        if level is not None:
            page.evaluate(
                "(level) => { const slider = document.getElementById('level'); slider.value = level; "
                "slider.dispatchEvent(new Event('input')); }",
                level,
            )
        volumes.append(page.evaluate("heard.volume"))
    context.close()
    np.testing.assert_allclose(volumes, [10 ** (-20 / 20), 10 ** (-6 / 20), 0.0], rtol=1e-9)


def test_a_file_that_is_gone_is_told(chromium, folder):
    with tab_on(chromium, folder / "summary.html") as tab:
        tab.page.locator("#rows tr", has_text="clips").locator(".player").click()
        wait_for(tab, "document.getElementById('problem').textContent !== ''")
        assert "clips.wav can’t be played here" in tab.page.locator("#problem").inner_text()
        assert tab.page.locator(".player[aria-pressed=true]").count() == 0
        tab.page.locator(".player").first.click()
        assert tab.page.locator("#problem").inner_text() == ""


def test_ten_thousand_rows_come_a_hundred_at_a_time(chromium, many):
    with tab_on(chromium, many) as tab:
        page = tab.page
        assert len(items(tab)) == 100
        assert page.locator("#page-count").inner_text() == "100"
        assert page.locator("#table").get_attribute("aria-rowcount") == "10001"
        page.click("#page-after")
        assert page.locator("#rows tr").first.get_attribute("aria-rowindex") == "102"
        page.fill("#page", "100")
        page.locator("#page").blur()
        assert page.locator("#page-after").is_disabled()
        page.fill("#page", "1000")
        page.locator("#page").blur()
        assert page.locator("#page").input_value() == "100"
        page.fill("#filter", "take-4711")
        assert page.locator("#pages").is_hidden()
        assert [name.split("/")[1] for name in items(tab)] == ["take-4711"]


def test_arrows_go_from_player_to_player_over_the_border_of_a_page(chromium, many):
    with tab_on(chromium, many) as tab:
        page = tab.page
        page.locator(".player").first.focus()
        for _ in range(100):
            page.keyboard.press("ArrowDown")
        row = "document.activeElement.closest('tr').getAttribute('aria-rowindex')"
        assert page.evaluate(row) == "102"
        page.keyboard.press("ArrowUp")
        assert page.evaluate(row) == "101"


@pytest.mark.parametrize("width", [320, 390, 1280])
@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_nothing_is_wider_than_the_window_and_text_stands_out(chromium, folder, width, scheme):
    """Only the table scrolls sideways. Contrast by WCAG 2.2, 1.4.3: 4.5 to 1."""
    with tab_on(
        chromium, folder / "summary.html", viewport={"width": width, "height": 800}, color_scheme=scheme
    ) as tab:
        tab.page.locator(".player").first.click()
        assert tab.page.evaluate("document.documentElement.scrollWidth") <= width
        found = tab.page.evaluate(
            """() => {
              const paper = getComputedStyle(document.documentElement).backgroundColor;
              const texts = "#rows b, #rows small, #rows a, .none, #count, #failures h2";
              const found = [...document.querySelectorAll(texts)];
              return found.map((text) => [getComputedStyle(text).color, paper]);
            }"""
        )
    assert len(found) > 10
    assert min(contrast(*pair) for pair in found) >= 4.5


@pytest.mark.parametrize(("width", "column"), [(1200, 9), (360, 2)])
def test_columns_are_whole_as_far_as_they_are_shown(chromium, many, width, column):
    """At 1200 pixels all of them, to the length; on a telephone the item and where it lands."""
    with tab_on(chromium, many, viewport={"width": width, "height": 800}) as tab:
        edges = tab.page.evaluate(
            """(column) => {
              const room = document.querySelector("#scrolled").getBoundingClientRect().right;
              const cells = document.querySelectorAll(`#rows td:nth-child(${column})`);
              return [...cells].flatMap((cell) => {
                const text = document.createRange();
                text.selectNodeContents(cell);
                return [...text.getClientRects()].map((box) => box.right - room);
              });
            }""",
            column,
        )
    assert len(edges) >= 100
    assert max(edges) <= 0.5


def contrast(one, other):
    """The ratio of WCAG 2.2's relative luminances of two colours "rgb(r, g, b)"."""
    lights = sorted(luminance(colour) for colour in (one, other))
    return (lights[1] + 0.05) / (lights[0] + 0.05)


def luminance(colour):
    parts = np.array([int(part) for part in colour[4:-1].split(",")]) / 255.0
    linear = np.where(parts <= 0.04045, parts / 12.92, ((parts + 0.055) / 1.055) ** 2.4)
    return float(linear @ (0.2126, 0.7152, 0.0722))


def test_every_control_has_a_name(tab):
    """What a screen reader says of buttons and fields: none is without."""
    tab.page.locator(".player").first.click()
    unnamed = tab.page.evaluate(
        """() => {
          const said = (node) => node.textContent.trim() || node.ariaLabel || node.labels?.length;
          const controls = [...document.querySelectorAll("button, input, select, a")];
          return controls.filter((node) => !said(node)).map((node) => node.id);
        }"""
    )
    assert unnamed == []
    assert tab.page.get_by_role("button", name="Play far/twice.wav").count() == 1
    assert tab.page.get_by_role("table", name="What was rendered").count() == 1
