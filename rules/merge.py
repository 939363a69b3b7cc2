"""Events and exposure from two sources, units that need time to fail, and events that belong together."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from rules.model import FloatArray, IntArray, Steps, Timeline
from rules.series import count_series

__all__ = [
    "Placed",
    "before_maturity",
    "clusters_apart",
    "clusters_by_label",
    "on_production",
    "unit_failures",
]

BoolArray = npt.NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Placed:
    """A series with events on another source's exposure, and the events that have no place in it yet."""

    steps: Steps
    waiting: int
    """Later than the last production record: their exposure is not in."""
    early: int
    """Before the first production record."""
    forced: int
    """Later than the last production record of a silent source, placed at its end."""


def clusters_by_label(label: Sequence[str]) -> IntArray:
    """Cluster events of one label; an empty label is a cluster of its own.

    Parameters
    ----------
    label : sequence of str, length n
        One of each event, in order of time.

    Returns
    -------
    int array, shape (n,)
        Place of the first event of each one's cluster; its own for a first event.

    Examples
    --------
    >>> clusters_by_label(["L1", "", "L2", "L1", ""]).tolist()
    [0, 1, 2, 0, 4]
    """
    seen: dict[str, int] = {}
    return np.array([seen.setdefault(v, i) if v else i for i, v in enumerate(label)], dtype=np.int64)


def clusters_apart(position: FloatArray, span: float) -> IntArray:
    """Cluster events that come less than a span after the one before, however long the chain grows.

    Parameters
    ----------
    position : float array, shape (n,)
        Place of each event in time, never falling.
    span : float
        In the same unit; events just so far apart are two.

    Returns
    -------
    int array, shape (n,)
        Place of the first event of each one's cluster; its own for a first event.

    Examples
    --------
    >>> clusters_apart(np.array([0.0, 0.9, 1.8, 3.8]), 1.0).tolist()
    [0, 0, 0, 3]
    """
    first = np.ones(position.size, dtype=bool)
    first[1:] = np.diff(position) >= span
    return np.maximum.accumulate(np.where(first, np.arange(position.size), 0)).astype(np.int64)


def unit_failures(
    unit: IntArray, failing: BoolArray, defects: FloatArray, *, add: bool
) -> tuple[FloatArray, IntArray]:
    """Defects of each record's unit, and the record that first found it failing.

    Parameters
    ----------
    unit : int array, shape (n,)
        Number of each record's unit, in order of time; negative where none is known (always its own).
    failing : bool array, shape (n,)
    defects : float array, shape (n,)
    add : bool
        Defects of a unit's failing records add up; else the largest number stands.

    Returns
    -------
    defects : float array, shape (n,)
    found : int array, shape (n,)
        A record's own place where its unit never failed.

    Examples
    --------
    >>> unit_failures(np.array([0, 1, 0, 0]), np.array([False, False, True, True]), np.array([0.0, 0.0, 2.0, 1.0]), add=True)
    (array([3., 0., 3., 3.]), array([2, 1, 2, 2]))
    """
    total: dict[int, float] = {}
    found: dict[int, int] = {}
    for i in np.nonzero(failing & (unit >= 0))[0].tolist():
        u, d = int(unit[i]), float(defects[i])
        total[u] = total.get(u, 0.0) + d if add else max(total.get(u, 0.0), d)
        found.setdefault(u, i)
    out, places = defects.copy(), np.arange(unit.size, dtype=np.int64)
    for i in np.nonzero(np.isin(unit, list(found)))[0].tolist():
        out[i], places[i] = total[int(unit[i])], found[int(unit[i])]
    return out, places


def before_maturity(
    made_unit: IntArray,
    made_us: IntArray,
    unit: IntArray,
    time_us: IntArray,
    failing: BoolArray,
    span_us: int,
) -> tuple[IntArray, BoolArray, int]:
    """Completion of each record's unit, and which failures came too late to be compared.

    Parameters
    ----------
    made_unit, made_us : int arrays, shape (k,)
        Unit (negative for none) and moment of each record that completes one, in order of time.
    unit, time_us : int arrays, shape (n,)
    failing : bool array, shape (n,)
    span_us : int
        Time that every unit is given to fail.

    Returns
    -------
    completed : int array, shape (n,)
        Moment of completion, or the record's own where none is known.
    late : bool array, shape (n,)
    unknown : int
        Failing records without a known completion.

    Examples
    --------
    >>> before_maturity(np.array([0, 1]), np.array([10, 20]), np.array([1, 0]), np.array([25, 90]), np.array([True, True]), 50)
    (array([20, 10]), array([False,  True]), 0)
    """
    first: dict[int, int] = {}
    for u, t in zip(made_unit.tolist(), made_us.tolist(), strict=True):
        if u >= 0:
            first.setdefault(u, t)
    known = np.array([u in first for u in unit.tolist()], dtype=bool)
    completed = np.array(
        [first.get(u, t) for u, t in zip(unit.tolist(), time_us.tolist(), strict=True)], dtype=np.int64
    )
    late = failing & (time_us - completed > span_us)
    return completed, late, int((failing & ~known).sum())


