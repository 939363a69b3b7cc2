"""Records of a stream before they become steps: units once, late failures at their unit, clusters as one event."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from rules.merge import before_maturity, clusters_apart, clusters_by_label, unit_failures
from rules.model import FloatArray, IntArray
from rules.series import first_pass
from watcher.config import Stream
from watcher.config.tables import ClusterColumn
from watcher.config.values import Span
from watcher.store.records import RecordFrame
from watcher.workcalendar import WorkCalendar

__all__ = ["Chosen", "earlier", "mature", "merge", "once"]

_DAY_US = 86_400_000_000


@dataclass(slots=True)
class Chosen:
    """The records of a stream, in order of time; ``index`` are their places in the source's frame."""

    index: IntArray
    times: IntArray
    ids: IntArray
    quantity: FloatArray
    defects: FloatArray
    failing: npt.NDArray[np.bool_]
    unit: IntArray

    def keep(self, which: npt.NDArray[np.bool_] | IntArray) -> Chosen:
        """Return some of them, or all in another order."""
        return Chosen(
            self.index[which], self.times[which], self.ids[which], self.quantity[which], self.defects[which], self.failing[which],
            self.unit[which],
        )  # fmt: skip

    def failing_units(self, *, has_defects: bool) -> FloatArray:
        """Failing units of a failing record: one, or in a lot as many as were counted."""
        ones: FloatArray = np.ones(self.index.size)
        in_lot = np.minimum(np.maximum(self.defects, 1), self.quantity) if has_defects else ones
        return np.where(self.quantity > 1, in_lot, ones)


def earlier(calendar: WorkCalendar, span: Span, times_us: IntArray) -> IntArray:
    """Moment from which a span has just passed at each of ``times_us``; the last such, where work stands still."""
    plain = round(span.plain().total_seconds() * 1e6)
    if span.unit != "workdays" or times_us.size == 0:
        return times_us - plain
    low = int(times_us.min()) - 3 * plain - 60 * _DAY_US
    worked, moments = calendar.knots("workdays", low, int(times_us.max()))
    wanted = np.interp(times_us, moments, worked) - span.amount
    after = np.searchsorted(worked, wanted + 1e-9, side="right")
    i = np.clip(after, 1, worked.size - 1) - 1
    rise = np.where(worked[i + 1] > worked[i], worked[i + 1] - worked[i], 1.0)
    share = np.clip((wanted - worked[i]) / rise, 0.0, 1.0)
    return moments[i] + np.round(share * (moments[i + 1] - moments[i])).astype(np.int64)


def once(chosen: Chosen, mode: str, *, later_adds: bool) -> Chosen:
    """Let each unit count once; with ``any`` its failure is that of whichever record found it.

    Defects found later add to a unit's (``later_adds``), a test done again finds the same ones again.
    """
    keep, failing = first_pass(chosen.unit, chosen.failing, mode)
    if mode == "any":
        defects, found = unit_failures(chosen.unit, chosen.failing, chosen.defects, add=later_adds)
        chosen.defects, chosen.ids = defects, chosen.ids[found]
    chosen.failing = failing
    return chosen.keep(keep)


def mature(
    stream: Stream, chosen: Chosen, made: Chosen | None, cutoff: int, *, span_us: int
) -> tuple[Chosen, Chosen | None, list[str]]:
    """Let only exposure count that had the time to fail, and place late failures at their unit's completion."""
    notes = []
    placed = chosen.times
    if stream.locate == "unit":
        origin = chosen if made is None else made
        placed, late, unknown = before_maturity(
            origin.unit, origin.times, chosen.unit, chosen.times, chosen.failing, span_us
        )
        if late.any():
            told = _several(int(late.sum()), "failure came", "failures came")
            notes.append(
                f"{told} later than {stream.mature_after} after completion, too late to be compared."
            )
        if unknown:
            one, more = (
                "failure of a unit without a known completion stands at its",
                "failures of units without a known completion stand at their",
            )
            notes.append(f"{_several(unknown, one, more)} own time.")
        chosen.failing = chosen.failing & ~late
    # in one source a unit stays or goes as a whole, by its completion
    young = placed > cutoff
    if made is not None:
        chosen.times = placed
        made = made.keep(made.times <= cutoff)
        order = np.argsort(placed, kind="stable")
        chosen, young = chosen.keep(order), young[order]
    if young.any():
        told = _several(int(young.sum()), "record is", "records are")
        waits = "waits" if young.sum() == 1 else "wait"
        notes.append(f"{told} younger than {stream.mature_after} and {waits}.")
    return chosen.keep(~young), made, notes


def _several(number: int, one: str, more: str) -> str:
    return f"{number:,} {one if number == 1 else more}"


def merge(
    stream: Stream, chosen: Chosen, frame: RecordFrame, calendar: WorkCalendar, *, counts: FloatArray
) -> tuple[list[str], dict[int, list[int]]]:
    """Let events of one cluster be one event; ``counts`` are the events that each record stands for.

    Returns notes, and for the first record of a cluster the others that were merged into it.
    """
    at = np.nonzero(chosen.failing)[0]
    cluster = stream.cluster
    assert cluster is not None
    if isinstance(cluster, ClusterColumn):
        leader = clusters_by_label(frame.cells[cluster.column][chosen.index[at]].tolist())
    elif cluster.unit == "workdays":
        start = int(chosen.times[0]) if chosen.times.size else 0
        worked = calendar.cumulative("workdays", start, chosen.times[at])
        leader = clusters_apart(worked, float(cluster.amount) - 1e-9)
    else:
        leader = clusters_apart(
            (chosen.times[at] - chosen.times[at[:1]]).astype(float), cluster.plain().total_seconds() * 1e6
        )
    first = leader == np.arange(at.size)
    before, after = int(counts[at].sum()), int(first.sum())
    others: dict[int, list[int]] = {}
    for i in np.nonzero(~first)[0].tolist():
        others.setdefault(int(chosen.ids[at[leader[i]]]), []).append(int(chosen.ids[at[i]]))
    chosen.failing[at[~first]] = False
    chosen.defects[at] = np.minimum(chosen.defects[at], 1.0)
    if before == after:
        return [], others
    return [f"{before:,} events were merged into {after:,}: those of one cluster count once."], others
