"""The baseline in words and figures: its exact interval and the screens that warn about it."""

from __future__ import annotations

import math

from scipy.special import gammaincinv

from rules.findings import screen_counts, screen_gaps
from rules.model import BaselineFigures, Caution, FloatArray, IntArray

__all__ = ["baseline_figures", "screen"]

_FEW = 8
"""Below this the interval of the rate spans more than a factor of four."""


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
    found = screen_gaps(exposure) if located else ()
    if counted and not located:
        found = screen_counts(events, exposure)
    out += [Caution(f.code, f.text) for f in found if not (scattered and f.code == "over-dispersed")]
    return tuple(out)
