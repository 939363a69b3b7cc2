"""Webhooks: one POST of JSON, signed where a secret is set; redirects are never followed."""

from __future__ import annotations

import json
import os
from collections.abc import Callable, Mapping, Sequence
from datetime import UTC, datetime
from email.utils import parsedate_to_datetime
from pathlib import Path
from urllib.parse import quote, urlsplit

import requests

from watcher.config import SecretMissingError, WebhookChannel
from watcher.notify.base import Message, Outcome
from watcher.notify.signing import sign

__all__ = ["WebhookSender"]

TIMEOUT_S = 20.0
MAX_BODY = 60_000
_AGAIN = {408, 425, 429, 500, 502, 503, 504}
_LONGEST_WAIT_S = 6 * 3600.0


class WebhookSender:
    """Posts to one address."""

    def __init__(
        self, channel: WebhookChannel, *, plant: str, folder: Path, clock: Callable[[], datetime]
    ) -> None:
        self._channel = channel
        self._plant = plant
        self._clock = clock
        self._http = requests.Session()
        self._http.trust_env = False  # no proxies, no netrc
        bundle = os.environ.get("REQUESTS_CA_BUNDLE") or os.environ.get("SSL_CERT_FILE")
        if channel.ca_file is not None:
            bundle = str(folder / channel.ca_file)
        if bundle:
            self._http.verify = bundle

    def body(self, message: Message) -> tuple[bytes, str]:
        """Bytes to be sent, and their type."""
        text = message.short or message.text
        if self._channel.body == "text":
            return _fit({"text": text}, text), "application/json"
        event = {
            "specversion": "1.0", "id": message.message_id, "source": f"/plants/{quote(self._plant, safe='')}",
            "type": message.event_type, "time": message.created.astimezone(UTC).isoformat().replace("+00:00", "Z"),
            "datacontenttype": "application/json", "data": {**message.data, "text": text},
        }  # fmt: skip
        return _fit(event, text), "application/cloudevents+json"

    def probe(self) -> Outcome:
        """Check that the address can be made out; nothing is sent."""
        try:
            host = urlsplit(self._channel.address()).hostname
            if self._channel.secret is not None:
                self._channel.secret.reveal()
        except (SecretMissingError, ValueError) as error:
            return Outcome("paused", str(error))
        return Outcome("sent", f"would post to {host}; nothing was sent.")

    def close(self) -> None:
        """Give up connections."""
        self._http.close()

    def send(
        self, message: Message, to: Sequence[str] = (), *, shown_to: Sequence[str] | None = None
    ) -> Outcome:
        """Post once."""
        del to, shown_to
        if self._channel.body == "template":
            return Outcome("refused", 'body = "template" is not yet available.')
        try:
            address = self._channel.address()
            secret = self._channel.secret.reveal() if self._channel.secret is not None else None
        except (SecretMissingError, ValueError) as error:
            return Outcome("paused", str(error))
        host = urlsplit(address).hostname
        payload, kind = self.body(message)
        headers = {"Content-Type": kind, "User-Agent": "gapbell"}
        if secret is not None:
            headers |= sign(secret, message.message_id, int(self._clock().timestamp()), payload)
        try:
            answer = self._http.post(
                address, data=payload, headers=headers, timeout=TIMEOUT_S, allow_redirects=False
            )
        except requests.exceptions.SSLError:
            return Outcome("paused", f"The certificate of {host} is not trusted.")
        except requests.RequestException as error:
            return Outcome("later", f"{host} cannot be reached ({type(error).__name__}).")
        if answer.status_code in {200, 201, 202, 204}:
            return Outcome("sent", f"{host} answered {answer.status_code}")
        if answer.status_code in _AGAIN:
            wait = _retry_after(answer.headers.get("Retry-After"), self._clock())
            return Outcome("later", f"{host} answered {answer.status_code}", retry_after=wait)
        if answer.status_code in {401, 403}:
            return Outcome("paused", f"{host} refused us: {answer.status_code}")
        if 300 <= answer.status_code < 400:
            return Outcome("refused", f"{host} answered {answer.status_code}; redirects are not followed")
        return Outcome("refused", f"{host} refused it: {answer.status_code}")


def _fit(body: Mapping[str, object], text: str) -> bytes:
    """Keep below what receivers take: a very long text is cut, with a word about it."""
    raw = json.dumps(body, ensure_ascii=False).encode()
    while len(raw) > MAX_BODY and len(text) > 200:
        text = text[: len(text) // 2]
        cut = f"{text}\n… (cut here; the mail or gapbell alerts show has it all)"
        body = {**body, "data": {"text": cut}} if "data" in body else {"text": cut}
        raw = json.dumps(body, ensure_ascii=False).encode()
    return raw


def _retry_after(value: str | None, now: datetime) -> float | None:
    """Seconds to wait, from either form of the header; capped."""
    if value is None:
        return None
    if value.strip().isdecimal():
        return min(float(value), _LONGEST_WAIT_S)
    try:
        moment = parsedate_to_datetime(value)
    except (TypeError, ValueError):
        return None
    if moment.tzinfo is None:
        moment = moment.replace(tzinfo=UTC)
    return min(max(0.0, (moment - now).total_seconds()), _LONGEST_WAIT_S)
