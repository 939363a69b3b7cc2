"""The commands as functions: each does its work and returns what is to be shown."""

from __future__ import annotations

from collections.abc import Callable
from contextlib import nullcontext
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from watcher import showing
from watcher.building import is_one_of
from watcher.config import Config
from watcher.leasing import active, holding, standbys
from watcher.sending import enqueue_alert
from watcher.store import Store
from watcher.store import alerts as al
from watcher.store.outbox import last_pass
from watcher.store.records import records, rejects
from watcher.store.standings import all_standings, baselines
from watcher.streams import iso

__all__ = [
    "alert_json", "check", "cycle", "list_alerts", "list_baselines", "list_records", "list_rejects", "present", "real_clock", "settle",
    "show_alert", "status", "take", "write_digest",
]  # fmt: skip

Clock = Callable[[], datetime]
_BRIEFLY_S, _PATIENTLY_S = 2.0, 60.0
"""How long a pass waits for somebody who is writing, and how long a person does."""


def real_clock() -> datetime:
    """Return the one place where the commands read the clock."""
    return datetime.now(UTC)


def _us(moment: datetime) -> int:
    return round(moment.timestamp() * 1e6)


def present(config: Config, clock: Clock = real_clock) -> datetime:
    """Return now, or the moment of the last pass where that was made with ``--at``: a rehearsed yard lives in its own time."""
    with Store.open(config.store_url) as store, store.reading() as conn:
        last = last_pass(conn)
    if last is not None and last[1]:
        return datetime.fromtimestamp(last[0] / 1e6, config.zone)
    return clock().astimezone(config.zone)


def alert_json(alert: al.Alert, config: Config) -> dict[str, Any]:
    """Return the contract's ALERT object."""
    zone = config.zone
    return {
        "id": alert.label, "state": alert.state, **alert.evidence, "noticed_at": iso(alert.noticed_us, zone), "taken_by": alert.taken_by,
        "taken_at": iso(alert.taken_us, zone), "settled_by": alert.settled_by, "settled_at": iso(alert.settled_us, zone),
        "finding": alert.finding, "note": alert.note, "withdrawn_at": iso(alert.withdrawn_us, zone),
        "withdrawn_why": alert.withdrawn_why,
    }  # fmt: skip


def cycle(config: Config, *, now: datetime, clock: Clock = real_clock) -> Any:
    """Make one pass under the lease; returns its report."""
    from watcher.cycle import run_cycle

    with Store.open(config.store_url) as store, holding(store, clock, alone=True, wait_s=_BRIEFLY_S):
        return run_cycle(config, store, now=now, clock=clock)


def list_alerts(config: Config, *, everything: bool) -> dict[str, Any]:
    """Return open (or all) alerts."""
    with Store.open(config.store_url) as store, store.reading() as conn:
        found = al.alerts(conn, open_only=not everything)
    return {"alerts": [alert_json(a, config) for a in found]}


def show_alert(config: Config, which: str) -> dict[str, Any]:
    """Return one alert with its history, deliveries, records and how the stream stands now."""
    from watcher.store.outbox import deliveries

    zone = config.zone
    with Store.open(config.store_url) as store, store.reading() as conn:
        alert = al.alert(conn, which)
        lines = al.history(conn, alert.id)
        sent = deliveries(conn, alert.id)
        standing = all_standings(conn).get(alert.stream)
        keys = {tuple(sorted(k.items())) for k in alert.evidence["records"]}
        source = config.streams[alert.stream].source if alert.stream in config.streams else None
        found = [r for r in records(conn, source) if tuple(sorted(r.key.items())) in keys] if source else []
    return {
        **alert_json(alert, config),
        "history": [{"at": iso(h.at_us, zone), "what": h.what, "by": h.by, "note": h.note} for h in lines],
        "deliveries": [
            {"at": iso(d.at_us, zone), "channel": d.channel, "recipient": d.recipient, "outcome": d.outcome, "detail": d.detail}
            for d in sent
        ],
        "record_details": [r.as_json(zone) for r in found],
        "now": standing.data if standing else None,
        "how": _formulas(alert.evidence),
    }  # fmt: skip


