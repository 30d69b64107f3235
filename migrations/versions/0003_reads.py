"""What people read: indexes for pages by time and kind, and counts for charts."""

from alembic import op

revision = "0003"
down_revision = "0002"

# IF NOT EXISTS, so that a large PostgreSQL may be given its indexes beforehand, concurrently.
# The release before this one reads by the index that goes only for its table of passes, which
# is right without it, and merely slower; a third index on the log would cost every bid.
TABLES = """
CREATE INDEX IF NOT EXISTS decision_by_time ON decision (line_item, at_ms, number);
DROP INDEX IF EXISTS decision_by_line_item;
CREATE INDEX IF NOT EXISTS stream_by_kind ON stream (line_item, kind, seq);
CREATE INDEX IF NOT EXISTS journal_by_line_item ON journal (line_item, at_ms, number);
CREATE INDEX IF NOT EXISTS journal_by_time ON journal (at_ms, number);
CREATE TABLE chart_count (
    line_item TEXT NOT NULL,
    at_ms BIG NOT NULL,
    what TEXT NOT NULL,
    name TEXT NOT NULL,
    n BIG NOT NULL,
    nanos BIG NOT NULL,
    PRIMARY KEY (line_item, at_ms, what, name)
) CLUSTERED;
CREATE TABLE charted (
    line_item TEXT PRIMARY KEY,
    seq BIG NOT NULL CHECK (seq >= 0)
) STRICTLY
"""

WORDS = {
    "sqlite": {"BIG": "INTEGER", "STRICTLY": "STRICT", "CLUSTERED": "STRICT, WITHOUT ROWID"},
    "postgresql": {"BIG": "BIGINT", "STRICTLY": "", "CLUSTERED": ""},
}


def upgrade() -> None:
    """Add indexes and tables; rows that are there stay as they are."""
    words = WORDS[op.get_bind().dialect.name]
    for statement in TABLES.split(";"):
        for word, meaning in words.items():
            statement = statement.replace(f" {word}", f" {meaning}")
        op.execute(statement)
