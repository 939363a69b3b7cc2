"""From a stream's records to its series: which count, where each event lies, and how much exposure stands against it."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from rules.merge import on_production
from rules.model import FloatArray, IntArray, Steps
from rules.series import calendar_gaps, count_series, first_pass, unit_gaps
from watcher.config import Config, Stream
from watcher.config.tables import ClusterColumn
from watcher.config.values import Span
from watcher.reworking import Chosen, earlier, mature, merge, once
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
    merged: Mapping[int, Sequence[int]] = field(default_factory=dict)
    """Records of a cluster's first event -> those of the events merged into it."""

    def records_of(self, steps: Sequence[int]) -> tuple[list[int], frozenset[int]]:
        """Numbers of the records of some steps, merged ones behind their event, and which of them are merged."""
        events = [int(self.record_ids[i]) for i in steps if self.record_ids[i] >= 0]
        every = [n for event in events for n in (event, *self.merged.get(event, ()))]
        return every, frozenset(every) - frozenset(events)


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
    counted = stream.exposure in COUNTED and stream.production is None
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
    made: Chosen | None = None
    if stream.production is not None and produced is not None:
        until = int(np.searchsorted(produced.frame.time_us, now_us, side="right"))
        made = _made(stream, produced.frame, until, numbers)
    retested = columns is not None and columns.unit is not None and made is None
    mode = stream.retests or ("first-pass" if retested else "every")
    if stream.mature_after is not None:
        cutoff = _before(calendar, stream.mature_after, now_us)
        span_us = now_us - cutoff
        if stream.locate == "unit":
            mode = "any"
            # a unit had its time only as far as somebody would have heard of its failure
            alive_us = _before(
                calendar, stream.mature_after, now_us if alive_us is None else min(alive_us, now_us)
            )
            cutoff = cutoff if made is not None else alive_us
        chosen, made, more = mature(stream, chosen, made, cutoff, span_us=span_us)
        notes += more
        alive_us = cutoff if alive_us is None else min(alive_us, cutoff)
    if mode != "every":
        chosen = once(chosen, mode, later_adds=stream.locate == "unit")
    merged: dict[int, list[int]] = {}
    if stream.cluster is not None:
        in_lots = has_defects and stream.exposure in COUNTED
        counts = chosen.failing_units(has_defects=in_lots)
        more, merged = merge(stream, chosen, frame, calendar, counts=counts)
        notes += more
    if made is not None:
        assert produced is not None
        steps, more = _from_production(
            name, stream, calendar, chosen, made, produced, alive_us=alive_us, has_defects=has_defects
        )  # fmt: skip
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
    return Built(steps, record_ids, ahead, (*steps.notes, *notes), merged)


def _before(calendar: WorkCalendar, span: Span, moment_us: int) -> int:
    return int(earlier(calendar, span, np.array([moment_us], dtype=np.int64))[0])


def _choose(
    stream: Stream, frame: RecordFrame, size: int, *, has_defects: bool, numbers: dict[str, int]
) -> Chosen:
    index = np.nonzero(matches(frame, stream.where, size))[0]
    defects = np.nan_to_num(frame.defects[:size][index])
    if stream.event:
        failing = matches(frame, stream.event, size)[index]
    elif has_defects:
        failing = defects > 0
    else:
        failing = np.ones(index.size, dtype=bool)
    return Chosen(
        index, frame.time_us[:size][index], frame.id[:size][index], frame.quantity[:size][index], defects, failing,
        _unit_numbers(frame.unit[:size][index], numbers),
    )  # fmt: skip


def _made(stream: Stream, frame: RecordFrame, size: int, numbers: dict[str, int]) -> Chosen:
    """Production records of the other source; each unit once, at its first record."""
    assert stream.production is not None
    index = np.nonzero(matches(frame, stream.production.where, size))[0]
    none = np.zeros(index.size, dtype=bool)
    made = Chosen(
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


def _weights(name: str, stream: Stream, frame: RecordFrame, chosen: Chosen) -> FloatArray:
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
    of = {text: _places_of(text, places) for text in {str(p) for p in products.tolist()}}
    unknown = sorted(text for text, number in of.items() if number is None)
    if unknown:
        raise SeriesError(
            f'[streams.{name}] opportunities: column {stream.opportunities.column} holds "{unknown[0]}", which has no entry in'
            f" places; known are {', '.join(places)}. Add it: nothing is guessed, and the stream is not judged until then."
        )
    return np.array([of[str(p)] for p in products.tolist()], dtype=float)


def _places_of(product: str, places: Mapping[str, float]) -> float | None:
    if product in places:
        return places[product]
    number = as_number(product)
    same = [v for k, v in places.items() if number is not None and as_number(k) == number]
    return same[0] if same else None


def _counted_steps(
    config: Config, stream: Stream, chosen: Chosen, weight: FloatArray, *, has_defects: bool
) -> Steps:
    lot = chosen.quantity > 1
    if stream.form == "per-unit":
        counts = np.where(chosen.failing, np.maximum(chosen.defects, 0), 0).astype(np.int64)
        return count_series(weight, counts, chosen.times)
    failures = np.where(chosen.failing, chosen.failing_units(has_defects=has_defects), 0).astype(np.int64)
    last = config.sources[stream.source].failing_unit == "last"
    return unit_gaps(weight, failures, chosen.times, lot=lot, failing_last=last)


def _calendar_steps(
    config: Config,
    stream: Stream,
    calendar: WorkCalendar,
    chosen: Chosen,
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


def _outside(calendar: WorkCalendar, chosen: Chosen) -> list[str]:
    outside = sum(calendar.next_working_us(int(t)) != int(t) for t in chosen.times[chosen.failing])
    if not outside:
        return []
    return [f"{outside} of the events fell outside working time and count from the next working moment."]


def _from_production(
    name: str, stream: Stream, calendar: WorkCalendar, chosen: Chosen, made: Chosen, produced: Produced, *, alive_us: int | None, has_defects: bool
) -> tuple[Steps, list[str]]:  # fmt: skip
    """Place events on the exposure that another source reports."""
    assert stream.production is not None
    weight = _weights(name, stream, produced.frame, made)
    counts = np.where(chosen.failing, np.maximum(chosen.defects, 1) if stream.form == "per-unit" else chosen.failing_units(has_defects=has_defects), 0)  # fmt: skip
    events = np.nonzero(counts > 0)[0]
    at, lag = chosen.times[events], stream.production.lag
    if lag is not None and stream.locate != "unit":
        at = earlier(calendar, lag, at)
        alive_us = None if alive_us is None else _before(calendar, lag, alive_us)
    placed = on_production(
        weight, made.times, at, counts[events].astype(np.int64), chosen.times[events],
        record=events.astype(np.int64), alive_us=alive_us, per_record=stream.form == "per-unit", wait=not produced.stale,
    )  # fmt: skip
    notes, made_by = [], stream.production.source
    if placed.waiting:
        notes.append(f"{_events(placed.waiting, 'waits', 'wait')} for production records of {made_by}.")
    if placed.early:
        verb = _events(placed.early, "lies", "lie")
        notes.append(f"{verb} before the first production record, without any exposure to be judged by.")
    if placed.forced:
        verb = _events(placed.forced, "was", "were")
        notes.append(f"{verb} placed at the last known production: {made_by} is silent.")
    return placed.steps, notes


def _events(number: int, one: str, more: str) -> str:
    return f"{number:,} event {one}" if number == 1 else f"{number:,} events {more}"
