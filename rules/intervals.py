"""Exact intervals for means, rates, gaps and shares, and the exact comparison of two rates."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy.special import (
    betainc,
    betaincc,
    betainccinv,
    betaincinv,
    gammainccinv,
    gammaincinv,
    gammaln,
    xlog1py,
    xlogy,
)

from rules.arguments import need_at_least, need_positive, need_share

__all__ = [
    "EndedBy",
    "Interval",
    "RateComparison",
    "compare_rates",
    "mean_gap_factors",
    "mean_gap_interval",
    "mean_interval",
    "rate_interval",
    "share_interval",
]

EndedBy = Literal["time", "event"]
"""How the stretch was ended: at a moment chosen beforehand, or at its last event."""


@dataclass(frozen=True, slots=True)
class Interval:
    """Two-sided interval; ``high`` may be ``inf``."""

    low: float
    high: float


@dataclass(frozen=True, slots=True)
class RateComparison:
    """Two rates compared given the total of their events.

    ``p_greater`` and ``p_less`` are one-sided; ``p_central`` is twice the smaller one and agrees with the
    interval ``low``..``high``; ``p_minimum_likelihood`` sums all outcomes no more likely than the one seen
    and agrees with a different interval, so it is never shown beside this one.
    """

    ratio: float
    low: float
    high: float
    p_greater: float
    p_less: float
    p_central: float
    p_minimum_likelihood: float


def mean_interval(events: float, *, confidence: float = 0.95, ended_by: EndedBy = "time") -> Interval:
    """Exact central interval for the expected number of events of a stretch.

    Parameters
    ----------
    events : float
        Events seen, 0 or more (1 or more when an event ended the stretch).
    confidence : float
        Of the interval, 0 to 1.
    ended_by : {"time", "event"}
        With "time" the count is Poisson; with "event" the exposure is gamma distributed.

    Returns
    -------
    Interval

    Notes
    -----
    Assumes a steady rate. By time: half the chi-square points with 2n and 2n + 2 degrees of freedom (Garwood
    1936); by event: 2n on both sides (Epstein & Sobel 1953).

    Examples
    --------
    >>> mean_interval(3)
    Interval(low=0.61867212..., high=8.76727306...)
    """
    tail = (1.0 - need_share(confidence, "confidence")) / 2.0
    n = need_at_least(events, 1.0 if ended_by == "event" else 0.0, "events")
    low = float(gammaincinv(n, tail)) if n > 0 else 0.0
    high = float(gammainccinv(n + (1.0 if ended_by == "time" else 0.0), tail))
    return Interval(low, high)


def rate_interval(
    events: float, exposure: float, *, confidence: float = 0.95, ended_by: EndedBy = "time"
) -> Interval:
    """Exact central interval for a rate: :func:`mean_interval` over the exposure.

    Examples
    --------
    >>> interval = rate_interval(15, 400)
    >>> round(interval.low, 6), round(interval.high, 6)
    (0.020988, 0.061851)
    """
    mean = mean_interval(events, confidence=confidence, ended_by=ended_by)
    t = need_positive(exposure, "exposure")
    return Interval(mean.low / t, mean.high / t)


def mean_gap_interval(
    events: float, exposure: float, *, confidence: float = 0.95, ended_by: EndedBy = "time"
) -> Interval:
    """Exact central interval for the mean gap (mean time between failures): inverse of the rate's.

    Examples
    --------
    >>> interval = mean_gap_interval(2, 800, confidence=0.9)
    >>> round(interval.low, 3), round(interval.high, 3)
    (127.069, 2251.229)
    """
    rate = rate_interval(events, exposure, confidence=confidence, ended_by=ended_by)
    return Interval(1.0 / rate.high, 1.0 / rate.low if rate.low > 0 else math.inf)


def mean_gap_factors(events: int, *, confidence: float = 0.95, ended_by: EndedBy = "time") -> Interval:
    """Factors that turn the observed mean gap T/n into the limits of :func:`mean_gap_interval`.

    Parameters
    ----------
    events : int
        1 or more.
    confidence : float
        Of the interval.
    ended_by : {"time", "event"}
        How the stretch ended.

    Returns
    -------
    Interval

    Examples
    --------
    >>> factors = mean_gap_factors(5, confidence=0.9)
    >>> round(factors.low, 4), round(factors.high, 4)
    (0.4756, 2.5379)
    """
    return mean_gap_interval(
        events, need_at_least(events, 1.0, "events"), confidence=confidence, ended_by=ended_by
    )


def share_interval(hits: int, trials: int, *, confidence: float = 0.95) -> Interval:
    """Exact central interval for a share (Clopper & Pearson 1934).

    Examples
    --------
    >>> interval = share_interval(4, 20, confidence=0.9)
    >>> round(interval.low, 4), round(interval.high, 4)
    (0.0714, 0.401)
    """
    tail = (1.0 - need_share(confidence, "confidence")) / 2.0
    need_at_least(hits, 0.0, "hits")
    need_at_least(trials, max(hits, 1), "trials")
    low = float(betaincinv(hits, trials - hits + 1, tail)) if hits > 0 else 0.0
    high = float(betainccinv(hits + 1, trials - hits, tail)) if hits < trials else 1.0
    return Interval(low, high)


def compare_rates(
    events: int,
    exposure: float,
    other_events: int,
    other_exposure: float,
    *,
    ratio: float = 1.0,
    confidence: float = 0.95,
) -> RateComparison:
    """Compare one rate with another, exactly, given the total of events.

    Parameters
    ----------
    events, exposure : int, float
        Of the rate of interest.
    other_events, other_exposure : int, float
        Of the rate it is compared with.
    ratio : float
        Rate ratio under the null hypothesis, > 0.
    confidence : float
        Of the interval for the ratio.

    Returns
    -------
    RateComparison
        ``ratio`` is the observed one: ``inf`` without other events, ``nan`` without any.

    Notes
    -----
    Assumes two independent Poisson counts over exposures fixed beforehand. Given their total the first is
    binomial with odds ρ E/E′, whence the Clopper-Pearson interval and the p-values (Przyborowski & Wilenski
    1940). A stretch picked because it looked unusual does not meet the assumption: see
    :mod:`rules.changepoint`.

    Examples
    --------
    >>> c = compare_rates(60, 51477.5, 30, 54308.7)
    >>> round(c.ratio, 3), round(c.low, 3), round(c.high, 3), round(c.p_greater, 6)
    (2.11, 1.34, 3.388, 0.000428)
    """
    need_at_least(events, 0.0, "events")
    need_at_least(other_events, 0.0, "other_events")
    odds = need_positive(exposure, "exposure") / need_positive(other_exposure, "other_exposure")
    total = events + other_events
    if total == 0:
        return RateComparison(math.nan, 0.0, math.inf, 1.0, 1.0, 1.0, 1.0)
    seen = events / other_events / odds if other_events else math.inf
    tail = (1.0 - need_share(confidence, "confidence")) / 2.0
    # the beta points' odds, each from its own complement: no digits are lost near a share of 1
    low = high = 0.0
    if events:
        low = float(betaincinv(events, other_events + 1, tail) / betainccinv(other_events + 1, events, tail))
    if other_events:
        high = float(betainccinv(events + 1, other_events, tail) / betaincinv(other_events, events + 1, tail))
    else:
        high = math.inf
    null = need_positive(ratio, "ratio") * odds
    chance = null / (1.0 + null)
    greater = float(betainc(events, other_events + 1, chance)) if events else 1.0
    less = float(betaincc(events + 1, other_events, chance)) if other_events else 1.0
    k = np.arange(total + 1)
    log_p = (
        gammaln(total + 1) - gammaln(k + 1) - gammaln(total - k + 1)
        + xlogy(k, chance) + xlog1py(total - k, -chance)
    )  # fmt: skip
    # outcomes within 1e-7 of equally likely count as equal, as in R's exact tests
    smallest = float(np.exp(log_p[log_p <= log_p[events] + 1e-7]).sum())
    return RateComparison(
        seen, low / odds, high / odds, greater, less, min(1.0, 2.0 * min(greater, less)), min(1.0, smallest)
    )
