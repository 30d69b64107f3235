"""The first schema: line items, money, the stream, learners, keys and the journal."""

from alembic import op

revision = "0001"
down_revision = None

# One text for both databases; the words in capitals differ and are replaced below.
TABLES = """
CREATE TABLE service_clock (
    id BIG PRIMARY KEY CHECK (id = 1),
    now_ms BIG NOT NULL CHECK (now_ms >= 0),
    seen_ms BIG NOT NULL
) STRICTLY;
CREATE TABLE change_counter (
    id BIG PRIMARY KEY CHECK (id = 1),
    number BIG NOT NULL
) STRICTLY;
CREATE TABLE change_log (
    number BIG PRIMARY KEY,
    kind TEXT NOT NULL,
    line_item TEXT NOT NULL
) STRICTLY;
CREATE TABLE fact (
    name TEXT PRIMARY KEY,
    value TEXT NOT NULL
) STRICTLY;
CREATE TABLE access_key (
    id TEXT PRIMARY KEY,
    name TEXT NOT NULL,
    hash TEXT NOT NULL UNIQUE,
    scopes TEXT NOT NULL,
    created_ms BIG NOT NULL,
    ended_ms BIG
) STRICTLY;
CREATE TABLE line_item (
    id TEXT PRIMARY KEY CHECK (length(id) BETWEEN 1 AND 64),
    config TEXT NOT NULL,
    version BIG NOT NULL CHECK (version >= 1),
    created_ms BIG NOT NULL,
    updated_ms BIG NOT NULL
) STRICTLY;
CREATE TABLE balance (
    line_item TEXT PRIMARY KEY REFERENCES line_item (id),
    budget BIG NOT NULL,
    target BIG NOT NULL CHECK (target >= 0 AND target <= budget),
    spent BIG NOT NULL CHECK (spent >= 0),
    held BIG NOT NULL CHECK (held >= 0),
    unfunded BIG NOT NULL CHECK (unfunded >= 0),
    disputed BIG NOT NULL CHECK (disputed >= 0),
    seq BIG NOT NULL CHECK (seq >= 0),
    at_ms BIG NOT NULL,
    CHECK (spent + held <= budget)
) STRICTLY;
CREATE TABLE local_day (
    line_item TEXT NOT NULL REFERENCES line_item (id),
    day TEXT NOT NULL,
    budget BIG NOT NULL,
    target BIG NOT NULL CHECK (target >= 0 AND target <= budget),
    spent BIG NOT NULL CHECK (spent >= 0),
    held BIG NOT NULL CHECK (held >= 0),
    over_spent BIG NOT NULL CHECK (over_spent >= 0),
    PRIMARY KEY (line_item, day),
    CHECK (spent + held <= budget)
) STRICTLY;
CREATE TABLE slice (
    id BYTES PRIMARY KEY CHECK (length(id) = 16),
    line_item TEXT NOT NULL REFERENCES line_item (id),
    worker TEXT NOT NULL,
    day TEXT NOT NULL,
    amount BIG NOT NULL CHECK (amount > 0),
    remaining BIG NOT NULL CHECK (remaining >= 0),
    owed BIG NOT NULL CHECK (owed >= 0),
    ticked BIG NOT NULL CHECK (ticked >= 0),
    counted BIG NOT NULL CHECK (counted >= 0),
    state TEXT NOT NULL CHECK (state IN ('open', 'retired', 'closed')),
    leased_ms BIG NOT NULL,
    expires_ms BIG NOT NULL,
    close_ms BIG NOT NULL,
    billing_close_ms BIG NOT NULL,
    CHECK (remaining + owed <= amount),
    CHECK (state <> 'closed' OR remaining = 0)
) STRICTLY;
CREATE INDEX slice_by_line_item ON slice (line_item, state);
CREATE INDEX slice_to_close ON slice (close_ms) WHERE state <> 'closed';
CREATE INDEX slice_owing ON slice (billing_close_ms) WHERE owed > 0;
CREATE TABLE stream (
    line_item TEXT NOT NULL REFERENCES line_item (id),
    seq BIG NOT NULL CHECK (seq >= 1),
    kind TEXT NOT NULL,
    at_ms BIG NOT NULL,
    service_ms BIG NOT NULL,
    bid BYTES,
    slot TEXT,
    cost BIG NOT NULL CHECK (cost >= 0),
    body TEXT NOT NULL,
    PRIMARY KEY (line_item, seq),
    UNIQUE (bid, slot)
) STRICTLY;
CREATE TABLE learner (
    line_item TEXT PRIMARY KEY REFERENCES line_item (id),
    seq BIG NOT NULL CHECK (seq >= 0),
    working BYTES NOT NULL,
    reset_seq BIG NOT NULL CHECK (reset_seq >= 0),
    snapshot BIG NOT NULL CHECK (snapshot >= 0),
    state BYTES NOT NULL,
    digest TEXT NOT NULL,
    published_ms BIG NOT NULL,
    halted BIG NOT NULL DEFAULT 0 CHECK (halted IN (0, 1)),
    stuck_seq BIG NOT NULL DEFAULT 0,
    tries BIG NOT NULL DEFAULT 0
) STRICTLY;
CREATE TABLE cancelled (
    line_item TEXT NOT NULL REFERENCES line_item (id),
    by_seq BIG NOT NULL,
    part TEXT NOT NULL CHECK (part IN ('value', 'market', 'both', 'all')),
    spans TEXT NOT NULL,
    PRIMARY KEY (line_item, by_seq)
) STRICTLY;
CREATE TABLE checkpoint (
    line_item TEXT NOT NULL REFERENCES line_item (id),
    seq BIG NOT NULL CHECK (seq >= 0),
    state BYTES NOT NULL,
    digest TEXT NOT NULL,
    at_ms BIG NOT NULL,
    PRIMARY KEY (line_item, seq)
) STRICTLY;
CREATE TABLE audited (
    line_item TEXT PRIMARY KEY REFERENCES line_item (id),
    seq BIG NOT NULL CHECK (seq >= 0),
    service_ms BIG NOT NULL,
    cost BIG NOT NULL CHECK (cost >= 0),
    books TEXT NOT NULL
) STRICTLY;
CREATE TABLE epoch (
    line_item TEXT NOT NULL REFERENCES line_item (id),
    snapshot BIG NOT NULL CHECK (snapshot >= 0),
    law BYTES NOT NULL,
    service_ms BIG NOT NULL,
    PRIMARY KEY (line_item, snapshot)
) STRICTLY;
CREATE INDEX epoch_by_age ON epoch (service_ms);
CREATE TABLE worker (
    id TEXT PRIMARY KEY,
    started_ms BIG NOT NULL,
    beat_ms BIG NOT NULL,
    change_seen BIG NOT NULL
) STRICTLY;
CREATE TABLE journal (
    number NUMBERED,
    at_ms BIG NOT NULL,
    actor TEXT NOT NULL,
    action TEXT NOT NULL,
    line_item TEXT NOT NULL,
    reason TEXT NOT NULL,
    detail TEXT NOT NULL
) STRICTLY;
CREATE TABLE freezing (
    line_item TEXT NOT NULL,
    source TEXT NOT NULL
        CHECK (source IN ('person', 'tripwire', 'audit', 'all', 'restore', 'closed')),
    at_ms BIG NOT NULL,
    actor TEXT NOT NULL,
    reason TEXT NOT NULL,
    PRIMARY KEY (line_item, source)
) STRICTLY;
CREATE TABLE decision (
    number NUMBERED,
    at_ms BIG NOT NULL,
    line_item TEXT NOT NULL,
    ref TEXT,
    request_id TEXT,
    source TEXT NOT NULL,
    floor BIG NOT NULL,
    price BIG,
    reason TEXT,
    set_by TEXT,
    snapshot BIG NOT NULL,
    test BIG NOT NULL
) STRICTLY;
CREATE INDEX decision_by_line_item ON decision (line_item, number);
CREATE TABLE quarantine (
    number NUMBERED,
    at_ms BIG NOT NULL,
    line_item TEXT NOT NULL,
    error TEXT NOT NULL,
    body TEXT NOT NULL,
    seq BIG,
    state TEXT NOT NULL DEFAULT 'waiting' CHECK (state IN ('waiting', 'retried', 'released'))
) STRICTLY;
CREATE TABLE repeat_guard (
    actor TEXT NOT NULL,
    repeat_key TEXT NOT NULL,
    digest TEXT NOT NULL,
    answer TEXT NOT NULL,
    at_ms BIG NOT NULL,
    PRIMARY KEY (actor, repeat_key)
) STRICTLY;
INSERT INTO service_clock (id, now_ms, seen_ms) VALUES (1, 0, 0);
INSERT INTO change_counter (id, number) VALUES (1, 0)
"""

WORDS = {
    "sqlite": {
        "BIG": "INTEGER",
        "BYTES": "BLOB",
        "STRICTLY": "STRICT",
        "NUMBERED": "INTEGER PRIMARY KEY AUTOINCREMENT",
    },
    "postgresql": {
        "BIG": "BIGINT",
        "BYTES": "BYTEA",
        "STRICTLY": "",
        "NUMBERED": "BIGINT GENERATED ALWAYS AS IDENTITY PRIMARY KEY",
    },
}


def upgrade() -> None:
    """Create every table; STRICT on SQLite, since it otherwise takes text for numbers."""
    words = WORDS[op.get_bind().dialect.name]
    for statement in TABLES.split(";"):
        for word, meaning in words.items():
            statement = statement.replace(f" {word}", f" {meaning}")
        op.execute(statement)
