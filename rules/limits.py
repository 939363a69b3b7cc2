"""Limits for gaps and counts, known or estimated usual rate, each with the probability it attains."""

from __future__ import annotations

import math
from dataclasses import dataclass

from scipy.optimize import brentq
from scipy.special import (
    betainc,
    betainccinv,
    betaincinv,
    gammainc,
    gammaincc,
    gammainccinv,
    gammaincinv,
)

from rules.arguments import need_at_least, need_positive, need_share
from rules.intervals import EndedBy

__all__ = [
    "CountLimits",
    "GapLimits",
    "Tails",
    "count_limits",
    "count_tails",
    "gap_limits",
    "gap_limits_unbiased",
    "gap_tails",
]


@dataclass(frozen=True, slots=True)
class Tails:
    """Probabilities, when nothing has changed, of so little or less and of so much or more."""

    at_most: float
    at_least: float


@dataclass(frozen=True, slots=True)
class GapLimits:
    """Limits for a gap (or the sum of r gaps) in units of the mean gap, and the tail beyond each."""

    low: float
    high: float
    tail_low: float
    tail_high: float


@dataclass(frozen=True, slots=True)
class CountLimits:
    """A count at or below ``low`` or at or above ``high`` is outside; ``low`` is −1 where no count is."""

    low: int
    high: int
    tail_low: float
    tail_high: float


def gap_tails(gap: float, base_events: float = math.inf, *, gaps: int = 1) -> Tails:
    """Probability of so short and of so long a gap, or sum of gaps, when nothing has changed.

    Parameters
    ----------
    gap : float
        In units of the (estimated) mean gap T/m, 0 or more.
    base_events : float
        Events m of the baseline that the mean gap comes from; ``inf`` for a known mean.
    gaps : int
        r, how many gaps were added.

    Returns
    -------
    Tails

    Notes
    -----
    Exponential gaps: the sum of r is gamma(r); over an estimated mean it is r F(2r, 2m), for one gap
    P(longer) = (1 + x/m)^−m.

    Examples
    --------
    >>> round(gap_tails(6.60765069).at_least, 8), round(gap_tails(9.362731, 10).at_least, 8)
    (0.00135, 0.00135)
    """
    x = max(0.0, gap)
    if math.isinf(base_events):
        return Tails(float(gammainc(gaps, x)), float(gammaincc(gaps, x)))
    if gaps == 1:
        log_longer = -base_events * math.log1p(x / base_events)
        return Tails(-math.expm1(log_longer), math.exp(log_longer))
    share, rest = x / (x + base_events), base_events / (x + base_events)
    return Tails(float(betainc(gaps, base_events, share)), float(betainc(base_events, gaps, rest)))


def gap_limits(
    tail_low: float, tail_high: float, base_events: float = math.inf, *, gaps: int = 1
) -> GapLimits:
    """Limits that a gap, or a sum of r gaps, passes with the stated probabilities when nothing has changed.

    Parameters
    ----------
    tail_low, tail_high : float
        Probabilities below the lower and above the upper limit.
    base_events : float
        Events m of the baseline; ``inf`` for a known mean gap.
    gaps : int
        r, how many gaps are added.

    Returns
    -------
    GapLimits
        In units of the mean gap T/m.

    Notes
    -----
    Exponential gaps. Known mean: gamma points (Xie, Goh & Ranjan 2002). Estimated mean: exact predictive
    points, r F(2r, 2m); for one gap m(α^(−1/m) − 1) above and m((1 − α)^(−1/m) − 1) below.

    Examples
    --------
    >>> limits = gap_limits(0.00135, 0.00135, 20)
    >>> round(limits.low, 6), round(limits.high, 6)
    (0.001351, 7.830006)
    """
    need_share(tail_low, "tail_low")
    need_share(tail_high, "tail_high")
    need_at_least(gaps, 1, "gaps")
    if math.isinf(base_events):
        low, high = float(gammaincinv(gaps, tail_low)), float(gammainccinv(gaps, tail_high))
    elif gaps == 1:
        m = need_positive(base_events, "base_events")
        low = m * math.expm1(-math.log1p(-tail_low) / m)
        high = m * math.expm1(-math.log(tail_high) / m)
    else:
        m = need_positive(base_events, "base_events")
        low = m * float(betaincinv(gaps, m, tail_low) / betainccinv(m, gaps, tail_low))
        high = m * float(betainccinv(gaps, m, tail_high) / betaincinv(m, gaps, tail_high))
    return GapLimits(low, high, tail_low, tail_high)


