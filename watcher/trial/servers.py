"""A real mail server and a real chat endpoint on this machine, which keep what they receive."""

from __future__ import annotations

import json
import logging
import re
import ssl
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime, timedelta
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from ipaddress import ip_address
from pathlib import Path
from typing import Any

from aiosmtpd.controller import Controller
from aiosmtpd.smtp import AuthResult, Envelope, Session
from cryptography import x509
from cryptography.hazmat.primitives import hashes, serialization
from cryptography.hazmat.primitives.asymmetric import ec
from cryptography.x509.oid import NameOID

__all__ = ["chat_endpoint", "mail_server", "make_certificate"]


def make_certificate(folder: Path) -> tuple[Path, Path]:
    """Make a short-lived certificate for localhost; returns certificate and key files."""
    key = ec.generate_private_key(ec.SECP256R1())
    name = x509.Name([x509.NameAttribute(NameOID.COMMON_NAME, "localhost")])
    now = datetime.now(UTC)
    certificate = (
        x509.CertificateBuilder()
        .subject_name(name)
        .issuer_name(name)
        .public_key(key.public_key())
        .serial_number(x509.random_serial_number())
        .not_valid_before(now - timedelta(days=1))
        .not_valid_after(now + timedelta(days=7))
        .add_extension(
            x509.SubjectAlternativeName([x509.DNSName("localhost"), x509.IPAddress(ip_address("127.0.0.1"))]),
            critical=False,
        )
        .add_extension(x509.BasicConstraints(ca=True, path_length=None), critical=True)
        .add_extension(x509.SubjectKeyIdentifier.from_public_key(key.public_key()), critical=False)
        .sign(key, hashes.SHA256())
    )
    cert_file, key_file = folder / "local-ca.pem", folder / "local-key.pem"
    cert_file.write_bytes(certificate.public_bytes(serialization.Encoding.PEM))
    key_file.touch(mode=0o600)
    key_file.write_bytes(
        key.private_bytes(
            serialization.Encoding.PEM, serialization.PrivateFormat.PKCS8, serialization.NoEncryption()
        )
    )
    return cert_file, key_file


# what the sender wrote becomes part of a file's name
_NOT_IN_A_NAME = re.compile(r"[^A-Za-z0-9+_-]")


class _Keeper:
    """Keeps each received mail as a file, in order; those of an earlier run are not overwritten."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        self._count = len(list(folder.glob("*.eml")))

    async def handle_DATA(self, _server: Any, _session: Session, envelope: Envelope) -> str:  # noqa: N802 - aiosmtpd's name
        from email import message_from_bytes

        self._count += 1
        content = envelope.content if isinstance(envelope.content, bytes) else str(envelope.content).encode()
        kind = message_from_bytes(content).get("Gapbell-Kind", "mail")
        label = message_from_bytes(content).get("Gapbell-Alert", "")
        parts = (f"{self._count:03d}", kind, label, envelope.rcpt_tos[0].partition("@")[0])
        name = "-".join(_NOT_IN_A_NAME.sub("_", str(p)) for p in parts if p)
        (self._folder / f"{name}.eml").write_bytes(content)
        return "250 kept"


class _Controller(Controller):
    """Takes a free port; the library itself cannot."""

    def _trigger_server(self) -> None:
        server: Any = self.server
        self.port = server.sockets[0].getsockname()[1]
        super()._trigger_server()  # type: ignore[no-untyped-call]  # aiosmtpd has no types


@contextmanager
def mail_server(
    folder: Path, certificate: tuple[Path, Path], *, username: str, password: str
) -> Iterator[int]:
    """Run an SMTP server that wants STARTTLS and a login; gives its port."""
    context = ssl.SSLContext(ssl.PROTOCOL_TLS_SERVER)
    context.load_cert_chain(*certificate)

    def authenticate(_server: Any, _session: Any, _envelope: Any, _mechanism: str, data: Any) -> AuthResult:
        good = (data.login, data.password) == (username.encode(), password.encode())
        return AuthResult(success=good, handled=good)

    controller = _Controller(
        _Keeper(folder), hostname="127.0.0.1", port=0, tls_context=context, require_starttls=True, authenticator=authenticate,
        auth_required=True, auth_require_tls=True,
    )  # fmt: skip
    log = logging.getLogger("mail.log")  # where aiosmtpd tells of every client that hangs up
    level = log.level
    log.setLevel(logging.CRITICAL)
    controller.start()
    try:
        yield controller.port
    finally:
        controller.stop()
        log.setLevel(level)


@contextmanager
def chat_endpoint(folder: Path) -> Iterator[str]:
    """Run an HTTP endpoint that keeps each request; gives its address."""
    count = len(list(folder.glob("*.json")))

    class Handler(BaseHTTPRequestHandler):
        def do_POST(self) -> None:
            nonlocal count
            count += 1
            body = self.rfile.read(int(self.headers.get("Content-Length", 0)))
            kept = {"headers": {k.lower(): v for k, v in self.headers.items()}, "body": json.loads(body)}
            (folder / f"{count:03d}.json").write_text(
                json.dumps(kept, ensure_ascii=False, indent=1), encoding="utf-8"
            )
            self.send_response(204)
            self.end_headers()

        def log_message(self, *_: Any) -> None:
            """Stay quiet."""

    server = ThreadingHTTPServer(("127.0.0.1", 0), Handler)
    thread = threading.Thread(target=server.serve_forever, kwargs={"poll_interval": 0.05}, daemon=True)
    thread.start()
    try:
        yield f"http://127.0.0.1:{server.server_address[1]}/room"
    finally:
        server.shutdown()
        server.server_close()
        thread.join()
