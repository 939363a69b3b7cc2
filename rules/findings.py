"""All screens of one stretch run together: what speaks against one steady rate, each finding with its p.

Gaps and counts are screened at a two-sided level of 1 % a screen. Chances come from exact laws or from draws with a
fixed seed, kept once made (:mod:`rules.nulls`).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy.special import ndtr

from rules.model import FloatArray, IntArray
from rules.nulls import best_split, dispersion_p, serial_p, split_p, spread_ties, variation_p
from rules.screens import anderson_darling, change_point, laplace, military_handbook

__all__ = ["LEVEL", "Finding", "screen_counts", "screen_gaps"]

EndedBy = Literal["time", "event"]

LEVEL = 0.01
"""Level of each screen: a warning stands in every message and should be rare."""

_LEAST = 5
"""Events, and steps, below which nothing is said."""


@dataclass(frozen=True, slots=True)
class Finding:
    """One screen that speaks against a steady rate.

    ``code`` is one of the contract's, ``at`` (shift only) the index, from 0, of the gap or step after which the
    rate changed.
    """

    code: str
    statistic: float
    p: float
    text: str
    at: int | None = None


def screen_gaps(gaps: FloatArray, open_gap: float = 0.0, ended_by: EndedBy = "event") -> tuple[Finding, ...]:
    """Screen closed gaps for trend, one change, uneven gaps and serial dependence.

    Parameters
    ----------
    gaps : float array, shape (n,)
        Closed gaps in order, in exposure, none negative.
    open_gap : float
        Exposure since the last event; counts only where time ended the stretch.
    ended_by : {"event", "time"}

    Returns
    -------
    tuple of Finding
        Empty for fewer than five gaps. A change is looked for from seven gaps on (six if time ended them).

    Notes
    -----
    Given their number and sum, closed gaps of a steady rate are uniform spacings in either truncation; the
    Anderson-Darling and variation screens use them so, and need no open gap.

    Examples
    --------
    >>> shrinking = np.r_[np.linspace(60, 40, 12), np.linspace(6, 3, 12)]
    >>> [f.code for f in screen_gaps(shrinking)][:2]
    ['trend', 'shift']
    """
    x = np.asarray(gaps, dtype=float)
    if x.size < _LEAST or x.sum() <= 0.0:
        return ()
    times = np.cumsum(x)
    end = float(times[-1]) + open_gap if ended_by == "time" else None
    found = (
        _gap_trend(times, end),
        _gap_shift(x, times, end),
        _too_variable(x),
        _not_exponential(x),
        _serial(x, "gaps"),
    )
    return tuple(f for f in found if f is not None)


def screen_counts(counts: IntArray, exposure: FloatArray) -> tuple[Finding, ...]:
    """Screen counts of steps for trend, one change, scatter and serial dependence.

    Parameters
    ----------
    counts : int array, shape (n,)
    exposure : float array, shape (n,)
        Steps without exposure are left out; ``at`` still counts in the steps given.

    Returns
    -------
    tuple of Finding
        Empty for fewer than five steps with exposure or fewer than five events.

    Notes
    -----
    Trend and change allow for scatter: their statistics are divided by the index of dispersion where above 1.

    Examples
    --------
    >>> [f.code for f in screen_counts(np.array([0, 0, 9, 0, 0, 8, 0, 0, 0, 9, 0]), np.ones(11))]
    ['over-dispersed']
    """
    size = np.asarray(exposure, dtype=float)
    good = np.flatnonzero(size > 0.0)
    n, e = np.asarray(counts)[good].astype(float), size[good]
    if n.size < _LEAST or n.sum() < _LEAST:
        return ()
    expected = e * (n.sum() / e.sum())
    index = _index(n, e)
    found = (
        _count_trend(n, e, max(1.0, index)),
        _count_shift(n, e, good, max(1.0, index)),
        _scattered(n, e, index),
        _serial((n - expected) / np.sqrt(expected), "counts"),
    )
    return tuple(f for f in found if f is not None)


# -- gaps ---------------------------------------------------------------------------------------------------------


def _gap_trend(times: FloatArray, end: float | None) -> Finding | None:
    z, power = laplace(times, end), military_handbook(times, end)
    p = min(1.0, 2.0 * min(z.p, power.p))
    if p >= LEVEL:
        return None
    if z.p <= power.p:
        shrank, statistic, what = z.statistic > 0, z.statistic, f"Laplace z = {z.statistic:.1f}"
    else:
        shrank, statistic = power.statistic < power.df, power.statistic
        what = f"military-handbook statistic = {statistic:.1f} on {power.df} degrees of freedom"
    way = "shrank" if shrank else "grew"
    return Finding(
        "trend", statistic, p, f"Gaps {way} within the baseline ({what}, p = {p:.2g}); it mixes levels."
    )


def _gap_shift(gaps: FloatArray, times: FloatArray, end: float | None) -> Finding | None:
    change = change_point(times, end)
    if change is None or change.p >= LEVEL:
        return None
    k = change.after
    later = np.cumsum(gaps[k:])
    steady = (
        _one_level(times[:k], None),
        _one_level(later, None if end is None else end - float(times[k - 1])),
    )
    text = _shift_text(change.rate_after / change.rate_before, k, change.statistic, change.p, "event")
    return Finding(
        "shift", change.statistic, change.p, text + _stretches(k, gaps.size - k, steady, "events"), k - 1
    )


def _one_level(times: FloatArray, end: float | None) -> bool:
    if times.size < _LEAST:
        return False
    change = change_point(times, end)
    return change is None or change.p >= LEVEL


def _too_variable(gaps: FloatArray) -> Finding | None:
    variation = float(gaps.std() / gaps.mean())
    p = variation_p(variation, gaps.size)
    if p >= LEVEL:
        return None
    text = f"Gaps in the baseline vary more than chance makes them (coefficient of variation = {variation:.2f}, p = {p:.2g})."
    return Finding("over-dispersed", variation, p, text)


def _not_exponential(gaps: FloatArray) -> Finding | None:
    found = anderson_darling(spread_ties(gaps))
    if found.p >= LEVEL:
        return None
    way = "more uneven" if float(gaps.std()) > float(gaps.mean()) else "more even"
    text = f"Gaps in the baseline are {way} than a steady rate makes them (Anderson-Darling {found.statistic:.2f}, p = {found.p:.2g})."
    return Finding("not-exponential", found.statistic, found.p, text)


# -- counts -------------------------------------------------------------------------------------------------------


def _count_trend(n: FloatArray, e: FloatArray, wide: float) -> Finding | None:
    """Score test of a log-linear rate (Cox & Lewis 1966), events at the middle of their step's exposure."""
    share = e / e.sum()
    middle = np.cumsum(share) - share / 2.0
    mean = float((share * middle).sum())
    variance = float((share * (middle - mean) ** 2).sum())
    z = float((n * (middle - mean)).sum()) / math.sqrt(float(n.sum()) * variance * wide)
    p = 2.0 * float(ndtr(-abs(z)))
    if p >= LEVEL:
        return None
    way = "rose" if z > 0 else "fell"
    text = f"The rate {way} within the baseline (Cox-Lewis z = {z:.1f}, p = {p:.2g}); it mixes levels."
    return Finding("trend", z, p, text)


