"""Mail and webhooks against real servers on this machine, well-behaved and not."""

from __future__ import annotations

import json
import random
import socket
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime, timedelta
from email import message_from_bytes, policy
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path

import pytest

from watcher.config import EmailChannel, WebhookChannel, load_config
from watcher.notify.base import Message
from watcher.notify.deliver import deliver_due
from watcher.notify.mail import MailSender
from watcher.notify.signing import sign
from watcher.notify.webhook import WebhookSender
from watcher.store import Store
from watcher.store.outbox import OutMessage, channel_state, due, enqueue
from watcher.trial.servers import chat_endpoint, mail_server, make_certificate

NOW = datetime(2026, 3, 4, 10, 15, tzinfo=UTC)
PNG = b"\x89PNG\r\n\x1a\n" + bytes(200)
TO = ("qa@plant.example", "lead@plant.example")
pytestmark = pytest.mark.filterwarnings("ignore:Session.login_data is deprecated")


def message(**changes) -> Message:
    values = {
        "message_id": "a-000012.raised", "kind": "alert", "subject": "Worse: Lekkasjer i prøve\r\nBcc: x@y", "text": "Tekst æøå.\n",
        "html": '<body><p>Tekst</p><img src="cid:staircase" alt="Staircase of leaks"></body>', "event_type": "gapbell.alert.raised",
        "created": NOW, "recipient": "quality", "images": {"staircase": PNG}, "thread": "a-000012.raised", "alert_label": "A-000012",
        "data": {"id": "A-000012"}, "short": "Kort",
    } | changes  # fmt: skip
    return Message(**values)


@pytest.fixture(scope="module")
def certificate(tmp_path_factory) -> tuple[Path, Path]:
    return make_certificate(tmp_path_factory.mktemp("tls"))


@pytest.fixture
def mailbox(tmp_path, certificate, monkeypatch) -> Iterator[tuple[Path, int]]:
    monkeypatch.setenv("PW", "geheim-42")
    (tmp_path / "mails").mkdir()
    with mail_server(tmp_path / "mails", certificate, username="gapbell", password="geheim-42") as port:
        yield tmp_path / "mails", port


def sender(port, certificate, **changes) -> MailSender:
    values = {
        "kind": "email", "host": "localhost", "port": port, "username": "gapbell", "password": {"env": "PW"},
        "sender": "gapbell@plant.example", "ca_file": certificate[0],
    } | changes  # fmt: skip
    return MailSender(EmailChannel.model_validate(values), plant="Skerry Point Works", folder=Path())


@contextmanager
def smtp_that_says(*replies: bytes) -> Iterator[int]:
    """A server of one line each: greets, then gives these replies in order and hangs up after the last."""
    listener = socket.create_server(("127.0.0.1", 0))

    def serve() -> None:
        for _ in range(4):
            try:
                line, _peer = listener.accept()
            except OSError:
                return
            with line, line.makefile("rb") as file:
                heard = True
                for reply in replies:
                    if not heard and not file.readline():
                        break
                    line.sendall(reply)
                    heard = reply.startswith(b"354")
                    if heard:
                        while (got := file.readline()) not in {b".\r\n", b""}:
                            del got

    thread = threading.Thread(target=serve, daemon=True)
    thread.start()
    try:
        yield listener.getsockname()[1]
    finally:
        listener.close()


def test_a_mail_arrives_whole_over_starttls_and_login(mailbox, certificate):
    folder, port = mailbox
    mailer = sender(port, certificate)
    outcome = mailer.send(message(), TO)
    mailer.close()
    assert (outcome.kind, outcome.accepted) == ("sent", TO)
    (file,) = folder.glob("*.eml")
    mail = message_from_bytes(file.read_bytes(), policy=policy.default)
    # RFC 5322, 3834, 2919, 2387 as listed in the design's table of mail headers
    assert mail["Message-ID"].endswith("@plant.example>")
    assert mail["Auto-Submitted"] == "auto-generated"
    assert mail["Gapbell-Alert"] == "A-000012"
    assert mail["Gapbell-Kind"] == "alert"
    assert mail["List-Id"]
    assert mail["Bcc"] is None
    assert mail["Date"].datetime == NOW
    kinds = [p.get_content_type() for p in mail.walk()]
    assert kinds == ["multipart/alternative", "text/plain", "multipart/related", "text/html", "image/png"]
    picture = list(mail.walk())[-1]
    assert picture.get_payload(decode=True) == PNG
    assert picture["Content-ID"] == "<staircase>"
    assert max(len(line) for line in file.read_bytes().split(b"\n")) <= 998


