"""What blind listening adds up to: A/B/X trials and preferences of any number of listeners.

    tally = tally_sheets([Path("ann.json"), Path("ben.json")])
    print(tally_text(tally))

Trials of several listeners, and rounds of one, are added up pair by pair; that each listener is shown beside
the sum matters, because a sum hides who heard what, and trials of one listener are not independent of each
other. Where the figures show nothing, the verdict says so.
"""

from collections.abc import Callable, Iterator, Mapping, Sequence
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
from glidesmith.tallytext import counted, facts_text, named, rounded, with_correction
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

ABX_TEST = (
    "exact one-sided binomial test, corrected by Holm's method for the number of tests: one for each "
    "listener of each pair, and one for all together where there are several"
)
PREFERENCE_TEST = (
    "exact two-sided sign test over listeners, a vote each, or over the choices of the only one; corrected "
    "by Holm's method for the number of pairs"
)

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

Excerpt = tuple[float, float] | None


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
            "evidence": corrected < SIGNIFICANCE,
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
            "rounds": [_missing_facts(round_, sheets[0].set) for round_ in missing],
        },
        "refused": list(refused),
    }
    return Tally(facts, refused)


def tally_text(tally: Tally) -> str:
    """The tally for a terminal: plain text, one pair of candidates after the other."""
    return facts_text(tally.facts)


def _missing(sheets: Sequence[Sheet]) -> tuple[list[EarlierRound], int]:
    """Earlier rounds that sheets tell of and that are not among them, and how many more no sheet lists."""
    told: dict[str, EarlierRound] = {}
    for sheet in sorted(sheets, key=lambda sheet: instant(sheet.made)):
        told.update((each.id, each) for each in sheet.earlier.rounds)
    given = {sheet.id for sheet in sheets}
    missing = sorted((each for each in told.values() if each.id not in given), key=lambda each: each.made)
    return missing, sum(_unlisted_of_device(own) for own in _devices(sheets))


def _devices(sheets: Sequence[Sheet]) -> list[list[Sheet]]:
    """The sheets of each device: those that tell of the same rounds, or stand in one file."""
    found: list[tuple[set[object], list[Sheet]]] = []
    for sheet in sheets:
        marks: set[object] = {sheet.path, *(each.id for each in sheet.earlier.rounds)}
        if sheet.id:
            marks.add(sheet.id)
        own = [sheet]
        for device in [device for device in found if not marks.isdisjoint(device[0])]:
            found.remove(device)
            marks |= device[0]
            own += device[1]
        found.append((marks, own))
    return [own for _, own in found]


def _unlisted_of_device(sheets: Sequence[Sheet]) -> int:
    """How many rounds of a device no sheet lists."""
    known = {each.id: each.made for sheet in sheets for each in sheet.earlier.rounds}
    known |= {sheet.id: sheet.made for sheet in sheets if sheet.id}
    return max(_unlisted(sheet, known) for sheet in sheets)


def _unlisted(sheet: Sheet, known: Mapping[str, str]) -> int:
    """How many of a sheet's earlier rounds neither it nor another sheet of its device lists."""
    listed = {each.id for each in sheet.earlier.rounds}
    before = [
        made for key, made in known.items() if key not in listed and instant(made) < instant(sheet.made)
    ]
    return max(sheet.earlier.count - len(listed) - len(before), 0)


def _missing_facts(told: EarlierRound, of_set: str) -> dict[str, object]:
    return {
        "test": told.test,
        "listener": told.listener,
        "made": told.made,
        "labels": list(told.labels),
        "answered": told.answered,
        "planned": told.planned,
        "finished": told.finished,
        "of_another_set": told.set not in ("", of_set),
    }


