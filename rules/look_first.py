"""Where to look first: values of attributes that the events since a shift share more often than usual."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import bdtrc, gammaln

from rules.model import FloatArray, IntArray

__all__ = ["SHOWN_FROM", "Place", "look_first"]

SHOWN_FROM = 0.10
"""Adjusted probability from which down a value is shown."""

_DRAWS = 4_000
_CELLS = 1_000_000
"""Random numbers drawn at once."""
_MOST_VALUES = 300
"""An attribute with more values than this names single units, not places to look at."""


@dataclass(frozen=True, slots=True)
class Place:
    """One value of one attribute: ``events`` of the ``of`` events carry it, usually a share ``usual_share``.

    ``p`` is the exact chance of so many or more, ``p_adjusted`` the chance that the most striking of all
    values of all attributes looked at (and not yet named) would be as striking.
    """

    attribute: str
    value: str
    events: int
    of: int
    usual_share: float
    p: float
    p_adjusted: float


@dataclass(frozen=True, slots=True)
class _Attribute:
    name: str
    values: tuple[str, ...]
    seen: IntArray
    """Code of each event since the shift."""
    usual: IntArray
    """Code of each record of the reference."""


def look_first(
    events: Mapping[str, Sequence[str]],
    usual: Mapping[str, Sequence[str]],
    *,
    weights: FloatArray | None = None,
    seed: int = 20261201,
) -> tuple[Place, ...]:
    """Compare the events since a shift with what is usual, value by value.

    Parameters
    ----------
    events : mapping of attribute to sequence of str, each of length k
        Values of the k events since the shift.
    usual : mapping of attribute to sequence of str, each of length n
        Values of the records they are compared with: production (with ``weights``) or earlier events.
    weights : float array, shape (n,), or None
        Exposure of each production record. None: the reference are earlier events of the same kind.
    seed : int
        Of the draws behind ``p_adjusted``; the same data give the same answer.

    Returns
    -------
    tuple of Place
        Values with two events or more, most striking first, whatever their probability.

    Notes
    -----
    Against production the number of events with a value is binomial with the value's share of exposure;
    against earlier events it is hypergeometric given both totals (Fisher 1935). Adjusted step down over all
    attributes and values by the distribution of the smallest p when the events are drawn at random from
    production, or their labels exchanged with the earlier ones (Westfall & Young 1993, algorithm 2.8); rows
    are drawn whole, so that attributes that go together stay together.

    Examples
    --------
    >>> since = {"fixture": ["F7", "F7", "F7", "F2", "F7"]}
    >>> before = {"fixture": ["F1", "F2", "F3", "F4", "F7"] * 12}
    >>> place = look_first(since, before)[0]
    >>> place.value, place.events, place.of, round(place.usual_share, 2), place.p_adjusted < 0.05
    ('F7', 4, 5, 0.2, True)
    """
    size = len(next(iter(events.values()), ()))
    reference = len(next(iter(usual.values()), ()))
    if size < 2 or reference == 0:
        return ()
    attributes = [a for name in events if (a := _coded(name, events[name], usual.get(name, ()))) is not None]
    if not attributes:
        return ()
    rng = np.random.default_rng(seed)
    share = None if weights is None else np.asarray(weights, dtype=float) / float(np.sum(weights))
    rows = _drawn_rows(rng, size, reference, share)
    raw: list[float] = []
    places: list[tuple[str, str, int, float]] = []
    null: list[FloatArray] = []
    for attribute in attributes:
        width = len(attribute.values)
        counts = np.bincount(attribute.seen, minlength=width)
        each = np.full(reference, 1.0 / reference) if share is None else share
        usually: FloatArray = np.bincount(attribute.usual, each, minlength=width).astype(float)
        codes = np.concatenate([attribute.usual, attribute.seen]) if share is None else attribute.usual
        drawn = codes[rows]
        for v in np.nonzero(counts >= 2)[0]:
            if share is None:
                total = int((codes == v).sum())
                tails = _shared_tails(size, reference + size, total)
            else:
                tails = _binomial_tails(size, float(usually[v]))
            raw.append(float(tails[counts[v]]))
            places.append((attribute.name, attribute.values[v], int(counts[v]), float(usually[v])))
            null.append(tails[(drawn == v).sum(axis=1)])
        # a value that no event carries twice can still be the most striking one by chance
        rest = np.nonzero(counts < 2)[0]
        if rest.size:
            null.append(_smallest_rest(drawn, rest, codes, usually, size, share is None))
            raw.append(1.0)
            places.append((attribute.name, "", 0, 0.0))
    adjusted = _step_down(np.array(raw), np.array(null))
    found = [
        Place(name, value, count, size, usual_share, p, p_adjusted)
        for (name, value, count, usual_share), p, p_adjusted in zip(places, raw, adjusted, strict=True)
        if value
    ]
    return tuple(sorted(found, key=lambda place: (place.p_adjusted, place.p, place.attribute, place.value)))


def _coded(name: str, seen: Sequence[str], usual: Sequence[str]) -> _Attribute | None:
    """Number an attribute's values; None where it cannot tell anything."""
    values, codes = np.unique(np.array([*seen, *usual], dtype=str), return_inverse=True)
    if values.size < 2 or values.size > _MOST_VALUES or not len(usual):
        return None
    return _Attribute(name, tuple(values.tolist()), codes[: len(seen)], codes[len(seen) :])


