"""The engine: one stream's steps, baseline and plan in, its standing and every shift found out."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from rules import protocol
from rules.alerting import DIRECTIONS, Alerting
from rules.bank import Side, crossing_with_floor
from rules.baseline import baseline_figures, screen
from rules.calibration import Calibration
from rules.dispersion import over_dispersed
from rules.evidence import drifted
from rules.keeping import typical_step
from rules.model import (
    Assessment,
    BaselineFigures,
    BaselinePlan,
    Caution,
    Plan,
    Settled,
    Standing,
    Steps,
)
from rules.points import Points
from rules.start import (
    DEFAULT_FIRST_EVENTS,
    GUARD_FROM_EVENTS,
    Start,
)

__all__ = ["assess"]

_YEAR_US = 365.25 * 86400e6
_LOG_FLOOR = math.log(protocol.FLOOR_PROBABILITY)
_MIN_ELAPSED_YEARS = 1.0 / 365.25


def assess(steps: Steps, plan: Plan, settled: Sequence[Settled], now_us: int) -> Assessment:
    """Judge a stream.

    Parameters
    ----------
    steps : Steps
        The whole history; the result depends on nothing else, least of all on how it was delivered.
    plan : Plan
        Baseline, budget share and directions.
    settled : sequence of Settled
        Earlier alerts in the order of their raising, open ones with ``settled_us`` None. The k-th signal of
        a direction is the k-th of these with that direction.
    now_us : int
        Present moment, microseconds since 1970 UTC; only settlements up to it count.

    Returns
    -------
    Assessment

    Notes
    -----
    methods.md sections 1 to 6: the protocol is that of :mod:`rules.simulate`, which calibrates it.

    Examples
    --------
    >>> from rules.model import Timeline
    >>> at = np.arange(1, 31) * 86_400_000_000
    >>> gaps = np.full(30, 40.0)
    >>> steps = Steps(gaps, np.ones(30, dtype=np.int64), at, np.arange(30), 0.0, int(at[-1]), 0,
    ...               Timeline(np.cumsum(gaps), at, stepped=True))
    >>> assess(steps, Plan(BaselinePlan(first_events=12), 0.05), [], int(at[-1])).standing
    'steady'
    """
    return Replay(steps, plan, settled, now_us).run()


class Replay(Alerting):
    """State of one replay; see :func:`assess`."""

    def __init__(self, steps: Steps, plan: Plan, settled: Sequence[Settled], now_us: int) -> None:
        super().__init__(steps, plan, settled, now_us)
        self.level = 0.0
        self.era_events = 0
        self.position = 0.0
        self.now = 0.0

    # -- the walk ---------------------------------------------------------------------------------------------

    def run(self) -> Assessment:
        era_plan, after, resume = self.plan.baseline, 0.0, 0.0
        while True:
            again = self._run_era(era_plan, after, resume)
            if again is None:
                break
            after, resume = again
            first = self.plan.baseline.first_events or DEFAULT_FIRST_EVENTS
            era_plan = BaselinePlan(first_events=first, grow_to=self.plan.baseline.grow_to)
        return self._result()

    def _run_era(self, plan: BaselinePlan, after: float, resume: float) -> tuple[float, float] | None:
        """Judge from one baseline on; returns (began, settled) positions when a person starts a new one."""
        self.open = dict.fromkeys(DIRECTIONS)
        self.excluded = []
        self.start = None
        self.learning = False
        self.watch = self.plan.watch
        self.era_events = int((self.event_positions <= after).sum()) if after > 0 else 0
        full = self.find(plan, after)
        first = plan.first_events or DEFAULT_FIRST_EVENTS
        if plan.rate is None and plan.events is None and plan.from_us is None and first > GUARD_FROM_EVENTS:
            early = self.find(replace(plan, first_events=GUARD_FROM_EVENTS), after)
            if early is not None and "worse" in self.watch:
                return self._guarded(early, full, plan, resume)
        if full is None:
            return None
        return self._walk(self._begin(full, plan, resume), self.ends.size)

    def _guarded(self, early: Start, full: Start | None, plan: BaselinePlan, resume: float) -> tuple[float, float] | None:  # fmt: skip
        """Watch for gross deterioration while the baseline is still being learnt; what it finds ends the learning."""
        self.learning, self.watch = True, ("worse",)
        grow_to = plan.grow_to
        plan = replace(plan, grow_to=max(grow_to, plan.first_events or DEFAULT_FIRST_EVENTS))
        raised, noted = len(self.signals), len(self.baselines)
        until = full.first_step if full is not None else self.ends.size
        renewed = self._walk(self._begin(early, plan, resume), until, learnt=full is not None)
        if not self.learning:
            return renewed
        assert len(self.signals) == raised
        del self.baselines[noted:]
        if full is None:
            self.start = None
            return None
        self.learning, self.watch = False, self.plan.watch
        return self._walk(self._begin(full, replace(plan, grow_to=grow_to), resume), self.ends.size)

    def _begin(self, start: Start, plan: BaselinePlan, resume: float) -> int:
        """Set up judging from a baseline; returns the first step to be judged."""
        steps = self.steps
        self.start = start
        base = start.base
        self.grow_to = float(plan.grow_to) if plan.first_events is not None else 0.0
        self.lot = 0.0 if steps.located else typical_step(steps, start.first_step)
        self.calibration = Calibration(
            base.events, self.grow_to, self.lot * base.rate, self.plan.false_alerts_per_year
        )
        position, first = start.position, start.first_step
        if resume > start.position:
            first = int(np.searchsorted(self.ends, resume, side="left"))
            position = resume
            if not steps.located and first < self.ends.size:
                position = float(self.ends[first])
                first += 1
        self.sides = {d: Side(d, position, first) for d in DIRECTIONS}
        self.points = {d: Points(d, position) for d in DIRECTIONS}
        self.judged_from = dict.fromkeys(DIRECTIONS, position)
        self.first_end = start.base_to
        self.first_figures = (base.events, base.exposure)
        self.grows = not base.known and self.grow_to > base.events
        positive = steps.exposure[:first][steps.exposure[:first] > 0]
        self.grain = float(positive.min()) if positive.size else math.inf
        self.dispersion_due = 0
        self._limits_of = (math.inf, self.calibration, 1.0, False)
        begin_us = int(steps.time_us[first - 1]) if first > 0 else steps.start_us
        if position > 0.0:
            self.recalibrate(position, begin_us)
        elif first < self.ends.size:  # a stated rate: the first step is all the production there is to go by
            self.recalibrate(float(self.ends[first]), int(steps.time_us[first]))
        else:
            self.recalibrate(self.alive_end, steps.open_time_us)
        self.note_baseline(begin_us)
        self.position = position
        return first

    def _walk(self, first: int, until: int, *, learnt: bool = False) -> tuple[float, float] | None:
        """Judge the steps from ``first`` on; while learning, only up to ``until``."""
        steps, position = self.steps, self.position
        for i in range(first, self.ends.size):
            if self.learning and i >= until:
                break
            renewed = self._step(
                i, position, float(self.ends[i]), int(steps.events[i]), int(steps.time_us[i])
            )
            if renewed is not None:
                return renewed
            position = float(self.ends[i])
            if not any(self.open.values()):
                self.grow(i)
        if self.learning and learnt:
            return None
        if self.alive_end > position:
            renewed = self._open_stretch(position, self.alive_end)
            if renewed is not None:
                return renewed
        self._settle_up_to(self.alive_end, self.ends.size)
        return self._renewal()

    def _settle_up_to(self, end: float, index: int) -> None:
        for direction in DIRECTIONS:
            alert = self.open[direction]
            if alert is not None and alert.restart <= end:
                if alert.settled is None or not alert.settled.new_baseline:
                    # a group's events have no place in it: judging starts anew with a whole step
                    at = alert.restart if self.steps.located else max(alert.restart, end)
                    self.sides[direction].restart(at, index)
                    self.points[direction].restart(at)
                    self.judged_from[direction] = at
                    if alert.settled is not None and not alert.settled.absorb:
                        self.excluded.append((alert.at, alert.restart))
                self.open[direction] = None if not (alert.settled and alert.settled.new_baseline) else alert

    def _renewal(self) -> tuple[float, float] | None:
        """Return (began, settled) positions of an alert that a person settled as an intended change."""
        for direction in DIRECTIONS:
            alert = self.open[direction]
            if alert and alert.settled and alert.settled.new_baseline and alert.restart <= self.alive_end:
                began_us = alert.settled.began_us
                signal = self.signals[alert.slot]
                began = (
                    self.steps.timeline.position_at(began_us)
                    if began_us is not None
                    else signal.began.exposure_at
                )
                return min(began, alert.at), alert.restart
        return None

    def _step(self, i: int, begin: float, end: float, count: int, time_us: int) -> tuple[float, float] | None:
        self._settle_up_to(end if self.steps.located else begin, i)
        renewed = self._renewal()
        if renewed is not None and renewed[1] <= end:
            return renewed
        self.now = end
        if time_us > self.limits_until:
            self.recalibrate(begin, int(self.steps.time_us[i - 1]) if i else self.steps.start_us)
        if end > begin:
            self.grain = min(self.grain, end - begin)
        if self.steps.located:
            self._located(i, begin, end, count, time_us)
        else:
            self._counted(i, begin, end, count, time_us)
        if count:
            self.follow_open(end, time_us)
        return None

    def _located(self, i: int, begin: float, end: float, count: int, time_us: int) -> None:
        """Judge the gap that an event at ``end`` closes."""
        base, worse, better = self.base, self.sides["worse"], self.sides["better"]
        self._quiet_part(begin, end)
        worse.measure(base, end)
        worse.drop_spent(base, end, i)
        worse.count(count)
        if self.judges("worse"):
            levels = self.points["worse"].gap_levels(base, end, self.finest)
            if self._passes(worse) or max(levels.values()) >= self.log_limit:
                self.raise_alert("worse", end, time_us, self.points["worse"].gap_hits(base, end, self.finest, self.log_limit))  # fmt: skip
        better.measure(base, end)
        better.count(count)
        better.drop_spent(base, end, i + 1)
        for points in self.points.values():
            points.take_gap(base, end, self.finest)

    def _counted(self, i: int, begin: float, end: float, count: int, time_us: int) -> None:
        """Judge a step whose events have no place in it."""
        base, worse, better = self.base, self.sides["worse"], self.sides["better"]
        exposure = end - begin
        if count == 0:
            self._quiet_part(begin, end)
        for side in (worse, better):
            side.measure(base, end)
            side.count(count)
            direction = side.direction
            if not self.judges(direction) or (direction == "worse" and not count) or exposure <= 0:
                continue
            alone = not self.steps.per_record
            levels = self.points[direction].count_levels(base, count, exposure, alone=alone)
            if direction == "better" and alone:
                levels = {}
            if self._passes(side) or max(levels.values(), default=-math.inf) >= self.log_limit:
                hits = self.points[direction].count_hits(base, count, exposure, self.log_limit, alone=alone)
                self.raise_alert(direction, end, time_us, hits if levels else ())
        worse.drop_spent(base, end, i + 1)
        better.drop_spent(base, end, i + 1)
        for points in self.points.values():
            points.take_count(base, count, exposure, end)

    def _passes(self, side: Side) -> bool:
        """Whether a member of the bank is over its limit, floors included."""
        base = self.base
        for w, limit, n, start in zip(side.w, side.limits, side.n, side.start, strict=True):
            if w < limit:
                continue
            if side.direction == "worse":
                if n >= protocol.MIN_EVENTS_WORSE:
                    return True
            elif base.log_beyond(n + 1.0, self.now - start) <= _LOG_FLOOR:
                return True
        return False

    def _open_stretch(self, begin: float, end: float) -> tuple[float, float] | None:
        """Judge the exposure proven since the last step."""
        self._settle_up_to(end, self.ends.size)
        renewed = self._renewal()
        if renewed is not None:
            return renewed
        self._quiet_part(begin, end)
        base = self.base
        for side in self.sides.values():
            side.measure(base, end)
        return None

    def _quiet_part(self, begin: float, end: float) -> None:
        """Let `better` rise over an event-free stretch, and stop at the first crossing."""
        if not self.judges("better"):
            return
        base, side, points = self.base, self.sides["better"], self.points["better"]
        side.measure(base, end)
        levels = points.gap_levels(base, end, 0.0)
        if not self.steps.located:
            levels = {rule: level for rule, level in levels.items() if rule == "open-gap"}
        crossing = math.inf
        for rule, level in levels.items():
            if level >= self.log_limit:
                crossing = min(crossing, max(begin, points.crossing(base, rule, self.log_limit)))
        for w, limit, ratio, n, start in zip(
            side.w, side.limits, side.ratios, side.n, side.start, strict=True
        ):
            if w >= limit:
                at = crossing_with_floor(base, ratio, n, limit, start)
                crossing = min(crossing, max(begin, at))
        if crossing > end:
            return
        hits = [h for h in points.gap_hits(base, crossing, 0.0, self.log_limit) if h.rule in levels]
        self.raise_alert("better", crossing, self.steps.timeline.time_at(crossing), hits)

    # -- the answer ---------------------------------------------------------------------------------------------

    def _drift(self) -> Caution | None:
        later = float((self.event_positions > self.first_end).sum())
        return drifted(*self.first_figures, later, self.alive_end - self.first_end, self.base.index)

    def _last_figures(self) -> BaselineFigures:
        """The baseline's figures with the dispersion as it is known now."""
        last = self.baselines[-1]
        base = self.base
        if last.index == base.index:
            return last
        return baseline_figures(
            base.events, base.exposure, source=last.source, start_us=last.start_us, end_us=last.end_us, index=base.index
        )  # fmt: skip

    def _result(self) -> Assessment:
        steps = self.steps
        events = int(self.totals[-1]) if self.totals.size else 0
        gaps_from = float(self.event_positions[-1]) if self.event_positions.size else 0.0
        standing: Standing = "learning"
        cautions = list(self.cautions)
        signals = list(self.signals)
        if self.start is not None:
            standing = "steady"
            for direction in reversed(DIRECTIONS):
                alert = self.open[direction]
                if alert is not None and not math.isfinite(alert.restart):
                    standing = direction
                    signal = signals[alert.slot]
                    signals[alert.slot] = replace(signal, eased=self.is_eased(alert))
            for side in self.sides.values():
                if side.direction in self.plan.watch:
                    shares = [w / h for w, h in zip(side.w, side.limits, strict=True) if h > 0]
                    self.level = max(self.level, *shares)
            base = self.start.base
            if self.calibration.unspent(base.rate, self.per_year):
                cautions.append(
                    Caution(
                        "budget-unspent",
                        "So few events are expected that the share of the false-alert budget cannot be spent"
                        " sensibly; the floors decide, and alerts are rarer than promised.",
                    )
                )
            if base.index > 1.0:
                cautions.append(over_dispersed(base.index, single=not steps.per_record))
            drift = self._drift() if self.grows and standing == "steady" else None
            if drift is not None:
                cautions.append(drift)
            if self.baselines:
                inside = (self.ends > self.start.base_from) & (self.ends <= self.start.base_to)
                warnings = screen(
                    steps.exposure[inside],
                    steps.events[inside],
                    located=steps.located,
                    counted=steps.per_record,
                    known=base.known,
                    events_total=base.events,
                    scattered=base.index > 1.0,
                )
                self.baselines[-1] = replace(self._last_figures(), warnings=warnings)
        elif not any(c.code == "too-few" for c in cautions):
            want = self.plan.baseline.first_events or DEFAULT_FIRST_EVENTS
            cautions.append(
                Caution(
                    "too-few",
                    f"{events - self.era_events} of the {want} events that the baseline needs are in.",
                )
            )
        return Assessment(
            standing=standing,
            events=events,
            exposure=self.alive_end,
            open_gap=self.alive_end - gaps_from,
            mean_gap=self.alive_end / events if events else None,
            baseline=self.baselines[-1] if self.start is not None and self.baselines else None,
            baselines=tuple(self.baselines),
            signals=tuple(signals),
            cautions=tuple(cautions),
            level=self.level,
        )
