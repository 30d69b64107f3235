"""Tripwires: what a line item did by the minute, findings, refusals, and news for webhooks."""

from alembic import op

revision = "0004"
down_revision = "0003"

# Sums of whole numbers, moved by signed steps; the rules say what each of them means.
COUNTS = (
    *("bids", "wins", "losses", "voids", "late", "paid", "spent", "words", "zeros"),
    *("parked", "unparked", "logs", "log_squares", "refused", "unfunded", "disputed", "halted"),
)

# One text for both databases; the words in capitals differ and are replaced below.
TABLES = """
CREATE TABLE tripwire_mark (
    line_item TEXT PRIMARY KEY REFERENCES line_item (id),
    seq BIG NOT NULL CHECK (seq >= 0),
    looked_ms BIG NOT NULL,
    unfunded BIG NOT NULL,
    disputed BIG NOT NULL,
    halted BIG NOT NULL
) STRICTLY;
CREATE TABLE tripwire_bucket (
    line_item TEXT NOT NULL REFERENCES line_item (id),
    width BIG NOT NULL CHECK (width IN (0, 1, 2)),
    start_ms BIG NOT NULL,
    COLUMNS,
    PRIMARY KEY (line_item, width, start_ms)
) STRICTLY;
CREATE INDEX tripwire_bucket_by_age ON tripwire_bucket (width, start_ms);
CREATE TABLE tripwire_finding (
    number NUMBERED,
    line_item TEXT NOT NULL REFERENCES line_item (id),
    rule TEXT NOT NULL,
    action TEXT NOT NULL CHECK (action IN ('freeze', 'warn')),
    saw TEXT NOT NULL,
    numbers TEXT NOT NULL,
    since_ms BIG NOT NULL,
    raised_ms BIG NOT NULL,
    seen_ms BIG NOT NULL,
    froze_ms BIG,
    thawed_ms BIG,
    cleared_ms BIG
) STRICTLY;
CREATE UNIQUE INDEX tripwire_finding_open ON tripwire_finding (line_item, rule)
    WHERE cleared_ms IS NULL;
CREATE TABLE refused_outcomes (
    line_item TEXT PRIMARY KEY REFERENCES line_item (id),
    refusals BIG NOT NULL CHECK (refusals >= 0)
) STRICTLY;
CREATE TABLE outbox (
    number NUMBERED,
    id TEXT NOT NULL UNIQUE,
    kind TEXT NOT NULL,
    line_item TEXT NOT NULL,
    body TEXT NOT NULL,
    at_ms BIG NOT NULL,
    state TEXT NOT NULL DEFAULT 'waiting' CHECK (state IN ('waiting', 'sent', 'given_up')),
    tries BIG NOT NULL DEFAULT 0,
    next_ms BIG NOT NULL,
    error TEXT NOT NULL DEFAULT ''
) STRICTLY;
CREATE INDEX outbox_due ON outbox (next_ms) WHERE state = 'waiting';
CREATE INDEX outbox_by_line_item ON outbox (line_item, state)
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
    """Create the tables; an older release beside this one knows none of them."""
    words = WORDS[op.get_bind().dialect.name]
    columns = ",\n    ".join(f"{name} BIG NOT NULL DEFAULT 0" for name in COUNTS)
    for statement in TABLES.replace("COLUMNS", columns).split(";"):
        for word, meaning in words.items():
            statement = statement.replace(f" {word}", f" {meaning}")
        op.execute(statement)
