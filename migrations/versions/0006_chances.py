"""What hindsight needs of a decision: kind of auction, arm, gross prices and chances."""

from alembic import op

revision = "0006"
down_revision = "0005"

# An empty text or no number means that nobody kept it: lines of before, and of a release that
# still runs beside this one.
COLUMNS = """
ALTER TABLE decision ADD COLUMN auction TEXT NOT NULL DEFAULT '';
ALTER TABLE decision ADD COLUMN arm TEXT NOT NULL DEFAULT '';
ALTER TABLE decision ADD COLUMN held BIG;
ALTER TABLE decision ADD COLUMN floor_held BIG;
ALTER TABLE decision ADD COLUMN arm_odds FRACTION;
ALTER TABLE decision ADD COLUMN odds FRACTION
"""

WORDS = {
    "sqlite": {"BIG": "INTEGER", "FRACTION": "REAL"},
    "postgresql": {"BIG": "BIGINT", "FRACTION": "DOUBLE PRECISION"},
}


def upgrade() -> None:
    """Add the columns; none of them is filled for what is there, so no table is rewritten."""
    words = WORDS[op.get_bind().dialect.name]
    for statement in COLUMNS.split(";"):
        for word, meaning in words.items():
            statement = statement.replace(f" {word}", f" {meaning}")
        op.execute(statement)