def on_production(
    weight: FloatArray, made_us: IntArray, at_us: IntArray, counts: IntArray, event_us: IntArray, *, record: IntArray,
    alive_us: int | None, per_record: bool, wait: bool,
) -> Placed:  # fmt: skip
    """Place events on the cumulative exposure of production records.

    Parameters
    ----------
    weight, made_us : float and int arrays, shape (k,)
        Exposure and moment of each production record, in order of time.
    at_us, counts, event_us, record : int arrays, shape (n,)
        Moment each event belongs to (its own less the lag), how many it stands for, its own moment and number.
    alive_us : int or None
        Production up to here is known to be without further events: how far the events' source is proven alive,
        less the lag. What was made later proves nothing yet.
    per_record : bool
        Count events per production record (per-unit form) instead of listing gaps.
    wait : bool
        Events after the last production record wait; else they are placed at its end.

    Examples
    --------
    >>> placed = on_production(np.full(4, 10.0), np.array([1, 2, 3, 4]), np.array([2, 9]), np.array([1, 1]),
    ...     np.array([2, 9]), record=np.array([0, 1]), alive_us=9, per_record=False, wait=True)
    >>> placed.steps.exposure.tolist(), placed.steps.open_exposure, placed.waiting
    ([20.0], 20.0, 1)
    """
    order = np.argsort(at_us, kind="stable")
    at_us, counts, event_us, record = at_us[order], counts[order], event_us[order], record[order]
    none: IntArray = np.zeros(0, dtype=np.int64)
    if weight.size == 0:
        empty = np.zeros(0)
        steps = Steps(empty, none, none, none, 0.0, 0, 0, Timeline(empty, none, stepped=True))
        return Placed(steps, int(counts.sum()), 0, 0)
    proven = made_us <= (alive_us if alive_us is not None else int(event_us.max(initial=int(made_us[0]))))
    last_us = int(made_us[-1])
    late, early = at_us > last_us, at_us < made_us[0]
    before = int(counts[early].sum())
    keep = ~early & ~(late & wait)
    waiting, forced = (int(counts[late].sum()), 0) if wait else (0, int(counts[late].sum()))
    at_us, counts, event_us, record = at_us[keep], counts[keep], event_us[keep], record[keep]
    place = np.minimum(np.searchsorted(made_us, at_us, side="right") - 1, weight.size - 1)
    # production that the events' source has not lived to see counts only up to the last event placed
    upto = max(int(proven.sum()), int(place.max(initial=-1)) + 1)
    weight, made_us = weight[:upto], made_us[:upto]
    if per_record:
        per = np.bincount(place, counts, minlength=upto).astype(np.int64)
        steps = count_series(weight, per, made_us)
        last_event = np.full(upto, -1, dtype=np.int64)
        last_event[place] = record
        steps = Steps(
            steps.exposure, steps.events, steps.time_us, last_event, 0.0, steps.open_time_us, steps.start_us, steps.timeline,
            located=False, per_record=True,
        )  # fmt: skip
        return Placed(steps, waiting, before, forced)
    position = np.cumsum(weight)
    index = np.repeat(place, counts)
    gaps = np.diff(position[index], prepend=0.0)
    total = float(position[-1]) if position.size else 0.0
    open_gap = total - (float(position[index[-1]]) if index.size else 0.0)
    timeline = Timeline(position, made_us, stepped=True)
    steps = Steps(
        gaps, np.ones(index.size, dtype=np.int64), np.repeat(event_us, counts), np.repeat(record, counts), open_gap,
        max(int(made_us[-1]), int(event_us.max(initial=0))), int(made_us[0]), timeline,
    )  # fmt: skip
    return Placed(steps, waiting, before, forced)
