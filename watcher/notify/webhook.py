"""Webhooks: one POST of JSON, signed where a secret is set; redirects are never followed."""

from __future__ import annotations

import json
import logging
import socket
import ssl
from collections.abc import Callable, Mapping, Sequence
from contextlib import closing
from dataclasses import dataclass
from datetime import UTC, datetime
from email.utils import parsedate_to_datetime
from http import HTTPStatus
from pathlib import Path
from typing import TYPE_CHECKING, Any
from urllib.parse import quote, urlsplit

from watcher.config import SecretMissingError, WebhookChannel
from watcher.config.values import Secret
from watcher.notify.base import Hidden, Message, Outcome, plain_json, scrub
from watcher.notify.signing import SigningKeyError, signature_headers, signing_key
from watcher.notify.trust import TrustError, tls_context, trusted_file

if TYPE_CHECKING:
    import requests

__all__ = ["MAX_BODY", "WebhookSender"]

_CONNECT_S = 10.0
_READ_S = 20.0
# CloudEvents asks for less than 64 KiB; the rest is left for what lies around the body
MAX_BODY = 60_000
_AGAIN = {408, 425, 429}
# never answered otherwise on a second try: not implemented, HTTP version, loop, extension needed
_FINAL_5XX = {501, 505, 508, 510}
_LONGEST_WAIT_S = 6 * 3600.0
# how many entries of a list and letters of a text are kept, tried in this order until the body fits
_CUTS = ((200, 8000), (50, 4000), (10, 2000), (3, 500), (0, 100))
_SHOWN_BYTES = 600


@dataclass(frozen=True, slots=True, repr=False)
class _Ready:
    """All that a request needs, secrets included; it is never shown."""

    address: str
    shown: str
    key: bytes | None
    trusted: Path | None
    hidden: Hidden


