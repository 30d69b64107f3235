"""The database that the settings name, apart from the app so that small commands start quickly."""

from __future__ import annotations

from service.settings import Settings
from service.store.database import Database


def open_database(settings: Settings) -> Database:
    """The database of these settings; the caller closes it."""
    return Database(
        settings.database_url.get_secret_value(),
        pool_size=settings.pool_size,
        statement_timeout_ms=settings.statement_timeout_ms,
    )
