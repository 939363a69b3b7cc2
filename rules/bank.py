"""One direction's half of the bank: where each member's stretch began, and how strong it is now."""

from __future__ import annotations

import math

from rules import protocol
from rules.cusum import BANK, bank_weights, crossing_exposure
from rules.model import Direction
from rules.run_length import cusum_limit
from rules.tails import exposure_beyond, exposure_within, log_beyond, log_within

__all__ = ["Base", "Side", "crossing_with_floor"]


class Base:
    """The baseline as the engine uses it: m events in T exposure, or a known rate (m infinite).

    ``index`` is the recognised index of dispersion, 1 where chance alone explains the counts.
    """

    __slots__ = ("end_i", "events", "exposure", "index", "known", "mean_gap")

    def __init__(self, events: float, exposure: float, end_i: int, index: float = 1.0) -> None:
        self.events = events
        self.exposure = exposure
        self.known = math.isinf(events)
        self.end_i = end_i
        self.index = index
        self.mean_gap = exposure if self.known else exposure / events

    def join(self, events: float, exposure: float) -> None:
        """Let one more step join."""
        self.events += events
        self.exposure += exposure
        self.mean_gap = self.exposure / self.events

    @property
    def rate(self) -> float:
        """Events per exposure."""
        return 1.0 / self.mean_gap

    def log_within(self, r: float, exposure: float) -> float:
        """Ln P(the r-th event comes within ``exposure``)."""
        return log_within(r, exposure, self.events, self.exposure, self.index)

    def log_beyond(self, r: float, exposure: float) -> float:
        """Ln P(the r-th event comes later than ``exposure``)."""
        return log_beyond(r, exposure, self.events, self.exposure, self.index)

    def exposure_beyond(self, r: float, log_tail: float) -> float:
        """Exposure that the r-th event outlasts with probability ``exp(log_tail)``."""
        return exposure_beyond(r, log_tail, self.events, self.exposure, self.index)

    def exposure_within(self, r: float, log_tail: float) -> float:
        """Exposure within which the r-th event comes with probability ``exp(log_tail)``."""
        return exposure_within(r, log_tail, self.events, self.exposure, self.index)


class Side:
    """Members of one direction; ``start`` is a position, ``start_i`` the step after which it lies."""

    __slots__ = (
        "_per_event",
        "direction",
        "limits",
        "log_ratios",
        "n",
        "ratios",
        "start",
        "start_i",
        "w",
        "weights",
    )

    def __init__(self, direction: Direction, position: float, index: int) -> None:
        self.direction = direction
        self.ratios = BANK if direction == "worse" else tuple(1.0 / r for r in BANK)
        self.weights = bank_weights(direction)
        self.log_ratios = tuple(math.log(r) for r in self.ratios)
        self.limits = [math.inf] * len(self.ratios)
        self.restart(position, index)

    def restart(self, position: float, index: int) -> None:
        """Begin every stretch anew at ``position``."""
        size = len(self.ratios)
        self.start = [position] * size
        self.start_i = [index] * size
        self.n = [0.0] * size
        self.w = [0.0] * size
        self._per_event = [0.0] * size

    def set_limits(self, log_limit: float, index: float = 1.0) -> None:
        """Set each member's limit so that its weighted level is ``exp(log_limit)`` mean gaps."""
        level = math.exp(min(log_limit, 600.0)) / index
        self.limits = [cusum_limit(r, level / w) for r, w in zip(self.ratios, self.weights, strict=True)]

    def measure(self, base: Base, end: float) -> list[float]:
        """Evidence of every member's stretch up to ``end``, over-dispersed counts scaled by their index."""
        index = base.index
        members = zip(self.ratios, self.log_ratios, self.n, self.start, strict=True)
        if base.known:
            unit = 1.0 / base.mean_gap
            self._per_event = [r / index for r in self.log_ratios]
            self.w = [(n * log_r - (r - 1.0) * (end - s) * unit) / index for r, log_r, n, s in members]
            return self.w
        m, t = base.events, base.exposure
        log1p = math.log1p
        w, per_event = [], []
        for ratio, log_ratio, n, start in members:
            q = (end - start) / t
            # log1p of both parts, kept apart: exact for short stretches of a long baseline
            one = (log_ratio - (log1p(ratio * q) - log1p(q))) / index
            per_event.append(one)
            w.append(n * one - m * (log_ratio / index - one))
        self.w, self._per_event = w, per_event
        return w

    def count(self, events: int) -> None:
        """Take in events at the position last measured."""
        self.n = [n + events for n in self.n]
        self.w = [w + events * one for w, one in zip(self.w, self._per_event, strict=True)]

    def drop_spent(self, base: Base, end: float, index: int) -> None:
        """Restart each member whose stretch carries no evidence (the reset of a CUSUM at zero)."""
        for j, value in enumerate(self.w):
            if value <= 0.0:
                self.start[j] = end
                self.start_i[j] = index
                self.n[j] = 0.0
                self.w[j] = 0.0
                self._per_event[j] = self.log_ratios[j] / base.index

    def held_from(self) -> int:
        """Return the first step index that a growing baseline must leave out for this side's sake."""
        held = 1 << 60
        for value, i in zip(self.w, self.start_i, strict=True):
            if value >= protocol.QUIET_EVIDENCE and i < held:
                held = i
        return held

    def trim(self, base_i: int, base_position: float, events_since: float) -> None:
        """Let stretches that began inside the grown baseline begin at its end."""
        for j, i in enumerate(self.start_i):
            if i < base_i:
                self.start_i[j] = base_i
                self.start[j] = base_position
                self.n[j] = events_since


def crossing_with_floor(base: Base, ratio: float, n: float, limit: float, start: float) -> float:
    """Position at which a member crosses and the floor is passed as well."""
    at = crossing_exposure(ratio, n, limit * base.index, base.events, base.exposure)
    if not math.isfinite(at):
        return math.inf
    floor = base.exposure_beyond(n + 1.0, math.log(protocol.FLOOR_PROBABILITY))
    return start + max(at, floor)
