"""What blind listening adds up to: A/B/X trials and preferences of any number of listeners.

    tally = tally_sheets([Path("ann.json"), Path("ben.json")])
    print(tally_text(tally))

Trials of several listeners, and rounds of one, are added up pair by pair; that each listener is shown beside
the sum matters, because a sum hides who heard what, and trials of one listener are not independent of each
other. Where the figures show nothing, the verdict says so.
"""

from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import combinations
from pathlib import Path
from typing import Any

from glidesmith.binomial import (
    CONFIDENCE,
    Trials,
    confidence_interval,
    critical_correct,
    guessing_probability,
    holm,
    sign_test,
    trials_needed,
)
from glidesmith.sheets import (
    AbxSheet,
    EarlierRound,
    PreferenceSheet,
    Sheet,
    SheetError,
    accepted_sheets,
    instant,
)
from glidesmith.text import shortened

__all__ = [
    "Trials",
    "confidence_interval",
    "critical_correct",
    "guessing_probability",
    "holm",
    "sign_test",
    "tally_sheets",
    "tally_text",
    "trials_needed",
]

SIGNIFICANCE = 0.05
"""A probability under this counts as evidence: a chance result in twenty (common practice)."""

PREFERENCE_TEST = "exact two-sided sign test, corrected by Holm's method for the number of pairs"
ABX_TEST = "exact one-sided binomial test, corrected by Holm's method for the number of pairs"

DEPENDENT = (
    "pooled trials are not independent: those of one listener resemble each other, so the pooled "
    "probability may be too small; look at each listener"
)
REPEATED = (
    "more than one round of a listener is counted; rounds repeated until one turns out well prove nothing, "
    "so decide beforehand how many there are"
)
GIVEN_UP = "giving up when it goes badly makes the rest look better than it is"
PICKED = "a result that is picked from several proves less than it seems"
NO_PROOF_OF_SAMENESS = "this is no evidence that they sound the same"
NO_PROOF_OF_EQUAL_LIKING = "this is no evidence that they are liked equally"


@dataclass(frozen=True, slots=True)
class Score:
    """Correct answers of trials: of one listener, in ``rounds`` rounds, or pooled."""

    listener: str
    rounds: int
    correct: int
    trials: int

    @property
    def probability(self) -> float:
        """How often guessing does as well or better."""
        return guessing_probability(self.correct, self.trials)

    def as_dict(self, corrected: float) -> dict[str, object]:
        """Fit for JSON; ``corrected`` is the probability after correction for several tests."""
        return {
            "listener": self.listener,
            "rounds": self.rounds,
            "correct": self.correct,
            "trials": self.trials,
            "probability": self.probability,
            "probability_corrected": corrected,
            "confidence_interval": list(confidence_interval(self.correct, self.trials)),
        }


@dataclass(frozen=True, slots=True)
class Tally:
    """What sheets add up to. ``facts``: what `tally --json` prints; ``refused``: why others don't count."""

    facts: Mapping[str, object]
    refused: tuple[str, ...]


def tally_sheets(paths: Sequence[Path]) -> Tally:
    """Add up listening sheets of one set.

    Sheets that are damaged, inconsistent, of another set than the first good one, or there twice are refused
    and named, a line each; the others are added up all the same.

    Raises SheetError, with all those lines, where no sheet is left.
    """
    sheets, errors = accepted_sheets(paths)
    refused = tuple(line for error in errors for line in error.lines)
    if not sheets:
        raise SheetError(*(refused or ("no listening sheets: give the files that the page saved",)))
    rounds = [sheet for sheet in sheets if isinstance(sheet, AbxSheet) and sheet.finished]
    given_up = [sheet for sheet in sheets if isinstance(sheet, AbxSheet) and not sheet.finished]
    preferences = [sheet for sheet in sheets if isinstance(sheet, PreferenceSheet) and sheet.finished]
    missing, unlisted = _missing(sheets)
    facts: dict[str, object] = {
        "kind": "glidesmith tally",
        "version": 1,
        "set": sheets[0].set,
        "sheets": len(sheets),
        "abx": _abx(rounds, given_up, missing),
        "preference": _preference(preferences, missing),
        "unfinished": [_unfinished(sheet) for sheet in sheets if not sheet.finished],
        "earlier_missing": {
            "count": len(missing) + unlisted,
            "rounds": [_missing_facts(round_) for round_ in missing],
        },
        "refused": list(refused),
    }
    return Tally(facts, refused)


