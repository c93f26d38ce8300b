"""Exact figures for counts of successes: what guessing would do, and what a share may really be.

An A/B/X trial is a coin toss to a listener who hears no difference, so correct answers are binomial with 1/2.
Everything here comes from the binomial distribution itself; there is no normal approximation.
"""

import math
from collections.abc import Callable, Sequence
from fractions import Fraction
from typing import NamedTuple

from glidesmith.errors import SettingError

CONFIDENCE = 0.95
MOST_TRIALS = 1_000


class Trials(NamedTuple):
    """A number of trials, and how many correct answers among them are needed."""

    trials: int
    correct: int


def guessing_probability(correct: int, trials: int) -> float:
    """P(X ≥ correct) when every answer is a guess: X is binomial with 1/2. One-sided, exact."""
    _check_counts(correct, trials)
    term = math.comb(trials, correct)
    total = 0
    for k in range(correct, trials + 1):
        total += term
        term = term * (trials - k) // (k + 1)
    return float(Fraction(total, 1 << trials))


def sign_test(wins: int, losses: int) -> float:
    """The two-sided sign test: the exact probability of a result at least this uneven when both are equally
    likely.

    Judgements without a preference are left out beforehand (Dixon and Mood, "The statistical sign test", J.
    Am. Stat. Assoc. 41, 1946; from memory).
    """
    trials = wins + losses
    return min(1.0, 2.0 * guessing_probability(max(wins, losses), trials)) if trials else 1.0


def confidence_interval(correct: int, trials: int, confidence: float = CONFIDENCE) -> tuple[float, float]:
    """The Clopper-Pearson interval of the share of correct answers, from 0 to 1.

    Its ends are the shares at which the result, or one further out, has the probability (1 − confidence)/2
    (Clopper and Pearson, "The use of confidence or fiducial limits illustrated in the case of the binomial",
    Biometrika 26, 1934; from memory).
    """
    _check_counts(correct, trials)
    _check_share("confidence", confidence)
    tail = 0.5 * (1.0 - confidence)
    low = 0.0 if correct == 0 else _share_at(tail, lambda share: upper_tail(correct, trials, share))
    if correct == trials:
        return low, 1.0
    # What is wrong is binomial too, with the share 1 - p.
    wrong = trials - correct
    return low, 1.0 - _share_at(tail, lambda share: upper_tail(wrong, trials, share))


def upper_tail(correct: int, trials: int, share: float) -> float:
    """P(X ≥ correct) for X binomial with ``trials`` and ``share``, a probability from 0 to 1."""
    if correct <= 0:
        return 1.0
    if not 0.0 < share < 1.0:
        return 0.0 if share <= 0.0 else 1.0
    if correct <= trials * share:
        # The terms are summed from the rarer side, where they fall off.
        return 1.0 - upper_tail(trials - correct + 1, trials, 1.0 - share)
    log_term = (
        math.lgamma(trials + 1)
        - math.lgamma(correct + 1)
        - math.lgamma(trials - correct + 1)
        + correct * math.log(share)
        + (trials - correct) * math.log1p(-share)
    )
    term, total = 1.0, 0.0
    odds = share / (1.0 - share)
    for k in range(correct, trials + 1):
        total += term
        term *= (trials - k) / (k + 1) * odds
        if term < 1e-18 * total:
            break
    return min(1.0, math.exp(log_term) * total)


def _share_at(tail: float, probability: Callable[[float], float]) -> float:
    """Where a probability that grows with the share is ``tail``, by bisection."""
    low, high = 0.0, 1.0
    for _ in range(80):
        middle = 0.5 * (low + high)
        if probability(middle) < tail:
            low = middle
        else:
            high = middle
    return 0.5 * (low + high)


def critical_correct(trials: int, confidence: float = CONFIDENCE) -> int | None:
    """How many of ``trials`` must be correct so that guessing does as well with at most 1 − confidence.

    None where even all of them are not enough.
    """
    _check_share("confidence", confidence)
    for correct in range(trials // 2, trials + 1):
        if guessing_probability(correct, trials) <= 1.0 - confidence + 1e-15:
            return correct
    return None


def trials_needed(confidence: float, ability: float, power: float = 0.8) -> Trials:
    """The fewest trials after which a listener of some ability is found out.

    Parameters
    ----------
    confidence : float
        Guessing passes with at most 1 − ``confidence``; over 0.5, under 1. 0.95 is usual.
    ability : float
        The share of trials that the listener gets right in the long run; over 0.5, up to 1.
    power : float
        How likely such a listener is to pass; over 0, under 1.

    Returns
    -------
    Trials
        The number of trials, and how many of them must be correct.

    Raises
    ------
    SettingError
        For a value out of range, and where more than 1000 trials would be needed.
    """
    for name, value, low, high in (
        ("confidence", confidence, 0.5, 1.0),
        ("ability", ability, 0.5, 1.0 + 1e-12),
        ("power", power, 0.0, 1.0),
    ):
        if not low < value < high:
            raise SettingError(f"{name} = {value!r}: must lie between {low:g} and {min(high, 1.0):g}")
    for trials in range(1, MOST_TRIALS + 1):
        correct = critical_correct(trials, confidence)
        if correct is not None and upper_tail(correct, trials, min(ability, 1.0)) >= power:
            return Trials(trials, correct)
    raise SettingError(
        f"ability = {ability!r}: it would take more than {MOST_TRIALS:,} trials to tell it from guessing"
    )


def holm(probabilities: Sequence[float]) -> list[float]:
    """Probabilities of several tests, corrected so that all together are wrong as seldom as one.

    By Holm, "A simple sequentially rejective multiple test procedure", Scand. J. Statistics 6, 1979 (from
    memory): the smallest times the number of tests, the next times one less, never falling.
    """
    order = sorted(range(len(probabilities)), key=lambda index: probabilities[index])
    corrected = [0.0] * len(probabilities)
    highest = 0.0
    for rank, index in enumerate(order):
        highest = max(highest, min(1.0, probabilities[index] * (len(order) - rank)))
        corrected[index] = highest
    return corrected


def _check_counts(correct: int, trials: int) -> None:
    if not 0 <= correct <= trials:
        raise SettingError(f"{correct!r} correct of {trials!r} trials: give 0 up to all of them")


def _check_share(name: str, value: float) -> None:
    if not 0.0 < value < 1.0:
        raise SettingError(f"{name} = {value!r}: must lie between 0 and 1")