def _fewest(
    trials: int, best: Callable[[int], float], place: int, probabilities: Sequence[float]
) -> int | None:
    """How many trials could show something, where so many can't; None where they can.

    ``best(n)`` is the probability of the clearest result of n trials. It is corrected as the one at ``place``
    among the ``probabilities`` of all tests.
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


@dataclass(frozen=True, slots=True)
class _Group:
    """Rounds of one pair of candidates over one excerpt: ``members`` are listeners and their sheets."""

    excerpt_s: Excerpt
    members: list[tuple[str, AbxSheet]]

    @property
    def pair(self) -> frozenset[str]:
        return frozenset(self.members[0][1].pair)

    @property
    def listeners(self) -> list[Score]:
        names = dict.fromkeys(name for name, _ in self.members)
        return [_score(name, [sheet for member, sheet in self.members if member == name]) for name in names]

    @property
    def pooled(self) -> Score:
        return _score("", [sheet for _, sheet in self.members])


def _score(name: str, rounds: Sequence[AbxSheet]) -> Score:
    return Score(name, len(rounds), sum(s.correct for s in rounds), sum(s.trials for s in rounds))


def _abx(
    sheets: Sequence[AbxSheet], given_up: Sequence[AbxSheet], missing: Sequence[EarlierRound]
) -> dict[str, object] | None:
    """Every pair of candidates that was listened to, excerpt by excerpt, with its listeners and what rounds
    are not counted."""
    if not sheets:
        return None
    groups: dict[tuple[frozenset[str], Excerpt], _Group] = {}
    for name, sheet in zip(_names(sheets), sheets, strict=True):
        key = frozenset(sheet.pair), sheet.excerpt_s
        groups.setdefault(key, _Group(sheet.excerpt_s, [])).members.append((name, sheet))
    # A test for each listener; where there are several, one for their sum before them.
    scores = [
        [group.pooled, *listeners] if len(listeners) > 1 else listeners
        for group, listeners in ((group, group.listeners) for group in groups.values())
    ]
    probabilities = [score.probability for own in scores for score in own]
    corrected = holm(probabilities)
    entries, place = [], 0
    for group, own in zip(groups.values(), scores, strict=True):
        tested = list(zip(own, corrected[place : place + len(own)], strict=True))
        fewest = _fewest(own[0].trials, lambda n: guessing_probability(n, n), place, probabilities)
        entry = _abx_entry(group, tested)
        entry["verdict"] = _abx_verdict(tested, fewest, len(probabilities))
        entry["warnings"] = [*_abx_warnings(group), *_uncounted(group, given_up, missing)]
        entries.append(entry)
        place += len(own)
    return {"test": ABX_TEST, "tests": len(probabilities), "confidence": CONFIDENCE, "pairs": entries}


def _abx_entry(group: _Group, tested: Sequence[tuple[Score, float]]) -> dict[str, object]:
    first = group.members[0][1]
    total = tested[0][0].as_dict(tested[0][1])
    del total["listener"]
    listeners = tested[1:] or tested
    return {
        "pair": list(first.pair),
        "labels": list(first.labels),
        "excerpt_s": None if group.excerpt_s is None else list(group.excerpt_s),
        **total,
        "listeners": [score.as_dict(value) for score, value in listeners],
    }


def _abx_warnings(group: _Group) -> list[str]:
    """What to bear in mind of rounds by these listeners."""
    names = [name for name, _ in group.members]
    several = [DEPENDENT] if len(set(names)) > 1 else []
    return [*several, REPEATED] if len(set(names)) < len(names) else several


def _uncounted(group: _Group, given_up: Sequence[AbxSheet], missing: Sequence[EarlierRound]) -> Iterator[str]:
    """Warnings of a pair's rounds that are not counted."""
    left = sum(frozenset(sheet.pair) == group.pair for sheet in given_up)
    absent = sum(each.pair == group.pair for each in missing)
    if left:
        yield f"{counted(left, 'round')} of this pair given up and not counted; {GIVEN_UP}"
    if absent:
        yield f"{counted(absent, 'earlier round')} of this pair not among these files; {PICKED}"


