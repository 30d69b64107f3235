"""Keys with limits and several texts, refusals, and a journal of rows that seal one another."""

import json

from alembic import op
from sqlalchemy import text

from service.store.chain import START, seal
from service.store.database import Writing

revision = "0002"
down_revision = "0001"

# The previous release reads `access_key.hash` and knows no limits: a key with limits keeps its
# hash in `key_text` alone, so that there it is unknown instead of mightier than it should be.
TABLES = """
ALTER TABLE access_key ADD COLUMN line_items TEXT;
ALTER TABLE access_key ADD COLUMN expires_ms BIG;
ALTER TABLE access_key ADD COLUMN used_ms BIG;
CREATE TABLE key_text (
    hash TEXT PRIMARY KEY,
    key_id TEXT NOT NULL REFERENCES access_key (id),
    made_ms BIG NOT NULL,
    until_ms BIG
) STRICTLY;
CREATE INDEX key_text_by_key ON key_text (key_id);
INSERT INTO key_text (hash, key_id, made_ms) SELECT hash, id, created_ms FROM access_key;
CREATE TABLE refusal (
    number NUMBERED,
    minute_ms BIG NOT NULL,
    key_id TEXT NOT NULL,
    route TEXT NOT NULL,
    code TEXT NOT NULL,
    count BIG NOT NULL CHECK (count > 0),
    UNIQUE (minute_ms, key_id, route, code)
) STRICTLY;
ALTER TABLE journal ADD COLUMN link BIG;
ALTER TABLE journal ADD COLUMN previous TEXT;
ALTER TABLE journal ADD COLUMN hash TEXT;
ALTER TABLE journal ADD COLUMN adopted BIG NOT NULL DEFAULT 0;
CREATE UNIQUE INDEX journal_by_link ON journal (link);
CREATE INDEX journal_unsealed ON journal (number) WHERE link IS NULL;
CREATE TABLE journal_head (
    id BIG PRIMARY KEY CHECK (id = 1),
    link BIG NOT NULL CHECK (link >= 0),
    hash TEXT NOT NULL,
    elders TEXT NOT NULL
) STRICTLY
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

# What a row says never changes; the seal is added once, to a row that has none.
_CHANGED = (
    "OLD.link IS NOT NULL OR NEW.link IS NULL OR NEW.number <> OLD.number"
    " OR NEW.at_ms <> OLD.at_ms OR NEW.actor <> OLD.actor OR NEW.action <> OLD.action"
    " OR NEW.line_item <> OLD.line_item OR NEW.reason <> OLD.reason OR NEW.detail <> OLD.detail"
)
_SAID = "rows of the journal are added, never changed"
GUARDS = {
    "sqlite": [
        f"CREATE TRIGGER journal_keeps BEFORE UPDATE ON journal WHEN {_CHANGED}"
        f" BEGIN SELECT RAISE(ABORT, '{_SAID}'); END",
        "CREATE TRIGGER journal_stays BEFORE DELETE ON journal"
        f" BEGIN SELECT RAISE(ABORT, '{_SAID}'); END",
    ],
    "postgresql": [
        "CREATE FUNCTION journal_refuse() RETURNS trigger LANGUAGE plpgsql AS $$ BEGIN"
        f" RAISE EXCEPTION '{_SAID}' USING ERRCODE = 'check_violation'; END $$",
        f"CREATE TRIGGER journal_keeps BEFORE UPDATE ON journal FOR EACH ROW WHEN ({_CHANGED})"
        " EXECUTE FUNCTION journal_refuse()",
        "CREATE TRIGGER journal_stays BEFORE DELETE ON journal FOR EACH ROW"
        " EXECUTE FUNCTION journal_refuse()",
        "CREATE TRIGGER journal_whole BEFORE TRUNCATE ON journal FOR EACH STATEMENT"
        " EXECUTE FUNCTION journal_refuse()",
    ],
}


def upgrade() -> None:
    """Add columns and tables, seal the rows that are there, then guard them."""
    connection = op.get_bind()
    dialect = connection.dialect.name
    for statement in TABLES.split(";"):
        for word, meaning in WORDS[dialect].items():
            statement = statement.replace(f" {word}", f" {meaning}")
        op.execute(statement)
    # Workers of the release before go on beside us and write rows without a seal.
    elders = list(connection.execute(text("SELECT id FROM worker ORDER BY id")).scalars())
    before = connection.execute(text("SELECT count(*) FROM journal")).scalar_one()
    connection.execute(
        text("INSERT INTO journal_head (id, link, hash, elders) VALUES (1, 0, :start, :elders)"),
        {"start": START, "elders": json.dumps([*elders, *(["before"] if before else [])])},
    )
    if before:
        seal(Writing(connection))
    for statement in GUARDS[dialect]:
        op.execute(statement)
