"""Laws under a steady rate for the screens of :mod:`rules.findings`: exact where cheap, else drawn once and kept.

Ties (sparse counts, gaps in whole days) are taken as ties: they make neither dependence nor unevenness.
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from scipy.special import chdtrc, gammaincc, ndtr, xlogy

from rules.model import FloatArray, IntArray

__all__ = [
    "best_split",
    "dispersion_p",
    "kept_size",
    "serial_p",
    "share_above",
    "split_p",
    "spread_ties",
    "variation_p",
]

_LEAST = 5
_DRAWS = 4_000
_CELLS = 240_000
"""Most numbers drawn for one kept distribution, which keeps it near 30 ms."""
_SEED = 20261201


def spread_ties(gaps: FloatArray) -> FloatArray:
    """Equal gaps spread evenly over their unit of measurement, zeros over its first half.

    The unit is the smallest step between two different gaps: a day for gaps in whole days, next to nothing for
    exact ones, whose clusters of zeros so stay what they are.

    Examples
    --------
    >>> spread_ties(np.array([2.0, 0.0, 1.0, 2.0])).tolist()
    [1.75, 0.25, 1.0, 2.25]
    """
    x = np.asarray(gaps, dtype=float)
    scale = float(np.abs(x).max(initial=0.0)) or 1.0
    values, which, many = np.unique((x / scale).round(9), return_inverse=True, return_counts=True)
    if values.size in (1, x.size):
        return x
    unit = float(np.diff(values).min()) * scale
    order = np.argsort(which, kind="stable")
    place = np.empty(x.size)
    place[order] = np.arange(x.size) - np.repeat(np.cumsum(many) - many, many)
    share = (place + 0.5) / many[which]
    return np.asarray(np.where(values[which] > 0.0, x + unit * (share - 0.5), unit * share / 2.0))


def variation_p(variation: float, n: int) -> float:
    """P of so large a coefficient of variation (n in its variance) of n exponential gaps, by seeded draws.

    Examples
    --------
    >>> variation_p(1.0, 20) > 0.2, variation_p(2.0, 20) < 0.01
    (True, True)
    """
    return share_above(_drawn_variation(kept_size(n)), math.sqrt(n) * (variation - 1.0))


def dispersion_p(counts: FloatArray | IntArray, exposure: FloatArray) -> float:
    """P of so large a Pearson statistic of counts over exposures, given their total.

    Notes
    -----
    Chi-square where every step expects five or more. Otherwise the gamma law with the exact mean and variance
    (Haldane 1937), and draws of the multinomial where that leaves a doubt (p < 0.1).

    Examples
    --------
    >>> round(dispersion_p(np.array([12, 9, 14, 6, 9, 10]), np.ones(6)), 3)
    0.579
    """
    n, e = np.asarray(counts, dtype=float), np.asarray(exposure, dtype=float)
    total, m, share = float(n.sum()), n.size, e / e.sum()
    chi2 = float(((n - total * share) ** 2 / (total * share)).sum())
    if float(share.min()) * total >= 5.0:
        return float(chdtrc(m - 1, chi2))
    variance = 2.0 * (m - 1) + (float((1.0 / share).sum()) - m * m - 2.0 * m + 2.0) / total
    smooth = float(gammaincc((m - 1) ** 2 / variance, chi2 * (m - 1) / variance))
    if smooth >= 0.1 and chi2 < 1.5 * (m - 1):
        return smooth
    if m > 240 and total > 2_000:
        return smooth
    return share_above(_drawn_dispersion(int(total), share.tobytes()), chi2)


def best_split(n: FloatArray, e: FloatArray) -> tuple[int, float]:
    """Number of steps before the most likely change of a Poisson rate, and its 2 ln LR.

    Parameters
    ----------
    n, e : float array, shape (m,)
        Counts and exposures, m >= 5, all exposures above 0.

    Notes
    -----
    Both sides keep two steps and a share 2/m of the exposure (2 % from a hundred steps on).

    Examples
    --------
    >>> k, ratio = best_split(np.array([1.0, 0, 1, 5, 6, 4]), np.ones(6))
    >>> k, round(ratio, 2)
    (3, 11.25)
    """
    m = n.size
    at = np.cumsum(e)[1 : m - 2] / e.sum()
    least = 2.0 / min(m, 100) - 1e-9
    ratio = _split_ratios(np.cumsum(n)[None, 1 : m - 2], at, float(n.sum()))[0]
    ratio[(at < least) | (at > 1.0 - least)] = 0.0
    best = int(np.argmax(ratio))
    return best + 2, float(ratio[best])


def _split_ratios(before: FloatArray, at: FloatArray, total: float) -> FloatArray:
    after = total - before
    ratio = xlogy(before, before / (total * at)) + xlogy(after, after / (total * (1.0 - at)))
    return np.asarray(2.0 * ratio)


def split_p(statistic: float, n: FloatArray) -> float:
    """P of so large a 2 ln LR of :func:`best_split`, drawn given the events and as many equal steps.

    Examples
    --------
    >>> split_p(3.84, np.ones(40)) > 0.2
    True
    """
    return share_above(_drawn_split(kept_size(int(n.sum())), min(100, kept_size(n.size))), statistic)


def serial_p(values: FloatArray) -> tuple[float, float]:
    """Lag-1 rank correlation, ties at their mean rank, and its two-sided permutation p.

    Notes
    -----
    A normal law with the exact permutation mean and variance (Wald & Wolfowitz 1943) settles the clear cases;
    from z = 1.5 on, seeded permutations of the very values, which keep their ties.

    Examples
    --------
    >>> r, p = serial_p(np.array([1, 2, 3, 4, 5, 6, 7, 8, 9, 10.0]))
    >>> round(r, 2), p < 0.01
    (0.7, True)
    """
    x = np.asarray(values, dtype=float)
    n = x.size
    scale = float(np.abs(x).max(initial=0.0)) or 1.0
    _, rank, many = np.unique((x / scale).round(9), return_inverse=True, return_counts=True)
    if n < _LEAST or many.size < 2:
        return 0.0, 1.0
    v = (np.cumsum(many) - many / 2.0)[rank]
    v -= v.mean()
    s2, s4 = float((v**2).sum()), float((v**4).sum())
    v /= math.sqrt(s2)
    s4 /= s2 * s2
    r = float(v[1:] @ v[:-1])
    second = ((1.0 - s4) + 2.0 * (2.0 * s4 - 1.0) / (n - 1) + (3.0 - 6.0 * s4) / (n - 1)) / n
    away = abs(r + 1.0 / n)
    z = away / math.sqrt(max(second - 1.0 / n**2, 1e-12))
    if z < 1.5 or n > 2_000:
        return r, 2.0 * float(ndtr(-z))
    w = v[_permutations(n)]
    drawn = np.abs((w[:, 1:] * w[:, :-1]).sum(axis=1) + 1.0 / n)
    return r, float(((drawn >= away - 1e-9).sum() + 1) / (drawn.size + 1))


# -- kept distributions -------------------------------------------------------------------------------------------


def kept_size(n: int) -> int:
    """Return a number rounded up: as it is to 30, to the next tenth more above, never over 500."""
    if n <= 30:
        return n
    return min(500, math.ceil(30 * 1.1 ** math.ceil(math.log(n / 30) / math.log(1.1) - 1e-9)))


def share_above(null: FloatArray, statistic: float) -> float:
    """Return P(at least so large), from sorted draws."""
    near = statistic - 1e-9 * max(1.0, abs(statistic))
    above = null.size - int(np.searchsorted(null, near, side="left"))
    return (above + 1.0) / (null.size + 1.0)


def _draws(width: int) -> int:
    return max(1_000, min(_DRAWS, _CELLS // max(1, width)))


@lru_cache(maxsize=128)
def _drawn_variation(n: int) -> FloatArray:
    """Sorted ``sqrt(n) (CV - 1)`` of exponential gaps: on this scale the law hardly changes with n."""
    gaps = np.random.default_rng([_SEED, 1, n]).exponential(1.0, (_draws(n // 4), n))
    return np.sort(math.sqrt(n) * (gaps.std(axis=1) / gaps.mean(axis=1) - 1.0))


@lru_cache(maxsize=256)
def _drawn_split(total: int, m: int) -> FloatArray:
    """Sorted largest 2 ln LR of a split of m equal steps, given the number of events."""
    rng = np.random.default_rng([_SEED, 2, total, m])
    counts = rng.multinomial(total, np.full(m, 1.0 / m), _draws(m))
    at = np.arange(2, m - 1) / m
    return np.sort(
        _split_ratios(np.cumsum(counts, axis=1, dtype=float)[:, 1 : m - 2], at, float(total)).max(axis=1)
    )


@lru_cache(maxsize=64)
def _drawn_dispersion(total: int, shares: bytes) -> FloatArray:
    """Sorted Pearson statistics of a multinomial with these shares (exact bytes of a float array)."""
    share = np.frombuffer(shares)
    m = share.size
    rng = np.random.default_rng([_SEED, 3, total, m])
    if m <= 240:
        counts = rng.multinomial(total, share / share.sum(), _draws(m))
        return np.sort((counts**2 / (total * share)).sum(axis=1) - total)
    # many steps, few events: place the events instead of drawing every step
    draws = _draws(total)
    cells = np.minimum(np.searchsorted(np.cumsum(share), rng.random((draws, total)), side="right"), m - 1)
    held, many = np.unique(cells + m * np.arange(draws)[:, None], return_counts=True)
    return np.sort(np.bincount(held // m, many**2 / (total * share[held % m]), draws) - total)


@lru_cache(maxsize=64)
def _permutations(n: int) -> IntArray:
    rng = np.random.default_rng([_SEED, 4, n])
    order = np.argsort(rng.random((max(500, min(2_000, _CELLS // n)), n)), axis=1)
    return order.astype(np.int64)
