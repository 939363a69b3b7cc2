"""The trial: the invented yard's three years, run through the real cycle at simulated times."""

from __future__ import annotations

import logging
import os
import shutil
import tempfile
from collections.abc import Callable
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

__all__ = ["run"]

_MARK = ".gapbell-trial"
_FULL_LOOK_FROM = datetime(2025, 1, 6)  # noqa: DTZ001 - given the yard's zone below
"""Until then the past is taken in at once, as at an installation; from then on week by week."""


def run(out: Path | None, tell: Callable[[str], None]) -> int:
    """Run it; leaves mails, chat bodies, digest and pictures in ``out``. Returns the exit status."""
    try:
        from watcher.trial.servers import chat_endpoint, mail_server, make_certificate
    except ImportError:
        tell('The trial needs its local mail server: install "gapbell[trial]".')
        return 1
    logging.getLogger("mail.log").setLevel(logging.CRITICAL)
    folder = _fresh(out, tell)
    if folder is None:
        return 1
    mails, chats = folder / "mails", folder / "chat"
    for sub in (mails, chats, folder / "pictures"):
        sub.mkdir(parents=True)
    secrets = {
        "GAPBELL_TRIAL_PASSWORD": "only-for-this-trial",
        "GAPBELL_TRIAL_SECRET": "whsec_b25seS1mb3ItdGhpcy10cmlhbC0wMTIzNDU2Nzg5",
    }
    before = {k: os.environ.get(k) for k in secrets}
    os.environ.update(secrets)
    try:
        certificate = make_certificate(folder)
        with (
            mail_server(
                mails, certificate, username="gapbell", password=secrets["GAPBELL_TRIAL_PASSWORD"]
            ) as port,
            chat_endpoint(chats) as hook,
        ):
            return _story(folder, port, hook, tell)
    finally:
        for key, value in before.items():
            if value is None:
                os.environ.pop(key, None)
            else:
                os.environ[key] = value


def _fresh(out: Path | None, tell: Callable[[str], None]) -> Path | None:
    """Make the folder; one that an earlier trial left is emptied, any other non-empty one is left alone."""
    if out is None:
        return Path(tempfile.mkdtemp(prefix="gapbell-trial-"))
    if out.exists() and any(out.iterdir()):
        if not (out / _MARK).exists():
            tell(f'The folder "{out}" is not empty and holds no earlier trial; choose another.')
            return None
        shutil.rmtree(out)
    out.mkdir(parents=True, exist_ok=True)
    (out / _MARK).touch()
    return out.resolve()


def _story(folder: Path, port: int, hook: str, tell: Callable[[str], None]) -> int:
    from watcher.commands import real_clock
    from watcher.config import load_config
    from watcher.cycle import run_cycle
    from watcher.digesting import send_digest
    from watcher.leasing import holding
    from watcher.store import Store
    from watcher.trial.plant import ZONE, configuration, drops

    path = folder / "plant.toml"
    path.write_text(configuration(smtp_port=port, hook=hook, ca_file="local-ca.pem"), encoding="utf-8")
    config = load_config(path)
    files = drops()
    tell(
        f"Skerry Point Works, an invented yard: {len(files)} files over three years, {len(config.streams)} streams,"
    )
    tell(f"{config.alerting.false_alerts_per_year:g} false alert a year promised for all of them together.\n")
    start = _FULL_LOOK_FROM.replace(tzinfo=ZONE)
    moments = [start + timedelta(weeks=k, hours=7) for k in range(51)]
    done = 0
    known: dict[str, str] = {}
    with Store.open(config.store_url) as store:
        for number, now in enumerate(moments):
            while done < len(files) and files[done].delivered <= now:
                _leave(folder, files[done])
                done += 1
            if number == 0:
                tell(f"{now:%d %B %Y}: two years of records are taken in and baselines learnt …")
            _act(config, store, now, tell)
            with holding(store, real_clock):
                report = run_cycle(config, store, now=now, clock=real_clock)
                if number >= len(moments) - 4:
                    send_digest(config, store, now=now)
            _tell_changes(config, store, report, known, now, tell)
        with holding(store, real_clock):
            run_cycle(config, store, now=moments[-1] + timedelta(minutes=15), clock=real_clock)
    return _close(config, folder, moments[-1], tell)


def _leave(folder: Path, drop: Any) -> None:
    """Write a file as its station would, dated when it was delivered."""
    target = folder / drop.path
    target.parent.mkdir(parents=True, exist_ok=True)
    target.write_bytes(drop.text.encode("utf-8"))
    os.utime(target, (drop.delivered.timestamp(), drop.delivered.timestamp()))


