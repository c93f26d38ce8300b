"""Blind listening: exact figures against scipy and published tables, and sheets that are refused.

`scipy.stats.binomtest` is the reference for every probability and interval, to 1e-12.
"""

import csv
import json

import pytest
from scipy.stats import binom, binomtest, false_discovery_control

from conftest import REFERENCE
from glidesmith.binomial import upper_tail
from glidesmith.blind import (
    confidence_interval,
    critical_correct,
    guessing_probability,
    holm,
    sign_test,
    tally_sheets,
    tally_text,
    trials_needed,
)
from glidesmith.errors import SettingError
from glidesmith.sheets import SheetError
from listening import COSINE, EXP, RC, SET, abx, bundle, preference, save, told

EXACT = 1e-12
COUNTS = [(n, k) for n in (1, 2, 5, 16, 25, 100, 1000) for k in {0, n // 3, n // 2, (2 * n) // 3, n}]


@pytest.mark.parametrize(("trials", "correct"), COUNTS)
def test_guessing_is_scipys_binomial_test(trials, correct):
    expected = binomtest(correct, trials, 0.5, alternative="greater").pvalue
    assert guessing_probability(correct, trials) == pytest.approx(expected, rel=EXACT)


@pytest.mark.parametrize(("trials", "correct"), COUNTS)
@pytest.mark.parametrize("confidence", [0.9, 0.95, 0.999])
def test_the_interval_is_that_of_clopper_and_pearson(trials, correct, confidence):
    expected = binomtest(correct, trials).proportion_ci(confidence, method="exact")
    found = confidence_interval(correct, trials, confidence)
    assert found == pytest.approx((expected.low, expected.high), abs=1e-10)


@pytest.mark.parametrize(("wins", "losses"), [(0, 0), (1, 0), (3, 3), (9, 1), (1, 9), (14, 6), (70, 30)])
def test_the_sign_test_is_the_two_sided_binomial_test(wins, losses):
    expected = binomtest(wins, wins + losses).pvalue if wins + losses else 1.0
    assert sign_test(wins, losses) == pytest.approx(expected, rel=EXACT)


@pytest.mark.parametrize("share", [0.0, 1e-9, 0.1, 0.5, 0.77, 1.0 - 1e-9, 1.0])
@pytest.mark.parametrize(("trials", "correct"), COUNTS)
def test_the_upper_tail_is_scipys(trials, correct, share):
    assert upper_tail(correct, trials, share) == pytest.approx(
        binom.sf(correct - 1, trials, share), abs=1e-12
    )


def test_published_critical_values_are_reproduced():
    """Tables for the duo-trio and the one-sided paired test; see the file for their source."""
    lines = (REFERENCE / "abx-critical-values.csv").read_text().splitlines()
    rows = list(csv.DictReader(line for line in lines if not line.startswith("#")))
    assert len(rows) > 25
    for row in rows:
        for column, confidence in (("percent_5", 0.95), ("percent_1", 0.99), ("percent_0_1", 0.999)):
            expected = None if row[column] == "-" else int(row[column])
            assert critical_correct(int(row["trials"]), confidence) == expected, (row["trials"], column)


@pytest.mark.parametrize("confidence", [0.9, 0.95, 0.99])
@pytest.mark.parametrize("ability", [0.6, 0.75, 0.9, 1.0])
def test_the_trials_needed_are_the_fewest_that_serve(confidence, ability):
    needed = trials_needed(confidence, ability, power=0.8)

    def power(n):
        correct = next((k for k in range(n + 1) if binom.sf(k - 1, n, 0.5) <= 1.0 - confidence), n + 1)
        return binom.sf(correct - 1, n, ability), correct

    assert power(needed.trials)[0] >= 0.8
    assert power(needed.trials)[1] == needed.correct
    assert all(power(n)[0] < 0.8 for n in range(1, needed.trials))


@pytest.mark.parametrize(
    ("arguments", "word"),
    [
        ((1.0, 0.8), "confidence"),
        ((float("nan"), 0.8), "confidence"),
        ((0.95, 0.5), "ability"),
        ((0.95, 1.1), "ability"),
        ((0.95, 0.501), "more than 1,000 trials"),
        ((0.95, 0.8, 1.0), "power"),
    ],
)
def test_what_no_number_of_trials_can_show_is_refused(arguments, word):
    with pytest.raises(SettingError, match=word):
        trials_needed(*arguments)


def test_holms_correction():
    """The example of Holm's procedure by hand: sorted, times what is left of the tests, never falling."""
    assert holm([0.01, 0.04, 0.03, 0.005]) == pytest.approx([0.03, 0.06, 0.06, 0.02])
    assert holm([0.9, 0.8]) == [1.0, 1.0]
    assert holm([]) == []
    # Never under what the less strict procedure of Benjamini and Hochberg gives, never over Bonferroni's.
    raw = [0.001, 0.02, 0.02, 0.3, 0.7]
    for value, least, most in zip(holm(raw), false_discovery_control(raw), raw, strict=True):
        assert least <= value <= 5 * most


def tally(folder, *sheets):
    return tally_sheets(save(folder, *sheets)).facts


def test_listeners_are_shown_and_pooled(tmp_path):
    facts = tally(tmp_path, abx(14), abx(11, listener="Ben"), abx(9, 12, listener="Cleo"))
    (pair,) = facts["abx"]["pairs"]
    assert (pair["correct"], pair["trials"]) == (34, 44)
    assert pair["probability"] == pytest.approx(binomtest(34, 44, alternative="greater").pvalue, rel=EXACT)
    expected = binomtest(34, 44).proportion_ci(0.95, method="exact")
    assert pair["confidence_interval"] == pytest.approx([expected.low, expected.high], abs=1e-10)
    shown = [(row["listener"], row["correct"], row["trials"]) for row in pair["listeners"]]
    assert shown == [("Ada", 14, 16), ("Ben", 11, 16), ("Cleo", 9, 12)]
    raw = [binomtest(k, n, alternative="greater").pvalue for _, k, n in shown]
    assert [row["probability"] for row in pair["listeners"]] == pytest.approx(raw, rel=EXACT)
    assert pair["listeners"][0]["probability_corrected"] == pytest.approx(3 * raw[0])
    assert "not independent" in pair["warnings"][0]
    assert pair["evidence"]
    assert [row["evidence"] for row in pair["listeners"]] == [True, False, False]
    assert pair["verdict"].startswith("evidence that Ada can tell the two apart (")
    assert pair["verdict"].endswith(", and none that Ben and Cleo can")


def test_one_who_hears_it_is_named_among_many_who_do_not(tmp_path):
    """Nine at 7 of 16 and one at 16 of 16: together 79 of 160, which shows nothing; alone 2^-16."""
    others = [abx(7, listener=f"listener {n}") for n in range(9)]
    found = tally_sheets(save(tmp_path, *others, abx(16)))
    (pair,) = found.facts["abx"]["pairs"]
    assert (pair["correct"], pair["trials"], pair["evidence"]) == (79, 160, False)
    assert [row["listener"] for row in pair["listeners"] if row["evidence"]] == ["Ada"]
    assert pair["listeners"][-1]["probability_corrected"] == pytest.approx(11 / 2**16)
    assert pair["verdict"].startswith("evidence that Ada can tell the two apart (guessing")
    assert "1.5e-05, 1.7e-04 after correction for 11 tests" in pair["verdict"]
    assert pair["verdict"].endswith(
        "and none that listener 0, listener 1, listener 2, listener 3, listener 4 and 4 more can"
    )


@pytest.mark.parametrize(
    ("scores", "begin", "pooled"),
    [
        ((16, 9), "evidence that Ada can tell the two apart (", True),
        (
            (16, 15),
            "evidence that the two can be told apart by each of Ada and Ben: at worst, guessing",
            True,
        ),
        ((11, 11), "no evidence that the two can be told apart: guessing", False),
        ((12, 12), "evidence that the two can be told apart by all together, though by none alone: ", True),
    ],
)
def test_the_verdict_says_of_whom_there_is_evidence(tmp_path, scores, begin, pooled):
    first, second = scores
    (pair,) = tally(tmp_path, abx(first), abx(second, listener="Ben"))["abx"]["pairs"]
    assert pair["verdict"].startswith(begin)
    assert pair["evidence"] is pooled


def test_what_shows_nothing_is_said_plainly(tmp_path):
    (pair,) = tally(tmp_path, abx(9))["abx"]["pairs"]
    assert not pair["evidence"]
    assert pair["verdict"].startswith("no evidence that the two can be told apart")
    assert "no evidence that they sound the same" in pair["verdict"]
    assert pair["warnings"] == []


def test_too_few_trials_to_show_anything_are_said_so(tmp_path):
    (pair,) = tally(tmp_path, abx(4, 4))["abx"]["pairs"]
    assert "4 trials are too few to show anything, 5 are the fewest" in pair["verdict"]


def test_pairs_are_kept_apart_and_corrected_for_their_number(tmp_path):
    sheets = abx(12), abx(12, pair=(EXP, COSINE)), abx(13, pair=(EXP, RC), listener="Ben")
    first, second = tally(tmp_path, *sheets)["abx"]["pairs"]
    assert (first["labels"], first["correct"], first["trials"]) == (["rc", "exp"], 25, 32)
    assert (second["labels"], second["correct"]) == (["exp", "cosine"], 12)
    # Four tests: Ada and Ben and both together, and Ada again. 12 of 16 alone would be evidence, at 3.8 %.
    assert first["probability_corrected"] == pytest.approx(4 * first["probability"])
    assert second["probability_corrected"] == pytest.approx(2 * second["probability"])
    assert second["probability"] < 0.05
    assert not second["evidence"]
    assert "a probability of 0.038, 0.077 after correction for 4 tests;" in second["verdict"]


def test_excerpts_are_kept_apart(tmp_path):
    sheets = (
        abx(12, excerpt_s=[0, 0.2]),
        abx(9, listener="Ben", excerpt_s=[0, 8]),
        abx(8, listener="Cleo", excerpt_s=[0.0, 8.0]),
        abx(7, listener="Dan"),
    )
    found = tally_sheets(save(tmp_path, *sheets))
    pairs = found.facts["abx"]["pairs"]
    told = [(pair["excerpt_s"], pair["correct"], len(pair["listeners"])) for pair in pairs]
    assert told == [([0.0, 0.2], 12, 1), ([0.0, 8.0], 17, 2), (None, 7, 1)]
    lines = tally_text(found).splitlines()
    assert "  rc  or  exp, excerpt 0 to 0.2 s" in lines
    assert "  rc  or  exp, excerpt 0 to 8 s" in lines
    assert "  rc  or  exp" in lines


def test_excerpts_of_preferences_are_kept_apart(tmp_path):
    two = {"candidates": (RC, EXP)}
    sheets = (
        preference([RC, EXP], excerpt_s=[0, 1.5], **two),
        preference([EXP, RC], listener="Ben", excerpt_s=[0, 3], **two),
    )
    found = tally_sheets(save(tmp_path, *sheets))
    told = [(pair["excerpt_s"], pair["wins"]) for pair in found.facts["preference"]["pairs"]]
    assert told == [([0.0, 1.5], [1, 0]), ([0.0, 3.0], [0, 1])]
    assert "rc 1 : 0 exp, excerpt 0 to 1.5 s: " in tally_text(found)


def test_a_name_in_another_way_of_writing_is_one_listener(tmp_path):
    """\u00c5 is one letter, or an A and a ring (Unicode Standard Annex 15)."""
    again = abx(10, listener="A\u030asa", made="2031-05-05T10:00:00")
    (pair,) = tally(tmp_path, abx(9, listener="\u00c5sa"), again)["abx"]["pairs"]
    assert [(row["listener"], row["rounds"]) for row in pair["listeners"]] == [("\u00c5sa", 2)]


def test_one_name_in_other_letters_is_one_listener_and_no_name_is_none(tmp_path):
    sheets = (
        abx(9),
        abx(10, listener=" ADA ", made="2031-05-05T10:00:00"),
        abx(8, listener=""),
        abx(7, listener=" "),
    )
    (pair,) = tally(tmp_path, *sheets)["abx"]["pairs"]
    names = [(row["listener"], row["rounds"]) for row in pair["listeners"]]
    assert names == [("Ada", 2), ("no name (sheet-3.json)", 1), ("no name (sheet-4.json)", 1)]
    assert any("more than one round" in warning for warning in pair["warnings"])


def test_rounds_that_were_given_up_are_listed_apart(tmp_path):
    facts = tally(
        tmp_path,
        abx(12),
        abx(6, 16, 7, listener="Ben"),
        preference([RC, EXP, COSINE], finished=False, pairs=[]),
    )
    (pair,) = facts["abx"]["pairs"]
    assert (pair["correct"], pair["trials"]) == (12, 16)
    told = [(row["listener"], row["test"]) for row in facts["unfinished"]]
    assert told == [("Ben", "abx"), ("Ada", "preference")]
    assert facts["unfinished"][0]["trials"] == 7
    assert facts["preference"] is None
    assert "Not finished, and not counted" in tally_text(tally_sheets(sorted(tmp_path.glob("*.json"))))


def test_preferences_are_counted_by_pair(tmp_path):
    sheets = [preference([EXP, RC, COSINE], listener=f"listener {n}") for n in range(9)]
    sheets.append(preference([COSINE, RC, EXP], listener="Ada", undecided=[frozenset((RC, EXP))]))
    facts = tally(tmp_path, *sheets)["preference"]
    assert "sign test" in facts["test"]
    assert "Holm" in facts["test"]
    found = {tuple(pair["labels"]): pair for pair in facts["pairs"]}
    assert found["rc", "exp"]["wins"] == [0, 9]
    assert found["rc", "exp"]["no_preference"] == 1
    assert found["rc", "cosine"]["wins"] == [9, 1]
    raw = binomtest(0, 9).pvalue, binomtest(9, 10).pvalue
    assert found["rc", "exp"]["probability"] == pytest.approx(raw[0], rel=EXACT)
    assert found["rc", "exp"]["probability_corrected"] == pytest.approx(3 * raw[0], rel=EXACT)
    assert found["rc", "cosine"]["probability_corrected"] == pytest.approx(2 * raw[1], rel=EXACT)
    assert found["rc", "exp"]["verdict"].startswith("exp is preferred")
    assert {total["label"]: total["wins"] for total in facts["candidates"]} == {
        "exp": 18,
        "rc": 9,
        "cosine": 2,
    }
    assert found["rc", "exp"]["listeners"][-1] == {"listener": "Ada", "preferred": None}


def test_a_single_round_of_preferences_shows_nothing(tmp_path):
    save(tmp_path, preference([RC, EXP, COSINE]))
    found = tally_sheets([tmp_path / "sheet-1.json"])
    assert not any(pair["evidence"] for pair in found.facts["preference"]["pairs"])
    assert "no pair shows a preference" in tally_text(found)


@pytest.mark.parametrize("sheet", [abx(14), abx(9), preference([RC, EXP, COSINE])])
def test_the_text_tells_what_the_facts_hold(tmp_path, sheet):
    found = tally_sheets(save(tmp_path, sheet))
    text = tally_text(found)
    for pair in (found.facts["abx"] or found.facts["preference"])["pairs"]:
        assert pair["verdict"] in text
        assert all(label in text for label in pair["labels"])
    json.dumps(found.facts, allow_nan=False)


def many(pair, count, best):
    """Rounds by ``count`` listeners who all prefer ``best`` of the pair."""
    return [preference([best, *pair], listener=f"listener {n}", candidates=pair) for n in range(count)]


def test_too_few_choices_to_show_a_preference_are_said_so(tmp_path):
    """Five of five have a two-sided probability of 2/32, six of six 2/64 (by hand)."""
    (pair,) = tally(tmp_path, *many((RC, EXP), 5, RC))["preference"]["pairs"]
    assert "5 votes are too few to show anything, 6 are the fewest" in pair["verdict"]
    (pair,) = tally(tmp_path, *many((RC, EXP), 6, RC))["preference"]["pairs"]
    assert pair["verdict"] == "rc is preferred by 6 of 6 listeners (probability 0.031)"
    undecided = preference([RC, EXP], candidates=(RC, EXP), undecided=[frozenset((RC, EXP))])
    (pair,) = tally(tmp_path, undecided)["preference"]["pairs"]
    assert "0 choices are too few to show anything" in pair["verdict"]


def test_what_could_show_something_depends_on_the_other_pairs(tmp_path):
    """Holm: beside a clearer result the 1/32 of six of six is not corrected any more, beside a weaker one it
    is doubled, to 1/16; twice the 1/64 of seven of seven is then the first under 0.05."""
    clear, weak = many((RC, COSINE), 12, RC), many((RC, COSINE), 1, RC)
    split = [*many((RC, EXP), 5, RC), *many((RC, EXP), 1, EXP)]
    for sheet in split[5:]:
        sheet["listener"] = "Ben"
    found = tally(tmp_path, *clear, *split)["preference"]["pairs"]
    (pair,) = [each for each in found if each["labels"] == ["rc", "exp"]]
    assert pair["wins"] == [5, 1]
    assert "too few" not in pair["verdict"]
    found = tally(tmp_path, *weak, *split)["preference"]["pairs"]
    (pair,) = [each for each in found if each["labels"] == ["rc", "exp"]]
    assert "6 votes are too few to show anything, 7 are the fewest" in pair["verdict"]


def again(sheet, day):
    return {**sheet, "made": f"2031-05-{day:02d}T20:30:00.000Z"}


def test_what_one_listener_prefers_is_said_of_them_alone(tmp_path):
    """Six of six choices by one: 2/64, and no word of others."""
    rounds = [again(preference([RC, EXP], candidates=(RC, EXP)), day) for day in range(1, 7)]
    (pair,) = tally(tmp_path, *rounds)["preference"]["pairs"]
    assert (pair["counted"], pair["wins"]) == ("choices", [6, 0])
    assert pair["verdict"] == "Ada prefers rc (probability 0.031), which tells of no other listener"


def test_each_of_several_listeners_has_one_vote(tmp_path):
    """Ada's six rounds for rc are one vote; Ben's one each way is none; Cleo's two against one is one."""
    two = {"candidates": (RC, EXP)}
    rounds = [again(preference([RC, EXP], **two), day) for day in range(1, 7)]
    rounds += [
        again(preference([order, RC, EXP], listener="Ben", **two), 8 + n) for n, order in enumerate((RC, EXP))
    ]
    rounds += [
        again(preference([o, RC, EXP], listener="Cleo", **two), 8 + n) for n, o in enumerate((EXP, RC, EXP))
    ]
    found = tally_sheets(save(tmp_path, *rounds))
    (pair,) = found.facts["preference"]["pairs"]
    assert (pair["wins"], pair["votes"], pair["counted"]) == ([8, 3], [1, 1], "votes")
    assert pair["probability"] == 1.0
    assert "2 votes are too few" in pair["verdict"]
    assert "rc 8 : 3 exp, votes 1 : 1: " in tally_text(found)


def test_wins_are_told_of_how_many(tmp_path):
    """rc against exp only, twice, and one round of all three: rc was in four pairs, cosine in two."""
    rounds = [again(preference([RC, EXP], candidates=(RC, EXP)), day) for day in (1, 2)]
    undecided = [frozenset((EXP, COSINE))]
    found = tally_sheets(save(tmp_path, *rounds, preference([COSINE, RC, EXP], undecided=undecided)))
    told = {
        each["label"]: (each["wins"], each["comparisons"]) for each in found.facts["preference"]["candidates"]
    }
    assert told == {"rc": (3, 4), "exp": (0, 4), "cosine": (1, 2)}
    assert "wins in all: rc 3 of 4, cosine 1 of 2, exp 0 of 4" in tally_text(found)


def test_rounds_of_some_candidates_add_up_with_rounds_of_all(tmp_path):
    some = preference([EXP, RC], listener="Ben", candidates=(EXP, RC))
    facts = tally(tmp_path, preference([EXP, RC, COSINE]), some)["preference"]
    found = {tuple(pair["labels"]): pair["wins"] for pair in facts["pairs"]}
    assert found == {("rc", "exp"): [0, 2], ("rc", "cosine"): [1, 0], ("exp", "cosine"): [1, 0]}


def test_a_file_may_hold_all_rounds_of_a_browser(tmp_path):
    rounds = bundle(abx(9, id="one"), abx(12, listener="Ben", id="two"), abx(9, correct=3, id="three"))
    found = tally_sheets(save(tmp_path, rounds, abx(9, id="one")))
    assert found.facts["sheets"] == 2
    assert found.facts["abx"]["pairs"][0]["correct"] == 21
    damaged, twice = found.refused
    assert "sheet-1.json: sheet 3: is damaged or inconsistent: it says 3 correct" in damaged
    assert "sheet-2.json: is the same round as in" in twice
    assert twice.count("sheet-1.json") == 1


def test_one_round_with_other_contents_is_refused(tmp_path):
    found = tally_sheets(save(tmp_path, bundle(abx(9, id="one"), abx(14, id="one")), abx(15, id="one")))
    assert found.facts["abx"]["pairs"][0]["correct"] == 9
    assert all("with other contents" in line for line in found.refused)
    assert "another in this file" in found.refused[0]


def earlier(*rounds, count=None):
    return {"count": len(rounds) if count is None else count, "rounds": list(rounds)}


def test_earlier_rounds_that_are_not_given_are_told(tmp_path):
    sheets = (
        abx(12, id="c", earlier=earlier(told("a"), told("b", answered=3), told("d", pair=(EXP, COSINE)))),
        abx(6, id="a", made="2031-05-03T18:00:00.000Z"),
    )
    found = tally_sheets(save(tmp_path, *sheets))
    assert found.facts["earlier_missing"]["count"] == 2
    labels = [each["labels"] for each in found.facts["earlier_missing"]["rounds"]]
    assert labels == [["rc", "exp"], ["exp", "cosine"]]
    (pair,) = found.facts["abx"]["pairs"]
    assert any("1 earlier round of this pair not among these files" in line for line in pair["warnings"])
    text = tally_text(found)
    assert "2 earlier rounds not among these files" in text
    assert "A/B/X, rc or exp, Ada, 2031-05-03T18:00:00.000Z: 3 of 16 answered, not finished" in text


def test_nothing_is_said_of_earlier_rounds_where_all_are_given(tmp_path):
    last = abx(12, id="b", earlier=earlier(told("a")))
    found = tally_sheets(save(tmp_path, last, abx(6, id="a", made="2031-05-03T18:00:00.000Z"), abx(7)))
    assert found.facts["earlier_missing"] == {"count": 0, "rounds": []}
    assert "earlier round" not in tally_text(found)


def test_earlier_rounds_of_preferences_are_told_beside_them(tmp_path):
    before = {**told("a", answered=2, planned=3), "test": "preference"}
    del before["pair"], before["labels"]
    found = tally_sheets(save(tmp_path, preference([RC, EXP, COSINE], id="b", earlier=earlier(before))))
    assert any("1 earlier round of preferences" in line for line in found.facts["preference"]["warnings"])
    assert "preference, Ada, 2031" in tally_text(found)


def test_more_earlier_rounds_than_a_sheet_lists_are_counted(tmp_path):
    """Of 60, 50 are listed; of the other ten, one is given and one is told by another sheet of the device."""
    listed = [told(f"listed {n}") for n in range(50)]
    first = abx(
        8, id="x", made="2031-05-01T10:00:00Z", earlier=earlier(told("w", made="2031-05-01T09:00:00Z"))
    )
    last = abx(12, id="z", earlier=earlier(*listed, count=60))
    found = tally_sheets(save(tmp_path, bundle(last, first)))
    assert found.facts["earlier_missing"]["count"] == 51 + 8
    assert "  and 8 that no sheet lists" in tally_text(found)


def test_rounds_that_no_sheet_lists_are_counted_device_by_device(tmp_path):
    """Two devices that tell of 10 and of 7 rounds and list two each: 8 and 5 are listed by none. A second
    sheet of the first device, which tells of 11 with the first among them, adds none."""
    one = abx(9, id="o", earlier=earlier(told("a"), told("b"), count=10))
    next_one = abx(
        9,
        id="p",
        made="2031-05-05T10:00:00Z",
        earlier=earlier(told("b"), told("o", made=one["made"]), count=11),
    )
    other = abx(9, id="x", listener="Ben", earlier=earlier(told("c"), told("d"), count=7))
    for sheets in ((one, other), (other, one), (one, next_one, other), (next_one, other, one)):
        found = tally_sheets(save(tmp_path, *sheets))
        assert found.facts["earlier_missing"]["count"] == 4 + 8 + 5
        assert "  and 13 that no sheet lists" in tally_text(found)


def test_earlier_rounds_of_the_set_as_it_was_are_told_as_such(tmp_path):
    grown = abx(12, id="c", earlier=earlier(told("a", set="0" * 64), told("b", set=SET, answered=3)))
    found = tally_sheets(save(tmp_path, grown))
    assert [each["of_another_set"] for each in found.facts["earlier_missing"]["rounds"]] == [True, False]
    assert "16 of 16 answered, finished, of another set of these candidates" in tally_text(found)
    assert any("2 earlier rounds of this pair" in line for line in found.facts["abx"]["pairs"][0]["warnings"])


DAMAGED = [
    *(
        (abx(9, excerpt_s=excerpt), words)
        for excerpt, words in (
            ("foo", 'excerpt_s is "foo", not a list'),
            ([5, 3], "excerpt_s is 5 to 3, not two times in seconds, in order"),
            ([3, 3], "in order"),
            ([-1, 3], "in order"),
            ([0], "in order"),
            ([0, "1"], "in order"),
            ([False, True], "in order"),
            ([0, 1, 2], "3 entries"),
            ([0, 10**400], "in order"),
            (None, "not a list"),
        )
    ),
    (preference([RC, EXP, COSINE], excerpt_s=[5, 3]), "in order"),
    (abx(9, earlier={"count": 1, "rounds": [told("a", set="x")]}), "64 hexadecimal digits"),
    (abx(9, id=7), "id is 7"),
    (abx(9, id=""), "plain characters"),
    (abx(9, id="\u202e"), "plain characters"),
    (abx(9, earlier=3), "earlier is 3, not an object"),
    (abx(9, earlier={"rounds": []}), "earlier: count is missing"),
    (abx(9, earlier={"count": -1, "rounds": []}), "outside 0 to"),
    (abx(9, earlier={"count": 0, "rounds": [told("a")]}), "tells of 0 earlier rounds, and lists 1"),
    (abx(9, earlier={"count": 1, "rounds": [{}]}), "earlier round 1: id is missing"),
    (abx(9, earlier={"count": 1, "rounds": [told("a", made="then")]}), "not a date and time"),
    (abx(9, earlier={"count": 1, "rounds": [told("a", pair=(RC, EXP)) | {"pair": [1, 2]}]}), "hexadecimal"),
    (bundle(), "not a list of 1 to 1,000"),
    (bundle(sheets={}), "not a list of 1 to 1,000"),
    (bundle(abx(9), version=2), "version 2"),
    (bundle(7), "sheet 1: is no listening sheet"),
    ("", "no JSON"),
    ("{", "no JSON"),
    ("[1, 2]", "no listening sheet"),
    ("{}", "no listening sheet"),
    ('{"kind": "glidesmith comparison", "version": 1}', "no listening sheet"),
    ("[" * 100_000, "nested"),
    ('{"kind": NaN}', "NaN"),
    (abx(9, version=2), "version 2"),
    (abx(9, version=True), "version true"),
    (abx(9, set="abc"), "64 hexadecimal digits"),
    (abx(9, set=SET.upper()), "64 hexadecimal digits"),
    (abx(9, test="triangle"), "triangle"),
    (abx(9, made="yesterday"), "made"),
    (abx(9, listener=7), "listener"),
    (abx(9, finished="yes"), "finished"),
    (abx(9, finished=False), "not finished, with 16 of 16"),
    (abx(9, 16, 12, finished=True), "finished, with 12 of 16"),
    (abx(9, correct=10), "10 correct, and its trials have 9"),
    (abx(9, probability=0.05), "probability of 0.05"),
    (abx(9, probability=-1), "probability"),
    (abx(9, pair=(RC, RC)), "the same"),
    (abx(9, pair=[RC]) | {"labels": ["rc"]}, "not two candidates"),
    (abx(9, trials_planned=0), "outside 1 to 1,000"),
    (abx(9, trials_planned=10**30), "outside 1 to 1,000"),
    (abx(9, trials="none"), "trials"),
    (abx(9, trials=[{"x": 2, "answer": 0, "seconds": 1}]), "trial 1: x"),
    (abx(9, trials=[{"x": True, "answer": 0, "seconds": 1}]), "trial 1: x"),
    (abx(9, trials=[{"x": 1, "seconds": 1}]), "trial 1: answer is missing"),
    (abx(9, trials=[{"x": 1, "answer": 0, "seconds": -1}]), "seconds"),
    (abx(9, trials=[7]), "trial 1 is 7"),
    (preference([RC, EXP, COSINE], candidates=[RC]), "two or more"),
    (preference([RC, EXP, COSINE]) | {"candidates": []}, "two or more"),
    (preference([RC, EXP, COSINE], pairs=[{"first": 0, "second": 0, "preferred": 0}]), "with itself"),
    (preference([RC, EXP, COSINE], pairs=[{"first": 0, "second": 3, "preferred": 0}]), "outside 0 to 2"),
    (preference([RC, EXP, COSINE], pairs=[{"first": 0, "second": 1, "preferred": 2}]), "only 0 and 1"),
    (preference([RC, EXP, COSINE], pairs=[{"first": 0, "second": 1, "preferred": 1}] * 3), "twice"),
    (preference([RC, EXP, COSINE], pairs=[{"first": 0, "second": 1}]), "preferred is missing"),
    (preference([RC, EXP, COSINE], finished=False) | {"finished": True}, "2 of 3 pairs"),
    ('{"kind": "glidesmith listening sheet", "version": "\\u001b[31m"}', "version"),
    ("1" * 10_000, "no JSON"),
]


@pytest.mark.parametrize(("sheet", "words"), DAMAGED)
def test_damaged_and_inconsistent_sheets_are_refused_in_a_line(tmp_path, sheet, words):
    (path,) = save(tmp_path, sheet)
    with pytest.raises(SheetError) as caught:
        tally_sheets([path])
    (line,) = caught.value.lines
    assert line.startswith(f"{path}: ")
    assert words in line
    assert line.isprintable()


def test_the_others_are_added_up_all_the_same(tmp_path):
    other = "f" * 64
    paths = save(tmp_path, abx(12), abx(9, set=other), "{", abx(12), abx(8, listener="Ben"))
    found = tally_sheets([*paths, tmp_path / "missing.json", tmp_path])
    assert found.facts["sheets"] == 2
    assert found.facts["abx"]["pairs"][0]["correct"] == 20
    words = ["another set", "damaged", "the same round", "no such file", "is a folder"]
    assert len(found.refused) == len(words)
    assert all(word in line for word, line in zip(words, found.refused, strict=True))
    assert found.facts["refused"] == list(found.refused)


def test_a_sheet_over_the_limit_is_not_read(tmp_path):
    (path,) = save(tmp_path, json.dumps(abx(9)) + " " * 10_000_000)
    with pytest.raises(SheetError, match="10,000,000 bytes"):
        tally_sheets([path])


def test_no_sheets_at_all_are_an_error():
    with pytest.raises(SheetError, match="no listening sheets"):
        tally_sheets([])


def test_rounds_that_were_given_up_are_told_beside_their_pair(tmp_path):
    found = tally_sheets(save(tmp_path, abx(12), abx(1, done=3, made="2026-11-02T10:00:00Z")))
    (pair,) = found.facts["abx"]["pairs"]
    assert pair["trials"] == 16
    assert any("1 round of this pair given up" in line for line in pair["warnings"])


def test_far_fewer_right_than_guessing_gives_is_no_plain_nothing(tmp_path):
    """0 of 16: guessing does as badly with 2^-16 (binomial, by hand)."""
    verdict = tally_sheets(save(tmp_path, abx(0))).facts["abx"]["pairs"][0]["verdict"]
    assert "the wrong way round" in verdict
    assert "1.5e-05" in verdict
    assert "wrong way" not in tally_sheets(save(tmp_path, abx(8))).facts["abx"]["pairs"][0]["verdict"]


@pytest.mark.parametrize(
    "made", ["2026-11-01T10:00:00+00:00", "2026-11-01T10:00:00.000Z", "2026-11-01T11:00:00+01:00"]
)
def test_one_round_whose_time_is_written_otherwise_is_still_one_round(tmp_path, made):
    once = abx(12, made="2026-11-01T10:00:00Z")
    found = tally_sheets(save(tmp_path, once, abx(12, made=made, listener=" ADA")))
    assert found.facts["abx"]["pairs"][0]["trials"] == 16
    assert "the same round" in found.refused[0]
