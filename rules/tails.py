"""Exact tails of a Poisson count whose rate is known, or predicted from a baseline."""

from __future__ import annotations

import math

from scipy.special import betainc, betaincc, gammainc, gammaincc

__all__ = ["floor_tail", "log_count_tail"]


def log_count_tail(count: int, exposure: float, base_events: float, base_exposure: float) -> float:
    """Ln P(N >= count) over ``exposure``: Poisson, or negative binomial given the baseline's m and T.

    With ``base_events`` infinite, ``base_exposure`` is the mean gap of a known rate.

    Examples
    --------
    >>> round(math.exp(log_count_tail(2, 1.0, math.inf, 1.0)), 6)
    0.264241
    """
    if count <= 0:
        return 0.0
    if math.isinf(base_events):
        tail = float(gammainc(count, exposure / base_exposure))
    else:
        tail = float(betainc(count, base_events, exposure / (exposure + base_exposure)))
    return math.log(tail) if tail > 0.0 else -745.0


def floor_tail(count: float, exposure: float, base_events: float, base_exposure: float) -> float:
    """P(N <= count) over ``exposure``, as in :func:`log_count_tail`.

    Examples
    --------
    >>> round(floor_tail(0, 3.0, math.inf, 1.0), 6)
    0.049787
    """
    if math.isinf(base_events):
        return float(gammaincc(count + 1.0, exposure / base_exposure))
    return float(betaincc(count + 1.0, base_events, exposure / (exposure + base_exposure)))
