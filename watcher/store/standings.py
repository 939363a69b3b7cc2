"""The last known standing of each stream, and every baseline it ever had."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Any

import sqlalchemy as sa

from watcher.store import schema as s

__all__ = ["BaselineLine", "Standing", "all_standings", "baselines", "note_baseline", "note_standing"]


@dataclass(frozen=True, slots=True)
class Standing:
    """A stream's standing with what ``status`` shows; ``inputs`` tells whether it must be assessed again."""

    stream: str
    standing: str
    data: dict[str, Any]
    inputs: str
    assessed_us: int


@dataclass(frozen=True, slots=True)
class BaselineLine:
    """One baseline that was in use."""

    data: dict[str, Any]
    at_us: int
    by: str
    why: str


def all_standings(conn: sa.Connection) -> dict[str, Standing]:
    """Return the standing of every stream ever assessed."""
    rows = conn.execute(sa.select(s.standings)).mappings()
    return {
        r["stream"]: Standing(
            r["stream"], r["standing"], json.loads(r["data"]), r["inputs"], r["assessed_us"]
        )
        for r in rows
    }


def note_standing(
    conn: sa.Connection, stream: str, standing: str, data: dict[str, Any], *, inputs: str, at_us: int
) -> None:  # fmt: skip
    """Replace a stream's standing."""
    conn.execute(sa.delete(s.standings).where(s.standings.c.stream == stream))
    values = {
        "stream": stream,
        "standing": standing,
        "data": json.dumps(data),
        "inputs": inputs,
        "assessed_us": at_us,
    }
    conn.execute(sa.insert(s.standings).values(**values))


def baselines(conn: sa.Connection, stream: str) -> list[BaselineLine]:
    """Return every baseline a stream had, oldest first."""
    rows = conn.execute(
        sa.select(s.baselines).where(s.baselines.c.stream == stream).order_by(s.baselines.c.id)
    ).mappings()
    return [BaselineLine(json.loads(r["data"]), r["at_us"], r["by"], r["why"]) for r in rows]


def note_baseline(
    conn: sa.Connection, stream: str, figures: dict[str, Any], *, at_us: int, by: str, why: str
) -> None:
    """Append a baseline unless it is the same as the latest."""
    latest = conn.execute(
        sa.select(s.baselines.c.data)
        .where(s.baselines.c.stream == stream)
        .order_by(s.baselines.c.id.desc())
        .limit(1)
    ).scalar()
    text = json.dumps(figures, sort_keys=True)
    if latest != text:
        conn.execute(sa.insert(s.baselines).values(stream=stream, data=text, at_us=at_us, by=by, why=why))
