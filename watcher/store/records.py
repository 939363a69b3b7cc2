"""Records as they stand: read for assessment, for audit and for the standing of sources."""

from __future__ import annotations

import json
from collections.abc import Iterator, Sequence
from dataclasses import asdict, dataclass, field
from datetime import UTC, datetime
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np
import numpy.typing as npt
import sqlalchemy as sa

from connectors.base import DropSeen
from watcher.store import schema as s

__all__ = [
    "Coded", "Record", "RecordFrame", "Reject", "SourceState", "as_number", "corrected_since", "drops_seen", "ensure_source",
    "fingerprint_of", "forget_drops",
    "note_contact", "note_fingerprint", "record_by_ids", "record_frame", "records", "records_version", "rejects",
    "rejects_since", "revised_between", "source_state",
]  # fmt: skip

_CHUNK = 2_000


@dataclass(frozen=True, slots=True)
class Record:
    """One record as understood; the fields of ``records --json`` and its number here."""

    id: int
    source: str
    key: dict[str, str]
    time_us: int
    unit: str | None
    quantity: float
    defects: float | None
    opportunities: float | None
    attributes: dict[str, str]
    file: str
    line: int
    revision: int
    voided: bool

    def as_json(self, zone: ZoneInfo) -> dict[str, Any]:
        """Return the contract's object."""
        body = asdict(self)
        del body["id"]
        body["time"] = datetime.fromtimestamp(body.pop("time_us") / 1e6, UTC).astimezone(zone).isoformat()
        return body


def as_number(text: str) -> float | None:
    """Return a cell's number, if it is one."""
    try:
        return float(text)
    except ValueError:
        return None


@dataclass(frozen=True, slots=True)
class Coded:
    """A column: number of each text, numbers of each value that reads as a number, and each record's number."""

    texts: dict[str, int]
    numbers: dict[float, list[int]]
    codes: npt.NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class RecordFrame:
    """Current records of a source as columns, in order of time, then key; voided ones left out."""

    id: npt.NDArray[np.int64]
    time_us: npt.NDArray[np.int64]
    quantity: npt.NDArray[np.float64]
    defects: npt.NDArray[np.float64]
    opportunities: npt.NDArray[np.float64]
    unit: npt.NDArray[Any]
    cells: dict[str, npt.NDArray[Any]]
    _coded: dict[str, Coded] = field(default_factory=dict)

    def coded(self, column: str) -> Coded:
        """Return a column by its different values; worked out once, however many streams look at it."""
        if column not in self._coded:
            known, inverse = np.unique(self.cells[column].astype(str), return_inverse=True)
            numbers: dict[float, list[int]] = {}
            for i, text in enumerate(known.tolist()):
                number = as_number(text)
                if number is not None:
                    numbers.setdefault(number, []).append(i)
            self._coded[column] = Coded({v: i for i, v in enumerate(known.tolist())}, numbers, inverse)
        return self._coded[column]


@dataclass(frozen=True, slots=True)
class Reject:
    """A set-aside row, or a refused file with ``line`` None."""

    source: str
    file: str
    line: int | None
    column: str | None
    value: str | None
    reason: str
    at_us: int


@dataclass(frozen=True, slots=True)
class SourceState:
    """Standing of a source."""

    last_contact_us: int | None
    last_record_us: int | None
    last_file_us: int | None
    records: int
    set_aside: int
    error: str | None


def drops_seen(conn: sa.Connection, source: str) -> dict[str, DropSeen]:
    """Every file read so far, by name."""
    t = s.drops
    rows = conn.execute(
        sa.select(t.c.file, t.c.size, t.c.modified_us, t.c.fingerprint, t.c.complete).where(
            t.c.source == source
        )
    )
    return {r.file: DropSeen(r.file, r.size, r.modified_us, r.fingerprint, r.complete == 1) for r in rows}


def forget_drops(conn: sa.Connection, source: str) -> None:
    """Let every file be read again, since the configuration now understands it otherwise."""
    conn.execute(sa.update(s.drops).where(s.drops.c.source == source).values(complete=-1, fingerprint=""))


def ensure_source(conn: sa.Connection, source: str) -> None:
    """Let a source have its row."""
    found = conn.execute(sa.select(s.sources.c.source).where(s.sources.c.source == source)).first()
    if found is None:
        conn.execute(sa.insert(s.sources).values(source=source, version=0))


