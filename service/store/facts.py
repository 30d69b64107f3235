"""Small facts of the whole database: its incarnation and the ticket key it made itself."""

from __future__ import annotations

from sqlalchemy import text

from service.store.database import Reading, Writing


def fact(connection: Reading | Writing, name: str) -> str:
    """The value of one fact."""
    return str(
        connection.execute(
            text("SELECT value FROM fact WHERE name = :name"), {"name": name}
        ).scalar_one()
    )
