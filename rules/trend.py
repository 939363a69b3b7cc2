"""Trend tests of repairable records, told how the record ended, and the power law behind one of them.

A record *ended by time* was stopped at a moment chosen beforehand: all its events count. One *ended by an event* was
stopped by its last event, which then is the end and drops out of the sums.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy.special import chdtr, chdtrc, ndtr

from rules import screens
from rules.model import FloatArray

__all__ = [
    "EndedBy", "Laplace", "LewisRobinson", "MilitaryHandbook", "PowerLaw", "ReverseArrangements", "laplace",
    "lewis_robinson", "military_handbook", "power_law", "reverse_arrangements",
]  # fmt: skip

EndedBy = Literal["time", "event"]


@dataclass(frozen=True, slots=True)
class Laplace:
    """Laplace's z, positive when events come closer together, and its two-sided normal p."""

    statistic: float
    p: float


@dataclass(frozen=True, slots=True)
class MilitaryHandbook:
    """``2 Σ ln(T/t)``, small when events come closer, its degrees of freedom, both tails and two-sided p."""

    statistic: float
    df: int
    lower: float
    upper: float
    p: float


@dataclass(frozen=True, slots=True)
class ReverseArrangements:
    """Pairs whose later gap is longer (``statistic`` of ``pairs``), exact tails and two-sided p.

    ``more`` is P(so many or more), small when gaps grow; ``fewer`` is P(so many or fewer).
    """

    statistic: int
    pairs: int
    more: float
    fewer: float
    p: float


@dataclass(frozen=True, slots=True)
class LewisRobinson:
    """Laplace's z over the coefficient of variation of the gaps, and its two-sided normal p."""

    statistic: float
    p: float
    variation: float


@dataclass(frozen=True, slots=True)
class PowerLaw:
    """Exponent of a power-law process, above 1 when events come closer, plain and corrected for bias.

    ``statistic`` is ``2 n / beta`` with ``df`` degrees of freedom under beta = 1, ``p`` two-sided. nan where too few
    events are left for an estimate.
    """

    beta: float
    corrected: float
    statistic: float
    df: int
    p: float


def _end(times: FloatArray, end: float | None, ended_by: EndedBy) -> float | None:
    """End as :mod:`rules.screens` takes it: None where the last event is the end."""
    if ended_by == "event":
        return None
    if end is None:
        raise ValueError("a record ended by time needs its end")
    if times.size and end < float(times[-1]):
        raise ValueError(f"the record ends at {end:g}, before its last event at {float(times[-1]):g}")
    return end


def laplace(times: FloatArray, end: float | None, ended_by: EndedBy) -> Laplace:
    """Laplace's test for a trend of the rate.

    Parameters
    ----------
    times : float array, shape (n,)
        Exposure at each event since the beginning of the record, rising.
    end : float or None
        Exposure at the end of the record; not used where an event ended it.
    ended_by : {"time", "event"}

    Notes
    -----
    Ascher & Feingold (1984). Without events to judge: z = 0, p = 1.

    Examples
    --------
    >>> repair = np.array([5, 40, 43, 175, 389, 712, 747, 795, 1299, 1478.0])
    >>> round(laplace(repair, 1500.0, "time").statistic, 5)
    -1.32695
    """
    t = np.asarray(times, dtype=float)
    found = screens.laplace(t, _end(t, end, ended_by))
    return Laplace(found.statistic, found.p)


def military_handbook(times: FloatArray, end: float | None, ended_by: EndedBy) -> MilitaryHandbook:
    """Military-handbook test (MIL-HDBK-189) for a trend of the rate; arguments as :func:`laplace`.

    Notes
    -----
    Chi-square with 2n degrees of freedom, 2(n-1) where an event ended the record. Events at exposure 0 say
    nothing about a trend on the log scale and are left out.

    Examples
    --------
    >>> repair = np.array([5, 40, 43, 175, 389, 712, 747, 795, 1299, 1478.0])
    >>> found = military_handbook(repair, 1500.0, "time")
    >>> round(found.statistic, 2), found.df, round(found.lower, 3)
    (37.23, 20, 0.989)
    """
    t = np.asarray(times, dtype=float)
    found = screens.military_handbook(t, _end(t, end, ended_by))
    if found.df == 0:
        return MilitaryHandbook(0.0, 0, 1.0, 1.0, 1.0)
    lower, upper = float(chdtr(found.df, found.statistic)), float(chdtrc(found.df, found.statistic))
    return MilitaryHandbook(found.statistic, found.df, lower, upper, found.p)


