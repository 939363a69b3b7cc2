"""From a stream's records to its series: which count, where each event lies, and how much exposure stands against it."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from rules.merge import before_maturity, first_of_cluster, on_production
from rules.model import FloatArray, IntArray, Steps
from rules.series import calendar_gaps, count_series, first_pass, unit_gaps
from watcher.config import Config, Stream
from watcher.config.tables import ClusterColumn
from watcher.config.values import Span
from watcher.store.records import Record, RecordFrame, as_number
from watcher.workcalendar import WorkCalendar

__all__ = [
    "COUNTED", "Built", "Produced", "SeriesError", "build", "is_event_only", "is_failure", "is_one_of", "matches", "needed_cells", "produced_for",
]  # fmt: skip

COUNTED = ("units", "opportunities")


class SeriesError(Exception):
    """A stream's records cannot be made a series without guessing; the message says what is missing."""


@dataclass(frozen=True, slots=True)
class Built:
    """A stream's series; ``record_ids`` names the record that closed each step, -1 for none."""

    steps: Steps
    record_ids: IntArray
    ahead: int
    """Records dated after the present moment: kept, not yet judged."""
    notes: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Produced:
    """Records of the source that a stream takes its exposure from."""

    frame: RecordFrame
    stale: bool
    """The source has fallen silent: events no longer wait for it."""


def produced_for(
    config: Config, name: str, frame_of: Callable[[str], RecordFrame], is_silent: Callable[[str], bool]
) -> Produced | None:
    """Records that a stream takes its exposure from, where that is another source."""
    made_by = config.streams[name].production
    return None if made_by is None else Produced(frame_of(made_by.source), is_silent(made_by.source))


def is_event_only(config: Config, stream: Stream) -> bool:
    """Whether every record of the stream's source is itself a failure."""
    columns = config.sources[stream.source].columns
    counted = stream.exposure in COUNTED
    return not counted and not stream.event and (columns is None or columns.defects is None)


def needed_cells(config: Config, source: str) -> list[str]:
    """Stored columns that the streams look at in a source."""
    out: dict[str, None] = {}
    for stream in config.streams.values():
        if stream.source == source:
            out |= dict.fromkeys([*stream.event, *stream.where])
            if isinstance(stream.cluster, ClusterColumn):
                out[stream.cluster.column] = None
        made_by = stream.production.source if stream.production is not None else stream.source
        if made_by == source:
            if stream.production is not None:
                out |= dict.fromkeys(stream.production.where)
            if stream.opportunities is not None:
                out[stream.opportunities.column] = None
    return list(out)


def is_one_of(cell: str, values: Sequence[str]) -> bool:
    """Whether a cell is one of the accepted values: as text, or as a number where both are numbers.

    Examples
    --------
    >>> is_one_of("2", ["LEAK", "2.0"]), is_one_of("leak", ["LEAK"])
    (True, False)
    """
    number = as_number(cell)
    return cell in values or (number is not None and any(as_number(v) == number for v in values))


def is_failure(config: Config, stream: Stream, record: Record) -> bool:
    """Whether a record, as it stands, is a failure of a stream."""
    if record.voided or not all(is_one_of(record.attributes.get(c, ""), v) for c, v in stream.where.items()):
        return False
    if stream.event:
        return all(is_one_of(record.attributes.get(c, ""), v) for c, v in stream.event.items())
    columns = config.sources[stream.source].columns
    return bool(record.defects) if columns is not None and columns.defects is not None else True


def matches(frame: RecordFrame, wanted: Mapping[str, Sequence[str]], size: int) -> npt.NDArray[np.bool_]:
    """Records whose cells match every column: as text, or as numbers where both are numbers."""
    keep = np.ones(size, dtype=bool)
    for column, values in wanted.items():
        column_of = frame.coded(column)
        good = np.zeros(len(column_of.texts), dtype=bool)
        for value in values:
            if value in column_of.texts:
                good[column_of.texts[value]] = True
            number = as_number(value)
            if number is not None:
                good[column_of.numbers.get(number, [])] = True
        keep &= good[column_of.codes[:size]] if good.size else False
    return keep


