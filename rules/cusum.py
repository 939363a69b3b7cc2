"""The CUSUM bank: evidence for a changed rate over a stretch, honest about an estimated baseline."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from rules.model import Direction, FloatArray

__all__ = [
    "BANK",
    "BANK_WEIGHTS",
    "BETTER_WEIGHT",
    "bank_weights",
    "crossing_exposure",
    "evidence",
    "evidence_array",
]

# Five ratios and their inverses, and what each may spend of the false alerts beside the others: small changes
# have only their own member, larger ones two. Delays against the exactly tuned CUSUM: tests/bench/detection.py.
BANK: tuple[float, ...] = (1.25, 1.65, 2.5, 4.5, 10.0)
BANK_WEIGHTS: tuple[float, ...] = (1.4, 1.0, 1.0, 1.0, 1.0)
BETTER_WEIGHT = 1.1


def bank_weights(direction: Direction) -> tuple[float, ...]:
    """Weight of each member's level beside those of the other rules."""
    factor = BETTER_WEIGHT if direction == "better" else 1.0
    return tuple(w * factor for w in BANK_WEIGHTS)


def evidence(ratio: float, events: float, exposure: float, base_events: float, base_exposure: float) -> float:
    """Log likelihood ratio of a stretch: rate times ``ratio`` against no change.

    Parameters
    ----------
    ratio : float
        Rate ratio δ > 0, not 1.
    events, exposure : float
        Events n and exposure E of the stretch.
    base_events, base_exposure : float
        Baseline's m and T. With ``math.inf`` events, ``base_exposure`` is the mean gap 1/λ of a known rate.

    Returns
    -------
    float
        Known rate: ``n ln δ − (δ−1) λ E`` (Page 1954; Poisson form Lucas 1985). Estimated rate:
        ``n ln δ − (n+m) ln((T+δE)/(T+E))``, the likelihood ratio of the scale-invariant part of the data
        (baseline rate integrated out under dλ/λ), so that neither the unit of exposure nor the true rate
        matters; it tends to the known form as m grows.

    Examples
    --------
    >>> round(evidence(2.0, 3, 1.0, math.inf, 1.0), 4)
    1.0794
    >>> round(evidence(2.0, 3, 1.0, 1e9, 1e9), 4)
    1.0794
    >>> round(evidence(2.0, 3, 1.0, 12, 12.0), 4)
    0.9678
    """
    if math.isinf(base_events):
        return events * math.log(ratio) - (ratio - 1.0) * exposure / base_exposure
    q = exposure / base_exposure
    return events * math.log(ratio) - (events + base_events) * (math.log1p(ratio * q) - math.log1p(q))


def evidence_array(
    ratio: npt.ArrayLike,
    events: npt.ArrayLike,
    exposure: npt.ArrayLike,
    base_events: npt.ArrayLike,
    base_exposure: npt.ArrayLike,
    *,
    known: bool,
) -> FloatArray:
    """As :func:`evidence`, on arrays that broadcast together; ``known`` takes ``base_exposure`` as 1/λ."""
    d = np.asarray(ratio, dtype=float)
    n = np.asarray(events, dtype=float)
    q = np.asarray(exposure, dtype=float) / np.asarray(base_exposure, dtype=float)
    if known:
        return np.asarray(n * np.log(d) - (d - 1.0) * q, dtype=float)
    m = np.asarray(base_events, dtype=float)
    return np.asarray(n * np.log(d) - (n + m) * (np.log1p(d * q) - np.log1p(q)), dtype=float)


def crossing_exposure(
    ratio: float, events: float, limit: float, base_events: float, base_exposure: float
) -> float:
    """Exposure at which an event-free stretch brings the evidence of a ``ratio`` < 1 up to ``limit``.

    Returns ``math.inf`` where the evidence can never reach it (an estimated baseline is too short to tell).

    Examples
    --------
    >>> e = crossing_exposure(0.4, 1, 3.0, 12, 12.0)
    >>> round(evidence(0.4, 1, e, 12, 12.0), 9)
    3.0
    """
    lack = events * math.log(ratio) - limit
    if math.isinf(base_events):
        return max(0.0, -lack / (1.0 - ratio)) * base_exposure
    share = math.exp(lack / (events + base_events))
    if share <= ratio:
        return math.inf
    return max(0.0, base_exposure * (1.0 - share) / (share - ratio))
