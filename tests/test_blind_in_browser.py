"""Blind listening on the comparison page in Debian's Chromium: what is asked for, hidden, kept and saved."""

# ruff: noqa: F401, F811 - fixtures are imported, and asked for by name

import json
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import binomtest

from browser import Tab, decoded, opened
from glidesmith.blind import tally_sheets, tally_text
from glidesmith.page import write_page
from pages import (
    AHEAD_S,
    LABELS,
    LEVEL,
    SAMPLE_RATE,
    SWITCH_S,
    at_position,
    begin,
    chosen,
    chromium,
    example,
    held_tab,
    in_chromium,
    page,
    saved,
    tab,
    tone_page,
    tones,
)

pytestmark = in_chromium


def test_only_what_was_heard_long_enough_may_be_answered(held_tab):
    """Half a second of each of A, B and X before the first answer, of X before the others."""

    def refused(trial):
        held_tab.page.keyboard.press("1")
        return held_tab.page.inner_text("#trial") == f"Trial {trial} of 5"

    held_tab.page.click("#play")  # what is heard before the round counts for nothing
    held_tab.page.evaluate("passTime(0.6)")
    begin(held_tab)
    held_tab.hear("abx", 0.3)
    assert refused(1)
    held_tab.hear("abx", 0.0)
    assert refused(1)
    held_tab.hear("ab")
    assert refused(1)
    held_tab.page.fill("#level", "-60")
    held_tab.hear("x", 3.0)
    assert refused(1)
    held_tab.page.keyboard.press("a")
    held_tab.page.fill("#level", "-20")
    held_tab.hear("x", 0.35)  # and 0.3 before; each change took 0.115 s of it
    assert refused(1)
    held_tab.hear("x", 0.2)
    held_tab.page.wait_for_selector(".answers button:enabled")
    assert not refused(1)
    held_tab.hear("ab")
    assert refused(2)
    held_tab.hear("x", 0.4)
    held_tab.page.keyboard.press("Space")
    held_tab.page.evaluate("passTime(9)")
    assert refused(2)
    held_tab.hear("x", 0.4)
    assert not refused(2)


def test_rounds_in_two_tabs_are_both_kept(chromium, page):
    """Both pages are open before either round begins; one is left in its round."""
    with opened(chromium, page, held=True) as one:
        other = Tab(one.page.context.new_page())
        other.page.goto(page.as_uri())
        other.wait_until_ready()
        begin(one, trials=8, listener="Ines")
        begin(other, trials=8, listener="Olaf")
        one.hear("abx1")
        other.hear("abx1x2")
        other.page.click("#give-up")
        one.page.close(run_before_unload=False)
        other.page.reload()
        other.wait_until_ready()
        assert "Ines" in other.page.inner_text("#record")
        assert "Olaf" in other.page.inner_text("#record")
        assert other.page.locator("#record li").count() == 2
        assert other.complaints == []


def test_no_other_tab_gives_away_a_round_that_runs(chromium, page):
    with opened(chromium, page, held=True) as one:
        begin(one, trials=8, listener="Ines")
        other = Tab(one.page.context.new_page())
        other.page.goto(page.as_uri())
        other.wait_until_ready()
        one.hear("abx1x2")
        assert "runs in another tab" in other.page.inner_text("#record")
        assert other.page.locator("#record .save").count() == 0
        for button in ("#save-all", "#forget"):
            assert other.page.is_disabled(button)
        one.page.click("#give-up")
        other.page.wait_for_selector("#record .save")
        sheet, _ = saved(other, "#record")
        assert len(sheet["trials"]) == 2
        begin(one, trials=8, listener="Olaf")
        other.page.wait_for_selector("text=runs in another tab")
        one.page.on("dialog", lambda dialog: dialog.accept())
        one.page.reload()
        other.page.wait_for_function("document.querySelectorAll('#record .save').length === 2")
        assert other.complaints == []


