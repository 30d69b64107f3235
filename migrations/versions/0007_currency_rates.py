"""What one unit of a currency costs in another, posted by operators, from a moment on."""

from alembic import op

revision = "0007"
down_revision = "0006"

TABLES = """
CREATE TABLE currency_rate (
    number NUMBERED,
    currency TEXT NOT NULL CHECK (length(currency) = 3),
    into_currency TEXT NOT NULL CHECK (length(into_currency) = 3),
    rate BIG NOT NULL CHECK (rate > 0),
    from_ms BIG NOT NULL,
    until_ms BIG,
    set_ms BIG NOT NULL,
    actor TEXT NOT NULL,
    reason TEXT NOT NULL
) STRICTLY;
CREATE INDEX rate_by_pair ON currency_rate (currency, into_currency, from_ms)
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
    """Create the table; the release before this one never looks at it."""
    words = WORDS[op.get_bind().dialect.name]
    for statement in TABLES.split(";"):
        for word, meaning in words.items():
            statement = statement.replace(f" {word}", f" {meaning}")
        op.execute(statement)