_HOW = {
    "gap-limit": "gap-limit: P(gap <= g) with g/(g+T) ~ beta(1, m) (rate stated: exponential); alert where it falls to that of the limit.",
    "open-gap": "open-gap: the open gap against P(gap > g) = (1+g/T)^-m (rate stated: exponential).",
    "gap-sum": "gap-sum: exposure s over the last three gaps; s/(s+T) ~ beta(3, m).",
    "median-run": "median-run: gaps or counts in a row on one side of the median; k in a row are 2^(k+1)-2 points apart by chance.",
    "near-limit-pair": "near-limit-pair: two of three gaps (or counts) beyond a warning limit of probability q on one side; 1/(2q²) points apart by chance.",
    "count-limit": "count-limit: the count of one record against the predictive negative binomial with m and T for its own exposure.",
}


def _formulas(e: dict[str, Any]) -> list[str]:
    """Say how to redo the figures by hand."""
    base, since = e["baseline"], e["since"]
    out = []
    if base["events"] is None:
        out.append(f"Baseline: stated rate λ = {base['rate']:.6g} per {e['exposure_unit']}.")
        out.append(
            f"Rate since: n/E = {since['events']}/{since['exposure']:.6g}; uncorrected ratio n/(λE), Garwood's exact Poisson interval."
        )
        form = "W = n ln δ − (δ−1) λ E"
    else:
        out.append(
            f"Baseline: m = {base['events']:g} events in T = {base['exposure']:.6g}; rate m/T, interval from chi-square with 2m degrees of freedom over 2T."
        )
        out.append(
            f"Rate since: n/E = {since['events']}/{since['exposure']:.6g}; uncorrected ratio (n/E)/(m/T),"
            " exact conditional interval (Clopper-Pearson: n of n+m with odds ρE/T)."
        )  # fmt: skip
        form = "W = n ln δ − (n+m) ln((T+δE)/(T+E))"
    out.append(
        f"cusum: {form} over the member's own stretch, which starts anew whenever W falls to 0; alert at W ≥ limit."
    )
    if base.get("dispersion", 1.0) > 1.0:
        out.append(
            f"Over-dispersed: W, m, n, T and E are all divided by the index of dispersion φ = {base['dispersion']:.3g}."
        )
    elif base.get("dispersion", 1.0) < 1.0:
        out.append(
            f"Gaps of whole units are geometric: W, m, n, T and E are all divided by φ = 1 - p = {base['dispersion']:.4g}."
        )
    out += [_HOW[rule] for rule in dict.fromkeys(r["rule"] for r in e["rules"]) if rule in _HOW]
    out.append(
        "Corrected ratio and start: posterior of one change point over the stretch since the baseline (start uniform, ratio ρ from"
        " 0.85 to 30 or the inverses with density falling as ρ^-0.7 on the log scale), median and central 95 % (start 97.5 %)."
    )  # fmt: skip
    out.append(
        "Recurrence interval: the yearly budget at which the calibrated limit would equal the strongest rule's level."
    )
    return out


def take(
    config: Config, which: str, *, by: str, note: str | None, now: datetime, clock: Clock = real_clock
) -> al.Alert:
    """Take an alert."""
    with (
        Store.open(config.store_url) as store,
        holding(store, clock, wait_s=_PATIENTLY_S),
        store.writing() as conn,
    ):
        known = al.alert(conn, which)
        return al.take_alert(conn, known.id, by=by, note=note, at_us=max(_us(now), known.noticed_us))


def settle(
    config: Config,
    which: str,
    *,
    by: str,
    finding: str,
    note: str | None,
    now: datetime,
    clock: Clock = real_clock,
) -> al.Alert:
    """Settle an alert, and tell those who had it."""
    with (
        Store.open(config.store_url) as store,
        holding(store, clock, wait_s=_PATIENTLY_S),
        store.writing() as conn,
    ):
        known = al.alert(conn, which)
        at_us = max(_us(now), known.noticed_us)  # nothing can be settled before it was noticed
        done = al.settle_alert(conn, known.id, by=by, finding=finding, note=note, at_us=at_us)
        if done.stream in config.streams:
            standing = all_standings(conn).get(done.stream)
            view = showing.stream_view(config, done.stream, standing.data if standing else {})
            enqueue_alert(
                conn, config, done, showing.alert_view(view, done), kind="settled", suffix="settled", now=now
            )
        return done


