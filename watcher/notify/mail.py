"""Email: well-behaved automatic mail over an encrypted, verified submission session."""

from __future__ import annotations

import base64
import re
import smtplib
import socket
import ssl
from collections.abc import Sequence
from contextlib import suppress
from email.message import EmailMessage
from email.policy import SMTP as SMTP_POLICY
from email.utils import format_datetime, formataddr
from pathlib import Path

from watcher.config import EmailChannel, SecretMissingError
from watcher.config.values import is_loopback
from watcher.notify.base import Hidden, Message, Outcome, scrub
from watcher.notify.trust import TrustError, tls_context, trusted_file

__all__ = ["MailSender", "build_mail", "mail_id"]

TIMEOUT_S = 30.0
_QUIT_TIMEOUT_S = 3.0
_NOT_AN_ID = re.compile(r"[^A-Za-z0-9.+=_-]")
_NOT_A_LABEL = re.compile(r"[^A-Za-z0-9-]+")
_HOST_NAME = re.compile(r"[A-Za-z0-9-]+(\.[A-Za-z0-9-]+)*")
# 7bit: whoever reads on gets quoted-printable or base64, since not every relay takes eight-bit text
_POLICY = SMTP_POLICY.clone(cte_type="7bit")
# RFC 3463: X.3.4 message too big for the system, X.2.3 longer than allowed
_TOO_BIG = re.compile(r"\b5\.(3\.4|2\.3)\b")
_NEEDS_LOGIN = {530, 534, 535, 538}


class _TooBigError(Exception):
    """The server would take the message if it were smaller; the text is the server's answer."""


def mail_id(message_id: str, recipient: str, sender: str) -> str:
    """Message-ID on the sender's own domain, the same on every try."""
    return f"<{_NOT_AN_ID.sub('-', message_id)}.{_NOT_AN_ID.sub('-', recipient)}@{sender.rpartition('@')[2]}>"


def _one_line(text: str) -> str:
    return " ".join("".join(c if c.isprintable() else " " for c in text).split())


def _list_id(plant: str, recipient: str, sender: str) -> str:
    """RFC 2919: a phrase for people, then a name like a domain for filters."""
    label = _NOT_A_LABEL.sub("-", recipient).strip("-").lower() or "all"
    phrase = re.sub(r'["\\<>]', " ", _one_line(f"{plant}, {recipient}"))
    return f'"{phrase}" <{label}.gapbell.{sender.rpartition("@")[2]}>'


def build_mail(message: Message, *, plant: str, sender: str, to: Sequence[str]) -> EmailMessage:
    """Make the mail: text first and sufficient, HTML with its pictures inline."""
    mail = EmailMessage(policy=_POLICY)
    mail["From"] = formataddr((_one_line(f"gapbell, {plant}"), sender))
    mail["To"] = ", ".join(to)
    mail["Subject"] = _one_line(message.subject)
    mail["Date"] = format_datetime(message.created)
    mail["Message-ID"] = mail_id(message.message_id, message.recipient, sender)
    if message.thread is not None and message.thread != message.message_id:
        root = mail_id(message.thread, message.recipient, sender)
        mail["In-Reply-To"] = root
        mail["References"] = root
    mail["Auto-Submitted"] = "auto-generated"
    mail["List-Id"] = _list_id(plant, message.recipient, sender)
    mail["Gapbell-Kind"] = message.kind
    if message.alert_label:
        mail["Gapbell-Alert"] = message.alert_label
    mail.set_content(message.text)
    if message.html is None:
        return mail
    mail.add_alternative(message.html, subtype="html")
    page = mail.get_payload()[1]  # type: ignore[index]  # typed for every kind of message
    assert isinstance(page, EmailMessage)
    for cid, png in message.images.items():
        page.add_related(png, "image", "png", cid=f"<{cid}>", disposition="inline", filename=f"{cid}.png")
    return mail


