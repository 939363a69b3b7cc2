"""The engine: one stream's steps, baseline and plan in, its standing and every shift found out."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from rules import protocol
from rules.bank import Base, Side, crossing_with_floor
from rules.baseline import baseline_figures, screen
from rules.calibration import RECURRENCE_CAP_YEARS, Calibration
from rules.evidence import eased, signal_at
from rules.hits import Counted, Gap, gather_hits
from rules.model import (
    Assessment,
    BaselineFigures,
    BaselinePlan,
    Caution,
    Direction,
    FloatArray,
    Plan,
    RuleHit,
    Settled,
    Signal,
    Standing,
    Steps,
)
from rules.start import DEFAULT_FIRST_EVENTS, Start, base_up_to, find_start, place_events
from rules.tails import log_count_tail

__all__ = ["assess"]

_YEAR_US = 365.25 * 86400e6
_MIN_ELAPSED_YEARS = 1.0 / 365.25
_DIRECTIONS: tuple[Direction, Direction] = ("worse", "better")


@dataclass(slots=True)
class _Open:
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
    return _Engine(steps, plan, settled, now_us).run()


class _Engine:
    """State of one replay; see :func:`assess`."""

    def __init__(self, steps: Steps, plan: Plan, settled: Sequence[Settled], now_us: int) -> None:
        self.steps = steps
        self.plan = plan
        self.calibration = Calibration(math.inf, 0.0, 0.0, plan.false_alerts_per_year)
        self.now_us = now_us
        self.queue: dict[Direction, list[Settled]] = {
            d: [s for s in settled if s.direction == d] for d in _DIRECTIONS
        }
        self.ends: FloatArray = np.cumsum(steps.exposure)
        self.totals: FloatArray = np.cumsum(steps.events).astype(float)
        self.alive_end = (float(self.ends[-1]) if self.ends.size else 0.0) + steps.open_exposure
        self.event_positions, self.event_steps = place_events(steps, self.ends)
        self.signals: list[Signal] = []
        self.baselines: list[BaselineFigures] = []
        self.cautions: list[Caution] = []
        self.open: dict[Direction, _Open | None] = dict.fromkeys(_DIRECTIONS)
        self.excluded: list[tuple[float, float]] = []
        self.grain = math.inf
        self.level = 0.0
        self.era_events = 0
        self.start: Start | None = None
        self.sides: dict[Direction, Side] = {}
        self.judged_from: dict[Direction, float] = {}
        """From where each direction's shift may have begun: the first baseline's end or the last restart."""

    @property
    def _base(self) -> Base:
        assert self.start is not None
        return self.start.base

    # -- the baseline ---------------------------------------------------------------------------------------

    def _exposure_per_year(self, position: float, time_us: int) -> float:
        years = (time_us - self.steps.start_us) / _YEAR_US
        return position / max(years, _MIN_ELAPSED_YEARS)

    def _recalibrate(self, position: float, time_us: int) -> None:
        """Take the limits anew from the baseline and the production seen so far."""
        assert self.start is not None
        base = self.start.base
        self.per_year = max(self._exposure_per_year(position, time_us), 1e-12)
        self.limits_until = time_us + max(0.25 * (time_us - self.steps.start_us), 86400e6)
        self.log_limit = self.calibration.log_limit(base.rate, self.per_year)
        for side in self.sides.values():
            side.set_limits(self.log_limit)
        self.log_gap_tail = math.log(protocol.GAP_WEIGHT) - self.log_limit

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
        self.open = dict.fromkeys(_DIRECTIONS)
        self.excluded = []
        steps = self.steps
        found = find_start(
            steps,
            plan,
            ends=self.ends,
            totals=self.totals,
            after=after,
            alive_end=self.alive_end,
            now_us=self.now_us,
        )
        if isinstance(found, Caution):
            self.cautions.append(found)
        self.start = found if isinstance(found, Start) else None
        self.era_events = int((self.event_positions <= after).sum()) if after > 0 else 0
        if self.start is None:
            return None
        start = self.start
        base = start.base
        grow_to = float(plan.grow_to) if plan.first_events is not None else 0.0
        typical = 0.0 if steps.located else _typical_step(steps, start.first_step)
        self.calibration = Calibration(
            base.events, grow_to, typical * base.rate, self.plan.false_alerts_per_year
        )
        self.sides = {d: Side(d, max(start.position, resume), start.first_step) for d in _DIRECTIONS}
        self.judged_from = dict.fromkeys(_DIRECTIONS, max(start.position, resume))
        self.first_end = start.base_to
        self.grows = not base.known and grow_to > base.events
        self.last_event = start.position
        first = start.first_step
        position = start.position
        if resume > start.position:
            first = int(np.searchsorted(self.ends, resume, side="left"))
            if not self.steps.located and first < self.ends.size:
                resume = float(self.ends[first])
                first += 1
            position = resume
            for side in self.sides.values():
                side.restart(resume, first)
            before = self.event_positions[self.event_positions <= resume]
            self.last_event = max(start.position, float(before[-1])) if before.size else start.position
        self.first = first
        begin_us = int(steps.time_us[first - 1]) if first > 0 else steps.start_us
        if position > 0.0:
            self._recalibrate(position, begin_us)
        elif first < self.ends.size:  # a stated rate: the first step is all the production there is to go by
            self._recalibrate(float(self.ends[first]), int(steps.time_us[first]))
        else:
            self._recalibrate(self.alive_end, steps.open_time_us)
        self._note_baseline(begin_us)
        positive = steps.exposure[:first][steps.exposure[:first] > 0]
        self.grain = float(positive.min()) if positive.size else math.inf

        for i in range(first, self.ends.size):
            renewed = self._step(
                i, position, float(self.ends[i]), int(steps.events[i]), int(steps.time_us[i])
            )
            if renewed is not None:
                return renewed
            position = float(self.ends[i])
            self._grow(i, grow_to)
        if self.alive_end > position:
            renewed = self._open_stretch(position, self.alive_end)
            if renewed is not None:
                return renewed
        self._settle_up_to(self.alive_end, self.ends.size)
        return self._renewal()

    def _settle_up_to(self, end: float, index: int) -> None:
        for direction in _DIRECTIONS:
            alert = self.open[direction]
            if alert is not None and alert.restart <= end:
                if alert.settled is None or not alert.settled.new_baseline:
                    # a group's events have no place in it: judging starts anew with a whole step
                    at = alert.restart if self.steps.located else max(alert.restart, end)
                    self.sides[direction].restart(at, index)
                    self.judged_from[direction] = at
                    if alert.settled is not None and not alert.settled.absorb:
                        self.excluded.append((alert.at, alert.restart))
                self.open[direction] = None if not (alert.settled and alert.settled.new_baseline) else alert

    def _renewal(self) -> tuple[float, float] | None:
        """Return (began, settled) positions of an alert that a person settled as an intended change."""
        for direction in _DIRECTIONS:
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
        base = self._base
        self._settle_up_to(end if self.steps.located else begin, i)
        renewed = self._renewal()
        if renewed is not None and renewed[1] <= end:
            return renewed
        if time_us > self.limits_until:
            self._recalibrate(begin, int(self.steps.time_us[i - 1]) if i else self.steps.start_us)
        worse, better = self.sides["worse"], self.sides["better"]
        located = self.steps.located
        if end > begin:
            self.grain = min(self.grain, end - begin)
        if located or count == 0:
            self._quiet_part(begin, end)
        if located:
            worse.measure(base, end)
            worse.drop_spent(end, i)
        if count:
            worse.n = [n + count for n in worse.n]
            better.n = [n + count for n in better.n]
        worse.measure(base, end)
        if count:
            self._judge_worse(i, begin, end, count, time_us)
        if not located:
            worse.drop_spent(end, i + 1)
        better.measure(base, end)
        better.drop_spent(end, i + 1)
        if count:
            self.last_event = end
            self._follow_open(end, time_us)
        return None

    def _open_stretch(self, begin: float, end: float) -> tuple[float, float] | None:
        """Judge the exposure proven since the last step."""
        self._settle_up_to(end, self.ends.size)
        renewed = self._renewal()
        if renewed is not None:
            return renewed
        self._quiet_part(begin, end)
        base = self._base
        for side in self.sides.values():
            side.measure(base, end)
        return None

    def _quiet_part(self, begin: float, end: float) -> None:
        """Let `better` rise over an event-free stretch, and stop at the first crossing."""
        if "better" not in self.plan.watch or self.open["better"] is not None:
            return
        base, side = self._base, self.sides["better"]
        side.measure(base, end)
        gap_from = max(self.last_event, min(side.start))
        tail = min(self.log_gap_tail, math.log(protocol.FLOOR_PROBABILITY))
        gap_limit = base.gap_above(tail)
        crossing = gap_from + gap_limit
        if not any(w >= h for w, h in zip(side.w, side.limits, strict=True)) and crossing > end:
            return
        for w, limit, ratio, n, start in zip(
            side.w, side.limits, side.ratios, side.n, side.start, strict=True
        ):
            if w >= limit:
                at = crossing_with_floor(base, ratio, n, limit, start)
                crossing = min(crossing, max(begin, at))
        if crossing > end:
            return
        self._raise(
            "better",
            crossing,
            self.steps.timeline.time_at(crossing),
            gap=Gap("open-gap", crossing - gap_from, gap_limit, crossing - gap_from),
        )

    def _judge_worse(self, i: int, begin: float, end: float, count: int, time_us: int) -> None:
        if "worse" not in self.plan.watch or self.open["worse"] is not None:
            return
        base, side = self._base, self.sides["worse"]
        hit = any(
            w >= h and n >= protocol.MIN_EVENTS_WORSE
            for w, h, n in zip(side.w, side.limits, side.n, strict=True)
        )
        short: Gap | None = None
        counted: Counted | None = None
        if self.steps.located:
            gap = max(end - begin, self.grain if math.isfinite(self.grain) else 0.0)
            log_tail = math.log(-math.expm1(base.log_gap_above(gap))) if gap > 0 else -math.inf
            if i > self.first and log_tail <= self.log_gap_tail and gap > 0:
                limit = base.gap_above(math.log1p(-math.exp(self.log_gap_tail)))
                short = Gap("gap-limit", end - begin, limit, gap)
        elif count >= protocol.MIN_EVENTS_WORSE and end > begin:
            log_tail = log_count_tail(count, end - begin, base.events, base.exposure)
            level = math.log(protocol.COUNT_WEIGHT) - log_tail + math.log((end - begin) * base.rate)
            if level >= self.log_limit:
                counted = Counted(count, end - begin, level)
        if hit or short or counted:
            self._raise("worse", end, time_us, gap=short, counted=counted)

    # -- alerts -----------------------------------------------------------------------------------------------

    def _raise(
        self,
        direction: Direction,
        position: float,
        time_us: int,
        *,
        gap: Gap | None = None,
        counted: Counted | None = None,
    ) -> None:
        base, side = self._base, self.sides[direction]
        side.measure(base, position)
        hits, log_level = gather_hits(side, base, self.log_limit, gap=gap, counted=counted)
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
        self.open[direction] = _Open(
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
            figures_up_to=self._figures_up_to if self.grows else None,
            hits=hits,
            recurrence_years=years,
            timeline=self.steps.timeline,
            start_us=self.steps.start_us,
        )

    def _figures_up_to(self, position: float) -> BaselineFigures:
        """Return the baseline's figures without what it took in after ``position``."""
        start = self.start
        assert start is not None
        if start.base_to <= position:
            return self.baselines[-1]
        events = self.event_positions[self.event_positions <= position]
        end = max(float(events[-1]) if events.size else position, self.first_end)
        base = base_up_to(start, end, self.event_positions, self.excluded)
        now = self.baselines[-1]
        return baseline_figures(
            base.events,
            base.exposure,
            source=now.source,
            start_us=now.start_us,
            end_us=self.steps.timeline.time_at(end),
        )

    def _follow_open(self, end: float, time_us: int) -> None:
        """Refresh an open alert when its evidence really grew (methods.md section 8)."""
        for direction in _DIRECTIONS:
            alert = self.open[direction]
            if alert is None or math.isfinite(alert.restart):
                continue
            if direction == "better":
                continue  # it rises inside gaps, where nothing can be added to what was said
            old = self.signals[alert.slot]
            hits, log_level = gather_hits(self.sides[direction], self._base, self.log_limit)
            grown = False
            if log_level >= alert.reported_level + 2.0 and alert.reported_years < RECURRENCE_CAP_YEARS:
                years = self.calibration.recurrence_years(log_level, self._base.rate, self.per_year)
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
            ratio = since / exposure / self._base.rate if exposure > 0 else math.inf
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

    # -- growth -----------------------------------------------------------------------------------------------

    def _grow(self, i: int, grow_to: float) -> None:
        """Let events join the baseline that are old enough and outside any running excursion."""
        start = self.start
        assert start is not None
        base = start.base
        if base.known or base.events >= grow_to or any(self.open.values()):
            return
        held = min(side.held_from() for side in self.sides.values())
        moved = False
        while (
            base.end_i < min(held, i + 1)
            and self.totals[i] - self.totals[base.end_i] >= protocol.GUARD_EVENTS
            and base.events < grow_to
        ):
            j = base.end_i
            low, high = float(self.ends[j] - self.steps.exposure[j]), float(self.ends[j])
            if not any(a < high and b > low for a, b in self.excluded):
                base.join(float(self.steps.events[j]), float(self.steps.exposure[j]))
            base.end_i = j + 1
            start.base_to = high
            moved = True
        if moved:
            for side in self.sides.values():
                side.trim(base.end_i, start.base_to, float(self.totals[i] - self.totals[base.end_i - 1]))
            self._recalibrate(float(self.ends[i]), int(self.steps.time_us[i]))
            self._note_baseline(int(self.steps.time_us[base.end_i - 1]))

    def _note_baseline(self, end_us: int) -> None:
        start = self.start
        assert start is not None
        from_us = self.steps.timeline.time_at(start.base_from) if start.base_from > 0 else self.steps.start_us
        figures = baseline_figures(
            start.base.events, start.base.exposure, source=start.source, start_us=from_us, end_us=end_us
        )
        if (
            self.baselines
            and start.source in {"first-events", "after-change"}
            and self.baselines[-1].start_us == from_us
        ):
            self.baselines[-1] = figures
        else:
            self.baselines.append(figures)

    # -- the answer ---------------------------------------------------------------------------------------------

    def _result(self) -> Assessment:
        steps = self.steps
        events = int(self.totals[-1]) if self.totals.size else 0
        gaps_from = float(self.event_positions[-1]) if self.event_positions.size else 0.0
        standing: Standing = "learning"
        cautions = list(self.cautions)
        signals = list(self.signals)
        if self.start is not None:
            standing = "steady"
            for direction in reversed(_DIRECTIONS):
                alert = self.open[direction]
                if alert is not None and not math.isfinite(alert.restart):
                    standing = direction
                    signal = signals[alert.slot]
                    signals[alert.slot] = replace(signal, eased=self._is_eased(alert))
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
            if self.baselines:
                inside = (self.ends > self.start.base_from) & (self.ends <= self.start.base_to)
                warnings = screen(
                    steps.exposure[inside],
                    steps.events[inside],
                    located=steps.located,
                    counted=steps.per_record,
                    known=base.known,
                    events_total=base.events,
                )
                self.baselines[-1] = replace(self.baselines[-1], warnings=warnings)
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

    def _is_eased(self, alert: _Open) -> bool:
        after = float((self.event_positions > alert.at * (1 + 1e-12)).sum())
        direction: Direction = self.signals[alert.slot].direction
        return eased(direction, after, self.alive_end - alert.at, self._base)


def _typical_step(steps: Steps, first_step: int) -> float:
    """Exposure of a usual step, from the baseline's own steps (or the first thirty), so that it stays as it is."""
    early = slice(0, max(first_step, 30))
    exposure = steps.exposure[early]
    if not steps.per_record:
        exposure = exposure[steps.events[early] > 0]
    return float(exposure.mean()) if exposure.size else 0.0
