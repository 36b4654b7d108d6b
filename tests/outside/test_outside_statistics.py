"""Statistics against published values and an independent reckoning in whole numbers."""

from __future__ import annotations

from fractions import Fraction
from math import comb

import pytest
from scipy.stats import binomtest

from protobench.judge.statistics import (
    SequentialTest,
    binomial_limits,
    lower_limit,
    tail_probability,
    trials_needed,
    upper_limit,
)

# count, trials, confidence, low, high
LIMITS = [
    (4, 20, 0.90, 0.07135, 0.40103),  # NIST/SEMATECH e-Handbook of Statistical Methods, 7.2.4.1; from memory
    (682, 925, 0.95, 0.7076683, 0.7654066),  # R, documentation of binom.test; from memory
]
# confidence, reliability, trials without a failure: the success-run theorem, as tables of reliability handbooks give
# it; common practice, from memory, and reckoned again below
SUCCESS_RUNS = [
    (0.95, 0.99, 299),
    (0.95, 0.999, 2995),
    (0.90, 0.95, 45),
    (0.90, 0.90, 22),
    (0.95, 0.95, 59),
    (0.95, 0.90, 29),
    (0.99, 0.99, 459),
    (0.90, 0.99, 230),
]
WITH_FAILURES = [(0.95, 0.99, (299, 473, 628, 773)), (0.95, 0.95, (59, 93, 124, 153))]


@pytest.mark.parametrize(("count", "trials", "confidence", "low", "high"), LIMITS)
def test_exact_limits(count: int, trials: int, confidence: float, low: float, high: float) -> None:
    assert binomial_limits(count, trials, confidence) == (
        pytest.approx(low, abs=5e-6),
        pytest.approx(high, abs=5e-6),
    )


def test_one_sided_limit() -> None:
    """SciPy's documentation of binomtest: 3 of 15; from memory."""
    assert lower_limit(3, 15, 0.95) == pytest.approx(0.0568469, abs=5e-8)
    assert tail_probability(3, 15, 0.1) == pytest.approx(0.1840611, abs=5e-8)


@pytest.mark.parametrize("trials", [1, 7, 40])
def test_limits_are_those_of_the_library(trials: int) -> None:
    for count in range(trials + 1):
        wanted = binomtest(count, trials).proportion_ci(0.95, method="exact")
        assert binomial_limits(count, trials, 0.95) == pytest.approx((wanted.low, wanted.high), abs=1e-9)
    assert upper_limit(0, trials, 0.95) == pytest.approx(1 - 0.05 ** (1 / trials))


@pytest.mark.parametrize(("confidence", "reliability", "trials"), SUCCESS_RUNS)
def test_success_run(confidence: float, reliability: float, trials: int) -> None:
    assert trials_needed(reliability, confidence) == trials
    exact, left = Fraction(str(reliability)), 1 - Fraction(str(confidence))
    assert exact**trials <= left < exact ** (trials - 1)


@pytest.mark.parametrize(("confidence", "reliability", "trials"), WITH_FAILURES)
def test_some_failures_allowed(confidence: float, reliability: float, trials: tuple[int, ...]) -> None:
    for failures, number in enumerate(trials):
        assert trials_needed(reliability, confidence, failures) == number
        share, left = 1 - Fraction(str(reliability)), 1 - Fraction(str(confidence))
        chance = [
            sum(comb(n, k) * share**k * (1 - share) ** (n - k) for k in range(failures + 1))
            for n in (number, number - 1)
        ]
        assert chance[0] <= left < chance[1]


def test_sequential_plan() -> None:
    """NIST/SEMATECH e-Handbook 6.2.6, an example of a sequential plan; from memory."""
    plan = SequentialTest(good=0.01, bad=0.10, alpha=0.05, beta=0.10)
    assert next(n for n in range(1, 99) if plan.decide(0, n) == "accept") == 24
    assert next(n for n in range(25, 99) if plan.decide(1, n) == "accept") == 49
    reject = {n: next(k for k in range(n + 1) if plan.decide(k, n) == "reject") for n in (2, 19, 20, 45, 46)}
    assert reject == {2: 2, 19: 2, 20: 3, 45: 3, 46: 4}


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: trials_needed(1.0, 0.95), "reliability = 1.0: between 0 and 1"),
        (lambda: trials_needed(0.9, 0.0), "confidence = 0.0: between 0 and 1"),
        (lambda: trials_needed(0.9, 0.9, -1), "failures = -1"),
        (lambda: trials_needed(1 - 1e-12, 0.95), "not made"),
        (lambda: lower_limit(3, 2, 0.9), "count = 3: from 0 to the number of trials, 2"),
        (lambda: upper_limit(0, 0, 0.9), "trials = 0"),
        (lambda: SequentialTest(0.2, 0.1, 0.1, 0.1), "good = 0.2: less than bad = 0.1"),
    ],
)
def test_arguments_are_checked(call: object, words: str) -> None:
    with pytest.raises(ValueError, match=words):
        call()  # type: ignore[operator]
