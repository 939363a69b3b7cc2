"""Where judging begins: the first baseline of a stream, or of its life after an intended change."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from rules.bank import Base
from rules.model import BaselinePlan, Caution, FloatArray, IntArray, Steps

__all__ = [
    "DEFAULT_FIRST_EVENTS",
    "FIRST_RECORDS",
    "GUARD_FROM_EVENTS",
    "Start",
    "base_up_to",
    "find_start",
    "place_events",
]

DEFAULT_FIRST_EVENTS = 12

GUARD_FROM_EVENTS = 6
"""So many events make a provisional baseline, which guards the learning of the first one."""

FIRST_RECORDS = 12
"""So many records a baseline of counts has at least: fewer cannot tell clusters from chance."""


@dataclass(slots=True)
class Start:
    """Where judging begins and against what; positions are exposure since the stream's first record."""

    base: Base
    base_from: float
    base_to: float
    first_step: int
    position: float
    source: str


def find_start(
    steps: Steps,
    plan: BaselinePlan,
    *,
    ends: FloatArray,
    totals: FloatArray,
    after: float,
    alive_end: float,
    now_us: int,
) -> Start | Caution | None:
    """Find the first baseline at or after position ``after``.

    ``ends`` and ``totals`` are the cumulative exposure and events of the steps. None means that it is still
    being learnt; a caution says why it cannot be had at all.
    """
    if plan.rate is not None:
        return Start(Base(math.inf, 1.0 / plan.rate, 0), 0.0, 0.0, 0, 0.0, "stated")
    if plan.events is not None and plan.exposure is not None:
        return Start(Base(float(plan.events), plan.exposure, 0), 0.0, 0.0, 0, 0.0, "counted")
    if plan.from_us is not None and plan.to_us is not None:
        low = steps.timeline.position_at(plan.from_us) if plan.from_us > steps.start_us else 0.0
        high = min(steps.timeline.position_at(plan.to_us), alive_end)
        inside = (steps.time_us >= plan.from_us) & (steps.time_us < plan.to_us)
        events = float(steps.events[inside].sum())
        first = int(np.searchsorted(steps.time_us, plan.to_us, side="left"))
        if now_us < plan.to_us:
            return None
        if events < 1 or high <= low:
            return Caution(
                "too-few", "No event lies between the dates given for the baseline; nothing is judged yet."
            )
        return Start(Base(events, high - low, first), low, high, first, high, "dated")
    want = float(plan.first_events or DEFAULT_FIRST_EVENTS)
    done = int(np.searchsorted(ends, after, side="right")) if after > 0 else 0
    before = float(totals[done - 1]) if done else 0.0
    enough = totals - before >= want
    if steps.per_record:
        enough &= np.arange(totals.size) >= done + FIRST_RECORDS - 1
    reached = np.nonzero(enough)[0]
    if reached.size == 0:
        return None
    i = int(reached[0])
    exposure = float(ends[i]) - after
    if exposure <= 0:
        return None
    source = "first-events" if after == 0 else "after-change"
    return Start(
        Base(float(totals[i]) - before, exposure, i + 1), after, float(ends[i]), i + 1, float(ends[i]), source
    )


def base_up_to(
    start: Start, position: float, event_positions: FloatArray, excluded: Sequence[tuple[float, float]]
) -> Base:
    """Return the growing baseline as if it ended at ``position``, stretches with a cause left out."""
    low, high = np.searchsorted(event_positions, [start.base_from, position], side="right")
    events = float(high - low)
    exposure = position - start.base_from
    for a, b in excluded:
        if a < position:
            top = min(b, position)
            events -= float(((event_positions > a) & (event_positions <= top)).sum())
            exposure -= top - a
    return Base(max(events, 1.0), max(exposure, 1e-300), 0, start.base.index)


def place_events(steps: Steps, ends: FloatArray) -> tuple[FloatArray, IntArray]:
    """Position and step of every event; a group's events are spread evenly over its exposure."""
    counts = steps.events
    which = np.repeat(np.arange(counts.size), counts)
    if steps.located or not which.size:
        return ends[which], which
    firsts = np.repeat(np.cumsum(counts) - counts, counts)
    rank = np.arange(which.size) - firsts + 1
    share = rank / counts[which]
    return ends[which] - steps.exposure[which] * (1.0 - share), which