class WebhookSender:
    """Posts to one address."""

    def __init__(
        self, channel: WebhookChannel, *, plant: str, folder: Path, clock: Callable[[], datetime], timeout_s: float = _READ_S
    ) -> None:  # fmt: skip
        self._channel = channel
        self._plant = plant
        self._folder = folder
        self._clock = clock
        self._timeout_s = timeout_s
        self._session: requests.Session | None = None

    def body(self, message: Message) -> tuple[bytes, str]:
        """Bytes to be sent, and their type."""
        text = message.short or message.text
        if self._channel.body == "text":
            return _fit({"text": text}), "application/json"
        event = {
            "specversion": "1.0", "id": message.message_id, "source": f"/plants/{quote(self._plant, safe='')}",
            "type": message.event_type, "time": message.created.isoformat(timespec="seconds"),
            "datacontenttype": "application/json", "data": {**plain_json(message.data), "text": text},
        }  # fmt: skip
        return _fit(event), "application/cloudevents+json"

    def probe(self) -> Outcome:
        """Reach the endpoint and check its certificate; nothing is sent."""
        ready = self._prepare()
        if isinstance(ready, Outcome):
            return ready
        parts = urlsplit(ready.address)
        host = parts.hostname or ""
        try:
            port = parts.port or (443 if parts.scheme == "https" else 80)
            with socket.create_connection((host, port), min(_CONNECT_S, self._timeout_s)) as line:
                if parts.scheme == "https":
                    with tls_context(ready.trusted or _bundled()).wrap_socket(line, server_hostname=host):
                        pass
        except ssl.SSLCertVerificationError as error:
            return _untrusted(ready, error)
        except (OSError, ValueError) as error:
            return Outcome(
                "later", f"{ready.shown} cannot be reached ({type(error).__name__}).", channel_wide=True
            )
        return Outcome("sent", f"{ready.shown} can be reached; nothing was sent.")

    def close(self) -> None:
        """Give up connections."""
        session, self._session = self._session, None
        if session is not None:
            session.close()

    def send(
        self, message: Message, to: Sequence[str] = (), *, shown_to: Sequence[str] | None = None
    ) -> Outcome:
        """Post once; a webhook has no addresses of its own, so that ``to`` is only said to be accepted."""
        del shown_to
        if self._channel.body == "template":
            return Outcome("refused", 'body = "template" is not yet available in this version.')
        ready = self._prepare()
        if isinstance(ready, Outcome):
            return ready
        body, kind = self.body(message)
        headers = {"Content-Type": kind, "User-Agent": "gapbell", "Accept": "*/*"}
        if ready.key is not None:
            headers |= signature_headers(ready.key, message.message_id, self._clock(), body)
        return self._post(ready, body, headers, tuple(to))

    def _prepare(self) -> _Ready | Outcome:
        """Gather address, key and certificates, or say what is wrongly set up."""
        c = self._channel
        try:
            address = c.address()
            secret = c.secret.reveal() if c.secret is not None else None
            key = None if secret is None else signing_key(secret)
            parts = urlsplit(address)
            host = parts.hostname
            trusted = None
            if parts.scheme == "https":
                trusted = trusted_file(c.ca_file, self._folder, "REQUESTS_CA_BUNDLE", "SSL_CERT_FILE")
                if trusted is not None:
                    tls_context(trusted)
        except (SecretMissingError, SigningKeyError, TrustError) as error:
            return Outcome("paused", f"{error}", channel_wide=True)
        except UnicodeError:
            return Outcome("paused", "The address or the secret is not UTF-8 text.", channel_wide=True)
        except ValueError:
            return Outcome(
                "paused", "The address is not one; an address starting with https:// is accepted (http:// to this machine only).",
                channel_wide=True,
            )  # fmt: skip
        concealed = isinstance(c.url, Secret)
        pieces = [address, parts.path, parts.query, *parts.path.split("/")] if concealed else []
        hidden = Hidden.of(secret, *(p for p in pieces if len(p) >= 6))
        return _Ready(address, "The endpoint" if concealed else str(host), key, trusted, hidden)

    def _open(self) -> requests.Session:
        if self._session is None:
            import requests

            # its debugging lines hold the whole path, which often is the secret
            logging.getLogger("urllib3.connectionpool").setLevel(logging.WARNING)
            self._session = requests.Session()
            self._session.trust_env = False  # no proxies, no netrc
        return self._session

    def _post(self, ready: _Ready, body: bytes, headers: dict[str, str], to: tuple[str, ...]) -> Outcome:
        session = self._open()
        from requests import RequestException
        from requests.exceptions import ConnectTimeout, SSLError, Timeout

        try:
            with closing(
                session.post(
                    ready.address, data=body, headers=headers, timeout=(min(_CONNECT_S, self._timeout_s), self._timeout_s),
                    allow_redirects=False, stream=True, verify=str(ready.trusted) if ready.trusted else True,
                )
            ) as answer:  # fmt: skip
                return self._judge(ready, answer, to)
        except SSLError as error:
            found = _certificate_error(error)
            if found is not None:
                return _untrusted(ready, found)
            return Outcome(
                "later", f"{ready.shown}: the encrypted line could not be set up.", channel_wide=True
            )
        except ConnectTimeout:
            return Outcome(
                "later", f"{ready.shown} cannot be reached (no answer in time).", channel_wide=True
            )
        except Timeout:
            return Outcome(
                "later",
                f"{ready.shown} did not answer in time; it may have arrived, a repeat carries the same id.",
            )
        except RequestException as error:
            if isinstance(error, ValueError):  # the library's kinds of "this is no address"
                return Outcome("paused", "The address cannot be used for a request.", channel_wide=True)
            return Outcome("later", f"{ready.shown} cannot be reached ({type(error).__name__}).")
        except (UnicodeError, OSError) as error:
            return Outcome("later", f"{ready.shown} cannot be reached ({type(error).__name__}).")

    def _judge(self, ready: _Ready, answer: requests.Response, to: tuple[str, ...]) -> Outcome:
        status = answer.status_code
        if 200 <= status < 300:
            return Outcome("sent", f"{ready.shown} answered {status}.", to)
        if 300 <= status < 400:
            return Outcome(
                "refused", f"{ready.shown} answered {status}; redirects are not followed.", refused=to
            )
        said = f"{ready.shown} answered {_named(status)}{_excerpt(answer, ready.hidden)}"
        if status in _AGAIN or (status >= 500 and status not in _FINAL_5XX):
            wait = _retry_after(answer.headers.get("Retry-After"), self._clock())
            return Outcome("later", said, retry_after=wait, channel_wide=wait is not None)
        if status in {401, 403}:
            return Outcome("paused", said, channel_wide=True)
        return Outcome("refused", said, refused=to)


