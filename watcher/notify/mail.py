"""Email: well-behaved automatic mail over an encrypted, verified submission session."""

from __future__ import annotations

import os
import re
import smtplib
import ssl
from collections.abc import Sequence
from email.message import EmailMessage
from email.policy import SMTP as SMTP_POLICY
from email.utils import format_datetime, formataddr
from pathlib import Path

from watcher.config import EmailChannel, SecretMissingError
from watcher.notify.base import Message, Outcome

__all__ = ["MailSender", "build_mail", "mail_id"]

TIMEOUT_S = 30.0
_NOT_AN_ID = re.compile(r"[^A-Za-z0-9.+=_-]")


def mail_id(message_id: str, recipient: str, sender: str) -> str:
    """Message-ID on the sender's own domain, the same on every try."""
    return f"<{_NOT_AN_ID.sub('-', message_id)}.{_NOT_AN_ID.sub('-', recipient)}@{sender.rpartition('@')[2]}>"


def _one_line(text: str) -> str:
    return " ".join("".join(c if c.isprintable() else " " for c in text).split())


def build_mail(message: Message, *, plant: str, sender: str, to: tuple[str, ...]) -> EmailMessage:
    """Make the mail: text first and sufficient, HTML with its pictures inline."""
    mail = EmailMessage(policy=SMTP_POLICY)
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
    mail["List-Id"] = (
        f"{_one_line(plant)} {message.recipient} <{_NOT_AN_ID.sub('-', message.recipient)}.gapbell.{sender.rpartition('@')[2]}>"
    )
    mail["Gapbell-Kind"] = message.kind
    if message.alert_label:
        mail["Gapbell-Alert"] = message.alert_label
    mail.set_content(message.text)
    if message.html is None:
        return mail
    mail.add_alternative(message.html, subtype="html")
    page = mail.get_payload()[1]  # type: ignore[index]
    assert isinstance(page, EmailMessage)
    for cid, png in message.images.items():
        page.add_related(png, "image", "png", cid=f"<{cid}>", disposition="inline", filename=f"{cid}.png")
    return mail


def _text(reply: object) -> str:
    text = reply.decode("utf-8", "replace") if isinstance(reply, bytes) else str(reply)
    return _one_line(text)[:200]