def status(config: Config, *, now: datetime, clock: Clock = real_clock) -> dict[str, Any]:
    """Return the standing of everything."""
    from watcher.digesting import channel_rows, source_rows

    with Store.open(config.store_url) as store:
        with store.reading() as conn:
            standings = all_standings(conn)
            waiting, last = standbys(conn, _us(clock())), last_pass(conn)
            still_open = {a.stream: a.label for a in al.alerts(conn, open_only=True)}
        alive = active(store, clock) or {}
        sources, channels = source_rows(config, store, now), channel_rows(config, store)
    stale = {s["source"] for s in sources if s["stale"]}
    streams = []
    for name, stream in config.streams.items():
        known = standings.get(name)
        if known is None:
            data = showing.unknown_json(name, stream)
            data["advice"] = [{"code": "too-few", "text": "Not assessed yet; run gapbell cycle."}]
        else:
            data = dict(known.data)
        data["alert"] = still_open.get(name)
        if stream.source in stale:
            data["standing"] = "silent"
        streams.append(data)
    return {
        "at": now.astimezone(config.zone).isoformat(timespec="seconds"), "plant": config.plant.name,
        "watcher": {"active": bool(alive), **{k: alive.get(k) for k in ("host", "pid", "since")},
                    "last_pass": iso(last[0], config.zone) if last else None, "standby": waiting},
        "streams": streams, "sources": sources, "channels": channels, "later": config.later,
    }  # fmt: skip


def list_records(config: Config, *, source: str | None, stream: str | None, history: bool) -> dict[str, Any]:
    """Return every record as understood."""
    wanted = config.streams[stream].source if stream is not None else source
    with Store.open(config.store_url) as store, store.reading() as conn:
        found = [r.as_json(config.zone) for r in records(conn, wanted, history=history)]
    if stream is not None:
        where = config.streams[stream].where
        found = [r for r in found if all(is_one_of(r["attributes"].get(c, ""), v) for c, v in where.items())]
    return {"records": found}


def list_rejects(config: Config, *, source: str | None) -> dict[str, Any]:
    """Return set-aside rows with their reasons."""
    with Store.open(config.store_url) as store, store.reading() as conn:
        found = rejects(conn, source)
    return {
        "rejects": [
            {
                "source": r.source, "file": r.file, "line": r.line, "column": r.column, "value": r.value, "reason": r.reason,
                "at": iso(r.at_us, config.zone),
            }
            for r in found
        ]
    }  # fmt: skip


def list_baselines(config: Config, stream: str) -> dict[str, Any]:
    """Return every baseline that a stream had."""
    with Store.open(config.store_url) as store, store.reading() as conn:
        found = baselines(conn, stream)
    return {
        "stream": stream,
        "baselines": [
            {**b.data, "noted_at": iso(b.at_us, config.zone), "by": b.by, "why": b.why} for b in found
        ],
    }


def write_digest(
    config: Config, *, now: datetime, out: Path | None, send: bool, clock: Clock = real_clock
) -> dict[str, Any]:
    """Compose the digest; write it as files, or put it out for sending, or return its text."""
    from watcher.digesting import digest_view, send_digest
    from watcher.notify.deliver import deliver_due
    from watcher.notify.digest import digest_message, digest_page
    from watcher.notify.mail import build_mail

    answer: dict[str, Any] = {
        "at": now.astimezone(config.zone).isoformat(timespec="seconds"),
        "sent": None,
        "files": [],
    }
    with (
        Store.open(config.store_url) as store,
        holding(store, clock, wait_s=_PATIENTLY_S) if send else nullcontext(),
    ):
        plant = showing.plant_view(config)
        view = digest_view(config, store, now=now)
        message = digest_message(plant, view, recipient="digest", message_id="digest-preview", now=now)
        answer["subject"], answer["text"] = message.subject, message.text
        if out is not None:
            out.mkdir(parents=True, exist_ok=True)
            sender = next(
                (c.sender for c in config.channels.values() if c.kind == "email"), "gapbell@localhost"
            )
            mail = build_mail(message, plant=plant.name, sender=sender, to=(sender,))
            files = {
                "digest.txt": message.text.encode(), "digest.eml": mail.as_bytes(), "digest.html": digest_page(plant, view).encode(),
            }  # fmt: skip
            for name, content in files.items():
                (out / name).write_bytes(content)
                answer["files"].append(str(out / name))
        if send:
            answer["sent"] = send_digest(config, store, now=now)
            done = deliver_due(config, store, now=now, clock=clock)
            answer["delivered"], answer["waiting"] = done.delivered, done.waiting
    return answer