def _missing(sheets: Sequence[Sheet]) -> tuple[list[EarlierRound], int]:
    """Earlier rounds that sheets tell of and that are not among them, and how many more no sheet lists."""
    told: dict[str, EarlierRound] = {}
    for sheet in sorted(sheets, key=lambda sheet: instant(sheet.made)):
        told.update((each.id, each) for each in sheet.earlier.rounds)
    given = {sheet.id: sheet.made for sheet in sheets if sheet.id}
    known = {each.id: each.made for each in told.values()} | given
    missing = sorted((each for each in told.values() if each.id not in given), key=lambda each: each.made)
    return missing, max(_unlisted(sheet, known) for sheet in sheets)


def _unlisted(sheet: Sheet, known: Mapping[str, str]) -> int:
    """How many of a sheet's earlier rounds neither it nor another sheet lists."""
    listed = {each.id for each in sheet.earlier.rounds}
    before = [
        made for key, made in known.items() if key not in listed and instant(made) < instant(sheet.made)
    ]
    return max(sheet.earlier.count - len(listed) - len(before), 0)


def _missing_facts(told: EarlierRound) -> dict[str, object]:
    return {
        "test": told.test,
        "listener": told.listener,
        "made": told.made,
        "labels": list(told.labels),
        "answered": told.answered,
        "planned": told.planned,
        "finished": told.finished,
    }


def _fewest(
    trials: int, best: Callable[[int], float], place: int, probabilities: Sequence[float]
) -> int | None:
    """How many trials could show something, where so many can't; None where they can.

    ``best(n)`` is the probability of the clearest result of n trials. It is corrected as the one at ``place``
    among the ``probabilities`` of all pairs.
    """

    def could(n: int) -> bool:
        return holm([*probabilities[:place], best(n), *probabilities[place + 1 :]])[place] < SIGNIFICANCE

    return None if could(trials) else next(n for n in range(trials, 1000) if could(n))


def _names(sheets: Sequence[Sheet]) -> list[str]:
    """Each sheet's listener; names that differ in capitals only are one, nameless sheets are one each."""
    first: dict[str, str] = {}
    return [
        first.setdefault(sheet.listener.casefold(), sheet.listener)
        if sheet.listener
        else f"no name ({shortened(sheet.path.name)})"
        for sheet in sheets
    ]


def _abx(
    sheets: Sequence[AbxSheet], given_up: Sequence[AbxSheet], missing: Sequence[EarlierRound]
) -> dict[str, object] | None:
    """Every pair of candidates that was listened to, with its listeners and what rounds are not counted."""
    if not sheets:
        return None
    names = _names(sheets)
    pairs: dict[frozenset[str], list[tuple[str, AbxSheet]]] = {}
    for name, sheet in zip(names, sheets, strict=True):
        pairs.setdefault(frozenset(sheet.pair), []).append((name, sheet))
    pooled = [_score("", (sheet for _, sheet in members)) for members in pairs.values()]
    probabilities = [score.probability for score in pooled]
    corrected = holm(probabilities)
    entries = []
    for place, (pair, members) in enumerate(pairs.items()):
        entry = _abx_pair(members, pooled[place], corrected[place])
        fewest = _fewest(pooled[place].trials, lambda n: guessing_probability(n, n), place, probabilities)
        uncounted = _uncounted(
            sum(frozenset(sheet.pair) == pair for sheet in given_up),
            sum(each.pair == pair for each in missing),
        )
        entry["verdict"] = _abx_verdict(pooled[place], corrected[place], fewest)
        entry["warnings"] = [*_abx_warnings([name for name, _ in members]), *uncounted]
        entries.append(entry)
    return {"test": ABX_TEST, "confidence": CONFIDENCE, "pairs": entries}


def _score(name: str, sheets: Iterable[AbxSheet]) -> Score:
    rounds = list(sheets)
    return Score(name, len(rounds), sum(s.correct for s in rounds), sum(s.trials for s in rounds))


def _abx_pair(members: Sequence[tuple[str, AbxSheet]], pooled: Score, corrected: float) -> dict[str, object]:
    first = members[0][1]
    listeners = [
        _score(name, (sheet for member, sheet in members if member == name))
        for name in dict.fromkeys(name for name, _ in members)
    ]
    own = holm([score.probability for score in listeners])
    total = pooled.as_dict(corrected)
    del total["listener"]
    return {
        "pair": list(first.pair),
        "labels": list(first.labels),
        **total,
        "evidence": corrected < SIGNIFICANCE,
        "listeners": [score.as_dict(value) for score, value in zip(listeners, own, strict=True)],
    }