def reverse_arrangements(gaps: FloatArray) -> ReverseArrangements:
    """Reverse-arrangement test of the order of gaps: exact, for any law of the gaps without ties.

    Parameters
    ----------
    gaps : float array, shape (n,)
        Closed gaps in order; equal ones do not count as a reversal.

    Notes
    -----
    Exact tails by the distribution of inversions (MacMahon). Ties make the count smaller than the law supposes,
    so that ``more`` errs on the careful side and ``fewer`` does not.

    Examples
    --------
    >>> found = reverse_arrangements(np.array([5, 35, 3, 132, 214, 323, 35, 48, 504, 179.0]))
    >>> found.statistic, found.pairs, round(found.more, 6)
    (33, 45, 0.036275)
    """
    x = np.asarray(gaps, dtype=float)
    count, more, fewer = screens.reverse_arrangements(x)
    return ReverseArrangements(
        count, x.size * (x.size - 1) // 2, more, fewer, min(1.0, 2.0 * min(more, fewer))
    )


def lewis_robinson(times: FloatArray, end: float | None, ended_by: EndedBy) -> LewisRobinson:
    """Lewis-Robinson test: Laplace's z allowing for gaps more, or less, variable than exponential ones.

    Arguments as :func:`laplace`.

    Notes
    -----
    Lewis & Robinson (1974): z over the coefficient of variation (n-1 in its variance) of the closed gaps. Equal
    gaps, or fewer than two, leave nothing to divide by: z = 0, p = 1.

    Examples
    --------
    >>> repair = np.array([5, 40, 43, 175, 389, 712, 747, 795, 1299, 1478.0])
    >>> round(lewis_robinson(repair, 1500.0, "time").statistic, 3)
    -1.201
    """
    t = np.asarray(times, dtype=float)
    z = laplace(t, end, ended_by).statistic
    gaps = np.diff(t, prepend=0.0)
    variation = float(gaps.std(ddof=1) / gaps.mean()) if t.size > 1 and t[-1] > 0 else 0.0
    if variation <= 0.0:
        return LewisRobinson(0.0, 1.0, variation)
    z /= variation
    return LewisRobinson(z, 2.0 * float(ndtr(-abs(z))), variation)


def power_law(times: FloatArray, end: float | None, ended_by: EndedBy) -> PowerLaw:
    """Exponent of a power-law (Crow-AMSAA) process by maximum likelihood; arguments as :func:`laplace`.

    Notes
    -----
    ``beta = n / Σ ln(T/t)``. Corrected for bias: times (n-1)/n where time ended the record, (n-2)/n where an
    event did (Crow 1974; MIL-HDBK-189).

    Examples
    --------
    >>> repair = np.array([5, 40, 43, 175, 389, 712, 747, 795, 1299, 1478.0])
    >>> found = power_law(repair, 1500.0, "time")
    >>> round(found.beta, 7), round(found.corrected, 6)
    (0.5372289, 0.483506)
    """
    test = military_handbook(times, end, ended_by)
    terms = test.df // 2
    n, lost = (terms, 1) if ended_by == "time" else (terms + 1, 2)
    if terms < 1 or test.statistic <= 0.0:
        return PowerLaw(math.nan, math.nan, test.statistic, test.df, test.p)
    beta = 2.0 * n / test.statistic
    corrected = beta * (n - lost) / n if n > lost else math.nan
    return PowerLaw(beta, corrected, test.statistic, test.df, test.p)
