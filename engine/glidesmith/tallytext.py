"""A tally as text for a terminal, and the words that its verdicts share with it."""

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from glidesmith.binomial import CONFIDENCE

NO_PROOF_OF_EQUAL_LIKING = "this is no evidence that they are liked equally"
_MOST_NAMED = 5


def counted(count: int, noun: str) -> str:
    """A number of things: ``"1 round"``, ``"2 rounds"``."""
    return f"{count:,} {noun}" if count == 1 else f"{count:,} {noun}s"


def named(names: Sequence[str]) -> str:
    """``"Ada"``, ``"Ada and Ben"``, and no more than a few of many."""
    more = len(names) - _MOST_NAMED
    told = [*names[:_MOST_NAMED], f"{more} more"] if more > 0 else list(names)
    return " and ".join(part for part in (", ".join(told[:-1]), told[-1]) if part)


def rounded(probability: float) -> str:
    """A probability with the digits that count."""
    return f"{probability:.3f}" if probability >= 0.001 else f"{probability:.1e}"


def with_correction(probability: float, corrected: float, tests: int, noun: str) -> str:
    """``"0.038, 0.115 after correction for 3 tests"``."""
    if corrected == probability:
        return rounded(probability)
    return f"{rounded(probability)}, {rounded(corrected)} after correction for {counted(tests, noun)}"


def facts_text(facts: Mapping[str, Any]) -> str:
    """What `tally --json` prints, in plain text: one pair of candidates after the other."""
    lines = [f"{counted(facts['sheets'], 'listening sheet')} of the set {facts['set'][:12]}"]
    if facts["abx"]:
        lines += ["", f"A/B/X ({facts['abx']['test']})"]
        for pair in facts["abx"]["pairs"]:
            lines += _abx_lines(pair, facts["abx"]["tests"])
    if facts["preference"]:
        lines += ["", f"Preference ({facts['preference']['test']})"]
        lines += _preference_lines(facts["preference"])
    if facts["unfinished"]:
        lines += ["", "Not finished, and not counted:"]
        lines += [f"  {_unfinished_line(told)}" for told in facts["unfinished"]]
    lines += _missing_lines(facts["earlier_missing"])
    if not facts["abx"] and not facts["preference"]:
        lines += ["", "No finished rounds: there is nothing to add up."]
    return "\n".join(lines)


def _excerpt_text(excerpt_s: Sequence[float] | None) -> str:
    return "" if excerpt_s is None else f", excerpt {excerpt_s[0]:g} to {excerpt_s[1]:g} s"


def _abx_lines(pair: Mapping[str, Any], tests: int) -> Iterator[str]:
    yield f"  {pair['labels'][0]}  or  {pair['labels'][1]}{_excerpt_text(pair['excerpt_s'])}"
    for score in pair["listeners"]:
        yield f"    {score['listener']}: {_score_text(score, tests)}"
    if len(pair["listeners"]) > 1:
        yield f"    all together: {_score_text(pair, tests)}"
    yield f"    {pair['verdict']}"
    yield from (f"    note: {warning}" for warning in pair["warnings"])


def _score_text(score: Mapping[str, Any], tests: int) -> str:
    low, high = (100.0 * share for share in score["confidence_interval"])
    rounds = f" in {score['rounds']} rounds" if score["rounds"] > 1 else ""
    chance = with_correction(score["probability"], score["probability_corrected"], tests, "test")
    return (
        f"{score['correct']} of {score['trials']} correct{rounds}, probability by guessing {chance}; "
        f"{100.0 * CONFIDENCE:g} % interval of the share {low:.0f} to {high:.0f} %"
    )


def _preference_lines(preference: Mapping[str, Any]) -> Iterator[str]:
    for pair in preference["pairs"]:
        wins, votes = pair["wins"], pair["votes"]
        neither = f", no preference {pair['no_preference']}" if pair["no_preference"] else ""
        by_vote = f", votes {votes[0]} : {votes[1]}" if pair["counted"] == "votes" and votes != wins else ""
        told = f"{pair['labels'][0]} {wins[0]} : {wins[1]} {pair['labels'][1]}{neither}{by_vote}"
        yield f"  {told}{_excerpt_text(pair['excerpt_s'])}: {pair['verdict']}"
    totals = (f"{each['label']} {each['wins']} of {each['comparisons']}" for each in preference["candidates"])
    yield f"  wins in all: {', '.join(totals)}"
    chosen: dict[str, list[str]] = {}
    for pair in preference["pairs"]:
        for row in pair["listeners"]:
            chosen.setdefault(row["listener"], []).append(row["preferred"] or "neither")
    yield from (f"  {listener} chose {', '.join(choices)}" for listener, choices in chosen.items())
    if not any(pair["evidence"] for pair in preference["pairs"]):
        yield f"  no pair shows a preference; {NO_PROOF_OF_EQUAL_LIKING}"
    yield from (f"  note: {warning}" for warning in preference["warnings"])


def _unfinished_line(told: Mapping[str, Any]) -> str:
    who = f"{told['file']}, {told['listener'] or 'no name'}"
    if told["test"] == "abx":
        return (
            f"{who}: {told['labels'][0]} or {told['labels'][1]}, {told['correct']} of {told['trials']} "
            f"correct, {told['trials_planned']} planned"
        )
    return f"{who}: preference, {told['pairs']} of {told['pairs_planned']} pairs"


def _missing_lines(missing: Mapping[str, Any]) -> Iterator[str]:
    if not missing["count"]:
        return
    yield ""
    yield f"{counted(missing['count'], 'earlier round')} not among these files, on the same devices:"
    for told in missing["rounds"]:
        test = "preference" if told["test"] == "preference" else "A/B/X"
        between = f" {' or '.join(told['labels'])}," if told["labels"] else ""
        state = "finished" if told["finished"] else "not finished"
        whose = ", of another set of these candidates" if told["of_another_set"] else ""
        yield (
            f"  {test},{between} {told['listener'] or 'no name'}, {told['made']}: "
            f"{told['answered']} of {told['planned']} answered, {state}{whose}"
        )
    unlisted = missing["count"] - len(missing["rounds"])
    if unlisted:
        yield f"  and {unlisted:,} that no sheet lists"