def gap_limits_unbiased(probability: float, *, gaps: int = 1) -> GapLimits:
    """Limits for r gaps of a known mean that signal soonest for a change, whichever its direction.

    Parameters
    ----------
    probability : float
        Of a point outside when nothing has changed: 1 / (mean points between false signals).
    gaps : int
        r, how many gaps are added.

    Returns
    -------
    GapLimits
        With the two tails that the split gives.

    Notes
    -----
    Equal tails make the mean time between signals grow for moderate increases of the rate (at α = 0.0027 it
    is longest at 1.29 times the usual rate). Here its maximum lies at the usual rate: both
    ``P(low) + P(high) = α`` and ``L^r e^−L = U^r e^−U`` hold.

    Examples
    --------
    >>> limits = gap_limits_unbiased(0.0027)
    >>> round(limits.low, 8), round(limits.high, 8)
    (0.00240738, 8.1267896)
    """
    alpha = need_share(probability, "probability")
    r = int(need_at_least(gaps, 1, "gaps"))

    def lopsided(tail_low: float) -> float:
        low = float(gammaincinv(r, tail_low))
        high = float(gammainccinv(r, alpha - tail_low))
        return (r * math.log(low) - low) - (r * math.log(high) - high)

    share = brentq(lambda s: lopsided(alpha * s), 1e-12, 1.0 - 1e-12, xtol=1e-16, rtol=1e-15)
    low_tail = alpha * float(share)
    return GapLimits(
        float(gammaincinv(r, low_tail)), float(gammainccinv(r, alpha - low_tail)), low_tail, alpha - low_tail
    )


def count_tails(
    count: int,
    exposure: float,
    base_events: float = math.inf,
    base_exposure: float = 1.0,
    *,
    ended_by: EndedBy = "event",
) -> Tails:
    """Probability of so few and of so many events in a step when nothing has changed.

    Parameters
    ----------
    count : int
        Events of the step.
    exposure : float
        Exposure of the step, > 0.
    base_events, base_exposure : float
        Baseline's m and T. With ``inf`` events the rate is known, ``base_exposure`` being its mean gap.
    ended_by : {"time", "event"}
        How the baseline ended.

    Returns
    -------
    Tails

    Notes
    -----
    Poisson for a known rate. For an estimated one the count is, given the total, binomial with share
    q = e/(e + T), and P(N >= n) = I_q(n, m) (negative binomial), exact for a baseline ended by its m-th
    event; for one ended by time each tail keeps its word with I_q(n, m + 1) and 1 − I_q(n + 1, m) (Nelson
    1982).

    Examples
    --------
    >>> round(count_tails(11, 4.0).at_least, 6)
    0.00284
    >>> round(count_tails(11, 4.0, 12, 12.0).at_least, 4)
    0.01
    """
    e = need_positive(exposure, "exposure")
    t = need_positive(base_exposure, "base_exposure")
    need_at_least(count, 0, "count")
    if math.isinf(base_events):
        mean = e / t
        return Tails(float(gammaincc(count + 1, mean)), float(gammainc(count, mean)) if count else 1.0)
    m = need_at_least(base_events, 1.0 if ended_by == "event" else 0.0, "base_events")
    q, rest = e / (e + t), t / (e + t)
    more = m if ended_by == "event" else m + 1.0
    at_most = float(betainc(m, count + 1, rest)) if m > 0 else 1.0
    return Tails(at_most, float(betainc(count, more, q)) if count else 1.0)


def count_limits(
    tail_low: float,
    tail_high: float,
    exposure: float,
    base_events: float = math.inf,
    base_exposure: float = 1.0,
    *,
    ended_by: EndedBy = "event",
) -> CountLimits:
    """Counts that a step reaches with at most the stated probabilities when nothing has changed.

    Parameters
    ----------
    tail_low, tail_high : float
        Allowed probabilities; 0 closes a side.
    exposure, base_events, base_exposure, ended_by
        As in :func:`count_tails`.

    Returns
    -------
    CountLimits
        With the tail probabilities attained, which are the allowed ones or less. ``high`` is the smallest
        count so improbable, ``low`` the largest.

    Examples
    --------
    >>> count_limits(0.00135, 0.00135, 4.0)
    CountLimits(low=-1, high=12, tail_low=0.0, tail_high=0.00091...)
    """

    def tails(count: int) -> Tails:
        return count_tails(count, exposure, base_events, base_exposure, ended_by=ended_by)

    if not (0.0 <= tail_low < 1.0 and 0.0 < tail_high < 1.0):
        raise ValueError(f"tails must lie between 0 and 1, not {tail_low!r} and {tail_high!r}")
    # double until outside, then halve; integer search on the exact tails, so no rounding can shift a limit
    high = 1
    while tails(high).at_least > tail_high:
        high *= 2
        if high > 2**52:
            raise ValueError(f"no count is as improbable as {tail_high!r}: the baseline has too few events")
    inside = high // 2
    while high - inside > 1:
        middle = (inside + high) // 2
        inside, high = (middle, high) if tails(middle).at_least > tail_high else (inside, middle)
    low, outside = -1, high
    while outside - low > 1:
        middle = (low + outside) // 2
        low, outside = (middle, outside) if tails(middle).at_most <= tail_low else (low, middle)
    return CountLimits(low, high, tails(low).at_most if low >= 0 else 0.0, tails(high).at_least)
