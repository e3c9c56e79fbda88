"""Form 3: outlooks as they were made, what became of them, and the hours of days they rest on."""

import sqlalchemy as sa
from alembic import op

revision = "3"
down_revision = "2"
branch_labels = None
depends_on = None


def upgrade() -> None:
    """Add three tables; nothing that is there changes."""
    op.create_table(
        "outlook",
        sa.Column("id", sa.Integer, primary_key=True, autoincrement=True),
        sa.Column("region", sa.String(200), nullable=False),
        sa.Column("known_until", sa.String(10), nullable=False),
        sa.Column("entered", sa.String(64), nullable=False),
        sa.Column("made_at", sa.DateTime(timezone=True), server_default=sa.text("CURRENT_TIMESTAMP"), nullable=False),
        sa.Column("facts", sa.Text, nullable=False),
        sa.Column("data", sa.LargeBinary, nullable=False),
        sa.Column("sha256", sa.String(64), nullable=False),
        sa.UniqueConstraint("region", "known_until", "entered", name="one_outlook_per_occasion"),
    )
    op.create_table(
        "outlook_score",
        sa.Column("outlook", sa.Integer, sa.ForeignKey("outlook.id", ondelete="CASCADE"), primary_key=True),
        sa.Column("days", sa.Integer, primary_key=True, autoincrement=False),
        sa.Column("facts", sa.Text, nullable=False),
    )
    op.create_table(
        "day_digest",
        sa.Column("region", sa.String(200), primary_key=True),
        sa.Column("day", sa.String(10), primary_key=True),
        sa.Column("version", sa.Integer, primary_key=True, autoincrement=False),
        sa.Column("mark", sa.String(64), primary_key=True),
        sa.Column("data", sa.LargeBinary, nullable=False),
        sa.Column("sha256", sa.String(64), nullable=False),
    )
    op.execute("INSERT INTO schema_version (version) VALUES (3)")


def downgrade() -> None:
    """Not offered: the copy made before the step is the way back."""
