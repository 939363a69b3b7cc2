"""Which certificates a channel trusts: its own file, else what the environment names, else the system's."""

from __future__ import annotations

import os
import ssl
from pathlib import Path

__all__ = ["TrustError", "tls_context", "trusted_file"]


class TrustError(Exception):
    """The certificates to trust cannot be used."""


def trusted_file(ca_file: Path | None, folder: Path, *variables: str) -> Path | None:
    """Return the file (or folder) of certificates to trust, or None for the system's own.

    ``variables`` are the environment variables to look at, the first that is set counts.
    """
    if ca_file is not None:
        found, named = folder / ca_file, "ca_file"
    else:
        set_ones = [v for v in variables if os.environ.get(v)]
        if not set_ones:
            return None
        found, named = Path(os.environ[set_ones[0]]), set_ones[0]
    if not found.exists():
        raise TrustError(f'The file of trusted certificates "{found.name}" ({named}) does not exist.')
    return found


def tls_context(trusted: Path | None) -> ssl.SSLContext:
    """Make a verifying context, TLS 1.2 or later; raises ``TrustError``."""
    try:
        if trusted is None:
            context = ssl.create_default_context()
        elif trusted.is_dir():
            context = ssl.create_default_context(capath=str(trusted))
        else:
            context = ssl.create_default_context(cafile=str(trusted))
    except (OSError, ssl.SSLError) as error:
        name = trusted.name if trusted else "of the system"
        raise TrustError(f'The trusted certificates "{name}" cannot be read as PEM certificates.') from error
    context.minimum_version = ssl.TLSVersion.TLSv1_2
    return context
