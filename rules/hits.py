"""Which rules are over their limit at one moment, and how strong the strongest of them is."""

from __future__ import annotations

import math
from collections.abc import Sequence

from rules import protocol
from rules.bank import Base, Side
from rules.model import RuleHit
from rules.points import PointHit
from rules.run_length import cusum_level

__all__ = ["gather_hits"]

_NEAR = 1.0 - 1e-9
"""A crossing found in the middle of a gap is met up to rounding."""


def gather_hits(
    side: Side, base: Base, log_limit: float, points: Sequence[PointHit] = ()
) -> tuple[tuple[RuleHit, ...], float]:
    """Rules at or over their limit, and ln of the strongest level reached (at least ``log_limit``)."""
    hits: list[RuleHit] = []
    log_level = log_limit
    worse = side.direction == "worse"
    members = zip(side.w, side.limits, side.ratios, side.n, side.weights, strict=True)
    for w, limit, ratio, n, weight in members:
        if w >= limit * _NEAR and (not worse or n >= protocol.MIN_EVENTS_WORSE):
            hits.append(RuleHit("cusum", ratio, w, limit))
            log_level = max(log_level, math.log(weight * base.index * cusum_level(ratio, w)))
    for hit in points:
        hits.append(RuleHit(hit.rule, None, hit.statistic, hit.limit))
        log_level = max(log_level, hit.log_level)
    return tuple(hits), log_level