def note_contact(conn: sa.Connection, source: str, now_us: int, error: str | None) -> None:
    """Note that a source was reached, or why not."""
    ensure_source(conn, source)
    values: dict[str, Any] = {"error": error}
    if error is None:
        values["last_contact_us"] = now_us
    conn.execute(sa.update(s.sources).where(s.sources.c.source == source).values(**values))


def fingerprint_of(conn: sa.Connection, source: str) -> str | None:
    """Return how a source's rows were understood when they were last read."""
    return conn.execute(sa.select(s.sources.c.fingerprint).where(s.sources.c.source == source)).scalar()


def note_fingerprint(conn: sa.Connection, source: str, fingerprint: str) -> bool:
    """Note how rows are understood now; True when that differs from what was noted before."""
    ensure_source(conn, source)
    before = conn.execute(sa.select(s.sources.c.fingerprint).where(s.sources.c.source == source)).scalar()
    conn.execute(sa.update(s.sources).where(s.sources.c.source == source).values(fingerprint=fingerprint))
    return before is not None and before != fingerprint


def _record(row: Any, number: int) -> Record:
    return Record(
        number, row["source"], json.loads(row["key"]), row["time_us"], row["unit"], row["quantity"], row["defects"],
        row["opportunities"], json.loads(row["cells"]), row["file"], row["line"], row["revision"], bool(row["voided"]),
    )  # fmt: skip


def records(conn: sa.Connection, source: str | None = None, *, history: bool = False) -> Iterator[Record]:
    """Every current record in order of source and time; with ``history`` each one's earlier revisions first."""
    t = s.records
    stmt = sa.select(t).order_by(t.c.source, t.c.time_us, t.c.key)
    if source is not None:
        stmt = stmt.where(t.c.source == source)
    earlier: dict[int, list[dict[str, Any]]] = {}
    if history:
        for r in conn.execute(
            sa.select(s.revisions.c.record_id, s.revisions.c.body).order_by(s.revisions.c.id)
        ):
            earlier.setdefault(r.record_id, []).append(json.loads(r.body))
    for row in conn.execute(stmt).mappings():
        for old in earlier.get(row["id"], ()):
            yield _record({"revision": 0, **old}, row["id"])
        yield _record(row, row["id"])


def record_by_ids(conn: sa.Connection, ids: Sequence[int]) -> list[Record]:
    """Return records by number, in the order asked for."""
    out: dict[int, Record] = {}
    for i in range(0, len(ids), _CHUNK):
        part = [int(n) for n in ids[i : i + _CHUNK]]
        for row in conn.execute(sa.select(s.records).where(s.records.c.id.in_(part))).mappings():
            out[row["id"]] = _record(row, row["id"])
    return [out[int(n)] for n in ids if int(n) in out]


def record_frame(conn: sa.Connection, source: str, cells: Sequence[str]) -> RecordFrame:
    """Load a source's current records as columns; order and content never depend on files or batches."""
    t = s.records
    columns = [
        t.c.id,
        t.c.time_us,
        t.c.quantity,
        t.c.defects,
        t.c.opportunities,
        t.c.unit,
        t.c.key,
        t.c.cells,
    ]
    rows = conn.execute(
        sa.select(*columns).where((t.c.source == source) & (t.c.voided == 0)).order_by(t.c.time_us)
    ).all()
    rows = _ties_by_key(rows)
    loaded = [json.loads(r.cells) for r in rows] if cells else []
    return RecordFrame(
        np.array([r.id for r in rows], dtype=np.int64),
        np.array([r.time_us for r in rows], dtype=np.int64),
        np.array([r.quantity for r in rows], dtype=float),
        np.array([np.nan if r.defects is None else r.defects for r in rows], dtype=float),
        np.array([np.nan if r.opportunities is None else r.opportunities for r in rows], dtype=float),
        np.array([r.unit for r in rows], dtype=object),
        {name: np.array([c.get(name, "") for c in loaded], dtype=object) for name in cells},
    )


def _natural(text: str) -> tuple[tuple[int, int | str], ...]:
    """Sort key in which numbers inside a text count as numbers."""
    out: list[tuple[int, int | str]] = []
    word = ""
    for digit, run in _runs(text):
        if digit and len(run) < 40:
            out.append((0, int(run)))
        else:
            word = run
            out.append((1, word))
    return tuple(out)


def _runs(text: str) -> Iterator[tuple[bool, str]]:
    start = 0
    for i in range(1, len(text) + 1):
        if i == len(text) or _is_digit(text[i]) != _is_digit(text[start]):
            yield _is_digit(text[start]), text[start:i]
            start = i


