"""The baseline in words and figures: its exact interval and the screens that warn about it."""

from __future__ import annotations

import math

import numpy as np
from scipy.special import chdtrc, gammaincinv, ndtr

from rules.model import BaselineFigures, Caution, FloatArray, IntArray

__all__ = ["baseline_figures", "dispersion_index", "laplace_statistic", "screen"]

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
) -> BaselineFigures:
    """Rate with its exact interval.

    ``events`` infinite means a stated rate 1/``exposure``. A dated baseline ends at a date (time-truncated:
    upper limit from m+1 events), every other one at its last event (event-truncated: both from m).

    Examples
    --------
    >>> f = baseline_figures(10, 1000, source="dated", start_us=None, end_us=None)
    >>> round(f.low * 1000, 4), round(f.high * 1000, 4)
    (4.7954, 18.3904)
    """
    if math.isinf(events):
        rate = 1.0 / exposure
        return BaselineFigures(None, None, rate, rate, rate, confidence, None, None, source)
    tail = (1.0 - confidence) / 2.0
    upper = events + 1.0 if source == "dated" else events
    low = float(gammaincinv(events, tail)) / exposure if events > 0 else 0.0
    high = float(gammaincinv(upper, 1.0 - tail)) / exposure
    return BaselineFigures(
        events, exposure, events / exposure, low, high, confidence, start_us, end_us, source
    )


def laplace_statistic(gaps: FloatArray) -> float:
    """Laplace's trend statistic of an event-truncated series of gaps; positive means gaps shrink.

    ``z = (mean of the first n-1 times − T/2) / (T sqrt(1/(12 (n-1))))`` (Laplace 1773; Ascher & Feingold
    1984). Returns 0 for fewer than three gaps.
    """
    times = np.cumsum(gaps)
    n = times.size - 1
    if n < 2 or times[-1] <= 0:
        return 0.0
    total = float(times[-1])
    return float((times[:-1].mean() - total / 2.0) / (total * math.sqrt(1.0 / (12.0 * n))))


def dispersion_index(counts: IntArray, exposure: FloatArray) -> tuple[float, float]:
    """Pearson's index of dispersion of counts over exposures, and its upper chi-square tail.

    Returns ``(index, p)``; index 1 is Poisson. Fewer than five steps give (1, 1).
    """
    if counts.size < 5 or counts.sum() == 0:
        return 1.0, 1.0
    expected = exposure * (counts.sum() / exposure.sum())
    good = expected > 0
    chi2 = float((((counts - expected) ** 2)[good] / expected[good]).sum())
    df = int(good.sum()) - 1
    return chi2 / df, float(chdtrc(df, chi2))


def screen(
    exposure: FloatArray,
    events: IntArray,
    *,
    located: bool,
    counted: bool,
    known: bool,
    events_total: float = 0.0,
) -> tuple[Caution, ...]:
    """Warnings about a baseline's own stretch; none of them drops data."""
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
        z = laplace_statistic(exposure)
        if 2.0 * float(ndtr(-abs(z))) < _SCREEN_LEVEL:
            way = "shrank" if z > 0 else "grew"
            out.append(
                Caution(
                    "trend",
                    f"Gaps {way} within the baseline itself (Laplace statistic {z:+.1f}); it mixes two levels.",
                )
            )
    if counted and events.size >= 5:
        index, p = dispersion_index(events, exposure)
        if p < _SCREEN_LEVEL:
            out.append(
                Caution(
                    "over-dispersed",
                    f"Counts in the baseline vary {index:.1f} times as much as chance alone would make them;"
                    " defects come in clusters, and alerts may come more often than promised.",
                )
            )
    return tuple(out)
