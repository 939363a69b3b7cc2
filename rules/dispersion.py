"""Over-dispersion of events against chance, seen in neighbours, so that a lasting change is not taken for it.

Events in clusters, lots that differ, a rate that wanders: counts then vary more than Poisson counts, and plain
limits would raise false alerts. The index φ (variance over mean, 1 for chance alone) is taken from pairs of
neighbouring stretches, whose split of their total depends on neither the rate nor its slow changes.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from rules.model import Caution, FloatArray, IntArray

__all__ = ["Dispersion", "count_dispersion", "gap_dispersion", "lot_dispersion", "over_dispersed"]

_GAP_SPANS = (1, 3, 8)
"""Gaps in each half of a pair: clusters of two show in single gaps, long ones only in longer stretches."""
_GAP_OVERLAP = (1.45, 2.4, 5.5)
"""Variance of the mean over overlapping pairs, as a multiple of that over as many independent ones (own simulation)."""
_BLOCK_EVENTS = (2.0, 8.0)
"""Expected events in each half of a pair of counts."""
_RECOGNISED, _COUNTS_RECOGNISED = 2.0, 1.7
"""Standard deviations above chance from which φ is used; see ``tests/rules/test_dispersion.py`` for the levels."""
_SOONER, _COUNTS_SOONER, _FEW = 0.5, 0.3, 24.0
"""With few events (or blocks) less is asked for. Own simulation, twelve first events of φ = 2: false alerts fall from
1.6 to 1.2 times the promise, those of streams without clusters from 0.95 to 0.91."""
_REGULAR = -2.0
_LARGEST = 20.0
_GOLDEN = (math.sqrt(5.0) - 1.0) / 2.0


@dataclass(frozen=True, slots=True)
class Dispersion:
    """Index of dispersion in use (1 where not recognised), and its score in standard deviations.

    ``regular`` says that events come more evenly than by chance, as with wear: runs on one side of the median
    are then no evidence.
    """

    index: float
    score: float
    regular: bool = False


_CHANCE = Dispersion(1.0, 0.0)


def over_dispersed(index: float, *, single: bool) -> Caution:
    """Say aloud that limits and evidence are scaled, and why; ``single`` events could be merged instead."""
    text = (
        f"Events seem to come in clusters: so far they vary {index:.1f} times as much as chance alone would make them. Limits and"
        f" evidence are scaled by that, so that {index:.1f} events count as one"
    )
    return Caution(
        "over-dispersed",
        f"{text}; where several have one cause, merging them (cluster) sees more." if single else f"{text}.",
    )


def gap_dispersion(positions: FloatArray, grain: float, breaks: Sequence[float] = ()) -> Dispersion:
    """Index of dispersion of located events.

    Parameters
    ----------
    positions : float array, shape (n,)
        Exposure at each event, rising.
    grain : float
        Finest difference that the data know; events are taken as spread over it.
    breaks : sequence of float
        Positions at which the rate is known to have changed, rising: no pair reaches over one.

    Notes
    -----
    Neighbouring sums of k gaps split their total as Beta(k/φ, k/φ) where gaps are gamma distributed with
    shape 1/φ, so that ``(2u - 1)²`` has mean ``1 / (2k/φ + 1)``, whatever the rate. The largest φ of the
    spans whose score passes is used.
    """
    n = positions.size
    # rounded moments are spread over their grain, evenly and always in the same way
    x = np.sort(positions + grain * ((np.arange(n) * _GOLDEN) % 1.0))
    segment = np.searchsorted(np.array(breaks), x, side="left") if len(breaks) else None
    best, top, least = _CHANCE, 0.0, 0.0
    for k, overlap in zip(_GAP_SPANS, _GAP_OVERLAP, strict=True):
        if n - 2 * k < 4:
            break
        first, second = x[k : n - k] - x[: n - 2 * k], x[2 * k :] - x[k : n - k]
        total = first + second
        good = total > 0
        if segment is not None:
            good &= segment[2 * k :] == segment[: n - 2 * k]
        pairs = int(good.sum())
        if pairs < 4:
            continue
        v = float((((first - second)[good] / total[good]) ** 2).mean())
        mean = 1.0 / (2 * k + 1)
        variance = 0.5 * k / ((k + 0.5) ** 2 * (k + 1.5))
        score = (v - mean) / math.sqrt(variance * overlap / pairs)
        top, least = max(top, score), min(least, score)
        if score >= _RECOGNISED - _SOONER * min(1.0, _FEW / n):
            index = min(_LARGEST, 2.0 * k * v / (1.0 - v)) if v < 1.0 else _LARGEST
            if index > best.index:
                best = Dispersion(index, score)
    return best if best.index > 1.0 else Dispersion(1.0, top, regular=least <= _REGULAR)


def count_dispersion(counts: IntArray, exposure: FloatArray, breaks: Sequence[float] = ()) -> Dispersion:
    """Index of dispersion of counts over neighbouring stretches of exposure.

    Parameters
    ----------
    counts : int array, shape (n,)
    exposure : float array, shape (n,)
        Above 0.
    breaks : sequence of float
        Positions, as exposure from the first record, at which the rate is known to have changed.

    Notes
    -----
    Given its total N a pair of Poisson counts splits binomially; the score is Tarone's (1979) against a
    beta-binomial split, summed over neighbouring blocks of at least 2, then 8 expected events. Negative
    binomial counts of index φ (shape proportional to exposure) split beta-binomially with intraclass
    correlation ``(φ - 1) / (φ - 1 + mean of the pair)``, whence φ.
    """
    best, top, least = _CHANCE, 0.0, 0.0
    total = float(counts.sum())
    if total < 4:
        return _CHANCE
    per_exposure = total / float(exposure.sum())
    middle = np.cumsum(exposure) - exposure / 2.0
    segment = np.searchsorted(np.array(breaks), middle, side="left")
    # within each segment blocks begin anew
    begin = np.concatenate([[0.0], np.array(breaks, dtype=float)])[segment]
    before = 0
    for wanted in _BLOCK_EVENTS:
        # a block closes with the step that fills its share of exposure
        block = np.floor((middle - begin) * per_exposure / wanted)
        _, first, number = np.unique(
            np.column_stack([segment, block]), axis=0, return_index=True, return_inverse=True
        )
        number = number.ravel()
        n = np.bincount(number, counts).astype(float)
        e = np.bincount(number, exposure)
        if n.size < 6 or n.size == before:
            continue
        before = n.size
        same = segment[first][:-1] == segment[first][1:]
        pair, share = (n[:-1] + n[1:])[same], (e[:-1] / (e[:-1] + e[1:]))[same]
        spread = share * (1.0 - share)
        square = (n[:-1][same] - pair * share) ** 2 / spread
        # under chance the square has mean N and variance N (2N - 6 + 1/pq)
        excess = float((square - pair).sum())
        variance = float((pair * (2.0 * pair - 6.0 + 1.0 / spread)).sum())
        if variance <= 0.0:
            continue
        score = excess / math.sqrt(variance)
        top, least = max(top, score), min(least, score)
        rho = excess / float((pair * (pair - 1.0)).sum())
        if score >= _COUNTS_RECOGNISED - _COUNTS_SOONER * min(1.0, _FEW / n.size) and rho > 0.0:
            mean = 2.0 * total / n.size
            index = min(_LARGEST, 1.0 + mean * rho / (1.0 - rho)) if rho < 1.0 else _LARGEST
            if index > best.index:
                best = Dispersion(index, score)
    return best if best.index > 1.0 else Dispersion(1.0, top, regular=least <= _REGULAR)


def lot_dispersion(
    positions: FloatArray, until: float, lot: float, breaks: Sequence[float] = ()
) -> Dispersion:
    """Index of dispersion of events whose places inside lots are unknown.

    ``positions`` has each lot's events spread evenly over it; they are counted over equal stretches of
    exposure up to ``until``, each of three usual lots (``lot``, in exposure) and two expected events at least.
    """
    if positions.size < 4 or until <= 0:
        return _CHANCE
    width = max(3.0 * lot, _BLOCK_EVENTS[0] * until / positions.size)
    blocks = int(until / width)
    if blocks < 6:
        return _CHANCE
    edges = np.arange(blocks + 1) * width
    counts, _ = np.histogram(positions, edges)
    return count_dispersion(counts.astype(np.int64), np.full(blocks, width), breaks)
