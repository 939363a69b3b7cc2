"""When a shift began, and by how much the rate changed, allowing for the way the stretch was found."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from rules.cusum import evidence_array
from rules.model import Direction, FloatArray

__all__ = ["ShiftPosterior", "locate_shift"]

_RATIOS: FloatArray = np.exp(np.linspace(math.log(0.85), math.log(30.0), 72))
_SMALLNESS = 0.7
"""The prior density of a ratio r falls as r^-0.7 on the log scale: small changes are the commoner ones."""
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(8)
_CELLS: FloatArray = np.concatenate([[0.0], np.cumsum(_WEIGHTS) / 2.0])
_MAX_GAPS = 400
"""Only the newest gaps are searched for the start; an older start of a still unseen shift has no weight."""


@dataclass(frozen=True, slots=True)
class ShiftPosterior:
    """What the data say of start and size of a shift; positions in exposure, ratios as rate / baseline."""

    start: float
    start_low: float
    start_high: float
    ratio: float
    ratio_low: float
    ratio_high: float


def locate_shift(
    event_positions: FloatArray,
    *,
    begin: float,
    now: float,
    base_events: float,
    base_exposure: float,
    direction: Direction,
    pooled: bool = False,
    index: float = 1.0,
    confidence: float = 0.95,
    start_confidence: float = 0.975,
) -> ShiftPosterior:
    """Start and ratio of one lasting change in ``(begin, now]``, given the baseline before it.

    Parameters
    ----------
    event_positions : float array, shape (n,)
        Positions of the events in ``(begin, now]``, rising (several may coincide).
    begin, now : float
        Stretch that is searched.
    base_events, base_exposure : float
        Baseline m and T up to ``begin``, or ``inf`` and the mean gap of a known rate.
    direction : {"worse", "better"}
    pooled : bool
        True where the baseline grows: the stretch from ``begin`` to the start in question belongs to it.
    index : float
        Index of dispersion; the log likelihood is divided by it.
    confidence, start_confidence : float
        Of the ratio's and of the start's interval.

    Returns
    -------
    ShiftPosterior

    Notes
    -----
    Start uniform over the exposure, ratio from 0.85 to 30 (``better``: their inverses) with small changes the
    likelier ones (the power 0.7 was chosen by coverage), the baseline's rate integrated out: the change-point posterior of a Poisson process (Raftery & Akman 1986),
    summed over the gaps by Gauss-Legendre nodes. Since it averages over where the stretch might begin and
    does not depend on when one chose to look, its intervals keep their meaning at the moment of an alert,
    where the plain interval of the picked stretch holds the truth far too seldom (measured figures in
    ``tests/bench/coverage.py``).
    """
    events = np.asarray(event_positions, dtype=float)[-_MAX_GAPS:]
    first = begin if events.size < _MAX_GAPS else float(events[0])
    edges = np.concatenate([[first], events, [now]])
    widths = np.diff(edges)
    keep = widths > 0
    if not keep.any():
        return ShiftPosterior(first, first, now, math.nan, math.nan, math.nan)
    left = edges[:-1][keep]
    widths = widths[keep]
    starts = left[:, None] + widths[:, None] * (_NODES + 1.0) / 2.0
    # a start inside gap i has every later event in the stretch
    after = (events.size - np.arange(events.size + 1))[keep].astype(float)
    spans = now - starts
    m: float | FloatArray = base_events
    t: float | FloatArray = base_exposure
    if pooled and not math.isinf(base_events):
        m = (base_events + events.size - after)[:, None, None]
        t = (base_exposure + starts - first)[:, :, None]
    ratios = _RATIOS if direction == "worse" else 1.0 / _RATIOS
    # with m + n and T + E the same for every start, this is the whole likelihood up to a constant
    log_like = evidence_array(
        ratios[None, None, :],
        after[:, None, None],
        spans[:, :, None],
        m,
        t,
        known=math.isinf(base_events),
    )
    log_like = log_like / index - _SMALLNESS * np.abs(np.log(ratios))
    weight = np.exp(log_like - log_like.max()) * (widths[:, None] * _WEIGHTS)[:, :, None]
    weight /= weight.sum()

    by_cell = weight.sum(axis=2).ravel()
    cell_edges = np.append((left[:, None] + widths[:, None] * _CELLS[:-1]).ravel(), now)
    cumulative = np.concatenate([[0.0], np.cumsum(by_cell)])

    def start_at(share: float) -> float:
        return float(np.interp(share, cumulative, cell_edges))

    by_ratio = weight.sum(axis=(0, 1))
    order = np.argsort(ratios)
    ratio_cumulative = np.cumsum(by_ratio[order]) - by_ratio[order] / 2.0
    log_sorted = np.log(ratios[order])
    tail = (1.0 - confidence) / 2.0
    low, mid, high = np.exp(np.interp([tail, 0.5, 1.0 - tail], ratio_cumulative, log_sorted))
    start_tail = (1.0 - start_confidence) / 2.0
    return ShiftPosterior(
        start_at(0.5), start_at(start_tail), start_at(1.0 - start_tail), float(mid), float(low), float(high)
    )