class MailSender:
    """One submission session, opened when first needed and kept for a pass."""

    def __init__(
        self, channel: EmailChannel, *, plant: str, folder: Path, timeout_s: float = TIMEOUT_S
    ) -> None:
        self._channel = channel
        self._plant = plant
        self._folder = folder
        self._timeout_s = timeout_s
        self._session: smtplib.SMTP | None = None
        self._hidden = Hidden()

    def send(self, message: Message, to: Sequence[str], *, shown_to: Sequence[str] | None = None) -> Outcome:
        """Send; at once again without pictures when the server finds the mail too big."""
        if not to:
            return Outcome("refused", "The message has no address to go to.")
        try:
            return self._submit(self._bytes(message, shown_to or to), to)
        except _TooBigError as first:
            if not message.images:
                return Outcome("refused", f"{first}", refused=tuple(to))
        except ValueError as error:  # an address or text that no mail can carry
            return Outcome(
                "refused",
                f"The message cannot be written as a mail ({type(error).__name__}).",
                refused=tuple(to),
            )
        try:
            outcome = self._submit(self._bytes(message.without_pictures(), shown_to or to), to)
        except _TooBigError as second:
            return Outcome("refused", f"{second} (also without pictures)", refused=tuple(to))
        return Outcome(
            outcome.kind, f"{outcome.detail} (without pictures)", outcome.accepted, outcome.refused,
            channel_wide=outcome.channel_wide,
        )  # fmt: skip

    def probe(self) -> Outcome:
        """Connect and log in, send nothing."""
        session = self._open()
        if isinstance(session, Outcome):
            return session
        self.close()
        return Outcome("sent", f"{self._channel.host} accepts us.")

    def close(self) -> None:
        """End the session."""
        session, self._session = self._session, None
        if session is None:
            return
        with suppress(OSError, smtplib.SMTPException, ValueError):
            if session.sock is not None:
                session.sock.settimeout(_QUIT_TIMEOUT_S)
            session.quit()
        session.close()

    def _bytes(self, message: Message, shown_to: Sequence[str]) -> bytes:
        mail = build_mail(message, plant=self._plant, sender=self._channel.sender, to=shown_to)
        return mail.as_bytes()

    def _drop(self) -> None:
        session, self._session = self._session, None
        if session is not None:
            session.close()

    def _later(self, why: str, *, channel_wide: bool = False, refused: tuple[str, ...] = ()) -> Outcome:
        return Outcome("later", why, refused=refused, channel_wide=channel_wide)

    def _paused(self, why: str) -> Outcome:
        self._drop()
        return Outcome("paused", why, channel_wide=True)

    def _reply(self, code: int, reply: bytes | str) -> str:
        return f"{code} {scrub(reply, self._hidden)}".strip()

    # ------------------------------------------------------------------ opening a session

    def _open(self) -> smtplib.SMTP | Outcome:
        """Return a session that may send, or why there is none."""
        if self._session is not None:
            return self._session
        c = self._channel
        try:
            password = c.password.reveal() if c.password else None
        except (SecretMissingError, UnicodeError) as error:
            reason = (
                str(error) if isinstance(error, SecretMissingError) else "The password is not UTF-8 text."
            )
            return self._paused(reason)
        self._hidden = Hidden.of(password, user=c.username)
        if password is not None and c.security == "none" and not is_loopback(c.host):
            return self._paused(f"A login to {c.host} without TLS would show the password; nothing was sent.")
        try:
            context = tls_context(
                trusted_file(c.ca_file, self._folder, "SSL_CERT_FILE", "REQUESTS_CA_BUNDLE")
            )
        except TrustError as error:
            return self._paused(str(error))
        try:
            self._session = self._connect(context)
            closed = self._encrypt(self._session, context) or self._log_in(self._session, password)
        except ssl.SSLCertVerificationError as error:
            return self._paused(f"The certificate of {c.host} is not trusted: {error.verify_message}.")
        except smtplib.SMTPResponseException as error:
            self._drop()
            what = f"{c.host} answered {self._reply(error.smtp_code, error.smtp_error)}."
            return self._later(what, channel_wide=True)
        except (OSError, smtplib.SMTPException, ValueError) as error:
            self._drop()
            said = scrub(str(error), self._hidden) or type(error).__name__
            return self._later(f"{c.host} port {c.port} cannot be reached: {said}.", channel_wide=True)
        return closed or self._session

    def _context(self) -> ssl.SSLContext:
        c = self._channel
        return tls_context(trusted_file(c.ca_file, self._folder, "SSL_CERT_FILE", "REQUESTS_CA_BUNDLE"))

    def _connect(self, context: ssl.SSLContext | None) -> smtplib.SMTP:
        c = self._channel
        name = socket.gethostname()  # without asking a name server, which smtplib would
        name = name if _HOST_NAME.fullmatch(name) else "[127.0.0.1]"
        session: smtplib.SMTP
        if c.security == "tls":
            session = smtplib.SMTP_SSL(c.host, c.port, name, timeout=self._timeout_s, context=context)
        else:
            session = smtplib.SMTP(c.host, c.port, name, timeout=self._timeout_s)
        try:
            session.ehlo_or_helo_if_needed()
        except BaseException:
            session.close()
            raise
        return session

    def _encrypt(self, session: smtplib.SMTP, context: ssl.SSLContext | None) -> Outcome | None:
        c = self._channel
        if c.security != "starttls":
            return None
        if not session.has_extn("starttls"):
            return self._paused(f"{c.host} offers no STARTTLS; nothing is sent in clear text.")
        try:
            session.starttls(context=context)
        except smtplib.SMTPResponseException as error:
            if error.smtp_code >= 500:
                answer = self._reply(error.smtp_code, error.smtp_error)
                return self._paused(f"{c.host} refused STARTTLS: {answer}; nothing is sent in clear text.")
            raise
        session.ehlo()
        return None

    def _log_in(self, session: smtplib.SMTP, password: str | None) -> Outcome | None:
        c = self._channel
        if c.username is None or password is None:
            return None
        try:
            if f"{c.username}{password}".isascii():
                session.login(c.username, password)
            else:
                self._log_in_beyond_ascii(session, c.username, password)
        except smtplib.SMTPAuthenticationError as error:
            answer = self._reply(error.smtp_code, error.smtp_error)
            if 400 <= error.smtp_code < 500:  # such as 454: the server cannot look it up just now
                self._drop()
                return self._later(f"{c.host} put off the login: {answer}.", channel_wide=True)
            return self._paused(f"{c.host} refused the login of {c.username}: {answer}.")
        except smtplib.SMTPNotSupportedError:
            return self._paused(f"{c.host} offers no way to log in.")
        except smtplib.SMTPResponseException:
            raise
        except smtplib.SMTPServerDisconnected:
            raise
        except smtplib.SMTPException:  # what smtplib says when no mechanism is known to both sides
            return self._paused(f"{c.host} offers no way to log in that is known here.")
        return None

    def _log_in_beyond_ascii(self, session: smtplib.SMTP, username: str, password: str) -> None:
        """AUTH PLAIN in UTF-8 (RFC 4616); the standard library knows ASCII only."""
        if "PLAIN" not in session.esmtp_features.get("auth", "").upper().split():
            raise smtplib.SMTPNotSupportedError
        proof = base64.b64encode(f"\0{username}\0{password}".encode()).decode("ascii")
        code, reply = session.docmd("AUTH", f"PLAIN {proof}")
        if code != 235:
            raise smtplib.SMTPAuthenticationError(code, reply)

    # ------------------------------------------------------------------ one message

    def _submit(self, raw: bytes, to: Sequence[str]) -> Outcome:
        """Hand over one mail; a kept session that went stale is opened anew, once."""
        kept = self._session is not None
        session = self._open()
        if isinstance(session, Outcome):
            return session
        outcome = self._envelope(session, raw, to)
        if outcome is None and kept:
            session = self._open()
            if isinstance(session, Outcome):
                return session
            outcome = self._envelope(session, raw, to)
        return outcome or self._later(f"The line to {self._channel.host} broke before anything was sent.")

    def _envelope(self, session: smtplib.SMTP, raw: bytes, to: Sequence[str]) -> Outcome | None:
        """MAIL, RCPT for each address, DATA; None when the line is dead at the very start."""
        c = self._channel
        size = [f"size={len(raw)}"] if session.has_extn("size") else []
        try:
            code, reply = session.mail(c.sender, size)
        except (OSError, smtplib.SMTPServerDisconnected):
            self._drop()
            return None
        answer = self._reply(code, reply)
        if code == 421:
            self._drop()
            return self._later(f"{c.host} put it off: {answer}.", channel_wide=True)
        if code in _NEEDS_LOGIN:
            return self._paused(f"{c.host} wants another login: {answer}.")
        if code == 552 or (code >= 500 and _TOO_BIG.search(answer)):
            self._reset()
            raise _TooBigError(f"The mail is too big for {c.host}: {answer}.")
        if not 200 <= code < 300:
            self._reset()
            if code >= 500:
                return Outcome(
                    "refused", f"{c.host} refused the sender {c.sender}: {answer}.", refused=tuple(to)
                )
            return self._later(f"{c.host} put it off: {answer}.")
        return self._recipients(session, raw, to)

    def _recipients(self, session: smtplib.SMTP, raw: bytes, to: Sequence[str]) -> Outcome:
        """Judge every address on its own."""
        c = self._channel
        good: list[str] = []
        never: list[str] = []
        said: list[str] = []
        for address in to:
            try:
                code, reply = session.rcpt(address)
            except (OSError, smtplib.SMTPServerDisconnected) as error:
                self._drop()
                return self._later(f"The line to {c.host} broke at {address} ({type(error).__name__}).")
            answer = self._reply(code, reply)
            if code == 421:
                self._drop()
                return self._later(f"{c.host} put it off: {answer}.", channel_wide=True)
            if code in _NEEDS_LOGIN:
                return self._paused(f"{c.host} wants another login: {answer}.")
            if 200 <= code < 300:
                good.append(address)
                continue
            said.append(f"{address}: {answer}")
            # RFC 5321 4.5.3.1.10: 552 to RCPT means too many at once, to be treated like 452
            if code >= 500 and code != 552:
                never.append(address)
        told = "; ".join(said)
        if not good:
            self._reset()
            if len(never) == len(to):
                return Outcome("refused", told, refused=tuple(never))
            return self._later(told, refused=tuple(never))
        return self._content(session, raw, to, tuple(good), tuple(never), told)

    def _content(
        self, session: smtplib.SMTP, raw: bytes, to: Sequence[str], good: tuple[str, ...], never: tuple[str, ...], told: str
    ) -> Outcome:  # fmt: skip
        c = self._channel
        try:
            code, reply = session.data(raw)
        except smtplib.SMTPDataError as error:  # the answer to DATA itself, before any content
            code, reply = error.smtp_code, error.smtp_error  # type: ignore[assignment]  # typed as text or bytes
        except (OSError, smtplib.SMTPServerDisconnected) as error:
            self._drop()
            return self._later(
                f"The line to {c.host} broke ({type(error).__name__}); the mail may have arrived, a repeat carries the same id.",
                refused=never,
            )
        answer = self._reply(code, reply)
        if 200 <= code < 300:
            if not told:
                return Outcome("sent", answer, good)
            some_wait = len(good) + len(never) < len(to)
            return Outcome("partly" if some_wait else "sent", f"accepted, but for {told}", good, never)
        if code == 421:
            self._drop()
            return self._later(f"{c.host} put it off: {answer}.", channel_wide=True, refused=never)
        self._reset()
        if code == 552 or (code >= 500 and _TOO_BIG.search(answer)):
            raise _TooBigError(f"The mail is too big for {c.host}: {answer}.")
        if code in _NEEDS_LOGIN:
            return self._paused(f"{c.host} wants another login: {answer}.")
        if code >= 500:
            return Outcome("refused", f"{c.host} refused it: {answer}.", refused=tuple(to))
        return self._later(f"{c.host} put it off: {answer}.", refused=never)

    def _reset(self) -> None:
        try:
            if self._session is not None:
                self._session.rset()
        except (OSError, smtplib.SMTPException):
            self._drop()