def check(config: Config, *, now: datetime, send_test: bool, clock: Clock = real_clock) -> dict[str, Any]:
    """Reach every source and channel, and show the first rows as understood."""
    from connectors import open_source
    from connectors.base import ConnectorError
    from watcher.notify.compose import feed_notice
    from watcher.notify.deliver import sender_for

    sources, channels, problems = [], [], []
    for name, source in config.sources.items():
        row: dict[str, Any] = {
            "source": name,
            "files": 0,
            "file": None,
            "columns": [],
            "rows": [],
            "set_aside": [],
            "error": None,
        }
        try:
            if source.kind != "csv-drop":
                raise ConnectorError(f'Kind "{source.kind}" is not yet available in this version.')
            seen = open_source(config.source_settings(name)).preview(now)
            row |= {"files": seen.files, "file": seen.file, "columns": list(seen.columns)}
            row["rows"] = [
                {
                    "line": r.line, "key": dict(r.key), "time": r.time.astimezone(config.zone).isoformat(), "unit": r.unit,
                    "quantity": r.quantity, "defects": r.defects, "opportunities": r.opportunities, "attributes": dict(r.cells),
                    "voided": r.voided,
                }
                for r in seen.understood
            ]  # fmt: skip
            row["set_aside"] = [
                {"line": a.line, "column": a.column, "value": a.value, "reason": a.reason}
                for a in seen.set_aside
            ]
            if seen.files and seen.file and not seen.understood and seen.set_aside:
                problems.append(f"Source {name}: no row of {seen.file} could be understood.")
        except ConnectorError as error:
            row["error"] = str(error)
            problems.append(f"Source {name}: {error}")
        sources.append(row)
    plant = showing.plant_view(config)
    for name in config.channels:
        sender = sender_for(config, name, clock)
        if sender is None:
            channels.append(
                {"channel": name, "outcome": "refused", "detail": "This kind is not yet available."}
            )
            continue
        try:
            outcome = sender.probe()
            if send_test and outcome.kind == "sent":
                to = tuple(
                    a for r in config.recipients.values() for s in r.send if s.channel == name for a in s.to
                )
                test = feed_notice(
                    plant, subject="Test from gapbell", lines=["This is a test; nothing is to be done."], recipient="test",
                    message_id=f"test-{now:%Y%m%dT%H%M%S}", now=now,
                )  # fmt: skip
                outcome = sender.send(test, tuple(dict.fromkeys(to)))
        finally:
            sender.close()
        channels.append({"channel": name, "outcome": outcome.kind, "detail": outcome.detail})
        if outcome.kind != "sent":
            problems.append(f"Channel {name}: {outcome.detail}")
    if send_test:
        from watcher.store.outbox import resume_channel

        with Store.open(config.store_url) as store, store.writing() as conn:
            for row in channels:
                if row["outcome"] == "sent":
                    resume_channel(conn, str(row["channel"]))
    return {
        "config": str(config.path.name), "streams": len(config.streams), "sources": sources, "channels": channels,
        "problems": problems, "later": config.later, "notes": _notes(config),
    }  # fmt: skip


def _notes(config: Config) -> list[str]:
    """What is allowed but worth knowing."""
    from watcher.building import is_event_only

    out = []
    for name, stream in config.streams.items():
        if is_event_only(config, stream) and config.sources[stream.source].proof_of_life is None:
            out.append(
                f"Stream {name}: its source holds failures only and has no proof_of_life, so a quiet stretch is never counted and no"
                ' improvement can be seen; "file" or "reachable" would tell that the feed is alive.'
            )
    out += [f"Source {n}: without key the whole row is its identity; corrections cannot be told from new records."
            for n, s in config.sources.items() if not s.key]  # fmt: skip
    return out