def _count_shift(n: FloatArray, e: FloatArray, where: IntArray, wide: float) -> Finding | None:
    k, statistic = best_split(n, e)
    p = split_p(statistic / wide, n)
    if p >= LEVEL:
        return None
    steady = _one_count_level(n[:k], e[:k]), _one_count_level(n[k:], e[k:])
    before, after = float(n[:k].sum()), float(n[k:].sum())
    ratio = (after / float(e[k:].sum())) / (before / float(e[:k].sum())) if before > 0 else math.inf
    text = _shift_text(ratio, int(where[k - 1]) + 1, statistic, p, "step")
    text += _stretches(int(before), int(after), steady, "events")
    return Finding("shift", statistic, p, text, int(where[k - 1]))


def _one_count_level(n: FloatArray, e: FloatArray) -> bool:
    if n.size < _LEAST or n.sum() < _LEAST:
        return False
    return split_p(best_split(n, e)[1] / max(1.0, _index(n, e)), n) >= LEVEL


def _index(n: FloatArray, e: FloatArray) -> float:
    """Pearson's index of dispersion; 1 is Poisson."""
    expected = e * (n.sum() / e.sum())
    return float(((n - expected) ** 2 / expected).sum()) / (n.size - 1)


def _scattered(n: FloatArray, e: FloatArray, index: float) -> Finding | None:
    p = dispersion_p(n, e)
    if p >= LEVEL:
        return None
    text = f"Counts in the baseline vary {index:.1f} times as much as chance alone makes them (Pearson index, p = {p:.2g})."
    return Finding("over-dispersed", index, p, text)


# -- both ---------------------------------------------------------------------------------------------------------


def _shift_text(ratio: float, after: int, statistic: float, p: float, what: str) -> str:
    way = f"{ratio:.1f} times as often" if ratio >= 1 else f"{1 / max(ratio, 1e-9):.1f} times more rarely"
    if math.isinf(ratio) or ratio <= 0.0:
        way = "for the first time" if ratio > 0 else "no more"
    return (
        f"The baseline seems to hold a change: after {what} {after} events come {way}"
        f" (2 ln LR = {statistic:.1f}, simulated p = {p:.2g}). "
    )


def _stretches(before: int, after: int, steady: tuple[bool, bool], what: str) -> str:
    first, last = f"the first {before} {what}", f"the last {after} {what}"
    if all(steady):
        return f"Apart, {first} and {last} each look like one level."
    if any(steady):
        return f"Only {first if steady[0] else last} look like one level."
    return "Neither side is both long enough and steady enough to stand for one level."


def _serial(values: FloatArray, what: str) -> Finding | None:
    r, p = serial_p(values)
    if p >= LEVEL:
        return None
    way = "alike" if r > 0 else "unlike"
    text = f"Neighbouring {what} in the baseline are {way} (lag-1 rank correlation = {r:.2f}, p = {p:.2g}); the limits take them as independent."
    return Finding("serial", r, p, text)