def _named(status: int) -> str:
    try:
        return f"{status} {HTTPStatus(status).phrase}"
    except ValueError:
        return str(status)


def _excerpt(answer: requests.Response, hidden: Hidden) -> str:
    """Begin of the answer's text, where it is text and short enough to help."""
    if not answer.headers.get("Content-Type", "").startswith(("text/plain", "application/json")):
        return "."
    try:
        raw = answer.raw.read(_SHOWN_BYTES, decode_content=True)
    except Exception:  # noqa: BLE001 - the answer is known already; its text is an extra
        return "."
    said = scrub(raw[:_SHOWN_BYTES], hidden)
    return f": {said}" if said else "."


def _bundled() -> Path:
    from requests.utils import DEFAULT_CA_BUNDLE_PATH

    return Path(DEFAULT_CA_BUNDLE_PATH)


def _untrusted(ready: _Ready, error: ssl.SSLCertVerificationError) -> Outcome:
    why = f": {error.verify_message}" if ready.shown != "The endpoint" else ""
    return Outcome("paused", f"{ready.shown}: the certificate is not trusted{why}.", channel_wide=True)


def _certificate_error(error: BaseException) -> ssl.SSLCertVerificationError | None:
    """Find the certificate's fault among what the libraries wrapped around it."""
    todo: list[Any] = [error]
    seen: set[int] = set()
    while todo:
        at = todo.pop()
        if not isinstance(at, BaseException) or id(at) in seen:
            continue
        seen.add(id(at))
        if isinstance(at, ssl.SSLCertVerificationError):
            return at
        todo += [*at.args, at.__cause__, at.__context__, getattr(at, "reason", None)]
    return None


def _cut(value: Any, items: int, letters: int) -> Any:
    if isinstance(value, str):
        return value if len(value) <= letters else value[:letters] + " … (shortened)"
    if isinstance(value, Mapping):
        return {k: _cut(v, items, letters) for k, v in list(value.items())[: max(items, 25)]}
    if isinstance(value, list):
        return [_cut(v, items, letters) for v in value[:items]]
    return value


def _fit(body: Mapping[str, Any]) -> bytes:
    """Write the body; where it is bigger than receivers take, long lists and texts are shortened."""

    def written(what: Any) -> bytes:
        return json.dumps(what, ensure_ascii=False, allow_nan=False).encode("utf-8", errors="replace")

    raw = written(body)
    for items, letters in _CUTS:
        if len(raw) <= MAX_BODY:
            break
        if "data" in body:
            raw = written({**body, "data": {**_cut(body["data"], items, letters), "shortened": True}})
        else:
            raw = written(_cut(body, items, letters))
    return raw


def _retry_after(value: str | None, now: datetime) -> float | None:
    """Seconds to wait, from either form of the header (RFC 9110, 10.2.3); capped."""
    if value is None:
        return None
    text = value.strip()
    if text.isascii() and text.isdecimal():
        return min(float(text), _LONGEST_WAIT_S)
    try:
        moment = parsedate_to_datetime(text)
    except (TypeError, ValueError):
        return None
    if moment.tzinfo is None:
        moment = moment.replace(tzinfo=UTC)
    return min(max(0.0, (moment - now).total_seconds()), _LONGEST_WAIT_S)
