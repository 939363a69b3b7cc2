"""ARL-unbiased limits for counts: units between failures, and failures per step."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from scipy.special import gammainc, gammaincc, gammaln

from rules.arguments import need_positive, need_share

__all__ = ["RandomisedLimits", "count_limits_randomised", "unit_gap_limits", "unit_gap_limits_randomised"]


@dataclass(frozen=True, slots=True)
class RandomisedLimits:
    """Counts below ``low`` or above ``high`` are outside; on them, with chances ``chance_low``/``_high``.

    ``tail_low`` and ``tail_high`` are the probabilities strictly below and strictly above: what a chart
    without drawing lots attains.
    """

    low: int
    high: int
    chance_low: float
    chance_high: float
    tail_low: float
    tail_high: float


@dataclass(frozen=True, slots=True)
class _Count:
    """A count distribution by its partial sums: probability and mean part below n, and from n on."""

    mean: float
    mass: Callable[[int], float]
    below: Callable[[int], float]
    mean_below: Callable[[int], float]
    at_least: Callable[[int], float]
    mean_at_least: Callable[[int], float]

    def smallest_beyond(self, probability: float) -> int:
        """Return the smallest n with P(X > n) <= probability."""
        high = 1
        while self.at_least(high + 1) > probability:
            high *= 2
        low = -1
        while high - low > 1:
            middle = (low + high) // 2
            low, high = (middle, high) if self.at_least(middle + 1) > probability else (low, middle)
        return high


def _unbiased(count: _Count, alpha: float) -> RandomisedLimits:
    """Solve ``E φ = α`` and ``E X φ = α E X`` for the limits and both chances.

    In an exponential family the second equation says that the derivative of the signal probability is zero
    at the usual parameter. Moving the lower cut up moves probability from the upper tail to the lower, so
    the second equation is monotone in it and halving finds the cut.
    """

    def upper(low: int, chance: float) -> tuple[int, float, float]:
        """Upper limit that uses up what the lower cut leaves, and the excess of the second equation."""
        left = alpha - count.below(low) - chance * count.mass(low)
        high = count.smallest_beyond(left)
        chance_high = (left - count.at_least(high + 1)) / count.mass(high)
        part = (
            count.mean_below(low) + chance * low * count.mass(low)
            + count.mean_at_least(high + 1) + chance_high * high * count.mass(high)
        )  # fmt: skip
        return high, chance_high, part - alpha * count.mean

    low = 0
    while count.below(low + 1) < alpha and upper(low + 1, 0.0)[2] > 0:
        low += 1
    lowest, highest = 0.0, min(1.0, (alpha - count.below(low)) / count.mass(low) * (1.0 - 1e-12))
    for _ in range(200):
        chance = (lowest + highest) / 2.0
        if chance in {lowest, highest}:
            break
        lowest, highest = (chance, highest) if upper(low, chance)[2] > 0 else (lowest, chance)
    chance_low = (lowest + highest) / 2.0
    high, chance_high, _ = upper(low, chance_low)
    return RandomisedLimits(low, high, chance_low, chance_high, count.below(low), count.at_least(high + 1))


def unit_gap_limits_randomised(fraction: float, probability: float) -> RandomisedLimits:
    """ARL-unbiased limits for the number of good units before a failing one, drawing lots on the limits.

    Parameters
    ----------
    fraction : float
        Usual fraction p of failing units.
    probability : float
        α, of a point outside when nothing has changed.

    Returns
    -------
    RandomisedLimits
        Counting good units from 0; a gap that includes the failing unit has both limits one higher.

    Notes
    -----
    Geometric gaps; the mean number of points to a signal is 1/α at p and shorter at any other (Morais 2017).
    An alert should not depend on a drawn lot: :func:`unit_gap_limits` is for use, this one is the published
    form from which it comes.

    Examples
    --------
    >>> limits = unit_gap_limits_randomised(0.001, 0.0027)
    >>> limits.low, limits.high, round(limits.chance_low, 6), round(limits.chance_high, 6)
    (2, 8122, 0.406312, 0.224264)
    """
    p = need_share(fraction, "fraction")
    need_share(probability, "probability")
    log_q = math.log1p(-p)
    odds = (1.0 - p) / p

    def at_least(n: int) -> float:
        return math.exp(n * log_q)

    def mean_below(n: int) -> float:
        # Σ_{x<n} x p q^x; the short direct sum keeps its digits where the difference would lose them
        if n <= 64:
            return math.fsum(x * p * math.exp(x * log_q) for x in range(n))
        return odds - at_least(n) * (n + odds)

    return _unbiased(
        _Count(
            mean=odds,
            mass=lambda n: p * math.exp(n * log_q),
            below=lambda n: -math.expm1(n * log_q),
            mean_below=mean_below,
            at_least=at_least,
            mean_at_least=lambda n: at_least(n) * (n + odds),
        ),
        probability,
    )


def unit_gap_limits(fraction: float, probability: float) -> RandomisedLimits:
    """Limits for unit-by-unit gaps for use: as the ARL-unbiased ones, but without drawing lots.

    Parameters
    ----------
    fraction, probability : float
        As in :func:`unit_gap_limits_randomised`.

    Returns
    -------
    RandomisedLimits
        Counting the failing unit (from 1), both chances 0; the probability attained is
        ``tail_low + tail_high``, at most α.

    Examples
    --------
    >>> limits = unit_gap_limits(0.001, 0.0027)
    >>> limits.low, limits.high, round(limits.tail_low + limits.tail_high, 6)
    (3, 8123, 0.002294)
    """
    found = unit_gap_limits_randomised(fraction, probability)
    return RandomisedLimits(found.low + 1, found.high + 1, 0.0, 0.0, found.tail_low, found.tail_high)


def count_limits_randomised(mean: float, probability: float) -> RandomisedLimits:
    """ARL-unbiased limits for a Poisson count, drawing lots on the limits.

    Parameters
    ----------
    mean : float
        Usual expected count of a step.
    probability : float
        α, of a point outside when nothing has changed.

    Returns
    -------
    RandomisedLimits

    Notes
    -----
    Paulino, Morais & Knoth 2016. For use see :func:`rules.limits.count_limits`.

    Examples
    --------
    >>> limits = count_limits_randomised(19.5, 0.0027)
    >>> limits.low, limits.high, round(limits.chance_low, 6), round(limits.chance_high, 6)
    (8, 34, 0.246867, 0.230476)
    """
    mu = need_positive(mean, "mean")
    need_share(probability, "probability")

    def below(n: int) -> float:
        return float(gammaincc(n, mu)) if n > 0 else 0.0

    def at_least(n: int) -> float:
        return float(gammainc(n, mu)) if n > 0 else 1.0

    return _unbiased(
        _Count(
            mean=mu,
            mass=lambda n: math.exp(n * math.log(mu) - mu - float(gammaln(n + 1))),
            below=below,
            mean_below=lambda n: mu * below(n - 1),
            at_least=at_least,
            mean_at_least=lambda n: mu * at_least(n - 1),
        ),
        probability,
    )
