"""Screens of a baseline: trend, one change point, too uneven or serially dependent gaps, scattered counts.

Each gives a statistic and its probability under a steady rate, exact or simulated with a fixed seed. They warn;
none of them drops data.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.special import chdtr, chdtrc, ndtr

from rules.model import FloatArray
from rules.nulls import kept_size, share_above

__all__ = [
    "ChangePoint", "Trend", "anderson_darling", "change_point", "laplace", "military_handbook",
]  # fmt: skip

_DRAWS = 4_000
_SEED = 20261201


@dataclass(frozen=True, slots=True)
class Trend:
    """Statistic of a trend test and its two-sided probability; ``df`` of a chi-square one."""

    statistic: float
    p: float
    df: int = 0


@dataclass(frozen=True, slots=True)
class ChangePoint:
    """The most likely single change: after event (or step) ``after``, statistic 2 ln LR and simulated p."""

    after: int
    statistic: float
    p: float
    rate_before: float
    rate_after: float


def _times(times: FloatArray, end: float | None) -> tuple[FloatArray, float]:
    """Times within the stretch and its end; without one the last event ends it and drops out."""
    t = np.asarray(times, dtype=float)
    return (t[:-1], float(t[-1])) if end is None else (t, end)


def laplace(times: FloatArray, end: float | None = None) -> Trend:
    """Laplace's trend test; positive means that events come closer together.

    Parameters
    ----------
    times : float array, shape (n,)
        Exposure at each event, rising, from the beginning of the stretch.
    end : float or None
        End of a stretch ended by time; None where the last event ended it.

    Notes
    -----
    ``z = (mean of the times - T/2) / (T / sqrt(12 n))``, normal (Laplace 1773; Ascher & Feingold 1984).

    Examples
    --------
    >>> repair = np.array([5, 40, 43, 175, 389, 712, 747, 795, 1299, 1478])
    >>> round(laplace(repair, 1500.0).statistic, 5)
    -1.32695
    """
    t, total = _times(times, end)
    if t.size < 1 or total <= 0:
        return Trend(0.0, 1.0)
    z = (float(t.mean()) - total / 2.0) / (total / math.sqrt(12.0 * t.size))
    return Trend(z, 2.0 * float(ndtr(-abs(z))))


def military_handbook(times: FloatArray, end: float | None = None) -> Trend:
    """Military-handbook trend test: ``2 Σ ln(T/t)``, chi-square with 2n degrees of freedom; small means closer.

    Examples
    --------
    >>> repair = np.array([5, 40, 43, 175, 389, 712, 747, 795, 1299, 1478])
    >>> round(military_handbook(repair, 1500.0).statistic, 4)
    37.2281
    """
    t, total = _times(times, end)
    t = t[t > 0]
    if t.size < 1:
        return Trend(0.0, 1.0)
    statistic = 2.0 * float(np.log(total / t).sum())
    df = 2 * t.size
    return Trend(
        statistic, min(1.0, 2.0 * min(float(chdtr(df, statistic)), float(chdtrc(df, statistic)))), df
    )


def change_point(times: FloatArray, end: float | None = None) -> ChangePoint | None:
    """One change of the rate within a stretch of events; None for fewer than six.

    Notes
    -----
    Twice the largest log likelihood ratio over all splits that leave two events on either side. The naive
    chi-square would reject far too often (the split was searched for): p is simulated from sorted uniform
    times given their number.
    """
    t, total = _times(times, end)
    n = t.size
    if n < 6 or total <= 0:
        return None
    u = np.clip(t / total, 1e-12, 1.0 - 1e-12)
    ratios = _split_ratios(u[None, :])[0]
    best = int(np.argmax(ratios))
    after = best + 2
    at = float(t[after - 1])
    return ChangePoint(
        after, float(ratios[best]), _upper("change", n, float(ratios[best])), after / max(at, 1e-300),
        (n - after) / max(total - at, 1e-300),
    )  # fmt: skip


def _split_ratios(u: FloatArray) -> FloatArray:
    """2 ln LR of a split just after the 2nd .. (n-2)th of n sorted shares; shape (draws, n - 3)."""
    n = u.shape[1]
    k = np.arange(2, n - 1, dtype=float)
    at = np.clip(u[:, 1 : n - 2], 1e-12, 1.0 - 1e-12)
    ratio = k * np.log(k / n / at) + (n - k) * np.log((n - k) / n / (1.0 - at))
    return np.asarray(2.0 * ratio)


def anderson_darling(gaps: FloatArray) -> Trend:
    """Anderson-Darling test that gaps are exponential, mean estimated, simulated p (one-sided: too large).

    Examples
    --------
    >>> even = anderson_darling(np.full(20, 3.0) + np.arange(20) / 100)
    >>> even.p < 0.01
    True
    """
    x = np.sort(np.asarray(gaps, dtype=float))
    if x.size < 5 or x.sum() <= 0:
        return Trend(0.0, 1.0)
    statistic = float(_anderson(x[None, :])[0])
    return Trend(statistic, _upper("exponential", x.size, statistic))


def _anderson(sorted_gaps: FloatArray) -> FloatArray:
    n = sorted_gaps.shape[1]
    z = np.maximum(sorted_gaps / sorted_gaps.mean(axis=1, keepdims=True), 1e-12)
    i = 2.0 * np.arange(1, n + 1) - 1.0
    log_below = np.log(-np.expm1(-z))
    return np.asarray(-n - ((log_below - z[:, ::-1]) * i).sum(axis=1) / n)


# -- simulated distributions, one for each rounded number of events -----------------------------------------------


def _drawn_change(rng: np.random.Generator, n: int) -> FloatArray:
    return np.asarray(_split_ratios(np.sort(rng.random((_DRAWS, n)), axis=1)).max(axis=1))


def _drawn_exponential(rng: np.random.Generator, n: int) -> FloatArray:
    return _anderson(np.sort(rng.exponential(1.0, (_DRAWS, n)), axis=1))


_LAWS: dict[str, Callable[[np.random.Generator, int], FloatArray]] = {
    "change": _drawn_change, "exponential": _drawn_exponential,
}  # fmt: skip


@lru_cache(maxsize=256)
def _null(name: str, n: int) -> FloatArray:
    return np.sort(_LAWS[name](np.random.default_rng([_SEED, n]), n))


def _upper(name: str, n: int, statistic: float) -> float:
    """Simulated P(at least this large)."""
    return share_above(_null(name, kept_size(n)), statistic)