def _drawn_rows(rng: np.random.Generator, size: int, reference: int, share: FloatArray | None) -> IntArray:
    if share is not None:
        return np.asarray(rng.choice(reference, size=(_DRAWS, size), p=share))
    pooled = reference + size
    few = max(1, _CELLS // pooled)
    parts = [
        np.argpartition(rng.random((min(few, _DRAWS - done), pooled)), size - 1, axis=1)[:, :size]
        for done in range(0, _DRAWS, few)
    ]
    return np.concatenate(parts)


def _binomial_tails(size: int, share: float) -> FloatArray:
    """P(N >= x) for x = 0..size."""
    below = bdtrc(np.arange(size), size, min(1.0, share))
    return np.concatenate([[1.0], below])


def _shared_tails(size: int, pooled: int, total: int) -> FloatArray:
    """P(N >= x) for x = 0..size when ``size`` of ``pooled`` are drawn, ``total`` of which have the value."""
    x = np.arange(size + 1.0)
    possible = (x <= total) & (size - x <= pooled - total)

    def log_choose(n: float, k: FloatArray) -> FloatArray:
        return np.asarray(gammaln(n + 1.0) - gammaln(k + 1.0) - gammaln(n - k + 1.0))

    x = np.where(possible, x, 0.0 if total + size <= pooled else float(total + size - pooled))
    whole = log_choose(pooled, np.array(float(size)))
    mass = np.where(
        possible, np.exp(log_choose(total, x) + log_choose(pooled - total, size - x) - whole), 0.0
    )
    return np.asarray(np.minimum(1.0, np.cumsum(mass[::-1])[::-1]))


def _smallest_rest(
    drawn: IntArray, rest: IntArray, codes: IntArray, usually: FloatArray, size: int, pooled: bool
) -> FloatArray:
    """Smallest p of each draw over the values that are not named themselves."""
    out = np.ones(drawn.shape[0])
    for v in rest:
        if pooled:
            tails = _shared_tails(size, codes.size, int((codes == v).sum()))
        else:
            tails = _binomial_tails(size, float(usually[v]))
        hit = (drawn == v).sum(axis=1)
        np.minimum(out, np.where(hit >= 2, tails[hit], 1.0), out=out)
    return out


def _step_down(raw: FloatArray, null: FloatArray) -> list[float]:
    """Adjust p by the smallest p of those not yet named (Westfall & Young)."""
    order = np.argsort(raw, kind="stable")
    successive = np.minimum.accumulate(null[order[::-1]], axis=0)[::-1]
    out = np.empty(raw.size)
    previous = 0.0
    for rank, i in enumerate(order):
        p = (1.0 + float((successive[rank] <= raw[i] * (1 + 1e-12)).sum())) / (null.shape[1] + 1.0)
        previous = max(previous, min(1.0, p))
        out[i] = previous
    return out.tolist()
