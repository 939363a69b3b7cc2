"""Exact tails of the waiting time to the r-th event: of gaps, of sums of gaps and, by duality, of counts.

One formula serves all of them. Steady events at a known rate: the exposure to the r-th event is gamma. Rate
estimated from a baseline of m events in T: ``E / (E + T)`` is beta, which for r = 1 is the F(2, 2m) law of the
next gap and for counts the predictive negative binomial. Over-dispersed by an index φ: r, m, E and T are all
divided by φ (gaps gamma distributed with shape 1/φ; for counts the scaled likelihood's own reference).
"""

from __future__ import annotations

import math

from scipy.special import (
    betainc,
    betaincc,
    betainccinv,
    betaincinv,
    gammainc,
    gammaincc,
    gammainccinv,
    gammaincinv,
)

__all__ = ["exposure_beyond", "exposure_within", "log_beyond", "log_within"]

_LEAST = -745.0
"""Ln of the smallest float: a tail that underflows is taken as this small, which is on the careful side."""


def log_within(r: float, exposure: float, events: float, span: float, index: float = 1.0) -> float:
    """Ln P(the r-th event comes within ``exposure``) = ln P(N >= r).

    Parameters
    ----------
    r : float
        Number of the event, above 0.
    exposure : float
    events, span : float
        Baseline's m and T; with m infinite, ``span`` is the mean gap of a known rate.
    index : float
        Index of dispersion φ >= 1.

    Examples
    --------
    >>> round(math.exp(log_within(2, 1.0, math.inf, 1.0)), 6)
    0.264241
    >>> round(math.exp(log_within(1, 3.492828, 10, 10.0)), 6)
    0.95
    """
    if exposure <= 0.0:
        return _LEAST
    if math.isinf(events):
        tail = gammainc(r / index, exposure / (span * index))
    else:
        tail = betainc(r / index, events / index, exposure / (exposure + span))
    return math.log(tail) if tail > 0.0 else _LEAST


def log_beyond(r: float, exposure: float, events: float, span: float, index: float = 1.0) -> float:
    """Ln P(the r-th event comes later than ``exposure``) = ln P(N < r); as :func:`log_within`.

    Examples
    --------
    >>> round(math.exp(log_beyond(1, 3.0, math.inf, 1.0)), 6)
    0.049787
    """
    if exposure <= 0.0:
        return 0.0
    if math.isinf(events):
        if r == 1.0 and index == 1.0:
            return -exposure / span
        tail = gammaincc(r / index, exposure / (span * index))
    else:
        if r == 1.0 and index == 1.0:
            return -events * math.log1p(exposure / span)
        tail = betaincc(r / index, events / index, exposure / (exposure + span))
    return math.log(tail) if tail > 0.0 else _LEAST


def exposure_beyond(r: float, log_tail: float, events: float, span: float, index: float = 1.0) -> float:
    """Exposure that the r-th event outlasts with probability ``exp(log_tail)``; inverse of :func:`log_beyond`.

    Examples
    --------
    >>> round(exposure_beyond(1, math.log(0.05), 10, 10.0), 6)
    3.492828
    """
    if math.isinf(events):
        if r == 1.0 and index == 1.0:
            return -log_tail * span
        return float(gammainccinv(r / index, math.exp(log_tail))) * span * index
    if r == 1.0 and index == 1.0:
        return span * math.expm1(-log_tail / events)
    share = float(betainccinv(r / index, events / index, math.exp(log_tail)))
    return span * share / (1.0 - share) if share < 1.0 else math.inf


def exposure_within(r: float, log_tail: float, events: float, span: float, index: float = 1.0) -> float:
    """Exposure within which the r-th event comes with probability ``exp(log_tail)``; inverse of :func:`log_within`.

    Examples
    --------
    >>> round(exposure_within(1, math.log(0.95), 10, 10.0), 6)
    3.492828
    """
    if math.isinf(events):
        return float(gammaincinv(r / index, math.exp(log_tail))) * span * index
    share = float(betaincinv(r / index, events / index, math.exp(log_tail)))
    return span * share / (1.0 - share) if share < 1.0 else math.inf
