"""Form 4: activity of Sun and magnetic field, as measured and as foretold with the time it was foretold."""

import sqlalchemy as sa
from alembic import op

revision = "4"
down_revision = "3"
branch_labels = None
depends_on = None


def upgrade() -> None:
    """Add two tables; nothing that is there changes."""
    op.create_table(
        "activity",
        sa.Column("id", sa.Integer, primary_key=True, autoincrement=True),
        sa.Column("day", sa.String(10), nullable=False),
        sa.Column("facts", sa.Text, nullable=False),
        sa.Column("source", sa.String(200), nullable=False),
        sa.Column("entered_ns", sa.BigInteger, nullable=False),
    )
    op.create_index("activity_by_day", "activity", ["day"])
    op.create_table(
        "activity_outlook",
        sa.Column("id", sa.Integer, primary_key=True, autoincrement=True),
        sa.Column("day", sa.String(10), nullable=False),
        sa.Column("made_ns", sa.BigInteger, nullable=False),
        sa.Column("facts", sa.Text, nullable=False),
        sa.Column("source", sa.String(200), nullable=False),
        sa.Column("entered_ns", sa.BigInteger, nullable=False),
    )
    op.create_index("activity_outlook_by_day", "activity_outlook", ["day", "made_ns"])
    op.execute("INSERT INTO schema_version (version) VALUES (4)")


def downgrade() -> None:
    """Not offered: the copy made before the step is the way back."""
