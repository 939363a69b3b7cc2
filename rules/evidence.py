"""What an alert states: since when, by how much, how sure, and whether it has eased."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from scipy.special import betaincinv, gammaincinv

from rules.bank import Base
from rules.calibration import RECURRENCE_CAP_YEARS
from rules.changepoint import locate_shift
from rules.model import (
    BaselineFigures,
    Caution,
    Direction,
    FloatArray,
    IntArray,
    Ratio,
    RuleHit,
    ShiftStart,
    Signal,
    Timeline,
)

__all__ = ["conditional_ratio", "drifted", "eased", "signal_at"]


_ENOUGH = 8
"""So many later events at least before a drift is spoken of."""


def conditional_ratio(
    events: float, exposure: float, base_events: float, base_exposure: float, confidence: float = 0.95
) -> Ratio:
    """Ratio of two Poisson rates with the exact conditional interval (Clopper & Pearson 1934).

    Given n + m events in all, n is binomial with odds ρE/T. With a known rate (``base_events`` infinite)
    the exact Poisson interval (Garwood 1936) over the expected number is given.

    Examples
    --------
    >>> r = conditional_ratio(21, 3011, 11, 800)
    >>> round(1 / r.estimate, 6), round(1 / r.high, 7), round(1 / r.low, 6)
    (1.971488, 0.8584264, 4.277266)
    """
    tail = (1.0 - confidence) / 2.0
    if exposure <= 0:
        return Ratio(math.inf, 0.0, math.inf, confidence)
    if math.isinf(base_events):
        mean = exposure / base_exposure
        low = float(gammaincinv(events, tail)) / mean if events > 0 else 0.0
        return Ratio(events / mean, low, float(gammaincinv(events + 1.0, 1.0 - tail)) / mean, confidence)
    scale = base_exposure / exposure
    low_p = float(betaincinv(events, base_events + 1.0, tail)) if events > 0 else 0.0
    high_p = float(betaincinv(events + 1.0, base_events, 1.0 - tail)) if base_events > 0 else 1.0
    high = scale * high_p / (1.0 - high_p) if high_p < 1.0 else math.inf
    estimate = scale * events / base_events if base_events > 0 else math.inf
    return Ratio(estimate, scale * low_p / (1.0 - low_p), high, confidence)


def drifted(
    first_events: float, first_exposure: float, events: float, exposure: float, index: float
) -> Caution | None:
    """Say that a stream has moved away from its first baseline, beyond what chance allows (99 %).

    A slow drift shows in no single stretch, and a growing baseline would follow it; this looks at its two ends:
    the first baseline's ``first_events`` and everything since.
    """
    if events < _ENOUGH or exposure <= 0.0:
        return None
    k = max(1.0, index)
    ratio = conditional_ratio(events / k, exposure / k, first_events / k, first_exposure / k, 0.99)
    if ratio.low <= 1.0 <= ratio.high:
        return None
    way = f"{ratio.estimate:.1f} times" if ratio.estimate > 1 else f"only {ratio.estimate:.2f} times"
    return Caution(
        "drift",
        f"Since the first {first_events:.0f} events the rate runs at {way} theirs (99 % interval"
        f" {ratio.low:.2f} to {ratio.high:.2f}): the usual level may have drifted.",
    )


def signal_at(
    *,
    direction: Direction,
    position: float,
    time_us: int,
    begin: float,
    event_positions: FloatArray,
    event_steps: IntArray,
    base: Base,
    figures: BaselineFigures,
    figures_up_to: Callable[[float], BaselineFigures] | None,
    hits: tuple[RuleHit, ...],
    recurrence_years: float,
    timeline: Timeline,
    start_us: int,
) -> Signal:
    """Gather the evidence of one shift as of ``position``.

    ``base`` is the baseline up to ``begin``. Where it grows, ``figures_up_to`` gives its figures without
    what it took in after the shift began; otherwise ``figures`` stand.
    """
    found = locate_shift(
        event_positions,
        begin=begin,
        now=position,
        base_events=base.events,
        base_exposure=base.exposure,
        direction=direction,
        pooled=figures_up_to is not None,
        index=base.index,
    )
    if figures_up_to is not None:
        figures = figures_up_to(found.start)
    inside = event_positions > found.start
    events = int(inside.sum())
    exposure = position - found.start
    if figures.events is None or figures.exposure is None:
        m, t = math.inf, 1.0 / figures.rate
    else:
        m, t = figures.events, figures.exposure
    k = max(1.0, base.index)
    plain = conditional_ratio(events / k, exposure / k, m / k, t if math.isinf(m) else t / k)

    def moment(at: float) -> int:
        return start_us if at <= 0 else min(timeline.time_at(at), time_us)

    corrected = Ratio(found.ratio, found.ratio_low, found.ratio_high, 0.95)
    if math.isnan(found.ratio):
        corrected = plain
    return Signal(
        direction=direction,
        raised_us=time_us,
        as_of_us=time_us,
        began=ShiftStart(
            moment(found.start),
            moment(found.start_low),
            moment(found.start_high),
            found.start,
            found.start_low,
            found.start_high,
        ),
        hits=hits,
        baseline=figures,
        since_events=events,
        since_exposure=exposure,
        ratio=corrected,
        uncorrected=plain,
        recurrence_years=min(recurrence_years, RECURRENCE_CAP_YEARS),
        recurrence_capped=recurrence_years >= RECURRENCE_CAP_YEARS,
        steps=tuple(int(i) for i in np.unique(event_steps[inside])),
    )


def eased(direction: Direction, events: float, exposure: float, base: Base) -> bool:
    """Whether the stretch since the alert looks like the baseline again.

    True once at least three usual gaps have passed and the events in them are not improbable (tail above
    5 %) on the alert's side.
    """
    if exposure < 3.0 * base.mean_gap:
        return False
    if direction == "worse":
        return events == 0 or base.log_within(events, exposure) > math.log(0.05)
    return base.log_beyond(events + 1.0, exposure) > math.log(0.05)