def _is_digit(character: str) -> bool:
    return "0" <= character <= "9"


def _ties_by_key(rows: Sequence[Any]) -> list[Any]:
    """Order records of one moment by their key, naturally: files and batches say nothing about it."""
    out = list(rows)
    i = 0
    while i < len(out):
        j = i + 1
        while j < len(out) and out[j].time_us == out[i].time_us:
            j += 1
        if j - i > 1:
            out[i:j] = sorted(out[i:j], key=lambda r: (_natural(r.key), r.key))
        i = j
    return out


def records_version(conn: sa.Connection, source: str) -> int:
    """Return a number that grows with every accepted change of a source's records."""
    return conn.execute(sa.select(s.sources.c.version).where(s.sources.c.source == source)).scalar() or 0


def corrected_since(conn: sa.Connection, source: str, since_us: int) -> list[Record]:
    """Return records of a source that were changed or voided after ``since_us``, newest first, at most 20."""
    t, h = s.records, s.revisions
    ids = conn.execute(
        sa.select(h.c.record_id)
        .join(t, t.c.id == h.c.record_id)
        .where((t.c.source == source) & (h.c.seen_us > since_us))
        .group_by(h.c.record_id)
        .order_by(sa.func.max(h.c.id).desc())
        .limit(20)
    ).scalars()
    return record_by_ids(conn, list(ids))


def revised_between(
    conn: sa.Connection, source: str, since_us: int, until_us: int
) -> Iterator[tuple[Record, Record]]:
    """Every earlier revision that was replaced after ``since_us`` and up to ``until_us``, and its record as it stands."""
    t, h = s.records, s.revisions
    seen = (t.c.source == source) & (h.c.seen_us > since_us) & (h.c.seen_us <= until_us)
    stmt = sa.select(t, h.c.body).join(h, h.c.record_id == t.c.id).where(seen).order_by(h.c.id)
    for row in conn.execute(stmt).mappings():
        yield _record({"revision": 0, **json.loads(row["body"])}, row["id"]), _record(row, row["id"])


def rejects(conn: sa.Connection, source: str | None = None) -> list[Reject]:
    """Set-aside rows that still stand, oldest first."""
    t = s.rejects
    stmt = sa.select(t).where(t.c.cleared_us.is_(None)).order_by(t.c.source, t.c.file, t.c.line, t.c.id)
    if source is not None:
        stmt = stmt.where(t.c.source == source)
    return [
        Reject(r["source"], r["file"], r["line"], r["column"], r["value"], r["reason"], r["at_us"])
        for r in conn.execute(stmt).mappings()
    ]


def rejects_since(
    conn: sa.Connection, source: str, since_us: int | None, most: int
) -> tuple[int, list[Reject]]:
    """Return how many rows of a source were set aside after a moment and still stand, and the first of them."""
    t = s.rejects
    mine = (t.c.source == source) & t.c.cleared_us.is_(None)
    if since_us is not None:
        mine &= t.c.at_us > since_us
    count = conn.execute(sa.select(sa.func.count()).where(mine)).scalar_one()
    if not count:
        return 0, []
    first = sa.select(t).where(mine).order_by(t.c.file, t.c.line, t.c.id).limit(most)
    return count, [
        Reject(r["source"], r["file"], r["line"], r["column"], r["value"], r["reason"], r["at_us"])
        for r in conn.execute(first).mappings()
    ]


def source_state(conn: sa.Connection, now_us: int | None = None) -> dict[str, SourceState]:
    """Standing of every source ever met; a record dated after ``now_us`` is no sign of life."""
    r, x = s.records, s.rejects

    def by_source(stmt: sa.Select[Any]) -> dict[str, int]:
        return {row[0]: row[1] for row in conn.execute(stmt)}

    known = r.c.voided == 0 if now_us is None else (r.c.voided == 0) & (r.c.time_us <= now_us)
    counted = by_source(sa.select(r.c.source, sa.func.count()).group_by(r.c.source))
    newest = by_source(sa.select(r.c.source, sa.func.max(r.c.time_us)).where(known).group_by(r.c.source))
    aside = by_source(
        sa.select(x.c.source, sa.func.count()).where(x.c.cleared_us.is_(None)).group_by(x.c.source)
    )
    out = {}
    for row in conn.execute(sa.select(s.sources)).mappings():
        name = row["source"]
        out[name] = SourceState(
            row["last_contact_us"],
            newest.get(name),
            row["last_file_us"],
            counted.get(name, 0),
            aside.get(name, 0),
            row["error"],
        )
    return out