def test_every_sheet_tells_of_the_rounds_before_it(held_tab):
    """Also of those that were given up and forgotten; all that are kept can be saved at once."""
    tab = held_tab
    tab.page.on("dialog", lambda dialog: dialog.accept())
    begin(tab, trials=5)
    tab.hear("abx1")
    tab.page.click("#give-up")
    tab.page.click("#forget")
    assert tab.page.locator("#record li").count() == 0
    assert "1 earlier round of this set is forgotten here" in tab.page.inner_text("#record")
    begin(tab, trials=5)
    tab.hear("ab" + 5 * "x1")
    begin(tab, "preference")
    tab.hear("ab1ab2ab0")
    tab.page.reload()
    tab.wait_until_ready()
    begin(tab, trials=5)
    tab.hear("ab" + 5 * "x1")
    sheet, _ = saved(tab)
    told = [
        (each["test"], each["answered"], each["planned"], each["finished"])
        for each in sheet["earlier"]["rounds"]
    ]
    assert told == [("abx", 1, 5, False), ("abx", 5, 5, True), ("preference", 3, 3, True)]
    assert sheet["earlier"]["count"] == 3
    assert "2 earlier rounds of this pair were begun on this device" in tab.page.inner_text("#result")
    with tab.page.expect_download() as download:
        tab.page.click("#save-all")
    path = Path(download.value.path())
    facts = tally_sheets([path])
    assert facts.refused == ()
    assert facts.facts["sheets"] == 3
    assert "1 earlier round not among these files" in tally_text(facts)


@pytest.fixture(scope="module")
def grown_page(example, tones, tmp_path_factory) -> Path:
    """The set with one more candidate, and another set of the same phrase that shares only one."""
    data = json.loads(json.dumps(example[0]))
    more = {**data["candidates"][0], "number": 4, "label": "one more", "settings_sha256": 64 * "4"}
    data["candidates"].append(more)
    data["set"] = 64 * "a"
    folder = tmp_path_factory.mktemp("grown")
    write_page(folder / "index.html", data, [*tones, tones[0]])
    data["candidates"] = [data["candidates"][0], more]
    data["set"] = 64 * "b"
    write_page(folder / "other.html", data, tones[:2])
    return folder / "index.html"


def test_rounds_outlast_one_more_candidate(chromium, page, grown_page, example):
    """They can be saved from the new page, by themselves, and sheets of the new set tell of them."""
    with opened(chromium, page, held=True) as tab:
        tab.page.on("dialog", lambda dialog: dialog.accept())
        begin(tab, trials=5)
        tab.hear("ab" + 5 * "x1")
        begin(tab, "preference")
        tab.hear("ab1ab1ab1")
        first, _ = saved(tab)
        tab.page.goto(grown_page.with_name("other.html").as_uri())
        tab.wait_until_ready()
        assert tab.page.inner_text("#record") == ""
        tab.page.goto(grown_page.as_uri())
        tab.wait_until_ready()
        assert tab.page.locator("#record li").count() == 2
        assert "From another set with candidates of this one (5e7000000000)" in tab.page.inner_text("#record")
        assert saved(tab, "#record")[0] == first
        with tab.page.expect_download() as download:
            tab.page.click(".save-others")
        facts = tally_sheets([Path(download.value.path())]).facts
        assert (facts["set"], facts["sheets"], facts["refused"]) == (example[0]["set"], 2, [])
        begin(tab, trials=5)
        tab.hear("ab" + 5 * "x1")
        assert "1 earlier round of this pair was begun on this device" in tab.page.inner_text("#result")
        sheet, _ = saved(tab)
        told = [(each["test"], each["set"]) for each in sheet["earlier"]["rounds"]]
        assert told == [("abx", example[0]["set"]), ("preference", example[0]["set"])]
        with tab.page.expect_download() as download:
            tab.page.click("#save-all")
        text = tally_text(tally_sheets([Path(download.value.path())]))
        assert "2 earlier rounds not among these files" in text
        assert text.count("of another set of these candidates") == 2
        tab.page.click("#forget")
        assert tab.page.locator("#record li").count() == 0
        tab.page.goto(page.as_uri())
        tab.wait_until_ready()
        assert "3 earlier rounds of this set are forgotten here" in tab.page.inner_text("#record")
        assert tab.complaints == []


def test_rounds_are_kept_without_what_was_before_them(held_tab):
    """Else each would hold all before it, and the browser's store would soon be full."""
    for _ in range(3):
        begin(held_tab, trials=5)
        held_tab.hear("abx1")
        held_tab.page.click("#give-up")
    kept = held_tab.page.evaluate("Object.entries(localStorage)")
    sheets = [sheet for key, value in kept for sheet in json.loads(value) if "trials_planned" in sheet]
    assert len(sheets) == 3
    assert not any("earlier" in sheet for sheet in sheets)
    sheet, _ = saved(held_tab)
    assert sheet["earlier"]["count"] == len(sheet["earlier"]["rounds"]) == 2


