"""Alerts and their life: raised, taken, settled, or withdrawn after a correction."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Any

import sqlalchemy as sa

from watcher.store import schema as s
from watcher.store.errors import AlertStateError

__all__ = [
    "FINDINGS", "Alert", "HistoryLine", "alert", "alerts", "history", "note_reminder", "raise_alert", "refresh_alert",
    "settle_alert", "take_alert", "withdraw_alert",
]  # fmt: skip

FINDINGS = ("cause-found", "no-cause", "recording-error", "intended-change")


@dataclass(frozen=True, slots=True)
class Alert:
    """One alert; ``evidence`` is the contract's object without id and state."""

    id: int
    stream: str
    direction: str
    state: str
    raised_us: int
    noticed_us: int
    evidence: dict[str, Any]
    taken_by: str | None
    taken_us: int | None
    settled_by: str | None
    settled_us: int | None
    finding: str | None
    note: str | None
    withdrawn_us: int | None
    withdrawn_why: str | None
    reminded_us: int | None

    @property
    def label(self) -> str:
        """Id as people see it."""
        return f"A-{self.id:06d}"

    @property
    def is_open(self) -> bool:
        """Whether it still waits for a finding."""
        return self.state in {"raised", "taken"}


@dataclass(frozen=True, slots=True)
class HistoryLine:
    """One thing that happened to an alert."""

    at_us: int
    what: str
    by: str | None
    note: str | None
    data: dict[str, Any] | None


def _alert(row: Any) -> Alert:
    body = dict(row)
    body["evidence"] = json.loads(body["evidence"])
    return Alert(**body)


def _dump(value: Any) -> str:
    return json.dumps(value, ensure_ascii=False)


def _note(
    conn: sa.Connection, number: int, at_us: int, what: str, *, by: str | None = None, note: str | None = None, data: Any = None
) -> None:  # fmt: skip
    conn.execute(
        sa.insert(s.alert_history).values(
            alert_id=number,
            at_us=at_us,
            what=what,
            by=by,
            note=note,
            data=None if data is None else _dump(data),
        )
    )


def alerts(conn: sa.Connection, *, open_only: bool = False, stream: str | None = None) -> list[Alert]:
    """Return alerts in the order of their raising."""
    t = s.alerts
    stmt = sa.select(t).order_by(t.c.id)
    if open_only:
        stmt = stmt.where(t.c.state.in_(("raised", "taken")))
    if stream is not None:
        stmt = stmt.where(t.c.stream == stream)
    return [_alert(r) for r in conn.execute(stmt).mappings()]


def alert(conn: sa.Connection, which: int | str) -> Alert:
    """Return one alert by number or label; raises ``AlertStateError`` when there is none."""
    text = str(which).strip().upper().removeprefix("A-")
    if text.isdecimal():
        row = conn.execute(sa.select(s.alerts).where(s.alerts.c.id == int(text))).mappings().first()
        if row is not None:
            return _alert(row)
    raise AlertStateError(f'There is no alert "{which}"; gapbell alerts --all lists them.')


def history(conn: sa.Connection, number: int) -> list[HistoryLine]:
    """Return everything that happened to an alert, oldest first."""
    t = s.alert_history
    rows = conn.execute(sa.select(t).where(t.c.alert_id == number).order_by(t.c.id)).mappings()
    return [
        HistoryLine(r["at_us"], r["what"], r["by"], r["note"], json.loads(r["data"]) if r["data"] else None)
        for r in rows
    ]


def raise_alert(
    conn: sa.Connection, stream: str, direction: str, evidence: dict[str, Any], *, raised_us: int, noticed_us: int
) -> Alert:  # fmt: skip
    """Raise an alert."""
    values = {
        "stream": stream, "direction": direction, "state": "raised", "raised_us": raised_us, "noticed_us": noticed_us,
        "evidence": _dump(evidence),
    }  # fmt: skip
    number = conn.execute(sa.insert(s.alerts).values(**values).returning(s.alerts.c.id)).scalar_one()
    _note(conn, number, noticed_us, "raised", data=evidence)
    return alert(conn, number)


def refresh_alert(
    conn: sa.Connection, number: int, evidence: dict[str, Any], *, raised_us: int, at_us: int, what: str, note: str | None = None
) -> Alert:  # fmt: skip
    """Replace the evidence (``updated``, ``eased`` or ``corrected``); the earlier one stays in the history."""
    conn.execute(
        sa.update(s.alerts)
        .where(s.alerts.c.id == number)
        .values(evidence=_dump(evidence), raised_us=raised_us)
    )
    _note(conn, number, at_us, what, note=note, data=evidence)
    return alert(conn, number)


def _move(conn: sa.Connection, number: int, allowed: set[str], verb: str, **values: Any) -> Alert:
    now = alert(conn, number)
    if now.state not in allowed:
        how = {"settled": f"was settled as {now.finding} by {now.settled_by}", "withdrawn": "was withdrawn"}
        raise AlertStateError(f"{now.label} cannot be {verb}: it {how.get(now.state, f'is {now.state}')}.")
    conn.execute(sa.update(s.alerts).where(s.alerts.c.id == number).values(**values))
    return alert(conn, number)


def take_alert(conn: sa.Connection, number: int, *, by: str, note: str | None, at_us: int) -> Alert:
    """Note that somebody is on it."""
    out = _move(conn, number, {"raised", "taken"}, "taken", state="taken", taken_by=by, taken_us=at_us)
    _note(conn, number, at_us, "taken", by=by, note=note)
    return out


def settle_alert(
    conn: sa.Connection, number: int, *, by: str, finding: str, note: str | None, at_us: int
) -> Alert:
    """Settle it with a finding."""
    out = _move(
        conn, number, {"raised", "taken"}, "settled",
        state="settled", settled_by=by, settled_us=at_us, finding=finding, note=note,
    )  # fmt: skip
    _note(conn, number, at_us, "settled", by=by, note=note, data={"finding": finding})
    return out


def withdraw_alert(conn: sa.Connection, number: int, *, at_us: int, why: str) -> Alert:
    """Withdraw it, since its evidence is gone."""
    out = _move(
        conn,
        number,
        {"raised", "taken"},
        "withdrawn",
        state="withdrawn",
        withdrawn_us=at_us,
        withdrawn_why=why,
    )
    _note(conn, number, at_us, "withdrawn", note=why)
    return out


def note_reminder(conn: sa.Connection, number: int, at_us: int) -> None:
    """Note that it was repeated once."""
    conn.execute(sa.update(s.alerts).where(s.alerts.c.id == number).values(reminded_us=at_us))
    _note(conn, number, at_us, "reminded")
