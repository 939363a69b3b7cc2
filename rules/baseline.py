"""The baseline in words and figures: its exact interval and the screens that warn about it."""

from __future__ import annotations

import math

import numpy as np
from scipy.special import gammaincinv, ndtr

from rules.model import BaselineFigures, Caution, FloatArray, IntArray
from rules.nulls import dispersion_p, serial_p, spread_ties
from rules.screens import (
    anderson_darling,
    change_p,
    change_point,
    dispersion_index,
    laplace,
    military_handbook,
)

__all__ = ["baseline_figures", "screen"]

_FEW = 8
"""Below this the interval of the rate spans more than a factor of four."""

_SCREEN_LEVEL = 0.01
"""Two-sided level of each screen: a warning should be rare, since it stands in every message."""


def baseline_figures(
    events: float,
    exposure: float,
    *,
    source: str,
    start_us: int | None,
    end_us: int | None,
    confidence: float = 0.95,
    index: float = 1.0,
) -> BaselineFigures:
    """Rate with its exact interval.

    ``events`` infinite means a stated rate 1/``exposure``. A dated baseline ends at a date (time-truncated:
    upper limit from m+1 events), every other one at its last event (event-truncated: both from m). Over-dispersed
    events count for 1/``index`` of themselves.

    Examples
    --------
    >>> f = baseline_figures(10, 1000, source="dated", start_us=None, end_us=None)
    >>> round(f.low * 1000, 4), round(f.high * 1000, 4)
    (4.7954, 18.3904)
    """
    if math.isinf(events):
        rate = 1.0 / exposure
        return BaselineFigures(None, None, rate, rate, rate, confidence, None, None, source, index=index)
    tail = (1.0 - confidence) / 2.0
    upper = events + 1.0 if source == "dated" else events
    k = max(1.0, index)
    unit = k / exposure
    low = float(gammaincinv(events / k, tail)) * unit if events > 0 else 0.0
    high = float(gammaincinv(upper / k, 1.0 - tail)) * unit
    return BaselineFigures(
        events, exposure, events / exposure, low, high, confidence, start_us, end_us, source, index=index
    )


def screen(
    exposure: FloatArray,
    events: IntArray,
    *,
    located: bool,
    counted: bool,
    known: bool,
    events_total: float = 0.0,
    scattered: bool = False,
) -> tuple[Caution, ...]:
    """Warnings about a baseline's own stretch; none of them drops data.

    ``scattered`` says that over-dispersion is recognised already, and told of.
    """
    if known:
        return ()
    out: list[Caution] = []
    total = float(events.sum()) if events.size else events_total
    if total < _FEW:
        out.append(
            Caution(
                "too-few",
                f"The baseline rests on {total:.0f} events only; its rate is known within a wide interval.",
            )
        )
    if located and events.size >= 5:
        out += _gap_cautions(exposure)
    elif counted and events.size >= 5:
        out += _count_cautions(exposure, events, scattered=scattered)
    return tuple(out)


def _gap_cautions(gaps: FloatArray) -> list[Caution]:
    times = np.cumsum(gaps)
    if times[-1] <= 0:
        return []
    out = []
    trend, power = laplace(times), military_handbook(times)
    p = min(1.0, 2.0 * min(trend.p, power.p))
    if p < _SCREEN_LEVEL:
        way = "shrank" if trend.statistic > 0 else "grew"
        out.append(
            Caution(
                "trend",
                f"Gaps {way} within the baseline itself (Laplace {trend.statistic:+.1f}, military-handbook"
                f" {power.statistic:.1f} on {power.df} degrees of freedom, p = {p:.2g}); it mixes two levels.",
            )
        )
    change = change_point(times)
    if change is not None and change.p < _SCREEN_LEVEL:
        out.append(
            _shift(change.after, times.size, change.p, "events", change.rate_after / change.rate_before)
        )
    uneven = anderson_darling(spread_ties(gaps))
    if uneven.p < _SCREEN_LEVEL:
        more = float(gaps.std()) > float(gaps.mean())
        what = (
            "more uneven than chance makes them, as where events come in clusters"
            if more
            else "too even for chance"
        )
        out.append(
            Caution(
                "not-exponential",
                f"Gaps in the baseline are {what} (Anderson-Darling {uneven.statistic:.2f}, p = {uneven.p:.2g}).",
            )
        )
    return out + _serial(gaps, "gaps")


def _count_cautions(exposure: FloatArray, events: IntArray, *, scattered: bool) -> list[Caution]:
    good = exposure > 0
    exposure, events = exposure[good], events[good]
    ends = np.cumsum(exposure)
    # the events of a record lie somewhere in it: spread evenly, so that no trend is made
    rank = np.arange(int(events.sum())) - np.repeat(np.cumsum(events) - events, events) + 0.5
    which = np.repeat(np.arange(events.size), events)
    times = ends[which] - exposure[which] * (1.0 - rank / events[which])
    out = []
    end = float(ends[-1])
    index, _ = dispersion_index(events, exposure)
    p = dispersion_p(events, exposure)
    wide = max(1.0, index)
    trend = laplace(times, end)
    p_trend = 2.0 * float(ndtr(-abs(trend.statistic) / math.sqrt(wide)))
    if p_trend < _SCREEN_LEVEL:
        way = "rose" if trend.statistic > 0 else "fell"
        out.append(
            Caution(
                "trend",
                f"The rate {way} within the baseline itself (Laplace {trend.statistic:+.1f}, p = {p_trend:.2g},"
                " scatter allowed for); it mixes two levels.",
            )
        )
    change = change_point(times, end)
    if change is not None and change_p(change.statistic / wide, times.size) < _SCREEN_LEVEL:
        records = int(which[change.after - 1]) + 1
        p_change = change_p(change.statistic / wide, times.size)
        out.append(_shift(records, events.size, p_change, "records", change.rate_after / change.rate_before))
    if p < _SCREEN_LEVEL and not scattered:
        out.append(
            Caution(
                "over-dispersed",
                f"Counts in the baseline vary {index:.1f} times as much as chance alone would make them"
                f" (p = {p:.2g}), but neighbouring records do not: rather a change or a trend than clusters.",
            )
        )
    expected = exposure * (events.sum() / exposure.sum())
    return out + _serial((events - expected) / np.sqrt(np.maximum(expected, 1e-12)), "counts")


def _shift(after: int, of: int, p: float, what: str, ratio: float) -> Caution:
    stretch = f"the last {of - after}" if 2 * after < of else f"the first {after}"
    way = f"{ratio:.1f} times as often" if ratio > 1 else f"{1 / max(ratio, 1e-9):.1f} times more rarely"
    return Caution(
        "shift",
        f"The baseline seems to hold a change: from its {what} number {after + 1} on events come {way}"
        f" (simulated p = {p:.2g}). Of its {of} {what}, {stretch} look like one level.",
    )


def _serial(values: FloatArray, what: str) -> list[Caution]:
    if values.size < 8:
        return []
    correlation, p = serial_p(values)
    if p >= _SCREEN_LEVEL:
        return []
    way = "alike" if correlation > 0 else "unlike"
    return [
        Caution(
            "serial",
            f"Neighbouring {what} in the baseline are {way} (rank correlation {correlation:+.2f},"
            f" p = {p:.2g}); the limits take them as independent.",
        )
    ]