def test_a_browser_that_can_not_keep_rounds_is_told_of(held_tab):
    words = "This browser can’t keep rounds. Save the sheet before you leave this page."
    begin(held_tab, trials=5)
    held_tab.hear("abx1")
    assert words not in held_tab.page.inner_text("#blind")
    held_tab.page.evaluate(
        "() => { Storage.prototype.setItem = () => { throw new DOMException('', 'QuotaExceededError'); }; }"
    )
    held_tab.hear("x1")
    assert words in held_tab.page.inner_text("#blind")
    assert held_tab.page.is_visible("#trial")
    held_tab.hear("x1x1x1")
    assert words in held_tab.page.inner_text("#result")
    assert words in held_tab.page.inner_text("#record")
    sheet, _ = saved(held_tab)
    assert len(sheet["trials"]) == 5


def test_what_was_chosen_for_a_round_outlasts_a_reload(tab):
    tab.page.fill("#listener", "Ines")
    tab.page.select_option("#first", "1")
    tab.page.select_option("#second", "2")
    tab.page.fill("#trials", "25")
    tab.page.check("#kind-preference")
    tab.page.uncheck("#included-2")
    tab.page.fill("#excerpt-start", "1.5")
    tab.page.fill("#excerpt-end", "4.25")
    tab.page.reload()
    tab.wait_until_ready()
    fields = ("listener", "first", "second", "trials", "excerpt-start", "excerpt-end")
    assert [tab.page.input_value(f"#{field}") for field in fields] == ["Ines", "1", "2", "25", "1.5", "4.25"]
    assert tab.page.is_checked("#kind-preference")
    assert [tab.page.is_checked(f"#included-{number}") for number in (1, 2, 3)] == [True, False, True]
    tab.requests.clear()
    tab.requests.append(tab.page.url)


def test_an_excerpt_set_by_hand_is_not_overwritten_by_the_loop(tab):
    def excerpt():
        return tab.page.input_value("#excerpt-start"), tab.page.input_value("#excerpt-end")

    whole = excerpt()
    tab.page.fill("#loop-start", "1")
    tab.page.fill("#loop-end", "3")
    tab.page.locator("#loop-end").blur()
    assert excerpt() == ("1.000", "3.000")
    tab.page.uncheck("#loop")
    assert excerpt() == whole
    tab.page.fill("#excerpt-start", "2.5")
    tab.page.check("#loop")
    assert excerpt() == ("2.5", whole[1])
    tab.page.click("#excerpt-as-loop")
    assert excerpt() == ("1.000", "3.000")
    # 8.85 - 8.65 is less than 0.2 in floating point.
    tab.page.fill("#excerpt-start", "8.650")
    tab.page.fill("#excerpt-end", "8.850")
    begin(tab)


def test_an_answer_while_the_audio_starts_starts_nothing_in_the_next_trial(held_tab):
    begin(held_tab)
    held_tab.hear("abx")
    held_tab.page.keyboard.press("Space")
    held_tab.page.evaluate(
        "() => { AudioContext.prototype.resume = () => new Promise((done) => { window.resumed = done; }); }"
    )
    held_tab.page.keyboard.press("Space")
    held_tab.page.keyboard.press("1")
    held_tab.page.evaluate("resumed()")
    assert held_tab.page.inner_text("#trial") == "Trial 2 of 5"
    assert held_tab.page.inner_text("#round-play") == "Play"


@pytest.fixture(scope="module")
def six_page(example, tones, tmp_path_factory) -> Path:
    """Six candidates: the three and copies of them."""
    data = json.loads(json.dumps(example[0]))
    for number, candidate in enumerate(json.loads(json.dumps(data["candidates"])), 4):
        digest = f"{number:x}" + candidate["settings_sha256"][1:]
        data["candidates"].append(
            {**candidate, "number": number, "label": f"copy {number}", "settings_sha256": digest}
        )
    path = tmp_path_factory.mktemp("six") / "index.html"
    write_page(path, data, [*tones, *tones])
    return path


@pytest.mark.parametrize("left_out", [(), (2,), (1, 5)])
def test_a_preference_round_of_some_candidates_is_balanced(chromium, six_page, left_out):
    """Every chosen candidate meets every other, as A as often as as B, or once more or less."""
    with opened(chromium, six_page, held=True) as tab:
        tab.page.check("#kind-preference")
        for number in left_out:
            tab.page.uncheck(f"#included-{number}")
        count = 6 - len(left_out)
        planned = count * (count - 1) // 2
        assert f"{planned} pairs" in tab.page.inner_text("#pairs")
        begin(tab, "preference")
        tab.hear(planned * "ab1")
        sheet, _ = saved(tab)
    labels = [*LABELS, "copy 4", "copy 5", "copy 6"]
    chosen_labels = [label for number, label in enumerate(labels, 1) if number not in left_out]
    assert [each["label"] for each in sheet["candidates"]] == chosen_labels
    pairs = [(pair["first"], pair["second"]) for pair in sheet["pairs"]]
    assert len({frozenset(pair) for pair in pairs}) == planned
    for index in range(count):
        times_first = sum(first == index for first, _ in pairs)
        assert abs(times_first - (count - 1 - times_first)) <= 1


