"""What a number of runs says about all runs: means and shares with confidence intervals."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import stats

CONFIDENCE = 0.95


@dataclass(frozen=True)
class Estimate:
    """An estimate and the interval that holds the true value with a confidence.

    The interval is None where one run alone says nothing of the spread.
    """

    value: float
    low: float | None
    high: float | None


def mean_of(
    values: Sequence[float],
    confidence: float = CONFIDENCE,
    within: tuple[float, float] = (-np.inf, np.inf),
) -> Estimate:
    """Estimate a mean with Student's t ("The probable error of a mean", Biometrika 6, 1908).

    Args:
        values: One from each run.
        confidence: Of the interval.
        within: Limits that every mean keeps to, and so the interval too.
    """
    mean = float(np.mean(values))
    if len(values) < 2:
        return Estimate(mean, None, None)
    error = float(np.std(values, ddof=1)) / len(values) ** 0.5
    half = float(stats.t.ppf(0.5 + confidence / 2, len(values) - 1)) * error
    return Estimate(mean, max(mean - half, within[0]), min(mean + half, within[1]))


def share_of(successes: int, runs: int, confidence: float = CONFIDENCE) -> Estimate:
    """Estimate a chance with the score interval of E. B. Wilson (JASA 22, 1927, 209)."""
    found = stats.binomtest(successes, runs).proportion_ci(confidence, method="wilson")
    return Estimate(successes / runs, float(found.low), float(found.high))
