"""The configuration: one file, read and checked whole before anything else happens."""

from __future__ import annotations

from watcher.config.load import Config, ConfigError, load_config
from watcher.config.tables import EmailChannel, MatrixChannel, Recipient, Source, Stream, WebhookChannel
from watcher.config.values import Secret, SecretMissingError, Span

__all__ = [
    "Config", "ConfigError", "EmailChannel", "MatrixChannel", "Recipient", "Secret", "SecretMissingError", "Source", "Span", "Stream",
    "WebhookChannel", "load_config",
]  # fmt: skip