def test_a_preference_round_needs_two_candidates(tab):
    tab.page.check("#kind-preference")
    tab.page.fill("#listener", "Ines")
    for number in (1, 3):
        tab.page.uncheck(f"#included-{number}")
    tab.page.click("#blind-form button[type=submit]")
    assert "two candidates at least" in tab.page.inner_text("#blind-problem")


def test_an_abx_round_end_to_end(held_tab, example):
    tab = held_tab
    begin(tab, trials=12)
    for trial in range(12):
        assert tab.page.inner_text("#trial") == f"Trial {trial + 1} of 12"
        tab.page.keyboard.press("1")  # not before X was heard
        assert tab.page.inner_text("#trial") == f"Trial {trial + 1} of 12"
        tab.hear("abx")
        tab.page.keyboard.press("1" if trial % 2 else "2")
    sheet, name = saved(tab)
    assert name.startswith("abx-ines-")
    assert name.endswith(".json")
    candidates = {each["settings_sha256"]: each["label"] for each in example[0]["candidates"]}
    assert set(sheet) == {
        "kind", "version", "set", "listener", "made", "test", "pair", "labels", "trials_planned", "trials",
        "correct", "finished", "probability", "excerpt_s", "id", "earlier",
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
    assert sheet["earlier"] == {"count": 0, "rounds": []}
    assert [trial["answer"] for trial in sheet["trials"]] == [1, 0] * 6
    assert all(trial["x"] in (0, 1) and trial["seconds"] >= 0.0 for trial in sheet["trials"])
    assert sheet["correct"] == sum(trial["x"] == trial["answer"] for trial in sheet["trials"])
    by_chance = binomtest(sheet["correct"], 12, 0.5, "greater").pvalue
    assert sheet["probability"] == pytest.approx(by_chance, rel=1e-12)
    assert f"{sheet['correct']} of 12 right" in tab.page.inner_text("#result")


def test_x_is_what_the_sheet_says_and_switching_to_it_is_through_silence(chromium, tone_page, tones, example):
    """Heard in each of five trials: A, X, B for 0.7 s, with the same silence before each."""
    digests = [candidate["settings_sha256"] for candidate in example[0]["candidates"]]
    clips = dict(zip(digests, map(decoded, tones), strict=True))
    presses = []
    for trial in range(5):
        start_s = 0.1 + 2.3 * trial
        presses += [(start_s, "a"), (start_s + 0.7, "x"), (start_s + 1.4, "b"), (start_s + 2.1, "1")]
    with opened(chromium, tone_page, offline_s=12) as tab:
        tab.page.click("#play")  # makes the context
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


def test_a_round_given_up_is_recorded(held_tab):
    tab = held_tab
    begin(tab, trials=8)
    tab.hear("abx1")
    tab.page.keyboard.press("x")
    tab.page.click("#give-up")
    assert "recorded as unfinished" in tab.page.inner_text("#result")
    assert "right" not in tab.page.inner_text("#result")
    sheet, _ = saved(tab)
    assert sheet["finished"] is False
    assert (len(sheet["trials"]), sheet["trials_planned"]) == (1, 8)


def test_a_round_that_the_page_was_left_in_is_recorded(held_tab):
    tab = held_tab
    begin(tab, trials=8)
    tab.hear("abx1x2")
    tab.page.on("dialog", lambda dialog: dialog.accept())
    tab.page.reload()
    tab.wait_until_ready()
    assert "unfinished" in tab.page.inner_text("#record")
    sheet, _ = saved(tab, "#record")
    assert sheet["finished"] is False
    assert len(sheet["trials"]) == 2


def test_a_preference_round_end_to_end(held_tab, example):
    tab = held_tab
    begin(tab, "preference")
    count = len(LABELS) * (len(LABELS) - 1) // 2
    for pair in range(count):
        assert tab.page.inner_text("#trial") == f"Pair {pair + 1} of {count}"
        tab.hear("a1")  # not before both were heard
        assert tab.page.inner_text("#trial") == f"Pair {pair + 1} of {count}"
        tab.hear("b" + "120"[pair])
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
    with opened(chromium, page, held=True) as tab:
        orders, truths = set(), set()
        for _ in range(6):
            begin(tab, "preference")
            tab.hear("ab1ab1ab1")
            orders.add(str([(each["first"], each["second"]) for each in saved(tab)[0]["pairs"]]))
            begin(tab, "abx")
            tab.hear("ab" + "x1" * 5)
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
