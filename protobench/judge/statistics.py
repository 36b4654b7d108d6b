"""What a number of trials shows: exact binomial limits, the success-run theorem, Wald's sequential test.

Trials are taken to be independent and alike. Counts are whole numbers; shares and confidences lie between 0 and 1.
ValueError names the argument, its value and the rule.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

TRIALS_MAX = 10_000_000


def binomial_limits(count: int, trials: int, confidence: float) -> tuple[float, float]:
    """The two-sided exact limits of a share after ``count`` of ``trials`` (Clopper and Pearson, 1934)."""
    tail = (1 - _share("confidence", confidence)) / 2
    return lower_limit(count, trials, 1 - tail), upper_limit(count, trials, 1 - tail)


def lower_limit(count: int, trials: int, confidence: float) -> float:
    """The share that is at least there, with this one-sided confidence."""
    from scipy.stats import beta  # noqa: PLC0415 - slow to import

    _counts(count, trials)
    _share("confidence", confidence)
    return float(beta.ppf(1 - confidence, count, trials - count + 1)) if count else 0.0


def upper_limit(count: int, trials: int, confidence: float) -> float:
    """The share that is at most there, with this one-sided confidence."""
    return 1 - lower_limit(trials - count, trials, confidence)


def tail_probability(count: int, trials: int, share: float) -> float:
    """The probability of ``count`` or more in ``trials`` when each comes with probability ``share``."""
    from scipy.stats import binom  # noqa: PLC0415

    _counts(count, trials)
    return float(binom.sf(count - 1, trials, share))


def trials_needed(reliability: float, confidence: float, failures: int = 0) -> int:
    """How many trials, with at most this many failures among them, show a reliability (success-run theorem).

    With no failure the smallest n for which reliability^n is at most 1 - confidence.
    """
    from scipy.stats import binom  # noqa: PLC0415

    _share("reliability", reliability)
    _share("confidence", confidence)
    if failures < 0:
        raise ValueError(f"failures = {failures}: not less than 0")
    needed = math.log1p(-confidence) / math.log(reliability)
    if needed > TRIALS_MAX:
        raise ValueError(
            f"reliability = {reliability} with confidence = {confidence} needs {needed:.3g} trials; "
            f"more than {TRIALS_MAX} are not made"
        )
    trials = max(1, math.ceil(needed * (1 - 1e-12)))
    while binom.cdf(failures, trials, 1 - reliability) > (1 - confidence) * (1 + 1e-12):
        trials += 1
    return trials


@dataclass(frozen=True, slots=True)
class SequentialTest:
    """Wald's sequential test of a share of failures: ``good`` against ``bad``, with the risks of a wrong decision.

    ``alpha``: of rejecting what is good; ``beta``: of accepting what is bad (Wald, Sequential Analysis, 1947).
    """

    good: float
    bad: float
    alpha: float
    beta: float

    def __post_init__(self) -> None:
        for name in ("good", "bad", "alpha", "beta"):
            _share(name, getattr(self, name))
        if not self.good < self.bad:
            raise ValueError(f"good = {self.good}: less than bad = {self.bad}")

    def decide(self, failures: int, trials: int) -> str:
        """``accept``, ``reject`` or ``go on`` after so many."""
        _counts(failures, trials)
        weight = failures * math.log(self.bad / self.good) + (trials - failures) * math.log(
            (1 - self.bad) / (1 - self.good)
        )
        if weight >= math.log((1 - self.beta) / self.alpha):
            return "reject"
        return "accept" if weight <= math.log(self.beta / (1 - self.alpha)) else "go on"


def _share(name: str, value: float) -> float:
    if not 0 < value < 1:
        raise ValueError(f"{name} = {value}: between 0 and 1, neither included")
    return value


def _counts(count: int, trials: int) -> None:
    if trials < 1:
        raise ValueError(f"trials = {trials}: at least 1")
    if not 0 <= count <= trials:
        raise ValueError(f"count = {count}: from 0 to the number of trials, {trials}")
