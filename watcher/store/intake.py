"""Taking deliveries in: each record once, corrected by later deliveries, never lost."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import asdict, dataclass
from hashlib import blake2b
from typing import Any

import sqlalchemy as sa

from connectors.base import Delivery, Row, SetAside
from watcher.store import schema as s
from watcher.store.engine import Store
from watcher.store.records import ensure_source

__all__ = ["Counts", "take_in"]

_CHUNK = 2_000


@dataclass(slots=True)
class Counts:
    """What became of the rows of a delivery; ``rows`` is the sum of the other five."""

    rows: int = 0
    new: int = 0
    changed: int = 0
    voided: int = 0
    repeated: int = 0
    set_aside: int = 0

    def add(self, other: Counts) -> None:
        """Add up."""
        for name, value in asdict(other).items():
            setattr(self, name, getattr(self, name) + value)


def take_in(
    store: Store,
    source: str,
    delivery: Delivery,
    *,
    now_us: int,
    at_step: Callable[[str], None] | None = None,
) -> Counts:
    """Take a delivery in, in transactions of a few thousand rows.

    The file is marked complete in a last transaction of its own; after a crash it is read again from the start
    and everything already taken in counts as repeated. Of two rows of one identity the one delivered later
    (file's time, then name, then line) is current; the other is kept as an earlier revision.
    """
    step = at_step or (lambda _name: None)
    total = Counts()
    marks: list[str] = []
    _forget_old_understanding(store, source, delivery)
    for batch in delivery.batches:
        step("before-batch")
        with store.writing() as conn:
            ensure_source(conn, source)
            counts = _apply(conn, source, delivery, batch.understood, now_us)
            counts.rows, counts.set_aside = batch.rows, len(batch.set_aside)
            marks += _set_aside(conn, source, delivery, batch.set_aside, now_us)
            if counts.new + counts.changed + counts.voided:
                conn.execute(
                    sa.update(s.sources)
                    .where(s.sources.c.source == source)
                    .values(version=s.sources.c.version + 1)
                )
            step("in-batch")
        step("after-batch")
        total.add(counts)
    with store.writing() as conn:
        ensure_source(conn, source)
        if delivery.refusal is not None:
            marks += _set_aside(conn, source, delivery, [delivery.refusal], now_us)
        _finish(conn, source, delivery, total, now_us=now_us, marks=marks)
        step("in-finish")
    step("after-finish")
    return total


def _forget_old_understanding(store: Store, source: str, delivery: Delivery) -> None:
    """Drop a file's records before it is read anew under a changed configuration (its rows are all still there)."""
    t, r = s.drops, s.records
    where = (t.c.source == source) & (t.c.file == delivery.file)
    with store.reading() as conn:
        if conn.execute(sa.select(t.c.complete).where(where)).scalar() != -1 or delivery.refusal is not None:
            return
    with store.writing() as conn:
        mine = (r.c.source == source) & (r.c.file == delivery.file)
        conn.execute(sa.delete(s.revisions).where(s.revisions.c.record_id.in_(sa.select(r.c.id).where(mine))))
        conn.execute(sa.delete(r).where(mine))
        conn.execute(sa.update(t).where(where).values(complete=0))
        conn.execute(
            sa.update(s.sources).where(s.sources.c.source == source).values(version=s.sources.c.version + 1)
        )


def _finish(
    conn: sa.Connection, source: str, delivery: Delivery, counts: Counts, *, now_us: int, marks: list[str]
) -> None:
    t, r = s.drops, s.rejects
    where = (t.c.source == source) & (t.c.file == delivery.file)
    before = conn.execute(sa.select(t.c.fingerprint).where(where)).scalar()
    values = {
        **asdict(counts), "size": delivery.size, "modified_us": delivery.modified_us, "complete": 1,
        "fingerprint": delivery.fingerprint, "read_us": now_us,
    }  # fmt: skip
    if before is not None and before == delivery.fingerprint and not counts.rows and delivery.refusal is None:
        # the same content under a new time: nothing was read, what is known of it stays
        conn.execute(sa.update(t).where(where).values(size=delivery.size, modified_us=delivery.modified_us))
    else:
        conn.execute(sa.delete(t).where(where))
        conn.execute(sa.insert(t).values(source=source, file=delivery.file, **values))
        old = conn.execute(
            sa.select(r.c.id, r.c.mark).where(
                (r.c.source == source) & (r.c.file == delivery.file) & r.c.cleared_us.is_(None)
            )
        ).all()
        here = set(marks)
        gone = [row.id for row in old if row.mark not in here]
        for i in range(0, len(gone), _CHUNK):
            conn.execute(sa.update(r).where(r.c.id.in_(gone[i : i + _CHUNK])).values(cleared_us=now_us))
    sources = s.sources
    conn.execute(
        sa.update(sources)
        .where(sources.c.source == source)
        .where(sa.or_(sources.c.last_file_us.is_(None), sources.c.last_file_us < delivery.modified_us))
        .values(last_file_us=delivery.modified_us)
    )


def _set_aside(
    conn: sa.Connection, source: str, delivery: Delivery, asides: Sequence[SetAside], now_us: int
) -> list[str]:
    """Keep set-aside rows, each once; returns their marks."""
    by_mark: dict[str, dict[str, Any]] = {}
    for a in asides:
        parts = [source, a.file, str(a.line), str(a.column), str(a.value), a.reason]
        mark = blake2b("\x1f".join(parts).encode("utf-8", "surrogatepass"), digest_size=16).hexdigest()
        by_mark[mark] = {
            "mark": mark, "source": source, "file": a.file, "line": a.line, "column": a.column, "value": a.value,
            "reason": a.reason, "at_us": now_us, "fingerprint": delivery.fingerprint,
        }  # fmt: skip
    marks = list(by_mark)
    known: set[str] = set()
    for part in _chunks(marks):
        known |= set(conn.execute(sa.select(s.rejects.c.mark).where(s.rejects.c.mark.in_(part))).scalars())
        conn.execute(sa.update(s.rejects).where(s.rejects.c.mark.in_(part)).values(cleared_us=None))
    fresh = [v for m, v in by_mark.items() if m not in known]
    if fresh:
        conn.execute(sa.insert(s.rejects), fresh)
    return marks


def _chunks(values: Sequence[str]) -> Iterator[Sequence[str]]:
    for i in range(0, len(values), _CHUNK):
        yield values[i : i + _CHUNK]


@dataclass(slots=True)
class _Current:
    """A record while a chunk is applied."""

    id: int | None
    values: dict[str, Any]
    dirty: bool = False


def _apply(conn: sa.Connection, source: str, delivery: Delivery, rows: Sequence[Row], now_us: int) -> Counts:
    counts = Counts()
    t = s.records
    current: dict[str, _Current] = {}
    for part in _chunks(list({r.identity for r in rows})):
        for found in conn.execute(
            sa.select(t).where((t.c.source == source) & t.c.identity.in_(part))
        ).mappings():
            values = dict(found)
            current[found["identity"]] = _Current(values.pop("id"), values)
    seen = _seen_before(conn, current, rows)
    history: list[tuple[_Current, dict[str, Any]]] = []
    for row in rows:
        fresh = _values(source, delivery, row)
        have = current.get(row.identity)
        if have is None:
            current[row.identity] = _Current(None, {**fresh, "revision": 1}, dirty=True)
            counts.voided += row.voided
            counts.new += not row.voided
            continue
        old = have.values
        if row.content == old["content"] or (row.identity, row.content, delivery.file) in seen:
            counts.repeated += 1
            continue
        rank = (delivery.modified_us, delivery.file, row.line)
        if rank < (old["modified_us"], old["file"], old["line"]):
            history.append((have, fresh))
            counts.repeated += 1
            continue
        history.append((have, old))
        have.values = {**fresh, "revision": old["revision"] + 1}
        if row.voided:  # a voided record keeps its last values
            for name in ("time_us", "unit", "quantity", "defects", "opportunities"):
                have.values[name] = old[name]
        have.dirty = True
        seen.add((row.identity, old["content"], old["file"]))
        counts.voided += row.voided
        counts.changed += not row.voided
    _write(conn, current, history, now_us)
    return counts


def _values(source: str, delivery: Delivery, row: Row) -> dict[str, Any]:
    return {
        "source": source, "identity": row.identity, "content": row.content, "key": _json(row.key),
        "time_us": round(row.time.timestamp() * 1e6), "unit": row.unit, "quantity": row.quantity, "defects": row.defects,
        "opportunities": row.opportunities, "cells": _json(row.cells), "file": delivery.file, "line": row.line,
        "modified_us": delivery.modified_us, "voided": int(row.voided),
    }  # fmt: skip


def _json(value: Any) -> str:
    return json.dumps(value, ensure_ascii=False, separators=(",", ":"))


def _seen_before(
    conn: sa.Connection, current: dict[str, _Current], rows: Iterable[Row]
) -> set[tuple[str, str, str]]:
    """(identity, content, file) of earlier revisions, for records about to change only."""
    touched = {
        have.id: row.identity
        for row in rows
        if (have := current.get(row.identity))
        and have.id is not None
        and have.values["content"] != row.content
    }
    out: set[tuple[str, str, str]] = set()
    ids = list(touched)
    t = s.revisions
    for i in range(0, len(ids), _CHUNK):
        for r in conn.execute(
            sa.select(t.c.record_id, t.c.content, t.c.file).where(t.c.record_id.in_(ids[i : i + _CHUNK]))
        ):
            out.add((touched[r.record_id], r.content, r.file))
    return out


def _write(
    conn: sa.Connection,
    current: dict[str, _Current],
    history: list[tuple[_Current, dict[str, Any]]],
    now_us: int,
) -> None:
    t = s.records
    new = [c for c in current.values() if c.id is None]
    if new:
        conn.execute(sa.insert(t), [c.values for c in new])
    changed = [c for c in current.values() if c.id is not None and c.dirty]
    if changed:
        names = [c.name for c in t.columns if c.name not in {"id", "source", "identity"}]
        stmt = (
            sa.update(t)
            .where(t.c.id == sa.bindparam("b_id"))
            .values({n: sa.bindparam(f"b_{n}") for n in names})
        )
        conn.execute(stmt, [{"b_id": c.id, **{f"b_{n}": c.values[n] for n in names}} for c in changed])
    if history:
        missing = {c.values["identity"]: c for c, _ in history if c.id is None}
        for part in _chunks(list(missing)):
            source = next(iter(missing.values())).values["source"]
            for r in conn.execute(
                sa.select(t.c.id, t.c.identity).where((t.c.source == source) & t.c.identity.in_(part))
            ):
                missing[r.identity].id = r.id
        conn.execute(
            sa.insert(s.revisions),
            [
                {
                    "record_id": c.id,
                    "content": v["content"],
                    "file": v["file"],
                    "body": _json(v),
                    "seen_us": now_us,
                }
                for c, v in history
            ],
        )