def _abx_verdict(tested: Sequence[tuple[Score, float]], fewest: int | None, tests: int) -> str:
    """In a sentence. ``tested``: scores with their corrected probabilities, that of all together first where
    there are several listeners; ``fewest``: see `_fewest`."""
    score, corrected = tested[0]
    said = _by_guessing(score.probability, corrected, tests)
    listeners = tested[1:]
    heard = [each for each in listeners if each[1] < SIGNIFICANCE]
    if heard:
        return _who_heard(heard, [each for each in listeners if each not in heard], tests)
    if corrected < SIGNIFICANCE:
        alone = " by all together, though by none alone" if listeners else f" by {score.listener}"
        return f"evidence that the two can be told apart{alone}: {said}"
    if fewest is not None:
        return f"no evidence, and there could be none: {_too_few(score.trials, 'trial', fewest)}"
    so_few = guessing_probability(score.trials - score.correct, score.trials)
    if so_few < SIGNIFICANCE:
        return (
            f"no evidence that the two can be told apart, but so few correct answers come by guessing with a "
            f"probability of only {rounded(so_few)}: were the answers the wrong way round?"
        )
    return f"no evidence that the two can be told apart: {said}; {NO_PROOF_OF_SAMENESS}"


def _who_heard(
    heard: Sequence[tuple[Score, float]], others: Sequence[tuple[Score, float]], tests: int
) -> str:
    """Of whom there is evidence, and of whom there is none."""
    least = max(heard, key=lambda each: each[1])
    worst = "at worst, " if len(heard) > 1 else ""
    said = f"{worst}{_by_guessing(least[0].probability, least[1], tests)}"
    names = named([score.listener for score, _ in heard])
    if not others:
        return f"evidence that the two can be told apart by each of {names}: {said}"
    rest = named([score.listener for score, _ in others])
    return f"evidence that {names} can tell the two apart ({said}), and none that {rest} can"


def _too_few(count: int, noun: str, fewest: int) -> str:
    verb = "is" if count == 1 else "are"
    return f"{counted(count, noun)} {verb} too few to show anything, {fewest} are the fewest"


def _by_guessing(probability: float, corrected: float, tests: int) -> str:
    chance = with_correction(probability, corrected, tests, "test")
    return f"guessing does as well with a probability of {chance}"


_Choice = tuple[str, str | None]
"""A listener, and what they chose: a hash, or None for neither."""


def _preference(
    sheets: Sequence[PreferenceSheet], missing: Sequence[EarlierRound]
) -> dict[str, object] | None:
    """Every pair of candidates, excerpt by excerpt, with who won how often, and each listener's choices."""
    if not sheets:
        return None
    names = _names(sheets)
    labels: dict[str, str] = {}
    for sheet in sheets:
        for digest, label in sheet.labels.items():
            labels.setdefault(digest, label)
    choices: dict[tuple[Excerpt, frozenset[str]], list[_Choice]] = {}
    for name, sheet in zip(names, sheets, strict=True):
        for judgement in sheet.judgements:
            key = sheet.excerpt_s, frozenset(judgement.pair)
            choices.setdefault(key, []).append((name, judgement.preferred))
    excerpts = dict.fromkeys(excerpt for excerpt, _ in choices)
    groups = {
        (excerpt, pair): choices[excerpt, frozenset(pair)]
        for excerpt in excerpts
        for pair in combinations(labels, 2)
        if (excerpt, frozenset(pair)) in choices
    }
    entries = _preference_pairs(labels, groups)
    totals = [_total(digest, label, entries) for digest, label in labels.items()]
    totals.sort(key=lambda total: total["wins"] / max(total["comparisons"], 1), reverse=True)
    warnings = [REPEATED] if len(set(names)) < len(names) else []
    absent = sum(each.test == "preference" for each in missing)
    if absent:
        rounds = counted(absent, "earlier round")
        warnings.append(f"{rounds} of preferences not among these files; {PICKED}")
    return {
        "test": PREFERENCE_TEST,
        "rounds": len(sheets),
        "candidates": totals,
        "pairs": entries,
        "warnings": warnings,
    }


