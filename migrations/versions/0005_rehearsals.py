"""Rehearsals: what was asked, how far it is, and what it came to; no money and no lesson in it."""

from alembic import op

revision = "0005"
down_revision = "0004"

TABLES = """
CREATE TABLE rehearsal (
    number NUMBERED,
    name TEXT NOT NULL,
    actor TEXT NOT NULL,
    line_item TEXT NOT NULL,
    worker TEXT NOT NULL,
    state TEXT NOT NULL DEFAULT 'queued'
        CHECK (state IN ('queued', 'running', 'done', 'failed', 'cancelled', 'lost')),
    stopping BIG NOT NULL DEFAULT 0 CHECK (stopping IN (0, 1)),
    done BIG NOT NULL DEFAULT 0 CHECK (done >= 0),
    total BIG NOT NULL CHECK (total >= 0),
    asked TEXT NOT NULL,
    result TEXT,
    error TEXT,
    created_ms BIG NOT NULL,
    started_ms BIG,
    ended_ms BIG
) STRICTLY;
CREATE INDEX rehearsal_by_state ON rehearsal (state)
"""

WORDS = {
    "sqlite": {
        "BIG": "INTEGER",
        "STRICTLY": "STRICT",
        "NUMBERED": "INTEGER PRIMARY KEY AUTOINCREMENT",
    },
    "postgresql": {
        "BIG": "BIGINT",
        "STRICTLY": "",
        "NUMBERED": "BIGINT GENERATED ALWAYS AS IDENTITY PRIMARY KEY",
    },
}


def upgrade() -> None:
    """Create the table; a release that does not know it goes on beside it."""
    words = WORDS[op.get_bind().dialect.name]
    for statement in TABLES.split(";"):
        for word, meaning in words.items():
            statement = statement.replace(f" {word}", f" {meaning}")
        op.execute(statement)
