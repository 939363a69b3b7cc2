"""The contract of a channel: what a message is, how a try at sending it ended, what a sender promises."""

from __future__ import annotations

import base64
import binascii
import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from datetime import datetime
from html import escape
from typing import Any, Literal, Protocol, Self

__all__ = ["ChannelSender", "Hidden", "Message", "Outcome", "PayloadError", "plain_json", "scrub"]

Ending = Literal["sent", "partly", "later", "refused", "paused"]

_CONTROL = re.compile(r"[\x00-\x1f\x7f-\x9f\u2028\u2029]+")
_BODY = re.compile(r"<body\b[^>]*>", re.IGNORECASE)
_PICTURE = re.compile(r"<img\b[^>]*\bsrc\s*=\s*[\"']?cid:[^>]*>", re.IGNORECASE)
_ALT = re.compile(r"\balt\s*=\s*(?:\"([^\"]*)\"|'([^']*)')", re.IGNORECASE)
_DETAIL_LENGTH = 300


def _description(picture: re.Match[str]) -> str:
    found = _ALT.search(picture[0])
    text = (found[1] or found[2] or "") if found else ""
    return f"<em>[picture left out: {text}]</em>" if text else ""  # already escaped where it came from


class PayloadError(Exception):
    """A stored message that cannot be read back."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Message:
    """One composed message, complete in itself: a later try needs nothing else.

    ``message_id`` is the same on every try and names the message to every receiver; ``thread`` is that of the
    alert's first message, or None in the first one. ``images`` are PNG files by the content id under which
    ``html`` refers to them. ``data`` is what programs receive (the ALERT object), without the text.
    """

    message_id: str
    kind: str
    subject: str
    text: str
    html: str | None
    recipient: str
    event_type: str
    created: datetime
    images: Mapping[str, bytes] = field(default_factory=dict)
    thread: str | None = None
    alert_label: str | None = None
    data: Mapping[str, Any] = field(default_factory=dict)
    short: str | None = None
    """What a chat shows; None where the whole text is short enough."""

    def with_age(self, line: str) -> Self:
        """Return the message with a line on top that says how late it comes."""
        html = self.html
        if html is not None:
            told = f"<p><strong>{escape(line)}</strong></p>"
            html, found = _BODY.subn(lambda m: m[0] + told, html, count=1)
            html = html if found else told + html
        short = None if self.short is None else f"{line}\n\n{self.short}"
        return replace(self, text=f"{line}\n\n{self.text}", html=html, short=short)

    def without_pictures(self) -> Self:
        """Return the message with each picture's description in its place."""
        html = None if self.html is None else _PICTURE.sub(_description, self.html)
        return replace(self, html=html, images={})

    def to_payload(self) -> dict[str, Any]:
        """Return the message as plain JSON, as the outbox keeps it."""
        return {
            "message_id": self.message_id,
            "kind": self.kind,
            "subject": self.subject,
            "text": self.text,
            "html": self.html,
            "images": {cid: base64.b64encode(png).decode("ascii") for cid, png in self.images.items()},
            "thread": self.thread,
            "alert_label": self.alert_label,
            "recipient": self.recipient,
            "event_type": self.event_type,
            "data": plain_json(self.data),
            "created": self.created.isoformat(),
            "short": self.short,
        }

    @classmethod
    def from_payload(cls, payload: Mapping[str, Any]) -> Self:
        """Read a message back; raises ``PayloadError``."""
        try:
            created = datetime.fromisoformat(payload["created"])
            message = cls(
                **{
                    **payload,
                    "images": {
                        cid: base64.b64decode(png, validate=True) for cid, png in payload["images"].items()
                    },
                    "data": dict(payload["data"]),
                    "created": created,
                }
            )
        except (KeyError, TypeError, ValueError, AttributeError, binascii.Error) as error:
            raise PayloadError("The stored message cannot be read back; it was damaged.") from error
        if created.tzinfo is None:
            raise PayloadError("The stored message has a time without a zone.")
        return message


@dataclass(frozen=True, slots=True)
class Outcome:
    """How one try ended.

    ``sent``: everybody asked for has it. ``partly``: some were accepted and the rest may be tried again.
    ``later``: nobody has it, try again. ``refused``: whoever is not in ``accepted`` never gets it unchanged.
    ``paused``: the channel itself is wrongly set up. ``retry_after`` is the receiver's wish, in seconds.
    ``channel_wide`` says that other messages would fare the same now, so that they need not be tried.
    """

    kind: Ending
    detail: str
    accepted: tuple[str, ...] = ()
    refused: tuple[str, ...] = ()
    retry_after: float | None = None
    channel_wide: bool = False


class ChannelSender(Protocol):
    """A way to send. Every method returns an ``Outcome`` and raises for no trouble of delivery."""

    def send(self, message: Message, to: Sequence[str], *, shown_to: Sequence[str] | None = None) -> Outcome:
        """Try once to bring ``message`` to ``to``; the message itself names ``shown_to`` (default ``to``)."""
        ...

    def probe(self) -> Outcome:
        """Reach the receiver as far as is possible without sending anything."""
        ...

    def close(self) -> None:
        """Give up what is kept open between messages."""
        ...


@dataclass(frozen=True, slots=True, repr=False)
class Hidden:
    """Texts that must not appear in a log, an error or the store, with the forms they take on the wire."""

    forms: tuple[str, ...] = field(default=())

    @classmethod
    def of(cls, *secrets: str | None, user: str | None = None) -> Self:
        """Gather the secrets' plain and encoded forms."""
        forms: list[str] = []
        for secret in filter(None, secrets):
            raw = secret.encode("utf-8")
            encoded = [
                raw,
                f"\0{user or ''}\0{secret}".encode(),
                f"{user or ''}\0{user or ''}\0{secret}".encode(),
            ]
            forms += [secret, *(base64.b64encode(e).decode("ascii") for e in encoded)]
        return cls(tuple(sorted(set(forms), key=len, reverse=True)))

    def __repr__(self) -> str:
        return "Hidden(…)"


def scrub(text: str | bytes, hidden: Hidden) -> str:
    r"""Make a receiver's words fit for a log: one line, no control characters, no secret, not long.

    >>> scrub(b"535 wrong: geheim \xff", Hidden.of("geheim"))
    '535 wrong: [secret] \ufffd'
    """
    if isinstance(text, bytes):
        text = text.decode("utf-8", errors="replace")
    for form in hidden.forms:
        text = text.replace(form, "[secret]")
    text = " ".join(_CONTROL.sub(" ", text).split())
    return text if len(text) <= _DETAIL_LENGTH else text[: _DETAIL_LENGTH - 1] + "…"


def plain_json(value: Any) -> Any:
    """Turn a value into what JSON knows: numbers that are none become null, the unknown becomes text."""
    if value is None or isinstance(value, str | bool | int):
        return value
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else None
    if isinstance(value, datetime):
        return value.isoformat()
    if isinstance(value, Mapping):
        return {str(k): plain_json(v) for k, v in value.items()}
    if isinstance(value, Sequence) and not isinstance(value, bytes | bytearray):
        return [plain_json(v) for v in value]
    if hasattr(value, "tolist"):  # numpy's numbers and arrays
        return plain_json(value.tolist())
    return str(value)