@dataclass(slots=True)
class _Chosen:
    """The records of a stream, in order of time; ``index`` are their places in the source's frame."""

    index: IntArray
    times: IntArray
    ids: IntArray
    quantity: FloatArray
    defects: FloatArray
    failing: npt.NDArray[np.bool_]
    unit: IntArray

    def keep(self, which: npt.NDArray[Any]) -> _Chosen:
        """Return some of them, or all in another order."""
        return _Chosen(
            self.index[which], self.times[which], self.ids[which], self.quantity[which], self.defects[which], self.failing[which],
            self.unit[which],
        )  # fmt: skip


def build(
    config: Config,
    name: str,
    frame: RecordFrame,
    calendar: WorkCalendar,
    *,
    alive_us: int | None,
    now_us: int,
    produced: Produced | None = None,
) -> Built:
    """Rework a stream's records into its series, as far as they are known at ``now_us``.

    ``produced`` are the records of the source named by ``production``. Raises ``SeriesError``.
    """
    stream = config.streams[name]
    size = int(np.searchsorted(frame.time_us, now_us, side="right"))
    ahead = frame.time_us.size - size
    columns = config.sources[stream.source].columns
    has_defects = columns is not None and columns.defects is not None
    numbers: dict[str, int] = {}
    chosen = _choose(stream, frame, size, has_defects=has_defects, numbers=numbers)
    notes: list[str] = []
    mode = stream.retests or ("first-pass" if columns is not None and columns.unit else "every")
    made: _Chosen | None = None
    if stream.production is not None and produced is not None:
        until = int(np.searchsorted(produced.frame.time_us, now_us, side="right"))
        made = _made(stream, produced.frame, until, numbers)
        mode = stream.retests or "every"
    if stream.mature_after is not None:
        cutoff = _moment_before(calendar, stream.mature_after, now_us)
        chosen, made, more = _mature(stream, chosen, made, cutoff, span=now_us - cutoff)
        notes += more
        alive_us = cutoff if alive_us is None else min(alive_us, cutoff)
        mode = "any" if stream.locate == "unit" else mode
    if mode != "every" and made is None:
        keep, failing = first_pass(chosen.unit, chosen.failing, mode)
        chosen.failing = failing
        chosen = chosen.keep(keep)
    if stream.cluster is not None:
        notes += _merge(stream, chosen, frame, calendar)
    if made is not None:
        assert produced is not None
        steps, more = _from_production(
            name, stream, chosen, made, produced, alive_us=alive_us, has_defects=has_defects
        )
        notes += more
    elif stream.form == "per-unit" or stream.exposure in COUNTED:
        weight = _weights(name, stream, frame, chosen)
        steps = _counted_steps(config, stream, chosen, weight, has_defects=has_defects)
    else:
        steps = _calendar_steps(config, stream, calendar, chosen, alive_us=alive_us, now_us=now_us)
        if stream.exposure != "days":
            notes += _outside(calendar, chosen)
    record_ids = (
        np.where(steps.record >= 0, chosen.ids[steps.record], -1) if steps.record.size else steps.record
    )
    return Built(steps, record_ids, ahead, (*steps.notes, *notes))


def _choose(
    stream: Stream, frame: RecordFrame, size: int, *, has_defects: bool, numbers: dict[str, int]
) -> _Chosen:
    index = np.nonzero(matches(frame, stream.where, size))[0]
    defects = np.nan_to_num(frame.defects[:size][index])
    if stream.event:
        failing = matches(frame, stream.event, size)[index]
    elif has_defects:
        failing = defects > 0
    else:
        failing = np.ones(index.size, dtype=bool)
    return _Chosen(
        index, frame.time_us[:size][index], frame.id[:size][index], frame.quantity[:size][index], defects, failing,
        _unit_numbers(frame.unit[:size][index], numbers),
    )  # fmt: skip


def _made(stream: Stream, frame: RecordFrame, size: int, numbers: dict[str, int]) -> _Chosen:
    """Production records of the other source; each unit once, at its first record."""
    assert stream.production is not None
    index = np.nonzero(matches(frame, stream.production.where, size))[0]
    none = np.zeros(index.size, dtype=bool)
    made = _Chosen(
        index, frame.time_us[:size][index], frame.id[:size][index], frame.quantity[:size][index], np.zeros(index.size), none,
        _unit_numbers(frame.unit[:size][index], numbers),
    )  # fmt: skip
    keep, _ = first_pass(made.unit, none, "first-pass")
    return made.keep(keep)