def _abx_warnings(names: Sequence[str]) -> list[str]:
    """What to bear in mind of rounds by these listeners."""
    several = [DEPENDENT] if len(set(names)) > 1 else []
    return [*several, REPEATED] if len(set(names)) < len(names) else several


def _uncounted(given_up: int, missing: int) -> Iterator[str]:
    """Warnings of a pair's rounds that are not counted."""
    if given_up:
        yield f"{_counted(given_up, 'round')} of this pair given up and not counted; {GIVEN_UP}"
    if missing:
        yield f"{_counted(missing, 'earlier round')} of this pair not among these files; {PICKED}"


def _abx_verdict(score: Score, corrected: float, fewest: int | None) -> str:
    """``fewest``: see `_fewest`."""
    if corrected < SIGNIFICANCE:
        return f"evidence that the two can be told apart: {_by_guessing(corrected)}"
    if fewest is not None:
        return f"no evidence, and there could be none: {_too_few(score.trials, 'trial', fewest)}"
    so_few = guessing_probability(score.trials - score.correct, score.trials)
    if so_few < SIGNIFICANCE:
        return (
            f"no evidence that the two can be told apart, but so few correct answers come by guessing with a "
            f"probability of only {_rounded(so_few)}: were the answers the wrong way round?"
        )
    return f"no evidence that the two can be told apart: {_by_guessing(corrected)}; {NO_PROOF_OF_SAMENESS}"


def _too_few(count: int, noun: str, fewest: int) -> str:
    verb = "is" if count == 1 else "are"
    return f"{_counted(count, noun)} {verb} too few to show anything, {fewest} are the fewest"


def _by_guessing(probability: float) -> str:
    return f"guessing does as well with a probability of {_rounded(probability)}"


def _rounded(probability: float) -> str:
    return f"{probability:.3f}" if probability >= 0.001 else f"{probability:.1e}"


def _preference(
    sheets: Sequence[PreferenceSheet], missing: Sequence[EarlierRound]
) -> dict[str, object] | None:
    """Every pair of candidates, with who won how often, and each listener's choices."""
    if not sheets:
        return None
    names = _names(sheets)
    labels: dict[str, str] = {}
    for sheet in sheets:
        for digest, label in sheet.labels.items():
            labels.setdefault(digest, label)
    choices: dict[frozenset[str], list[tuple[str, str | None]]] = {}
    for name, sheet in zip(names, sheets, strict=True):
        for judgement in sheet.judgements:
            choices.setdefault(frozenset(judgement.pair), []).append((name, judgement.preferred))
    pairs = [pair for pair in combinations(labels, 2) if frozenset(pair) in choices]
    entries = _preference_pairs(labels, {pair: choices[frozenset(pair)] for pair in pairs})
    totals = [
        {"label": label, "settings_sha256": digest, "wins": _total_wins(digest, entries)}
        for digest, label in labels.items()
    ]
    totals.sort(key=lambda total: -int(str(total["wins"])))
    warnings = [REPEATED] if len(set(names)) < len(names) else []
    absent = sum(each.test == "preference" for each in missing)
    if absent:
        rounds = _counted(absent, "earlier round")
        warnings.append(f"{rounds} of preferences not among these files; {PICKED}")
    return {
        "test": PREFERENCE_TEST,
        "rounds": len(sheets),
        "candidates": totals,
        "pairs": entries,
        "warnings": warnings,
    }


def _preference_pairs(
    labels: Mapping[str, str], choices: Mapping[tuple[str, str], Sequence[tuple[str, str | None]]]
) -> list[dict[str, Any]]:
    """What listeners chose of each pair of hashes, and what that shows."""
    wins = [[_count(judged, digest) for digest in pair] for pair, judged in choices.items()]
    probabilities = [sign_test(*counts) for counts in wins]
    corrected = holm(probabilities)
    entries = []
    for place, (pair, judged) in enumerate(choices.items()):
        both = [labels[digest] for digest in pair]
        fewest = _fewest(sum(wins[place]), lambda n: sign_test(n, 0), place, probabilities)
        entries.append(
            {
                "pair": list(pair),
                "labels": both,
                "wins": wins[place],
                "no_preference": _count(judged, None),
                "probability": probabilities[place],
                "probability_corrected": corrected[place],
                "evidence": corrected[place] < SIGNIFICANCE,
                "verdict": _preference_verdict(both, wins[place], corrected[place], fewest),
                "listeners": [
                    {"listener": name, "preferred": None if chosen is None else labels[chosen]}
                    for name, chosen in judged
                ],
            }
        )
    return entries


