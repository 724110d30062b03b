"""Tests on the residuals of one observable of one run."""

from __future__ import annotations

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
    """P(number of runs <= runs) when every order of the signs is equally likely (Swed & Eisenhart 1943).

    With a(k) = C(n1-1, k-1) C(n2-1, k-1), there are 2 a(k) orders of 2k runs and a(k) (n1 + n2 - 2k)/k of
    2k + 1. All a(k) follow from the largest one by a(k+1)/a(k) = (n1-k)(n2-k)/k^2, so that nothing overflows
    and rounding grows only with the distance from it; a probability below the smallest double is zero.

    Parameters
    ----------
    runs, positive, negative : numbers of runs and of residuals of each sign

    Returns
    -------
    float
        Exact but for rounding, to about 1e-13 relative at 100 000 residuals.
    """
    fewest = min(positive, negative)
    if fewest < 1:  # all of one sign: a single run
        return 1.0 if runs >= 1 else 0.0
    k = np.arange(1.0, fewest + 1.0)
    ratios = (positive - k[:-1]) * (negative - k[:-1]) / k[:-1] ** 2
    largest = int(np.count_nonzero(ratios > 1.0))  # ratios fall, so this is where a(k) peaks
    falling_away = np.cumprod(ratios[largest:])
    towards_two_runs = np.cumprod(1.0 / ratios[:largest][::-1])[::-1]
    a = np.concatenate([towards_two_runs, [1.0], falling_away])
    orders = np.stack(
        [2.0 * a, a * (positive + negative - 2.0 * k) / k], axis=1
    ).ravel()  # of 2, 3, 4, ... runs
    return min(1.0, float(orders[: max(runs - 1, 0)].sum() / orders.sum()))


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
