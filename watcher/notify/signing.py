"""Signatures after Standard Webhooks 1.0, so that a receiver knows who sent a request, and that it is whole."""

from __future__ import annotations

import base64
import binascii
import hashlib
import hmac
from datetime import UTC, datetime

__all__ = ["SigningKeyError", "sign", "signature_headers", "signing_key"]

_PREFIX = "whsec_"
# Standard Webhooks 1.0, "Signature scheme": a key has between 24 and 64 bytes
_SHORTEST, _LONGEST = 24, 64


class SigningKeyError(ValueError):
    """A signing secret that is not one; the text says what was expected, never what was found."""


def signing_key(secret: str) -> bytes:
    """Read a signing secret, base64 with or without ``whsec_`` before it; raises ``SigningKeyError``."""
    text = secret.strip().removeprefix(_PREFIX)
    try:
        key = base64.b64decode(text + "=" * (-len(text) % 4), validate=True)
    except (binascii.Error, ValueError):
        raise SigningKeyError(
            "The signing secret is not base64 text (with or without whsec_ before it)."
        ) from None
    if not _SHORTEST <= len(key) <= _LONGEST:
        raise SigningKeyError(
            f"The signing secret holds {len(key)} bytes; {_SHORTEST} to {_LONGEST} bytes, written as base64, are accepted."
        )
    return key


def signature_headers(key: bytes, message_id: str, at: datetime, body: bytes) -> dict[str, str]:
    """Return the three headers for exactly these bytes.

    HMAC-SHA256 over ``id.timestamp.body``; the id stays over all tries, the timestamp is that of this try.

    >>> key = signing_key("whsec_MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw")
    >>> at = datetime.fromtimestamp(1614265330, UTC)
    >>> headers = signature_headers(key, "msg_p5jXN8AQM9LWM0D4loKWxJek", at, b'{"test": 2432232314}')
    >>> headers["webhook-signature"]  # published vector of Standard Webhooks
    'v1,g0hM9SsE+OTPJTGt/tmIKtSyZlE3uFJELVlNIOLJ1OE='
    """
    stamp = str(int(at.timestamp()))
    signed = f"{message_id}.{stamp}.".encode() + body
    mark = base64.b64encode(hmac.new(key, signed, hashlib.sha256).digest()).decode("ascii")
    return {"webhook-id": message_id, "webhook-timestamp": stamp, "webhook-signature": f"v1,{mark}"}


def sign(secret: str, message_id: str, timestamp: int, body: bytes) -> dict[str, str]:
    """Return the headers for a secret as it is configured; raises ``SigningKeyError``."""
    return signature_headers(signing_key(secret), message_id, datetime.fromtimestamp(timestamp, UTC), body)
