"""Which rules are over their limit at one moment, and how strong the strongest of them is."""

from __future__ import annotations

import math
from dataclasses import dataclass

from rules import protocol
from rules.bank import Base, Side
from rules.model import RuleHit
from rules.run_length import cusum_level
from rules.tails import log_count_tail

__all__ = ["Counted", "Gap", "count_limit", "gather_hits"]

_NEAR = 1.0 - 1e-9
"""A crossing found in the middle of a gap is met up to rounding."""


@dataclass(frozen=True, slots=True)
class Gap:
    """A single gap and the limit that it passed; ``judged`` is the gap no finer than the data's grain."""

    rule: str
    gap: float
    limit: float
    judged: float


@dataclass(frozen=True, slots=True)
class Counted:
    """The count of one step that passed its limit."""

    count: int
    exposure: float
    log_level: float


def count_limit(exposure: float, base: Base, log_limit: float) -> int:
    """Smallest count of a step of ``exposure`` that passes ``count-limit``."""
    offset = math.log(protocol.COUNT_WEIGHT) + math.log(exposure * base.rate)
    count = protocol.MIN_EVENTS_WORSE
    while offset - log_count_tail(count, exposure, base.events, base.exposure) < log_limit:
        count += 1
    return count


def gather_hits(
    side: Side, base: Base, log_limit: float, *, gap: Gap | None = None, counted: Counted | None = None
) -> tuple[tuple[RuleHit, ...], float]:
    """Rules at or over their limit, and ln of the strongest level reached (at least ``log_limit``)."""
    hits: list[RuleHit] = []
    log_level = log_limit
    worse = side.direction == "worse"
    for w, limit, ratio, n in zip(side.w, side.limits, side.ratios, side.n, strict=True):
        if w >= limit * _NEAR and (not worse or n >= protocol.MIN_EVENTS_WORSE):
            hits.append(RuleHit("cusum", ratio, w, limit))
            log_level = max(log_level, math.log(cusum_level(ratio, w)))
    if gap is not None and (worse or gap.gap >= gap.limit * _NEAR):
        hits.append(RuleHit(gap.rule, None, gap.gap, gap.limit))
        log_tail = base.log_gap_above(gap.judged)
        if worse:
            log_tail = math.log(-math.expm1(log_tail))
        log_level = max(log_level, math.log(protocol.GAP_WEIGHT) - log_tail)
    if counted is not None:
        limit = count_limit(counted.exposure, base, log_limit)
        hits.append(RuleHit("count-limit", None, float(counted.count), float(limit)))
        log_level = max(log_level, counted.log_level)
    return tuple(hits), log_level
