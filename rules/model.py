"""The shapes that the rules take and give: series, plan, evidence and assessment."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Literal

import numpy as np
import numpy.typing as npt

__all__ = [
    "Assessment",
    "BaselineFigures",
    "BaselinePlan",
    "Caution",
    "Direction",
    "FloatArray",
    "IntArray",
    "Plan",
    "Ratio",
    "RuleHit",
    "Settled",
    "ShiftStart",
    "Signal",
    "Standing",
    "Steps",
    "Timeline",
]

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
Direction = Literal["worse", "better"]
Standing = Literal["learning", "steady", "worse", "better", "silent"]


@dataclass(frozen=True, slots=True)
class Timeline:
    """Maps a position (exposure since the stream's first record) to a moment and back.

    ``exposure`` and ``time_us`` (microseconds since 1970 UTC) never fall. With ``stepped`` exposure arrives
    at each moment at once (units leave a test); otherwise it runs evenly between knots (working time).
    """

    exposure: FloatArray
    time_us: IntArray
    stepped: bool

    def position_at(self, time_us: int) -> float:
        """Exposure reached by a moment; clamped to the ends."""
        e, t = self.exposure, self.time_us
        if e.size == 0 or time_us <= t[0]:
            return float(e[0]) if e.size and (not self.stepped or time_us == t[0]) else 0.0
        i = int(np.searchsorted(t, time_us, side="right"))
        if i >= t.size or self.stepped or t[i] == t[i - 1]:
            return float(e[min(i, t.size) - 1])
        return float(e[i - 1] + (e[i] - e[i - 1]) * (time_us - t[i - 1]) / (t[i] - t[i - 1]))

    def time_at(self, position: float) -> int:
        """Moment at which the exposure reached ``position``; clamped to the ends."""
        e, t = self.exposure, self.time_us
        if e.size == 0:
            return 0
        i = int(np.searchsorted(e, position - 1e-9 * max(1.0, abs(position)), side="left"))
        if i >= e.size:
            return int(t[-1])
        if self.stepped or i == 0 or e[i] == e[i - 1]:
            return int(t[i])
        share = min(1.0, max(0.0, (position - e[i - 1]) / (e[i] - e[i - 1])))
        return int(t[i - 1] + round(share * float(t[i] - t[i - 1])))


@dataclass(frozen=True, slots=True)
class Steps:
    """A stream as time-ordered steps.

    Attributes
    ----------
    exposure : float array, shape (n,)
        Exposure of each step, >= 0 (0 when several events fall on one moment).
    events : int array, shape (n,)
        Events of each step. Steady means ``events[i] ~ Poisson(rate * exposure[i])``.
    time_us : int array, shape (n,)
        Moment at which each step closed, microseconds since 1970 UTC.
    record : int array, shape (n,)
        Caller's number of the record that closed the step, -1 for none.
    open_exposure : float
        Exposure proven since the last step, without an event.
    open_time_us : int
        Moment up to which the feed is proven alive.
    start_us : int
        Moment of the stream's first record (position 0).
    timeline : Timeline
    located : bool
        True when every step ends exactly at one event (a list of gaps).
    notes : tuple of str
        Plain sentences about how the series was made (lots spread, events moved to working time ...).
    """

    exposure: FloatArray
    events: IntArray
    time_us: IntArray
    record: IntArray
    open_exposure: float
    open_time_us: int
    start_us: int
    timeline: Timeline
    located: bool = True
    per_record: bool = False
    """True when each step is one record with its own count, so that counts can be compared with chance."""
    unit: float = 0.0
    """Exposure of one unit where an event is located to a unit (geometric gaps), 0 where exposure is continuous."""
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class BaselinePlan:
    """How the baseline is to be had; exactly one of the four ways is filled in."""

    first_events: int | None = None
    grow_to: int = 60
    from_us: int | None = None
    to_us: int | None = None
    """Exclusive end of a dated baseline."""
    rate: float | None = None
    events: int | None = None
    exposure: float | None = None


@dataclass(frozen=True, slots=True)
class Settled:
    """A person's finding on an earlier alert, in the order of their raising."""

    direction: Direction
    raised_us: int
    settled_us: int | None
    """None while the alert is still open."""
    new_baseline: bool = False
    """True for ``intended-change``: the baseline starts anew at ``began_us``."""
    began_us: int | None = None
    absorb: bool = True
    """True for ``no-cause``: the stretch was chance and may join a growing baseline."""


@dataclass(frozen=True, slots=True)
class Plan:
    """What a stream is to be judged by."""

    baseline: BaselinePlan
    false_alerts_per_year: float
    """This stream's share of the plant's budget."""
    watch: tuple[Direction, ...] = ("worse", "better")
    settle_after_us: int | None = None
    """Rehearsal: settle every alert as ``no-cause`` this long after it was raised."""


@dataclass(frozen=True, slots=True)
class Caution:
    """A warning about a baseline or stream: ``code`` from the contract's list, ``text`` a plain sentence."""

    code: str
    text: str


@dataclass(frozen=True, slots=True)
class BaselineFigures:
    """The baseline in use; ``events`` and ``exposure`` are None when the rate was stated."""

    events: float | None
    exposure: float | None
    rate: float
    low: float
    high: float
    confidence: float
    start_us: int | None
    end_us: int | None
    source: str
    """``first-events``, ``dated``, ``stated``, ``counted`` or ``after-change``."""
    index: float = 1.0
    """Index of dispersion by which interval, limits and evidence are scaled."""
    warnings: tuple[Caution, ...] = ()


@dataclass(frozen=True, slots=True)
class RuleHit:
    """One rule over its limit; the unit of ``statistic`` and ``limit`` is the rule's own."""

    rule: str
    design_ratio: float | None
    statistic: float
    limit: float


@dataclass(frozen=True, slots=True)
class ShiftStart:
    """When the shift began, with the set of starts the data allow."""

    estimate_us: int
    earliest_us: int
    latest_us: int
    exposure_at: float
    exposure_earliest: float
    exposure_latest: float


@dataclass(frozen=True, slots=True)
class Ratio:
    """Rate since the shift over the baseline's rate."""

    estimate: float
    low: float
    high: float
    confidence: float


@dataclass(frozen=True, slots=True)
class Signal:
    """Evidence of one shift, as of the moment it went over its limit (or of its last update)."""

    direction: Direction
    raised_us: int
    as_of_us: int
    began: ShiftStart
    hits: tuple[RuleHit, ...]
    baseline: BaselineFigures
    since_events: int
    since_exposure: float
    ratio: Ratio
    uncorrected: Ratio
    recurrence_years: float
    recurrence_capped: bool
    """True when the figure is a floor ("less than once in ...")."""
    steps: tuple[int, ...]
    """Indices of the steps with events since the shift began."""
    settled_us: int | None = None
    updates: int = 0
    """How often the evidence really grew after the alert was raised."""
    eased: bool = False


@dataclass(frozen=True, slots=True)
class Assessment:
    """The whole standing of one stream at one moment."""

    standing: Standing
    events: int
    exposure: float
    open_gap: float
    mean_gap: float | None
    baseline: BaselineFigures | None
    baselines: tuple[BaselineFigures, ...]
    """Every baseline used on the way, oldest first."""
    signals: tuple[Signal, ...]
    """Every shift found, oldest first, settled ones included."""
    cautions: tuple[Caution, ...] = field(default=())
    level: float = 0.0
    """Strongest evidence now, as a share of the limit (1 = alert)."""
