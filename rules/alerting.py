"""Alerts during a replay: raised from the rules, followed while they are open, matched with what people found."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from rules.calibration import RECURRENCE_CAP_YEARS
from rules.evidence import eased, signal_at
from rules.hits import gather_hits
from rules.keeping import Keeper
from rules.model import Direction, Plan, RuleHit, Settled, Signal, Steps
from rules.points import PointHit
from rules.start import base_up_to

__all__ = ["DIRECTIONS", "Alerting"]

DIRECTIONS: tuple[Direction, Direction] = ("worse", "better")


@dataclass(slots=True)
class OpenAlert:
    """An alert that the engine has raised and not yet seen settled."""

    at: float
    settled: Settled | None
    restart: float
    """Position at which its direction is judged again (infinite while it is open)."""
    slot: int
    reported_level: float
    """ln of the strongest rule's level when the alert was last reported."""
    reported_years: float
    reported_events: int
    reported_ratio: float


class Alerting(Keeper):
    """Alerts of one replay."""

    def __init__(self, steps: Steps, plan: Plan, settled: Sequence[Settled], now_us: int) -> None:
        super().__init__(steps, plan, now_us)
        self.queue: dict[Direction, list[Settled]] = {
            d: [s for s in settled if s.direction == d] for d in DIRECTIONS
        }
        self.signals: list[Signal] = []
        self.open: dict[Direction, OpenAlert | None] = dict.fromkeys(DIRECTIONS)
        self.watch: tuple[Direction, ...] = plan.watch
        self.judged_from: dict[Direction, float] = {}
        """From where each direction's shift may have begun: the first baseline's end or the last restart."""

    def raise_alert(
        self,
        direction: Direction,
        position: float,
        time_us: int,
        points: Sequence[PointHit],
    ) -> None:
        """Raise an alert at a position, and settle it as the person did, or the plan says."""
        base, side = self.base, self.sides[direction]
        side.measure(base, position)
        hits, log_level = gather_hits(side, base, self.log_limit, points)
        if self.learning:  # an alert ends the learning: the baseline stays what it was before
            self.learning, self.watch = False, self.plan.watch
        signal = self._signal(direction, position, time_us, hits, log_level)
        waiting = self.queue[direction]
        known = waiting.pop(0) if waiting else None
        settled_us = known.settled_us if known else None
        if known is None and self.plan.settle_after_us is not None:
            settled_us = time_us + self.plan.settle_after_us
            known = Settled(direction, time_us, settled_us)
        if settled_us is not None and settled_us <= self.now_us:
            restart = max(position, self.steps.timeline.position_at(settled_us))
            if settled_us >= self.steps.open_time_us:
                restart = self.alive_end
            signal = replace(signal, settled_us=settled_us)
        else:
            restart = math.inf
        self.open[direction] = OpenAlert(
            position,
            known,
            restart,
            len(self.signals),
            log_level,
            signal.recurrence_years,
            signal.since_events,
            signal.uncorrected.estimate,
        )
        self.signals.append(signal)
        self.breaks = sorted([*self.breaks, signal.began.exposure_at])

    def _signal(
        self, direction: Direction, position: float, time_us: int, hits: tuple[RuleHit, ...], log_level: float
    ) -> Signal:
        start = self.start
        assert start is not None
        base = start.base
        begin = self.judged_from[direction]
        years = self.calibration.recurrence_years(log_level, base.rate, self.per_year)
        low = int(np.searchsorted(self.event_positions, begin, side="right"))
        high = int(np.searchsorted(self.event_positions, position * (1 + 1e-12), side="right"))
        if direction == "better" and high and self.event_positions[high - 1] >= position:
            high = int(np.searchsorted(self.event_positions, position, side="left"))
        return signal_at(
            direction=direction,
            position=position,
            time_us=time_us,
            begin=begin,
            event_positions=self.event_positions[low:high],
            event_steps=self.event_steps[low:high],
            base=base_up_to(start, begin, self.event_positions, self.excluded) if self.grows else base,
            figures=self.baselines[-1],
            figures_up_to=self.figures_up_to if self.grows else None,
            hits=hits,
            recurrence_years=years,
            timeline=self.steps.timeline,
            start_us=self.steps.start_us,
        )

    def follow_open(self, end: float, time_us: int) -> None:
        """Refresh an open alert when its evidence really grew (methods.md section 8)."""
        for direction in DIRECTIONS:
            alert = self.open[direction]
            if alert is None or math.isfinite(alert.restart):
                continue
            if direction == "better":
                continue  # it rises inside gaps, where nothing can be added to what was said
            old = self.signals[alert.slot]
            hits, log_level = gather_hits(self.sides[direction], self.base, self.log_limit)
            grown = False
            if log_level >= alert.reported_level + 2.0 and alert.reported_years < RECURRENCE_CAP_YEARS:
                years = self.calibration.recurrence_years(log_level, self.base.rate, self.per_year)
                grown = years >= 10.0 * alert.reported_years
            since = self.event_positions.size - int(
                np.searchsorted(self.event_positions, old.began.exposure_at, "right")
            )
            since -= self.event_positions.size - int(
                np.searchsorted(self.event_positions, end * (1 + 1e-12), "right")
            )
            if not grown and since < alert.reported_events + 3:
                continue
            exposure = end - old.began.exposure_at
            ratio = since / exposure / self.base.rate if exposure > 0 else math.inf
            moved = max(ratio, alert.reported_ratio) >= 1.5 * min(ratio, alert.reported_ratio)
            if not (grown or (moved and hits)):
                continue
            new = self._signal(direction, end, time_us, hits or old.hits, log_level)
            self.signals[alert.slot] = replace(
                new, raised_us=old.raised_us, settled_us=old.settled_us, updates=old.updates + 1
            )
            alert.reported_level = max(log_level, alert.reported_level)
            alert.reported_years = new.recurrence_years
            alert.reported_events = new.since_events
            alert.reported_ratio = new.uncorrected.estimate

    def is_eased(self, alert: OpenAlert) -> bool:
        """Whether the stretch since the alert looks like the baseline again."""
        after = float((self.event_positions > alert.at * (1 + 1e-12)).sum())
        direction: Direction = self.signals[alert.slot].direction
        return eased(direction, after, self.alive_end - alert.at, self.base)

    def judges(self, direction: Direction) -> bool:
        """Whether a direction is watched and has no alert open."""
        return direction in self.watch and self.open[direction] is None