def test_an_update_hangs_on_the_first_mail_and_a_repeat_has_the_same_id(mailbox, certificate):
    folder, port = mailbox
    mailer = sender(port, certificate)
    for m in (message(), message(message_id="a-000012.update-1", kind="update"), message()):
        mailer.send(m, TO[:1])
    mailer.close()
    first, update, again = (
        message_from_bytes(f.read_bytes(), policy=policy.default) for f in sorted(folder.glob("*.eml"))
    )
    assert update["In-Reply-To"] == update["References"] == first["Message-ID"] == again["Message-ID"]
    assert update["Message-ID"] != first["Message-ID"]


def test_a_wrong_password_an_untrusted_certificate_and_no_starttls_pause_the_channel(
    mailbox, certificate, monkeypatch, tmp_path
):
    _, port = mailbox
    other = make_certificate(tmp_path)
    assert sender(port, other).send(message(), TO).kind == "paused"
    with smtp_that_says(b"220 x\r\n", b"250 x\r\n", b"221 x\r\n") as plain:
        assert "STARTTLS" in sender(plain, certificate, host="127.0.0.1").send(message(), TO).detail
    monkeypatch.setenv("PW", "falsch-99")
    outcome = sender(port, certificate).send(message(), TO)
    assert outcome.kind == "paused"
    assert "falsch-99" not in repr(outcome)
    monkeypatch.delenv("PW")
    assert sender(port, certificate).send(message(), TO).kind == "paused"


OPEN = {"security": "none", "username": None, "password": None, "host": "127.0.0.1"}


@pytest.mark.parametrize(
    ("replies", "kind", "accepted", "refused"),
    [
        ((b"421 busy\r\n",), "later", (), ()),
        (
            (b"220 x\r\n", b"250 x\r\n", b"250 ok\r\n", b"451 grey\r\n", b"451 grey\r\n", b"250 ok\r\n"),
            "later",
            (),
            (),
        ),
        (
            (
                b"220 x\r\n",
                b"250 x\r\n",
                b"250 ok\r\n",
                b"250 ok\r\n",
                b"550 no\r\n",
                b"354 go\r\n",
                b"250 ok\r\n",
            ),
            "sent",
            TO[:1],
            TO[1:],
        ),
        (
            (
                b"220 x\r\n",
                b"250 x\r\n",
                b"250 ok\r\n",
                b"250 ok\r\n",
                b"450 no\r\n",
                b"354 go\r\n",
                b"250 ok\r\n",
            ),
            "partly",
            TO[:1],
            (),
        ),
        (
            (
                b"220 x\r\n",
                b"250 x\r\n",
                b"250 ok\r\n",
                b"250 ok\r\n",
                b"250 ok\r\n",
                b"354 go\r\n",
                b"554 spam\r\n",
                b"250 ok\r\n",
            ),
            "refused",
            (),
            TO,
        ),
        (
            (b"220 x\r\n", b"250 x\r\n", b"250 ok\r\n", b"250 ok\r\n", b"250 ok\r\n", b"354 go\r\n"),
            "later",
            (),
            (),
        ),
    ],
    ids=[
        "421 greeting",
        "both put off",
        "one refused",
        "one put off",
        "554 after data",
        "line dropped after data",
    ],
)
def test_each_phase_of_refusal_is_judged_on_its_own(certificate, replies, kind, accepted, refused):
    with smtp_that_says(*replies) as port:
        mailer = sender(port, certificate, **OPEN)
        outcome = mailer.send(message(), TO)
        mailer.close()
    assert (outcome.kind, outcome.accepted, outcome.refused) == (kind, accepted, refused), outcome.detail


@contextmanager
def hook_that_answers(
    *answers: tuple[int, dict[str, str]],
) -> Iterator[tuple[str, list[tuple[dict[str, str], bytes]]]]:
    got: list[tuple[dict[str, str], bytes]] = []
    queue = list(answers)

    class Handler(BaseHTTPRequestHandler):
        def do_POST(self) -> None:
            got.append(
                (
                    {k.lower(): v for k, v in self.headers.items()},
                    self.rfile.read(int(self.headers["Content-Length"])),
                )
            )
            status, headers = queue.pop(0) if len(queue) > 1 else queue[0]
            self.send_response(status)
            for key, value in headers.items():
                self.send_header(key, value)
            self.end_headers()

        def log_message(self, *_args: object) -> None:
            pass

    server = ThreadingHTTPServer(("127.0.0.1", 0), Handler)
    thread = threading.Thread(target=server.serve_forever)
    thread.start()
    try:
        yield f"http://127.0.0.1:{server.server_address[1]}/hook", got
    finally:
        server.shutdown()
        server.server_close()
        thread.join()


def hook(url: str, **changes) -> WebhookSender:
    channel = WebhookChannel.model_validate({"kind": "webhook", "url": url} | changes)
    return WebhookSender(channel, plant="Skerry Point Works", folder=Path(), clock=lambda: NOW)