class MailSender:
    """One submission session, opened when first needed and kept for a pass."""

    def __init__(self, channel: EmailChannel, *, plant: str, folder: Path) -> None:
        self._channel = channel
        self._plant = plant
        self._folder = folder
        self._session: smtplib.SMTP | None = None

    def _context(self) -> ssl.SSLContext:
        context = ssl.create_default_context()
        if self._channel.ca_file is not None:
            context.load_verify_locations(self._folder / self._channel.ca_file)
        elif os.environ.get("SSL_CERT_FILE"):
            context.load_verify_locations(os.environ["SSL_CERT_FILE"])
        context.minimum_version = ssl.TLSVersion.TLSv1_2
        return context

    def _open(self) -> smtplib.SMTP | Outcome:
        """Return a session that may send, or why there is none."""
        if self._session is not None:
            return self._session
        opened: list[smtplib.SMTP] = []
        result = self._log_in(opened)
        if isinstance(result, Outcome):
            for session in opened:
                session.close()
            return result
        self._session = result
        return result

    def _log_in(self, opened: list[smtplib.SMTP]) -> smtplib.SMTP | Outcome:
        c = self._channel
        try:
            password = c.password.reveal() if c.password else None
            session: smtplib.SMTP
            if c.security == "tls":
                session = smtplib.SMTP_SSL(c.host, c.port, timeout=TIMEOUT_S, context=self._context())
            else:
                session = smtplib.SMTP(c.host, c.port, timeout=TIMEOUT_S)
            opened.append(session)
            session.ehlo_or_helo_if_needed()
            if c.security == "starttls":
                if not session.has_extn("starttls"):
                    return Outcome("paused", f"{c.host} offers no STARTTLS; nothing is sent in clear text.")
                session.starttls(context=self._context())
                session.ehlo()
            if c.username is not None and password is not None:
                session.login(c.username, password)
        except SecretMissingError as error:
            return Outcome("paused", str(error))
        except ssl.SSLCertVerificationError as error:
            return Outcome("paused", f"The certificate of {c.host} is not trusted: {error.verify_message}.")
        except smtplib.SMTPAuthenticationError as error:
            if 400 <= error.smtp_code < 500:
                return Outcome("later", f"{c.host} put off the login: {error.smtp_code}.")
            return Outcome("paused", f"{c.host} refused the login of {c.username} ({error.smtp_code}).")
        except smtplib.SMTPNotSupportedError:
            return Outcome("paused", f"{c.host} offers no login.")
        except smtplib.SMTPResponseException as error:
            return Outcome("later", f"{c.host} answered {error.smtp_code} {_text(error.smtp_error)}.")
        except (OSError, smtplib.SMTPException) as error:
            return Outcome("later", f"{c.host} port {c.port} cannot be reached: {_text(error)}.")
        return session

    def _drop(self) -> None:
        session, self._session = self._session, None
        if session is not None:
            session.close()

    def close(self) -> None:
        """End the session."""
        session, self._session = self._session, None
        if session is not None:
            try:
                session.quit()
            except (OSError, smtplib.SMTPException):
                session.close()

    def probe(self) -> Outcome:
        """Connect and log in, send nothing."""
        session = self._open()
        if isinstance(session, Outcome):
            return session
        self.close()
        return Outcome("sent", f"{self._channel.host} accepts us.")

    def send(self, message: Message, to: Sequence[str], *, shown_to: Sequence[str] | None = None) -> Outcome:
        """Send; one try without pictures when the server finds the mail too big."""
        seen = tuple(shown_to or to)
        outcome = self._send_once(message, tuple(to), seen)
        if outcome.kind == "refused" and outcome.detail.startswith("too big") and message.images:
            smaller = self._send_once(message.without_pictures(), tuple(to), seen)
            return Outcome(
                smaller.kind,
                f"{smaller.detail} (without pictures)",
                smaller.accepted,
                smaller.refused,
                smaller.retry_after,
            )
        return outcome

    def _send_once(self, message: Message, to: tuple[str, ...], shown_to: tuple[str, ...]) -> Outcome:
        c = self._channel
        session = self._open()
        if isinstance(session, Outcome):
            return session
        mail = build_mail(message, plant=self._plant, sender=c.sender, to=shown_to)
        try:
            refused = session.send_message(mail, c.sender, list(to))
        except smtplib.SMTPRecipientsRefused as error:
            self._reset()
            return _by_recipient(to, error.recipients)
        except smtplib.SMTPResponseException as error:
            self._reset()
            code, text = error.smtp_code, _text(error.smtp_error)
            if code == 552 or "5.3.4" in text:
                return Outcome("refused", f"too big for {c.host}: {code} {text}", refused=to)
            if 500 <= code < 600:
                return Outcome("refused", f"{c.host} refused it: {code} {text}", refused=to)
            self._drop()
            return Outcome("later", f"{c.host} put it off: {code} {text}")
        except (OSError, smtplib.SMTPException) as error:
            self._drop()
            return Outcome(
                "later",
                f"The line to {c.host} broke: {_text(error)}; it may have arrived, a repeat carries the same id.",
            )
        return _by_recipient(to, refused)

    def _reset(self) -> None:
        try:
            if self._session is not None:
                self._session.rset()
        except (OSError, smtplib.SMTPException):
            self._drop()


def _by_recipient(to: tuple[str, ...], refused: dict[str, tuple[int, bytes]]) -> Outcome:
    """Judge each address on its own: accepted ones never get it again, 5xx ones are not tried again."""
    accepted = tuple(a for a in to if a not in refused)
    never = tuple(a for a, (code, _) in refused.items() if code >= 500)
    again = [a for a in to if a in refused and a not in never]
    detail = "; ".join(f"{a}: {code} {_text(text)}" for a, (code, text) in refused.items())
    if not refused:
        return Outcome("sent", "accepted", accepted)
    if again:
        return Outcome("partly" if accepted or never else "later", detail, accepted, never)
    if accepted:
        return Outcome("sent", f"accepted, but for {detail}", accepted, never)
    return Outcome("refused", detail, (), never)
