"""The baseline during a replay: how it grows, what is known of its scatter, and the limits that follow from it."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from rules import protocol
from rules.bank import Base, Side
from rules.baseline import baseline_figures
from rules.calibration import Calibration
from rules.dispersion import Dispersion, count_dispersion, gap_dispersion, lot_dispersion
from rules.model import BaselineFigures, BaselinePlan, Caution, Direction, FloatArray, Plan, Steps
from rules.points import Points
from rules.start import Start, base_up_to, find_start, place_events

__all__ = ["Keeper", "typical_step"]

_YEAR_US = 365.25 * 86400e6
_SAME = 0.005
_GROSS = math.log(10.0)
"""While learning ten times rarer evidence is asked for: whether events come in clusters is not known yet."""
_MIN_ELAPSED_YEARS = 1.0 / 365.25


class Keeper:
    """Geometry of a series, its baseline and its limits; the walk itself is :class:`rules.assess.Replay`."""

    start: Start | None
    calibration: Calibration
    per_year: float
    log_limit: float
    limits_until: float
    lot: float
    grow_to: float
    first_end: float
    first_figures: tuple[float, float]
    grows: bool

    def __init__(self, steps: Steps, plan: Plan, now_us: int) -> None:
        self.steps = steps
        self.plan = plan
        self.now_us = now_us
        self.ends: FloatArray = np.cumsum(steps.exposure)
        self.totals: FloatArray = np.cumsum(steps.events).astype(float)
        self.alive_end = (float(self.ends[-1]) if self.ends.size else 0.0) + steps.open_exposure
        self.event_positions, self.event_steps = place_events(steps, self.ends)
        self.baselines: list[BaselineFigures] = []
        self.cautions: list[Caution] = []
        self.excluded: list[tuple[float, float]] = []
        """Stretches with a cause found, which never join."""
        self.calibration = Calibration(math.inf, 0.0, 0.0, plan.false_alerts_per_year)
        self.breaks: list[float] = []
        """Where shifts began: dispersion is not taken over them."""
        self.grain = math.inf
        self._limits_of: tuple[float, Calibration, float, bool] = (math.inf, self.calibration, 1.0, False)
        self.dispersion = Dispersion(1.0, 0.0)
        self.dispersion_due = 0
        self.learning = False
        """Only the guard of a baseline that is still being learnt is at work."""
        self.start = None
        self.sides: dict[Direction, Side] = {}
        self.points: dict[Direction, Points] = {}

    @property
    def base(self) -> Base:
        """The baseline in use."""
        assert self.start is not None
        return self.start.base

    @property
    def finest(self) -> float:
        """Finest difference that the data know so far."""
        return self.grain if math.isfinite(self.grain) else 0.05 * self.base.mean_gap

    def find(self, plan: BaselinePlan, after: float) -> Start | None:
        """Where judging begins after a position; None, perhaps with a caution, where it cannot yet."""
        found = find_start(
            self.steps, plan, ends=self.ends, totals=self.totals, after=after, alive_end=self.alive_end,
            now_us=self.now_us,
        )  # fmt: skip
        if isinstance(found, Caution):
            self.cautions.append(found)
            return None
        return found

    def _exposure_per_year(self, position: float, time_us: int) -> float:
        years = (time_us - self.steps.start_us) / _YEAR_US
        return position / max(years, _MIN_ELAPSED_YEARS)

    def recalibrate(self, position: float, time_us: int) -> None:
        """Take the limits anew from the baseline and the production seen so far."""
        assert self.start is not None
        base = self.start.base
        self.per_year = max(self._exposure_per_year(position, time_us), 1e-12)
        self.limits_until = time_us + max(0.25 * (time_us - self.steps.start_us), 86400e6)
        self._look_at_dispersion(position)
        inputs = (math.log(base.rate * self.per_year), self.calibration, base.index, self.learning)
        if inputs[1:] == self._limits_of[1:] and abs(inputs[0] - self._limits_of[0]) < _SAME:
            return  # the limits would move by less than a hundredth of one event's evidence
        self._limits_of = inputs
        self.log_limit = self.calibration.log_limit(base.rate, self.per_year)
        if self.learning:
            self.log_limit += _GROSS
        for side in self.sides.values():
            side.set_limits(self.log_limit, base.index)

    def _look_at_dispersion(self, position: float) -> None:
        """Recognise over-dispersion from what was seen up to ``position``, a running excursion left out."""
        held = min((side.held_from() for side in self.sides.values()), default=1 << 60)
        if held <= self.ends.size:
            position = min(position, float(self.ends[held - 1]) if held > 0 else 0.0)
        events = int(np.searchsorted(self.event_positions, position, side="right"))
        if events >= self.dispersion_due:
            self.dispersion = self._dispersion(position, events)
            for points in self.points.values():
                points.runs = not self.dispersion.regular and self.dispersion.index == 1.0
            self.dispersion_due = events + 1 + events // 8
        if self.dispersion.index != self.calibration.index:
            self.calibration = replace(self.calibration, index=self.dispersion.index)
        self.base.index = self.dispersion.index
        if self.base.index == 1.0 and self.steps.unit > 0.0:
            # gaps of whole units are geometric: a little more even than exponential ones, by 1 - p
            self.base.index = 1.0 - min(0.5, self.steps.unit * self.base.rate)

    def _dispersion(self, position: float, events: int) -> Dispersion:
        steps = self.steps
        if steps.located:
            return gap_dispersion(
                np.concatenate([[0.0], self.event_positions[:events]]), self.finest, self.breaks
            )
        if steps.per_record:
            done = int(np.searchsorted(self.ends, position * (1 + 1e-12), side="right"))
            use = slice(0, done)
            good = steps.exposure[use] > 0
            return count_dispersion(steps.events[use][good], steps.exposure[use][good], self.breaks)
        return lot_dispersion(self.event_positions[:events], position, self.lot, self.breaks)

    def grow(self, i: int) -> None:
        """Let events join the baseline that are old enough and outside any running excursion."""
        start = self.start
        assert start is not None
        base = start.base
        if base.known or base.events >= self.grow_to:
            return
        held = min(side.held_from() for side in self.sides.values())
        moved = False
        while (
            base.end_i < min(held, i + 1)
            and self.totals[i] - self.totals[base.end_i] >= protocol.GUARD_EVENTS
            and base.events < self.grow_to
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
            self.recalibrate(float(self.ends[i]), int(self.steps.time_us[i]))
            self.note_baseline(int(self.steps.time_us[base.end_i - 1]))

    def note_baseline(self, end_us: int) -> None:
        """Keep the figures of the baseline as it is now."""
        start = self.start
        assert start is not None
        from_us = self.steps.timeline.time_at(start.base_from) if start.base_from > 0 else self.steps.start_us
        figures = baseline_figures(
            start.base.events,
            start.base.exposure,
            source=start.source,
            start_us=from_us,
            end_us=end_us,
            index=start.base.index,
        )
        if (
            self.baselines
            and start.source in {"first-events", "after-change"}
            and self.baselines[-1].start_us == from_us
        ):
            self.baselines[-1] = figures
        else:
            self.baselines.append(figures)

    def figures_up_to(self, position: float) -> BaselineFigures:
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
            index=base.index,
        )


def typical_step(steps: Steps, first_step: int) -> float:
    """Exposure of a usual step, from the baseline's own steps (or the first thirty), so that it stays as it is."""
    early = slice(0, max(first_step, 30))
    exposure = steps.exposure[early]
    if not steps.per_record:
        exposure = exposure[steps.events[early] > 0]
    return float(exposure.mean()) if exposure.size else 0.0