def _tell_changes(
    config: Any, store: Any, report: Any, known: dict[str, str], now: datetime, tell: Callable[[str], None]
) -> None:  # fmt: skip
    from watcher.store.alerts import alert

    for label in report.changes.raised:
        with store.reading() as conn:
            found = alert(conn, label)
        tell(f"{now:%d %B %Y}: {label} raised, {found.direction}. {found.evidence['summary']}")
    for label in report.changes.updated:
        tell(f"{now:%d %B %Y}: {label} has more evidence; an update is sent.")
    for name, standing in report.streams.items():
        if standing == "silent" and known.get(name) != "silent":
            tell(
                f"{now:%d %B %Y}: {config.streams[name].title}: the feed is silent. The maintainers are told; the quiet counts for nothing."
            )
    known.update(report.streams)
    if not report.is_fine:
        tell(
            f"{now:%d %B %Y}: something was left undone: {[s.error for s in report.sources if s.error]} {report.broken}"
        )


def _act(config: Any, store: Any, now: datetime, tell: Callable[[str], None]) -> None:
    """People at the yard: an alert is taken a week after it was raised; the brakes' improvement is confirmed."""
    from watcher import showing
    from watcher.sending import enqueue_alert
    from watcher.store import alerts as al
    from watcher.store.standings import all_standings

    week_us, now_us = 6 * 86_400_000_000, round(now.timestamp() * 1e6)
    with store.writing() as conn:
        for a in al.alerts(conn, open_only=True):
            if a.state == "raised" and now_us - a.noticed_us >= week_us:
                al.take_alert(conn, a.id, by="R. Fjell", note="looking into it", at_us=now_us)
                tell(f"{now:%d %B %Y}: {a.label} taken by R. Fjell.")
            elif (
                a.state == "taken"
                and a.stream == "brake-slip"
                and now_us - (a.taken_us or now_us) >= 4 * week_us
            ):
                done = al.settle_alert(
                    conn,
                    a.id,
                    by="R. Fjell",
                    finding="intended-change",
                    note="new lining since January",
                    at_us=now_us,
                )
                view = showing.stream_view(config, a.stream, all_standings(conn)[a.stream].data)
                enqueue_alert(
                    conn,
                    config,
                    done,
                    showing.alert_view(view, done),
                    kind="settled",
                    suffix="settled",
                    now=now,
                )
                tell(
                    f"{now:%d %B %Y}: {a.label} settled as an intended change; a new baseline starts at the shift."
                )


def _close(config: Any, folder: Path, now: datetime, tell: Callable[[str], None]) -> int:
    from email import message_from_bytes, policy

    from watcher import commands

    found = commands.status(config, now=now)
    tell(f"\nThe yard on {now:%d %B %Y}:")
    for s in found["streams"]:
        extra = f", {s['alert']} open" if s["alert"] else ""
        tell(f"  {s['title']}: {s['standing']}{extra} ({s['events']} events)")
    spring = next(s for s in found["streams"] if s["stream"] == "spring-break")
    tell(
        f"  (Broken springs were one, none and three in three years: {spring['standing']}, rightly no alarm.)"
    )
    commands.write_digest(config, now=now, out=folder, send=False)
    mails = sorted((folder / "mails").glob("*.eml"))
    for mail in mails:
        for part in message_from_bytes(mail.read_bytes(), policy=policy.default).walk():
            if part.get_content_type() == "image/png" and "digest" not in mail.name:
                name = f"{mail.stem}-{part.get_filename()}"
                (folder / "pictures" / name).write_bytes(part.get_payload(decode=True))  # type: ignore[arg-type]
    chats = list((folder / "chat").glob("*.json"))
    (folder / "local-key.pem").unlink()
    tell(f"\n{len(mails)} mails and {len(chats)} chat messages were received; they are in {folder}")
    tell("with digest.html, digest.txt and pictures/. Nothing left this machine.")
    good = {"seal-leak": "worse", "spring-break": "steady", "paint-blister": "silent", "bore-score": "steady"}
    wrong = [
        n
        for n, want in good.items()
        if next(s["standing"] for s in found["streams"] if s["stream"] == n) != want
    ]
    waiting = sum(c["waiting"] + c["failed"] for c in found["channels"])
    if wrong or waiting:
        tell(f"This is not as it should be: {', '.join(wrong)} {waiting} undelivered.")
        return 1
    return 0