def _unit_numbers(unit: npt.NDArray[Any], numbers: dict[str, int]) -> IntArray:
    """Number the units; those without a name stay apart."""
    out = np.empty(unit.size, dtype=np.int64)
    for i, name in enumerate(unit.tolist()):
        out[i] = -1 if name is None else numbers.setdefault(name, len(numbers))
    return out


def _moment_before(calendar: WorkCalendar, span: Span, now_us: int) -> int:
    """Moment from which a span has just passed now."""
    if span.unit != "workdays":
        return now_us - round(span.plain().total_seconds() * 1e6)
    low = now_us - round(span.plain().total_seconds() * 1e6) * 3 - 60 * 86_400_000_000
    exposures, moments = calendar.knots("workdays", low, now_us)
    wanted = float(exposures[-1]) - span.amount
    return int(np.interp(wanted, exposures, moments)) if wanted >= 0 else low


def _mature(
    stream: Stream, chosen: _Chosen, made: _Chosen | None, cutoff: int, *, span: int
) -> tuple[_Chosen, _Chosen | None, list[str]]:
    """Let only exposure count that had the time to fail, and place late failures at their unit's completion."""
    notes = []
    if stream.locate == "unit":
        origin = chosen if made is None else made
        completed, late, unknown = before_maturity(
            origin.unit, origin.times, chosen.unit, chosen.times, chosen.failing, span
        )
        if late.any():
            notes.append(
                f"{int(late.sum())} failures came later than {stream.mature_after} after completion and are not compared."
            )
        if unknown:
            notes.append(f"{unknown} failures of units without a known completion stand at their own time.")
        chosen.failing = chosen.failing & ~late
        if made is not None:
            chosen.times = completed
            chosen = chosen.keep(np.argsort(completed, kind="stable"))
        else:
            # a unit stays or goes as a whole, by its completion
            young = completed > cutoff
            chosen = chosen.keep(~young)
            return chosen, None, notes + _young(young, stream)
    young = chosen.times > cutoff
    if made is not None:
        made = made.keep(made.times <= cutoff)
    return chosen.keep(~young), made, notes + _young(young, stream)


def _young(young: npt.NDArray[np.bool_], stream: Stream) -> list[str]:
    if not young.any():
        return []
    return [f"{int(young.sum())} records are younger than {stream.mature_after} and wait."]


def _merge(stream: Stream, chosen: _Chosen, frame: RecordFrame, calendar: WorkCalendar) -> list[str]:
    """Let events of one cluster be one event."""
    at = np.nonzero(chosen.failing)[0]
    if isinstance(stream.cluster, ClusterColumn):
        labels = frame.cells[stream.cluster.column][chosen.index[at]].tolist()
        first = first_of_cluster(np.array([_label_of(v, i) for i, v in enumerate(labels)], dtype=object))
    else:
        assert stream.cluster is not None
        first = _apart(chosen.times[at], stream.cluster, calendar)
    merged = int((~first).sum())
    several = (chosen.defects[at] > 1) & first
    chosen.failing[at[~first]] = False
    chosen.defects[at] = np.minimum(chosen.defects[at], 1.0)
    if merged == 0 and not several.any():
        return []
    return [f"{at.size} events were merged into {int(first.sum())}: those of one cluster count once."]


def _label_of(value: str, place: int) -> str:
    """Name of a cluster; an empty cell is a cluster of its own."""
    return f"v{value}" if value else f"#{place}"


def _apart(times: IntArray, span: Span, calendar: WorkCalendar) -> npt.NDArray[np.bool_]:
    """Events that come at least a span after the one before."""
    first = np.ones(times.size, dtype=bool)
    if times.size < 2:
        return first
    if span.unit == "workdays":
        gaps = np.diff(calendar.cumulative("workdays", int(times[0]), times))
        first[1:] = gaps >= span.amount
    else:
        first[1:] = np.diff(times) >= round(span.plain().total_seconds() * 1e6)
    return first


def _weights(name: str, stream: Stream, frame: RecordFrame, chosen: _Chosen) -> FloatArray:
    """Exposure that each record adds."""
    weight = chosen.quantity.copy()
    if stream.exposure != "opportunities":
        return weight
    if stream.opportunities is None:
        return weight * np.nan_to_num(frame.opportunities[chosen.index], nan=1.0)
    return weight * _places(name, stream, frame.cells[stream.opportunities.column][chosen.index])


