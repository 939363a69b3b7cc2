"""Servers that misbehave on command: mail servers that answer as told at each step, and endpoints that do so for each request."""

from __future__ import annotations

import socket
import ssl
import threading
from collections.abc import Callable, Iterator, Mapping
from contextlib import AbstractContextManager, contextmanager, suppress
from dataclasses import dataclass, field
from datetime import UTC, datetime
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path
from typing import Any

import pytest

from watcher.config import EmailChannel, WebhookChannel
from watcher.notify.base import Message
from watcher.notify.mail import MailSender
from watcher.notify.webhook import WebhookSender
from watcher.trial.servers import make_certificate

NOW = datetime(2026, 3, 4, 10, 15, tzinfo=UTC)
PNG = b"\x89PNG\r\n\x1a\n" + bytes(range(256))

# None hangs up; a function gets the argument (address, or the whole content) and the number of the connection
Answer = str | None | Callable[[str, int], str | None]


@dataclass
class Desk:
    """A mail server as seen by a test: what it was told, and what it took in."""

    port: int = 0
    heard: list[str] = field(default_factory=list)
    taken: list[str] = field(default_factory=list)
    lines: int = 0


def _usual(**changes: Answer) -> dict[str, Answer]:
    return {
        "greeting": "220 desk", "EHLO": "250-desk\r\n250 SIZE 9999999", "HELO": "250 desk", "MAIL": "250 2.1.0 ok", "RCPT": "250 2.1.5 ok",
        "DATA": "354 go", "content": "250 2.0.0 kept", "RSET": "250 ok", "NOOP": "250 ok", "QUIT": "221 bye", "AUTH": "235 ok",
        "STARTTLS": "220 go",
    } | changes  # fmt: skip


class _Talk:
    """One connection."""

    def __init__(
        self, desk: Desk, answers: Mapping[str, Answer], tls: ssl.SSLContext | None, at_once: bool
    ) -> None:
        self.desk, self.answers, self.tls, self.at_once = desk, answers, tls, at_once

    def run(self, line: socket.socket, number: int) -> None:
        if self.tls is not None and self.at_once:
            line = self.tls.wrap_socket(line, server_side=True)
        file = line.makefile("rb")
        try:
            if not self.say(line, "greeting", "", number):
                return
            while words := file.readline():
                verb, _, rest = words.decode("latin-1").rstrip("\r\n").partition(" ")
                verb = verb.upper()
                text = f"{verb} {rest}".rstrip()
                self.desk.heard.append(text)
                if not self.say(line, verb, text, number):
                    return
                if verb == "STARTTLS" and self.tls is not None:
                    file.close()
                    line = self.tls.wrap_socket(line, server_side=True)
                    file = line.makefile("rb")
                elif verb == "DATA" and self.last.startswith("354"):
                    content = ""
                    while (more := file.readline()) not in {b".\r\n", b""}:
                        content += more.decode("latin-1")
                    if not self.say(line, "content", content, number):
                        return
                    if self.last.startswith("250"):
                        self.desk.taken.append(content)
                elif verb == "QUIT":
                    return
        except OSError:  # a client that hangs up, or does not like our certificate
            return
        finally:
            with suppress(OSError):
                file.close()
                line.shutdown(socket.SHUT_RDWR)
            line.close()

    def say(self, line: socket.socket, step: str, argument: str, number: int) -> bool:
        answer = self.answers.get(step, "500 unknown")
        if callable(answer):
            answer = answer(argument, number)
        self.last = answer or ""
        if answer is None:
            return False
        line.sendall(answer.encode("latin-1") + b"\r\n")
        return True


@contextmanager
def _desk(tls: ssl.SSLContext | None = None, at_once: bool = False, **changes: Answer) -> Iterator[Desk]:
    answers = _usual(**changes)
    listener = socket.create_server(("127.0.0.1", 0))
    desk = Desk(listener.getsockname()[1])
    threads: list[threading.Thread] = []
    opened: list[socket.socket] = []

    def serve() -> None:
        while True:
            try:
                line, _ = listener.accept()
            except OSError:
                return
            desk.lines += 1
            opened.append(line.dup())
            talk = threading.Thread(target=_Talk(desk, answers, tls, at_once).run, args=(line, desk.lines))
            threads.append(talk)
            talk.start()

    main = threading.Thread(target=serve)
    main.start()
    try:
        yield desk
    finally:
        listener.shutdown(socket.SHUT_RDWR)
        listener.close()
        main.join(5)
        for line in opened:  # of clients that keep theirs open
            with suppress(OSError):
                line.shutdown(socket.SHUT_RDWR)
            line.close()
        for thread in threads:
            thread.join(5)