def _preference_pairs(
    labels: Mapping[str, str], groups: Mapping[tuple[Excerpt, tuple[str, str]], Sequence[_Choice]]
) -> list[dict[str, Any]]:
    """What listeners chose of each pair of hashes, and what that shows.

    Choices of one listener are not independent of each other: of several listeners each has one vote. Where
    there is one only, their choices tell of them alone.
    """
    votes = [_votes(judged, pair) for (_, pair), judged in groups.items()]
    probabilities = [sign_test(*counts) for counts in votes]
    corrected = holm(probabilities)
    entries = []
    for place, ((excerpt, pair), judged) in enumerate(groups.items()):
        both = [labels[digest] for digest in pair]
        names = list(dict.fromkeys(name for name, _ in judged))
        only = names[0] if len(names) == 1 else None
        fewest = _fewest(sum(votes[place]), lambda n: sign_test(n, 0), place, probabilities)
        chance = with_correction(probabilities[place], corrected[place], len(groups), "pair")
        shows = corrected[place] < SIGNIFICANCE
        entries.append(
            {
                "pair": list(pair),
                "labels": both,
                "excerpt_s": None if excerpt is None else list(excerpt),
                "wins": [_count(judged, digest) for digest in pair],
                "no_preference": _count(judged, None),
                "counted": "votes" if only is None else "choices",
                "votes": votes[place],
                "probability": probabilities[place],
                "probability_corrected": corrected[place],
                "evidence": shows,
                "verdict": _preference_verdict(both, votes[place], only, shows, chance, fewest),
                "listeners": [
                    {"listener": name, "preferred": None if chosen is None else labels[chosen]}
                    for name, chosen in judged
                ],
            }
        )
    return entries


def _count(judged: Sequence[_Choice], chosen: str | None) -> int:
    return sum(choice == chosen for _, choice in judged)


def _votes(judged: Sequence[_Choice], pair: Sequence[str]) -> list[int]:
    """For each of the pair, how many listeners chose it more often than the other; of one listener, how often
    they chose it."""
    own: dict[str, list[_Choice]] = {}
    for name, chosen in judged:
        own.setdefault(name, []).append((name, chosen))
    counts = [[_count(choices, digest) for digest in pair] for choices in own.values()]
    if len(counts) == 1:
        return counts[0]
    return [sum(one > other for one, other in counts), sum(other > one for one, other in counts)]


def _total(digest: str, label: str, entries: Sequence[Mapping[str, Any]]) -> dict[str, Any]:
    """How often a candidate won, of how often it was heard in a pair."""
    own = [each for each in entries if digest in each["pair"]]
    return {
        "label": label,
        "settings_sha256": digest,
        "wins": sum(each["wins"][each["pair"].index(digest)] for each in own),
        "comparisons": sum(len(each["listeners"]) for each in own),
    }


def _preference_verdict(
    labels: Sequence[str],
    votes: Sequence[int],
    only: str | None,
    shows: bool,
    chance: str,
    fewest: int | None,
) -> str:
    """``only``: the one listener whose choices ``votes`` are, if there is one; ``fewest``: see `_fewest`."""
    better = labels[0] if votes[0] > votes[1] else labels[1]
    if shows and only is not None:
        return f"{only} prefers {better} (probability {chance}), which tells of no other listener"
    if shows:
        of_all = f"{max(votes)} of {counted(sum(votes), 'listener')}"
        return f"{better} is preferred by {of_all} (probability {chance})"
    if fewest is not None:
        too_few = _too_few(sum(votes), "vote" if only is None else "choice", fewest)
        return f"no evidence of a preference, and there could be none: {too_few}"
    return f"no evidence of a preference (probability {chance})"


def _unfinished(sheet: Sheet) -> dict[str, object]:
    """A round that was given up: told, and not counted."""
    told: dict[str, object] = {"file": str(sheet.path), "listener": sheet.listener}
    if isinstance(sheet, AbxSheet):
        counts = {"correct": sheet.correct, "trials": sheet.trials, "trials_planned": sheet.planned}
        return {**told, "test": "abx", "labels": list(sheet.labels), **counts}
    planned = len(sheet.labels) * (len(sheet.labels) - 1) // 2
    return {**told, "test": "preference", "pairs": len(sheet.judgements), "pairs_planned": planned}
