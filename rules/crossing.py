"""Exact chance, and mean time, that a Poisson process crosses a boundary: sequential tests and test plans.

One recursion serves all: between two boundary times the count moves by Poisson weights, at a boundary time the
counts that signal, or are accepted, are taken out. No grid is involved, so that nothing but rounding is lost.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammainc, gammaln, lambertw, xlogy

from rules.arguments import need_positive

__all__ = [
    "PlanOutcome",
    "Signal",
    "crossing_probability",
    "maximised_boundaries",
    "sequential_plan",
    "time_to_signal",
]

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Signal:
    """What a boundary does within its horizon.

    Attributes
    ----------
    probability : float
        Of a signal within the horizon.
    time_if_signal : float
        Mean time of the signal, given that there is one; nan if there cannot be one.
    watched : float
        Mean time watched: up to the signal, or to the horizon without one.
    """

    probability: float
    time_if_signal: float
    watched: float


@dataclass(frozen=True, slots=True)
class PlanOutcome:
    """What a plan with a boundary on either side does.

    Attributes
    ----------
    reject, accept : float
        Probabilities of the two decisions; they sum to 1.
    mean_time : float
        Mean time to the decision.
    """

    reject: float
    accept: float
    mean_time: float


def _checked(times: Sequence[float] | Floats, name: str) -> Floats:
    """Boundary times as an array: at least one, none nan, none below the one before."""
    values = np.asarray(times, dtype=np.float64)
    if values.ndim != 1 or values.size == 0 or np.isnan(values).any() or (np.diff(values) < 0).any():
        raise ValueError(f"{name} must be a list of times, none smaller than the one before")
    return values


def _advance(alive: Floats, mean: float) -> tuple[Floats, Floats]:
    """Let a stretch of ``mean`` expected events pass.

    ``alive[i]`` is the probability of i events so far. Returned are the same at the end, and for each i the
    mean number of expected events until the count leaves ``alive`` at its upper end, or the stretch ends.
    """
    size = alive.size
    steps = np.arange(size)
    weights = np.exp(xlogy(steps, mean) - mean - gammaln(steps + 1.0))
    after = np.convolve(alive, weights)[:size]
    # time to the m-th event: past the stretch with 1 − P(m, mean), else m P(m + 1, mean) on average
    to_go = size - steps
    spent = to_go * gammainc(to_go + 1.0, mean) + mean * (1.0 - gammainc(to_go, mean))
    return after, spent


def time_to_signal(boundaries: Sequence[float] | Floats, horizon: float, rate: float = 1.0) -> Signal:
    """How likely, and how soon, a Poisson process signals by events that come early.

    Parameters
    ----------
    boundaries : array_like of float, shape (n,)
        s_1 <= s_2 <= … : the k-th event is a signal if it comes at or before s_k. A value of 0 or less means
        that this event is none. Events after the n-th never signal.
    horizon : float
        Watched from 0 to here, in the unit of the boundaries.
    rate : float
        Events per unit of time.

    Returns
    -------
    Signal
        Probability, mean time given a signal, mean time watched.

    Notes
    -----
    Between s_(k−1) and s_k the silent states are 0 … k−1 events, and the k-th event signals; the count at s_k
    follows from Poisson weights, the lost time from the gamma distribution (recursion of Epanechnikov 1968
    and Noe 1972 for empirical processes; Kulldorff et al. 2011 for this use). n² operations per event.

    Examples
    --------
    One event within 2 units of time, then watching stops.

    >>> found = time_to_signal([2.0], horizon=5.0)
    >>> round(found.probability, 6), round(found.watched, 6)
    (0.864665, 1.270671)
    """
    times = np.clip(_checked(boundaries, "boundaries"), 0.0, need_positive(horizon, "horizon"))
    need_positive(rate, "rate")
    alive = np.zeros(1)
    alive[0] = 1.0
    watched = at = 0.0
    for k, until in enumerate(times.tolist()):
        if k:
            alive = np.append(alive, 0.0)
        alive, spent, before = *_advance(alive, rate * (until - at)), alive
        watched += float(before @ spent) / rate
        at = until
    silent = float(alive.sum())
    in_time = watched - silent * at
    watched += silent * (horizon - at)
    probability = 1.0 - silent
    return Signal(probability, in_time / probability if probability > 0 else float("nan"), watched)


def crossing_probability(boundaries: Sequence[float] | Floats, horizon: float, rate: float = 1.0) -> float:
    """Probability that a Poisson process signals within the horizon; see :func:`time_to_signal`.

    Parameters
    ----------
    boundaries : array_like of float, shape (n,)
        s_1 <= s_2 <= … : the k-th event is a signal if it comes at or before s_k.
    horizon, rate : float
        Time watched, and events per unit of time.

    Returns
    -------
    float
        Between 0 and 1.

    Examples
    --------
    >>> round(crossing_probability([0.0, 1.0], horizon=1.0), 6)  # two events or more within one unit
    0.264241
    """
    return time_to_signal(boundaries, horizon, rate).probability


def maximised_boundaries(limit: float, horizon: float) -> Floats:
    """Boundaries of the Poisson maximised sequential probability ratio test for more events than usual.

    Parameters
    ----------
    limit : float
        Critical value of the log-likelihood ratio, above 0.
    horizon : float
        In expected events.

    Returns
    -------
    numpy.ndarray, shape (n,)
        s_k, in expected events, up to the first that is not below the horizon. The k-th event signals at
        t <= s_k, where ``(t − k) + k ln(k/t)`` reaches the limit.

    Notes
    -----
    With t = k u: ``u − 1 − ln u = limit/k``, so ``u = −W(−exp(−1 − limit/k))`` with Lambert's W (Kulldorff,
    Davis, Kolczak, Lewis, Lieu & Platt 2011).

    Examples
    --------
    >>> maximised_boundaries(2.853937, horizon=1.0).round(4).tolist()
    [0.0217, 0.1947, 0.5043, 0.9037, 1.3659]
    """
    need_positive(limit, "limit")
    need_positive(horizon, "horizon")
    # s_k grows without end, by almost 1 an event in the long run, so that the loop ends
    found: list[float] = []
    while not found or found[-1] < horizon:
        k = len(found) + 1
        found.append(float(-k * lambertw(-np.exp(-1.0 - limit / k)).real))
    return np.array(found)


def sequential_plan(
    reject: Sequence[float] | Floats, accept: Sequence[float] | Floats, rate: float = 1.0
) -> PlanOutcome:
    """Risks and mean length of a sequential test that ends at one of two boundaries.

    Parameters
    ----------
    reject : array_like of float, shape (n,)
        The k-th event rejects if it comes at or before ``reject[k-1]``; 0 or less where it cannot.
    accept : array_like of float, shape (n,)
        With k events so far the test accepts as time reaches ``accept[k]``, above 0. The plan must be
        closed: ``accept[n-1]`` not above ``reject[n-1]``.
    rate : float
        Events per unit of time.

    Returns
    -------
    PlanOutcome
        Probabilities of both decisions and mean time to the decision.

    Notes
    -----
    As :func:`time_to_signal`, with the counts that accept taken out at their times (Aroian 1963 for the
    exact treatment of truncated plans; plans as in MIL-HDBK-781A).

    Examples
    --------
    Reject at the second event, accept after 3 units of time.

    >>> found = sequential_plan(reject=[0.0, 3.0], accept=[3.0, 3.0])
    >>> round(found.accept, 6)
    0.199148
    """
    low, high = np.maximum(_checked(reject, "reject"), 0.0), _checked(accept, "accept")
    if low.size != high.size or not high[0] > 0.0 or not high[-1] <= low[-1] < np.inf:
        raise ValueError("reject and accept must be of one length, accept above 0, and meet at a finite time")
    need_positive(rate, "rate")
    ends = np.unique(np.concatenate([low, high]))
    count = np.zeros(1)
    count[0] = 1.0
    rejected = accepted = mean_time = at = 0.0
    for until in ends[ends > 0].tolist():
        # states that are open just before this time: the first count that rejects closes them
        size = int(np.searchsorted(low, until, side="left")) + 1
        count = np.concatenate([count, np.zeros(size - count.size)])
        after, spent = _advance(count, rate * (until - at))
        mean_time += float(count @ spent) / rate
        rejected += float(count.sum() - after.sum())
        done = int(np.searchsorted(high, until, side="right"))
        accepted += float(after[:done].sum())
        after[:done] = 0.0
        count, at = after, until
    return PlanOutcome(rejected, accepted, mean_time)