def _places(name: str, stream: Stream, products: npt.NDArray[Any]) -> FloatArray:
    assert stream.opportunities is not None
    places: Mapping[str, float] = stream.opportunities.places
    unknown = sorted({str(p) for p in products.tolist()} - set(places))
    if unknown:
        raise SeriesError(
            f'[streams.{name}] opportunities: column {stream.opportunities.column} holds "{unknown[0]}", which has no entry in'
            f" places; known are {', '.join(places)}. Add it: nothing is guessed, and the stream is not judged until then."
        )
    return np.array([places[str(p)] for p in products.tolist()], dtype=float)


def _counted_steps(
    config: Config, stream: Stream, chosen: _Chosen, weight: FloatArray, *, has_defects: bool
) -> Steps:
    lot = chosen.quantity > 1
    if stream.form == "per-unit":
        counts = np.where(chosen.failing, np.maximum(chosen.defects, 0), 0).astype(np.int64)
        return count_series(weight, counts, chosen.times)
    failures = np.where(chosen.failing, _failing_units(chosen, has_defects=has_defects), 0).astype(np.int64)
    last = config.sources[stream.source].failing_unit == "last"
    return unit_gaps(weight, failures, chosen.times, lot=lot, failing_last=last)


def _failing_units(chosen: _Chosen, *, has_defects: bool) -> FloatArray:
    """Failing units of a failing record: one, or in a lot as many as were counted."""
    ones: FloatArray = np.ones(chosen.index.size)
    in_lot = np.minimum(np.maximum(chosen.defects, 1), chosen.quantity) if has_defects else ones
    return np.where(chosen.quantity > 1, in_lot, ones)


def _calendar_steps(
    config: Config,
    stream: Stream,
    calendar: WorkCalendar,
    chosen: _Chosen,
    *,
    alive_us: int | None,
    now_us: int,
) -> Steps:
    times = chosen.times
    event_times = times[chosen.failing]
    which = np.nonzero(chosen.failing)[0].astype(np.int64)
    event_only = is_event_only(config, stream)
    if times.size == 0:
        empty: FloatArray = np.zeros(0)
        return calendar_gaps(empty, event_times, which, knots=(empty, event_times), origin_is_event=False)
    start_us = int(times[0])
    alive = max(int(times[-1]), min(alive_us if alive_us is not None else int(times[-1]), now_us))
    knots = calendar.knots(stream.exposure, start_us, alive)
    positions = np.interp(event_times, knots[1], knots[0]) if event_times.size else np.zeros(0)
    return calendar_gaps(np.asarray(positions), event_times, which, knots=knots, origin_is_event=event_only)


def _outside(calendar: WorkCalendar, chosen: _Chosen) -> list[str]:
    outside = sum(calendar.next_working_us(int(t)) != int(t) for t in chosen.times[chosen.failing])
    if not outside:
        return []
    return [f"{outside} of the events fell outside working time and count from the next working moment."]


def _from_production(
    name: str, stream: Stream, chosen: _Chosen, made: _Chosen, produced: Produced, *, alive_us: int | None, has_defects: bool
) -> tuple[Steps, list[str]]:  # fmt: skip
    """Place events on the exposure that another source reports."""
    assert stream.production is not None
    weight = _weights(name, stream, produced.frame, made)
    lag = 0 if stream.production.lag is None else round(stream.production.lag.plain().total_seconds() * 1e6)
    counts = np.where(chosen.failing, np.maximum(chosen.defects, 1) if stream.form == "per-unit" else _failing_units(chosen, has_defects=has_defects), 0)  # fmt: skip
    events = np.nonzero(counts > 0)[0]
    at = chosen.times[events] - (0 if stream.locate == "unit" else lag)
    placed = on_production(
        weight, made.times, at, counts[events].astype(np.int64), chosen.times[events],
        record=events.astype(np.int64), alive_us=alive_us, per_record=stream.form == "per-unit", wait=not produced.stale,
    )  # fmt: skip
    notes = []
    if placed.waiting:
        word = "event waits" if placed.waiting == 1 else "events wait"
        notes.append(f"{placed.waiting} {word} for production records of {stream.production.source}.")
    if placed.early:
        notes.append(
            f"{placed.early} events lie before the first production record and have no exposure to be judged by."
        )
    if placed.forced:
        notes.append(
            f"{placed.forced} events were placed at the last known production: {stream.production.source} is silent."
        )
    return placed.steps, notes
