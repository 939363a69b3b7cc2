"""The rules that look at single points: gaps one by one, their sum, their runs and pairs, and single counts.

Each gives its *level*, ln of the expected exposure (in mean gaps) between its own false signals at what was
seen. Each costs its weight beside one CUSUM member's 1, and saw nearly every shift no earlier than the bank
(``tests/bench/detection.py``): the weights are small, and the rules stand in an alert for what they say.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from rules import protocol as p
from rules.bank import Base
from rules.model import Direction

__all__ = ["PointHit", "Points"]

_LN2 = math.log(2.0)
_LOG_HALF = -_LN2
_LOG_FLOOR = math.log(p.FLOOR_PROBABILITY)
_LOG_GAP, _LOG_SUM = math.log(p.GAP_WEIGHT), math.log(p.SUM_WEIGHT)
_LOG_RUN, _LOG_PAIR, _LOG_COUNT = math.log(p.RUN_WEIGHT), math.log(p.PAIR_WEIGHT), math.log(p.COUNT_WEIGHT)


@dataclass(frozen=True, slots=True)
class PointHit:
    """One of these rules over its limit; for gaps ``statistic`` and ``limit`` are exposures, for runs lengths."""

    rule: str
    statistic: float
    limit: float
    log_level: float


def _run_level(length: int) -> float:
    """Ln of the mean number of fair coin tosses until so many heads in a row (Feller 1968, XIII.7)."""
    return (length + 1) * _LN2 + math.log1p(-(2.0**-length)) if length else -math.inf


def _run_needed(log_level: float) -> int:
    length = 1
    while _run_level(length) < log_level:
        length += 1
    return length


class Points:
    """The newest points of one direction since judging began or began anew."""

    __slots__ = ("_run", "_tails", "recent", "runs", "worse")

    def __init__(self, direction: Direction, position: float) -> None:
        self.worse = direction == "worse"
        self.runs = True
        """False where events come too evenly, or in clusters: the median then says little of the next gap."""
        self.restart(position)

    def restart(self, position: float) -> None:
        """Forget every point; the next gap counts from ``position``."""
        self.recent = [position]
        self._run = 0
        self._tails = (0.0, 0.0)

    # -- a list of gaps -------------------------------------------------------------------------------------

    def _log_tail(self, base: Base, gap: float) -> float:
        log_beyond = base.log_beyond(1.0, gap)
        if not self.worse:
            return log_beyond
        if base.index != 1.0:
            return base.log_within(1.0, gap)
        # -expm1(0) is 0 only for a gap of nothing
        return math.log(-math.expm1(log_beyond)) if log_beyond < 0.0 else -745.0

    def gap_levels(self, base: Base, end: float, grain: float) -> dict[str, float]:
        """Ln level of each rule for the gap that ends, or is still open, at ``end``.

        ``grain`` is the finest difference the data know: no gap counts as finer.
        """
        gap = max(end - self.recent[0], grain if self.worse else 0.0)
        log_tail = self._log_tail(base, gap)
        out = {"gap-limit" if self.worse else "open-gap": _LOG_GAP - log_tail}
        if self.runs and log_tail < _LOG_HALF:
            out["median-run"] = _LOG_RUN + _run_level(self._run + 1)
        pair = max(log_tail, min(self._tails))
        out["near-limit-pair"] = _LOG_PAIR - _LN2 - 2.0 * pair
        if len(self.recent) == p.SUM_EVENTS:
            total = max(end - self.recent[-1], grain if self.worse else 0.0)
            tail = (base.log_within if self.worse else base.log_beyond)(float(p.SUM_EVENTS), total)
            if self.worse or tail <= _LOG_FLOOR:
                out["gap-sum"] = _LOG_SUM - tail
        if not self.worse and log_tail > _LOG_FLOOR:
            del out["open-gap"]
        return out

    def crossing(self, base: Base, rule: str, log_limit: float) -> float:
        """Position in the open gap at which a rule of `better` reaches its limit."""
        if rule == "median-run":
            return self.recent[0] + base.exposure_beyond(1.0, _LOG_HALF)
        if rule == "near-limit-pair":
            return self.recent[0] + base.exposure_beyond(1.0, (_LOG_PAIR - _LN2 - log_limit) / 2.0)
        if rule == "gap-sum":
            tail = min(_LOG_SUM - log_limit, _LOG_FLOOR)
            return self.recent[-1] + base.exposure_beyond(float(p.SUM_EVENTS), tail)
        return self.recent[0] + base.exposure_beyond(1.0, min(_LOG_GAP - log_limit, _LOG_FLOOR))

    def gap_hits(self, base: Base, end: float, grain: float, log_limit: float) -> list[PointHit]:
        """Rules at or over their limit at ``end``, with what was seen and the limit."""
        limit_of = base.exposure_within if self.worse else base.exposure_beyond
        hits = []
        # a crossing found in the middle of a gap is met up to rounding
        at = end if self.worse else end + 1e-9 * abs(end)
        for rule, level in self.gap_levels(base, at, grain).items():
            if level < log_limit:
                continue
            gap = end - self.recent[0]
            if rule == "median-run":
                hit = PointHit(rule, float(self._run + 1), float(_run_needed(log_limit - _LOG_RUN)), level)
            elif rule == "near-limit-pair":
                log_tail = self._log_tail(base, gap)
                other = min(self._tails)
                seen = gap if log_tail >= other else limit_of(1.0, other)
                hit = PointHit(rule, seen, limit_of(1.0, (_LOG_PAIR - _LN2 - log_limit) / 2.0), level)
            elif rule == "gap-sum":
                limit = limit_of(float(p.SUM_EVENTS), _LOG_SUM - log_limit)
                hit = PointHit(rule, end - self.recent[-1], limit, level)
            else:
                hit = PointHit(rule, gap, limit_of(1.0, _LOG_GAP - log_limit), level)
            hits.append(hit)
        return hits

    def take_gap(self, base: Base, end: float, grain: float) -> None:
        """Let the gap that an event at ``end`` closed become a past point."""
        gap = max(end - self.recent[0], grain if self.worse else 0.0)
        log_tail = self._log_tail(base, gap)
        self._run = self._run + 1 if log_tail < _LOG_HALF else 0
        self._tails = (log_tail, self._tails[0])
        self.recent = [end, *self.recent[: p.SUM_EVENTS - 1]]

    # -- counts ---------------------------------------------------------------------------------------------

    def _count_tail(self, base: Base, count: int, exposure: float) -> float:
        if self.worse:
            return base.log_within(float(count), exposure) if count else 0.0
        return base.log_beyond(count + 1.0, exposure)

    def count_levels(self, base: Base, count: int, exposure: float, *, alone: bool) -> dict[str, float]:
        """Ln level of each rule for a step of ``exposure``; ``alone`` leaves out those over several steps."""
        scale = math.log(exposure * base.rate)
        log_tail = self._count_tail(base, count, exposure)
        out = {}
        if count >= p.MIN_EVENTS_WORSE if self.worse else log_tail <= _LOG_FLOOR:
            out["count-limit"] = _LOG_COUNT - log_tail + scale
        if alone:
            return out
        if self.runs and log_tail < _LOG_HALF:
            out["median-run"] = _LOG_RUN + _run_level(self._run + 1) + scale
        out["near-limit-pair"] = _LOG_PAIR - _LN2 - 2.0 * max(log_tail, min(self._tails)) + scale
        return out

    def count_hits(self, base: Base, count: int, exposure: float, log_limit: float, *, alone: bool) -> list[PointHit]:  # fmt: skip
        """Rules at or over their limit for a step; for a pair the probabilities of such counts are given."""
        hits = []
        scale = math.log(exposure * base.rate)
        for rule, level in self.count_levels(base, count, exposure, alone=alone).items():
            if level < log_limit:
                continue
            if rule == "median-run":
                needed = _run_needed(log_limit - _LOG_RUN - scale)
                hit = PointHit(rule, float(self._run + 1), float(needed), level)
            elif rule == "near-limit-pair":
                seen = math.exp(max(self._count_tail(base, count, exposure), min(self._tails)))
                limit = math.exp((_LOG_PAIR - _LN2 + scale - log_limit) / 2.0)
                hit = PointHit(rule, seen, limit, level)
            else:
                hit = PointHit(
                    rule, float(count), self._count_limit(base, exposure, log_limit - scale), level
                )
            hits.append(hit)
        return hits

    def _count_limit(self, base: Base, exposure: float, log_limit: float) -> float:
        """Count at which ``count-limit`` is reached."""
        if self.worse:
            count = p.MIN_EVENTS_WORSE
            while _LOG_COUNT - self._count_tail(base, count, exposure) < log_limit:
                count += 1
            return float(count)
        count = 0
        while _LOG_COUNT - self._count_tail(base, count + 1, exposure) >= log_limit:
            count += 1
        return float(count)

    def take_count(self, base: Base, count: int, exposure: float, end: float) -> None:
        """Let a judged step become a past point."""
        if exposure > 0.0:
            log_tail = self._count_tail(base, count, exposure)
            self._run = self._run + 1 if log_tail < _LOG_HALF else 0
            self._tails = (log_tail, self._tails[0])
        if count:
            self.recent = [end]