def test_a_webhook_gets_text_or_a_signed_cloud_event(monkeypatch):
    """CloudEvents 1.0 structured mode; Standard Webhooks 1.0."""
    monkeypatch.setenv("HOOK_SECRET", "whsec_MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw")
    with hook_that_answers((204, {})) as (url, got):
        assert hook(url).send(message(), ()).kind == "sent"
        assert hook(url, body="cloudevents", secret={"env": "HOOK_SECRET"}).send(message(), ()).kind == "sent"
    assert json.loads(got[0][1]) == {"text": "Kort"}
    headers, body = got[1]
    event = json.loads(body)
    assert headers["content-type"] == "application/cloudevents+json"
    assert (event["specversion"], event["type"], event["id"]) == (
        "1.0",
        "gapbell.alert.raised",
        "a-000012.raised",
    )
    assert event["source"] == "/plants/Skerry%20Point%20Works"
    assert event["data"]["id"] == "A-000012"
    again = sign(
        "whsec_MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw",
        headers["webhook-id"],
        int(headers["webhook-timestamp"]),
        body,
    )
    assert headers["webhook-signature"] == again["webhook-signature"]


@pytest.mark.parametrize(
    ("status", "headers", "kind", "wait"),
    [(200, {}, "sent", None), (429, {"Retry-After": "90"}, "later", 90.0), (503, {"Retry-After": "Wed, 04 Mar 2026 10:16:00 GMT"}, "later", 60.0),
     (500, {}, "later", None), (302, {"Location": "http://127.0.0.1:1/"}, "refused", None), (410, {}, "refused", None),
     (400, {}, "refused", None)],
)  # fmt: skip
def test_each_answer_of_a_webhook_has_its_consequence(status, headers, kind, wait):
    with hook_that_answers((status, headers)) as (url, got):
        outcome = hook(url).send(message(), ())
    assert (outcome.kind, outcome.retry_after) == (kind, wait)
    assert len(got) == 1


PLANT = """
[plant]
name = "Skerry Point Works"
timezone = "UTC"
[channels.floor]
kind = "webhook"
url = "{url}"
[channels.dead]
kind = "webhook"
url = "http://127.0.0.1:1/x"
[recipients.q]
send = [{{ channel = "floor" }}, {{ channel = "dead" }}]
[sources.s]
kind = "csv-drop"
folder = "drops"
columns = {{ time = "t" }}
[streams.x]
title = "X"
source = "s"
exposure = "days"
"""


def test_what_failed_waits_longer_each_time_and_is_given_up_after_five_days(tmp_path):
    with hook_that_answers((500, {}), (204, {})) as (url, got):
        (tmp_path / "plant.toml").write_text(PLANT.format(url=url))
        config = load_config(tmp_path / "plant.toml")
        with Store.open(config.store_url) as store:
            for channel in ("floor", "dead"):
                with store.writing() as conn:
                    out = OutMessage(
                        "m-1", "alert", None, None, "q", channel, (), None, message().to_payload()
                    )
                    assert enqueue(conn, out, at_us=round(NOW.timestamp() * 1e6))
                    assert not enqueue(conn, out, at_us=round(NOW.timestamp() * 1e6))
            at, waits = NOW, []
            deliver_due(config, store, now=at, clock=lambda: NOW, rng=random.Random(1))
            for _ in range(200):
                with store.reading() as conn:
                    state = channel_state(conn)
                    step = next(
                        m
                        for m in (1, 2, 4, 8, 20, 40, 80)
                        if due(conn, round((at + timedelta(minutes=m)).timestamp() * 1e6)) or m == 80
                    )
                if not state["dead"].waiting:
                    break
                waits.append(step)
                at += timedelta(minutes=step)
                deliver_due(config, store, now=at, clock=lambda: NOW, rng=random.Random(1))
            with store.reading() as conn:
                state = channel_state(conn)
    assert len(got) == 2
    assert (state["floor"].waiting, state["floor"].failed) == (0, 0)
    assert (state["dead"].waiting, state["dead"].failed) == (0, 1)
    assert timedelta(days=5) <= at - NOW <= timedelta(days=5, hours=3)
    assert waits[0] <= 2 < waits[-1]


def test_a_message_late_by_an_hour_says_so_and_the_chat_endpoint_keeps_it(tmp_path):
    (tmp_path / "chat").mkdir()
    with chat_endpoint(tmp_path / "chat") as url:
        (tmp_path / "plant.toml").write_text(PLANT.format(url=url))
        config = load_config(tmp_path / "plant.toml")
        with Store.open(config.store_url) as store:
            with store.writing() as conn:
                enqueue(
                    conn,
                    OutMessage("m-1", "alert", None, None, "q", "floor", (), None, message().to_payload()),
                    at_us=1,
                )
            done = deliver_due(config, store, now=NOW + timedelta(hours=3), clock=lambda: NOW)
    assert done.delivered == 1
    (kept,) = (tmp_path / "chat").glob("*.json")
    assert "3 hours" in json.loads(kept.read_text())["body"]["text"]
