"""From records to a series: gaps in units or working time, or counts per unit."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import numpy.typing as npt

from rules.model import FloatArray, IntArray, Steps, Timeline

__all__ = ["calendar_gaps", "count_series", "first_pass", "unit_gaps"]

_EARLY_LOTS, _JUDGED_ALONE = 50, 0.25
"""Lots are judged one by one where the first of them have so many failures on average; else by gaps."""

BoolArray = npt.NDArray[np.bool_]


def first_pass(unit: IntArray, failing: BoolArray, mode: str) -> tuple[BoolArray, BoolArray]:
    """Let a unit that was tested again count once.

    Parameters
    ----------
    unit : int array, shape (n,)
        Number of the unit of each record in order of time; negative where none is known (always its own).
    failing : bool array, shape (n,)
    mode : {"first-pass", "any", "every"}
        A unit counts at its first record, failing if that one fails, or if any of its records fails; or each
        record is a trial of its own.

    Returns
    -------
    keep, failing : bool arrays, shape (n,)
        Records that count, and which of them fail.

    Examples
    --------
    >>> keep, fails = first_pass(np.array([1, 2, 1]), np.array([False, False, True]), "any")
    >>> keep.tolist(), fails.tolist()
    ([True, True, False], [True, False, False])
    """
    if mode == "every" or unit.size == 0:
        return np.ones(unit.size, dtype=bool), failing.copy()
    known = unit >= 0
    keep = ~known
    _, first, inverse = np.unique(unit, return_index=True, return_inverse=True)
    mark = np.zeros(unit.size, dtype=bool)
    mark[first] = True
    keep |= mark & known
    if mode == "first-pass":
        return keep, failing & keep
    any_fails = np.zeros(first.size, dtype=bool)
    np.logical_or.at(any_fails, inverse, failing)
    return keep, np.where(known, any_fails[inverse] & keep, failing)


def _empty(start_us: int, alive_us: int, notes: tuple[str, ...] = (), *, located: bool = True) -> Steps:
    none = np.zeros(0)
    return Steps(
        none, np.zeros(0, dtype=np.int64), np.zeros(0, dtype=np.int64), np.zeros(0, dtype=np.int64), 0.0, alive_us, start_us,
        Timeline(none, np.zeros(0, dtype=np.int64), stepped=True), located=located, notes=notes,
    )  # fmt: skip


def unit_gaps(
    weight: FloatArray, failures: IntArray, time_us: IntArray, *, lot: BoolArray, failing_last: bool = False
) -> Steps:
    """Gap form in units or opportunities.

    Parameters
    ----------
    weight : float array, shape (n,)
        Exposure that each record adds (quantity, or quantity times opportunities), in order of time.
    failures : int array, shape (n,)
        Failing units of each record.
    time_us : int array, shape (n,)
    lot : bool array, shape (n,)
        True where the record stands for several units, so that its failures' places are unknown.
    failing_last : bool
        The failing unit of a lot is its last one.

    Returns
    -------
    Steps
        A gap runs from just after the last failing unit up to and including the failing one. A lot with
        failures is one step of its own after an event-free one, or, where there are only lots and failures are not
        rare in them, every lot is a step; then the series is not ``located`` and a
        located failure is an event-free step followed by a step of no exposure.

    Examples
    --------
    >>> s = unit_gaps(np.ones(6), np.array([0, 0, 1, 0, 1, 0]), np.arange(6), lot=np.zeros(6, dtype=bool))
    >>> s.exposure.tolist(), s.open_exposure
    ([3.0, 2.0], 1.0)
    """
    if weight.size == 0:
        return _empty(0, 0)
    position = np.cumsum(weight)
    timeline = Timeline(position, time_us, stepped=True)
    at = np.nonzero(failures)[0]
    vague = lot[at] & ~((failures[at] == 1) & failing_last)
    start_us, alive_us = int(time_us[0]), int(time_us[-1])
    total = float(position[-1])
    early = slice(0, _EARLY_LOTS)
    if lot.all() and not failing_last and float(failures[early].mean()) >= _JUDGED_ALONE:
        note = "Failures inside a lot have no known place; each lot is judged as a whole."
        return replace(count_series(weight, failures.astype(np.int64), time_us), notes=(note,))
    if not vague.any():
        # two or more failures at one place are events with gaps of nothing between them
        index = np.repeat(at, failures[at])
        gaps = np.diff(position[index], prepend=0.0)
        open_gap = total - (float(position[index[-1]]) if index.size else 0.0)
        ones = np.ones(index.size, dtype=np.int64)
        return Steps(
            gaps, ones, time_us[index], index.astype(np.int64), open_gap, alive_us, start_us, timeline,
            unit=0.0 if lot.any() else float(weight.mean()),
        )  # fmt: skip
    before = position[at] - np.where(vague, weight[at], 0.0)
    previous = np.concatenate([[0.0], position[at][:-1]])
    exposure = np.column_stack([before - previous, np.where(vague, weight[at], 0.0)]).ravel()
    events = np.column_stack([np.zeros_like(failures[at]), failures[at]]).ravel()
    index = np.repeat(at, 2)
    exposure[exposure < 1e-12 * total] = 0.0  # what rounding leaves between two lots is nothing
    keep = (exposure > 0) | (events > 0)
    note = "Failures inside a lot have no known place; the list of gaps spreads them evenly."
    return Steps(
        exposure[keep], events[keep].astype(np.int64), time_us[index][keep], index[keep].astype(np.int64),
        total - float(position[at[-1]]), alive_us, start_us, timeline, located=False, notes=(note,),
    )  # fmt: skip


def calendar_gaps(
    event_position: FloatArray, event_time_us: IntArray, record: IntArray, *, knots: tuple[FloatArray, IntArray], origin_is_event: bool
) -> Steps:  # fmt: skip
    """Gap form in working days, working hours or days.

    Parameters
    ----------
    event_position : float array, shape (n,)
        Exposure from the stream's first moment to each event, rising; equal for two events at one moment.
    event_time_us, record : int arrays, shape (n,)
    knots : (float array, int array)
        Cumulative exposure and moments from the first moment to the last proven one.
    origin_is_event : bool
        In an event-only source the first event opens the first gap and closes none.

    Examples
    --------
    >>> knots = (np.array([0.0, 10.0]), np.array([0, 100]))
    >>> s = calendar_gaps(np.array([0.0, 4.0, 7.0]), np.array([0, 40, 70]), np.arange(3), knots=knots, origin_is_event=True)
    >>> s.exposure.tolist(), s.open_exposure
    ([4.0, 3.0], 3.0)
    """
    exposures, moments = knots
    timeline = Timeline(exposures, moments, stepped=False)
    skip = 1 if origin_is_event else 0
    positions = event_position[skip:]
    gaps = np.maximum(np.diff(positions, prepend=0.0), 0.0)
    end = float(exposures[-1]) if exposures.size else 0.0
    last = float(positions[-1]) if positions.size else 0.0
    start_us = int(moments[0]) if moments.size else 0
    alive_us = int(moments[-1]) if moments.size else start_us
    return Steps(
        gaps, np.ones(gaps.size, dtype=np.int64), event_time_us[skip:], record[skip:], max(0.0, end - last), alive_us, start_us,
        timeline,
    )  # fmt: skip


def count_series(weight: FloatArray, defects: IntArray, time_us: IntArray) -> Steps:
    """Per-unit form: each record is a step of its own exposure and defects.

    Examples
    --------
    >>> count_series(np.array([120.0, 340.0]), np.array([1, 0]), np.array([5, 9])).exposure.tolist()
    [120.0, 340.0]
    """
    if weight.size == 0:
        return _empty(0, 0, located=False)
    index = np.arange(weight.size, dtype=np.int64)
    timeline = Timeline(np.cumsum(weight), time_us, stepped=True)
    return Steps(
        weight, defects, time_us, index, 0.0, int(time_us[-1]), int(time_us[0]), timeline, located=False,
        per_record=True,
    )  # fmt: skip
