"""How records come in: one file per kind of source, one written contract in ``base``."""

from __future__ import annotations

from connectors.base import Connector, SourceSettings

__all__ = ["open_source"]


def open_source(settings: SourceSettings) -> Connector:
    """Return the connector for a source's kind."""
    from connectors.csv_drop import CsvDrop

    kinds = {"csv-drop": CsvDrop}
    return kinds[settings.kind](settings)
