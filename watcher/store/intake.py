"""Taking deliveries in: each record once, corrected by later deliveries, never lost."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import asdict, dataclass, replace
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
    delivery = replace(delivery, file=delivery.file.encode("utf-8", "backslashreplace").decode())
    anew = _is_forgotten(store, source, delivery)
    met: set[str] = set()
    for batch in delivery.batches:
        step("before-batch")
        with store.writing() as conn:
            ensure_source(conn, source)
            counts = _apply(conn, source, delivery, batch.understood, now_us, anew=anew)
            if anew:
                met.update(r.identity for r in batch.understood)
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
        if anew:
            _drop_left_over(conn, source, delivery, met)
        _finish(conn, source, delivery, total, now_us=now_us, marks=marks)
        step("in-finish")
    step("after-finish")
    return total


def _is_forgotten(store: Store, source: str, delivery: Delivery) -> bool:
    """Whether a changed configuration asked for this file to be understood anew."""
    t = s.drops
    with store.reading() as conn:
        state = conn.execute(
            sa.select(t.c.complete).where((t.c.source == source) & (t.c.file == delivery.file))
        ).scalar()
    return state == -1 and delivery.refusal is None


def _drop_left_over(conn: sa.Connection, source: str, delivery: Delivery, met: set[str]) -> None:
    """Take out a file's records that its rows, understood anew, no longer stand for."""
    r = s.records
    mine = conn.execute(
        sa.select(r.c.id, r.c.identity).where((r.c.source == source) & (r.c.file == delivery.file))
    ).all()
    gone = [row.id for row in mine if row.identity not in met]
    for i in range(0, len(gone), _CHUNK):
        part = gone[i : i + _CHUNK]
        conn.execute(sa.delete(s.revisions).where(s.revisions.c.record_id.in_(part)))
        conn.execute(sa.delete(r).where(r.c.id.in_(part)))
    if gone:
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


def _apply(
    conn: sa.Connection, source: str, delivery: Delivery, rows: Sequence[Row], now_us: int, *, anew: bool
) -> Counts:
    counts = Counts()
    t = s.records
    current: dict[str, _Current] = {}
    for part in _chunks(list({r.identity for r in rows})):
        for found in conn.execute(
            sa.select(t).where((t.c.source == source) & t.c.identity.in_(part))
        ).mappings():
            values = dict(found)
            current[found["identity"]] = _Current(values.pop("id"), values)
    seen = set() if anew else _seen_before(conn, current, rows)
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
        if row.content == old["content"]:
            counts.repeated += 1
            if delivery.file != old["file"] and delivery.modified_us > old["modified_us"]:
                # confirmed by a later delivery: that counts when an older change comes in late
                old["modified_us"] = delivery.modified_us
                have.dirty = True
        elif (row.identity, row.content, delivery.file, row.line) in seen:
            counts.repeated += 1
        elif (delivery.modified_us, delivery.file, row.line) < (old["modified_us"], old["file"], old["line"]):
            counts.repeated += 1
            _keep_older(have, fresh, history)
        else:
            _replace(have, fresh, history)
            counts.voided += row.voided
            counts.changed += not row.voided
    _write(conn, current, history, now_us)
    return counts


_KEPT_BY_VOID = ("time_us", "unit", "quantity", "defects", "opportunities")


def _keep_older(
    have: _Current, fresh: dict[str, Any], history: list[tuple[_Current, dict[str, Any]]]
) -> None:
    """A row that an already known later one has overtaken becomes an earlier revision."""
    old = have.values
    history.append((have, {**fresh, "revision": old["revision"]}))
    have.values = {**old, "revision": old["revision"] + 1}
    if old["voided"] and not fresh["voided"]:
        have.values |= {name: fresh[name] for name in _KEPT_BY_VOID}
    have.dirty = True


def _replace(have: _Current, fresh: dict[str, Any], history: list[tuple[_Current, dict[str, Any]]]) -> None:
    """A later row becomes current; a void keeps the last values of its record."""
    old = have.values
    history.append((have, old))
    have.values = {**fresh, "revision": old["revision"] + 1}
    if fresh["voided"]:
        have.values |= {name: old[name] for name in _KEPT_BY_VOID}
    have.dirty = True


def _values(source: str, delivery: Delivery, row: Row) -> dict[str, Any]:
    return {
        "source": source, "identity": row.identity, "content": row.content, "key": _json(row.key),
        "time_us": round(row.time.timestamp() * 1e6), "unit": row.unit, "quantity": row.quantity, "defects": row.defects,
        "opportunities": row.opportunities, "cells": _json(row.cells), "file": delivery.file, "line": row.line,
        "modified_us": delivery.modified_us, "voided": int(row.voided),
    }  # fmt: skip


_json = json.JSONEncoder(ensure_ascii=False, separators=(",", ":")).encode


def _seen_before(
    conn: sa.Connection, current: dict[str, _Current], rows: Iterable[Row]
) -> set[tuple[str, str, str, int]]:
    """(identity, content, file, line) of earlier revisions, for records about to change only."""
    touched = {
        have.id: row.identity
        for row in rows
        if (have := current.get(row.identity))
        and have.id is not None
        and have.values["content"] != row.content
    }
    out: set[tuple[str, str, str, int]] = set()
    ids = list(touched)
    t = s.revisions
    for i in range(0, len(ids), _CHUNK):
        stmt = sa.select(t.c.record_id, t.c.content, t.c.file, t.c.body).where(
            t.c.record_id.in_(ids[i : i + _CHUNK])
        )
        for r in conn.execute(stmt):
            out.add((touched[r.record_id], r.content, r.file, json.loads(r.body)["line"]))
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
