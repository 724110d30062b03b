"""Tests on the residuals of one observable of one run."""

from __future__ import annotations

from math import comb

import numpy as np
from numpy.typing import ArrayLike


def runs_test(residuals: ArrayLike) -> float | None:
    """Exact one-sided probability of as few runs of like sign as these or fewer, by chance.

    Swed & Eisenhart, Ann. Math. Statist. 14 (1943) 66: given n1 positive and n2 negative residuals every
    order is equally likely. When all have one sign that distribution has a single value, and the probability
    that equally likely signs all agree, 2^(1-n), is given instead. Residuals of exactly zero are left out.

    Parameters
    ----------
    residuals : array_like, shape (n,), in order of time

    Returns
    -------
    float or None
        None when no residual differs from zero.
    """
    signs = np.sign(np.asarray(residuals, dtype=float))
    signs = signs[signs != 0]
    n = len(signs)
    if n == 0:
        return None
    positive = int(np.sum(signs > 0))
    negative = n - positive
    if positive == 0 or negative == 0:
        return min(1.0, 2.0 ** (1 - n))
    runs = 1 + int(np.sum(signs[1:] != signs[:-1]))
    return probability_of_runs(runs, positive, negative)


def probability_of_runs(runs: int, positive: int, negative: int) -> float:
    """P(number of runs <= runs) when every order of the signs is equally likely (Swed & Eisenhart 1943)."""
    ways = 0
    for r in range(2, runs + 1):
        half = r // 2
        if r % 2 == 0:
            ways += 2 * comb(positive - 1, half - 1) * comb(negative - 1, half - 1)
        else:
            ways += comb(positive - 1, half) * comb(negative - 1, half - 1)
            ways += comb(positive - 1, half - 1) * comb(negative - 1, half)
    return ways / comb(positive + negative, positive)


def durbin_watson(residuals: ArrayLike) -> float | None:
    """Sum of squared differences of successive residuals over their sum of squares; about 2 without serial
    correlation (Durbin & Watson, Biometrika 37 (1950) 409). None for fewer than two or all zero.

    Parameters
    ----------
    residuals : array_like, shape (n,), in order of time
    """
    r = np.asarray(residuals, dtype=float)
    total = float(np.sum(r**2))
    if len(r) < 2 or total == 0.0:
        return None
    return float(np.sum(np.diff(r) ** 2)) / total


def holm(probabilities: list[float | None]) -> list[float | None]:
    """p-values adjusted for being many (Holm, Scand. J. Statist. 6 (1979) 65); None stays None."""
    known = sorted((p, i) for i, p in enumerate(probabilities) if p is not None)
    adjusted: list[float | None] = [None] * len(probabilities)
    highest = 0.0
    for rank, (p, i) in enumerate(known):
        highest = max(highest, min(1.0, (len(known) - rank) * p))
        adjusted[i] = highest
    return adjusted