@dataclass
class Hook:
    """An endpoint as seen by a test: its address and the requests it got."""

    url: str
    got: list[tuple[str, dict[str, str], bytes]] = field(default_factory=list)


@contextmanager
def _hook(
    answer: Callable[[int], tuple[int, Mapping[str, str], bytes] | None],
    tls: ssl.SSLContext | None = None,
    path: str = "/hook",
) -> Iterator[Hook]:
    hook = Hook("")

    class Handler(BaseHTTPRequestHandler):
        def do_POST(self) -> None:
            body = self.rfile.read(int(self.headers["Content-Length"]))
            hook.got.append((self.path, {k.lower(): v for k, v in self.headers.items()}, body))
            said = answer(len(hook.got))
            if said is None:
                self.close_connection = True
                self.connection.shutdown(socket.SHUT_RDWR)
                return
            status, headers, text = said
            self.send_response(status)
            for key, value in {"Content-Length": str(len(text)), **headers}.items():
                self.send_header(key, value)
            self.end_headers()
            self.wfile.write(text)

        def log_message(self, *_: object) -> None:
            pass

    class Server(ThreadingHTTPServer):
        def handle_error(self, *_: object) -> None:
            """A client that hangs up is part of the test."""

    server = Server(("127.0.0.1", 0), Handler)
    if tls is not None:
        server.socket = tls.wrap_socket(server.socket, server_side=True, do_handshake_on_connect=False)
    hook.url = f"{'https' if tls else 'http'}://localhost:{server.server_address[1]}{path}"
    thread = threading.Thread(target=server.serve_forever, kwargs={"poll_interval": 0.01})
    thread.start()
    try:
        yield hook
    finally:
        server.shutdown()
        server.server_close()
        thread.join()


@pytest.fixture(scope="session")
def certificate(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path]:
    """A certificate for localhost that only these tests trust, with its key."""
    return make_certificate(tmp_path_factory.mktemp("tls"))


@pytest.fixture
def server_tls(certificate: tuple[Path, Path]) -> ssl.SSLContext:
    context = ssl.SSLContext(ssl.PROTOCOL_TLS_SERVER)
    context.load_cert_chain(*certificate)
    return context


@pytest.fixture
def desk() -> Callable[..., AbstractContextManager[Desk]]:
    """Start a mail server that answers as told: ``desk(RCPT="550 no")``."""
    return _desk


@pytest.fixture
def hook() -> Callable[..., AbstractContextManager[Hook]]:
    """Start an endpoint that answers as told: ``hook(lambda n: (503, {}, b""))``."""
    return _hook


@pytest.fixture
def message() -> Callable[..., Message]:
    """Make a message; every part can be changed."""

    def make(**changes: Any) -> Message:
        values: dict[str, Any] = {
            "message_id": "a-000012.raised", "kind": "alert", "subject": "Worse: seal leaks", "text": "Seal leaks come more often.\n",
            "html": '<html><body><p>Seal leaks</p><img src="cid:staircase" alt="Staircase of leaks"></body></html>',
            "event_type": "gapbell.alert.raised", "created": NOW, "recipient": "quality", "images": {"staircase": PNG},
            "thread": "a-000012.raised", "alert_label": "A-000012", "data": {"id": "A-000012", "stream": "seal-leak"}, "short": None,
        }  # fmt: skip
        return Message(**(values | changes))

    return make


@pytest.fixture
def mailer() -> Iterator[Callable[..., MailSender]]:
    """Make a sender of mail; on this machine without TLS unless told otherwise."""
    made: list[MailSender] = []

    def make(port: int, *, timeout_s: float = 5.0, **changes: Any) -> MailSender:
        values = {
            "kind": "email", "host": "127.0.0.1", "port": port, "security": "none", "sender": "gapbell@plant.example",
        } | changes  # fmt: skip
        channel = EmailChannel.model_validate(values)
        made.append(
            MailSender(channel, plant="Skerry Point Works", folder=Path("/nowhere"), timeout_s=timeout_s)
        )
        return made[-1]

    yield make
    for sender in made:
        sender.close()


@pytest.fixture
def poster() -> Iterator[Callable[..., WebhookSender]]:
    """Make a sender of requests."""
    made: list[WebhookSender] = []

    def make(url: Any, *, timeout_s: float = 5.0, **changes: Any) -> WebhookSender:
        channel = WebhookChannel.model_validate({"kind": "webhook", "url": url} | changes)
        made.append(
            WebhookSender(
                channel,
                plant="Skerry Point Works",
                folder=Path("/nowhere"),
                clock=lambda: NOW,
                timeout_s=timeout_s,
            )
        )
        return made[-1]

    yield make
    for sender in made:
        sender.close()