def _count(judged: Sequence[tuple[str, str | None]], chosen: str | None) -> int:
    return sum(choice == chosen for _, choice in judged)


def _total_wins(digest: str, entries: Sequence[Mapping[str, Any]]) -> int:
    return sum(each["wins"][each["pair"].index(digest)] for each in entries if digest in each["pair"])


def _preference_verdict(
    labels: Sequence[str], wins: Sequence[int], probability: float, fewest: int | None
) -> str:
    """``fewest``: see `_fewest`."""
    if probability < SIGNIFICANCE:
        better = labels[0] if wins[0] > wins[1] else labels[1]
        return f"{better} is preferred (probability {_rounded(probability)})"
    if fewest is not None:
        return (
            f"no evidence of a preference, and there could be none: {_too_few(sum(wins), 'choice', fewest)}"
        )
    return f"no evidence of a preference (probability {_rounded(probability)})"


def _unfinished(sheet: Sheet) -> dict[str, object]:
    """A round that was given up: told, and not counted."""
    told: dict[str, object] = {"file": str(sheet.path), "listener": sheet.listener}
    if isinstance(sheet, AbxSheet):
        counts = {"correct": sheet.correct, "trials": sheet.trials, "trials_planned": sheet.planned}
        return {**told, "test": "abx", "labels": list(sheet.labels), **counts}
    planned = len(sheet.labels) * (len(sheet.labels) - 1) // 2
    return {**told, "test": "preference", "pairs": len(sheet.judgements), "pairs_planned": planned}


def tally_text(tally: Tally) -> str:
    """The tally for a terminal: plain text, one pair of candidates after the other."""
    facts: Mapping[str, Any] = tally.facts
    lines = [f"{_counted(facts['sheets'], 'listening sheet')} of the set {facts['set'][:12]}"]
    if facts["abx"]:
        lines += ["", f"A/B/X ({facts['abx']['test']})"]
        for pair in facts["abx"]["pairs"]:
            lines += _abx_lines(pair)
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


def _counted(count: int, noun: str) -> str:
    return f"{count:,} {noun}" if count == 1 else f"{count:,} {noun}s"


def _abx_lines(pair: Mapping[str, Any]) -> Iterator[str]:
    yield f"  {pair['labels'][0]}  or  {pair['labels'][1]}"
    for score in pair["listeners"]:
        yield f"    {score['listener']}: {_score_text(score)}"
    if len(pair["listeners"]) > 1:
        yield f"    all together: {_score_text(pair)}"
    yield f"    {pair['verdict']}"
    yield from (f"    note: {warning}" for warning in pair["warnings"])


def _score_text(score: Mapping[str, Any]) -> str:
    low, high = (100.0 * share for share in score["confidence_interval"])
    rounds = f" in {score['rounds']} rounds" if score["rounds"] > 1 else ""
    corrected = ""
    if score["probability_corrected"] != score["probability"]:
        corrected = f" ({_rounded(score['probability_corrected'])} corrected)"
    return (
        f"{score['correct']} of {score['trials']} correct{rounds}, probability by guessing "
        f"{_rounded(score['probability'])}{corrected}, {100.0 * CONFIDENCE:g} % interval of the share "
        f"{low:.0f} to {high:.0f} %"
    )


def _preference_lines(preference: Mapping[str, Any]) -> Iterator[str]:
    for pair in preference["pairs"]:
        wins = pair["wins"]
        neither = f", no preference {pair['no_preference']}" if pair["no_preference"] else ""
        yield f"  {pair['labels'][0]} {wins[0]} : {wins[1]} {pair['labels'][1]}{neither}: {pair['verdict']}"
    totals = ", ".join(f"{total['label']} {total['wins']}" for total in preference["candidates"])
    yield f"  wins in all: {totals}"
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
    yield f"{_counted(missing['count'], 'earlier round')} not among these files, on the same devices:"
    for told in missing["rounds"]:
        test = "preference" if told["test"] == "preference" else "A/B/X"
        between = f" {' or '.join(told['labels'])}," if told["labels"] else ""
        state = "finished" if told["finished"] else "not finished"
        yield (
            f"  {test},{between} {told['listener'] or 'no name'}, {told['made']}: "
            f"{told['answered']} of {told['planned']} answered, {state}"
        )
    unlisted = missing["count"] - len(missing["rounds"])
    if unlisted:
        yield f"  and {unlisted:,} that no sheet lists"
