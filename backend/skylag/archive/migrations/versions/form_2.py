"""Form 2: the work queue, keys of access, notices and their delivery; days that are still being added to."""

import sqlalchemy as sa
from alembic import op

revision = "2"
down_revision = "1"
branch_labels = None
depends_on = None


def upgrade() -> None:
    """Add tables; nothing that is there changes but for one column with a default."""
    op.add_column("product", sa.Column("provisional", sa.Boolean, nullable=False, server_default=sa.false()))
    op.create_table(
        "task",
        sa.Column("id", sa.Integer, primary_key=True, autoincrement=True),
        sa.Column("kind", sa.String(20), nullable=False),
        sa.Column("title", sa.String(300), nullable=False),
        sa.Column("spec", sa.Text, nullable=False),
        sa.Column("spec_sha256", sa.String(64), nullable=False),
        sa.Column("state", sa.String(12), nullable=False),
        sa.Column("attempts", sa.Integer, nullable=False),
        sa.Column("losses", sa.Integer, nullable=False),
        sa.Column("not_before_ns", sa.BigInteger, nullable=False),
        sa.Column("holder", sa.String(200), nullable=False),
        sa.Column("held_until_ns", sa.BigInteger, nullable=False),
        sa.Column("stage", sa.String(40), nullable=False),
        sa.Column("share", sa.Float(53), nullable=False),
        sa.Column("word", sa.String(300), nullable=False),
        sa.Column("said", sa.Text, nullable=False),
        sa.Column("result", sa.Text, nullable=False),
        sa.Column("added_ns", sa.BigInteger, nullable=False),
        sa.Column("changed_ns", sa.BigInteger, nullable=False),
    )
    op.create_index("task_by_state", "task", ["state", "not_before_ns"])
    op.create_table(
        "access_key",
        sa.Column("id", sa.Integer, primary_key=True, autoincrement=True),
        sa.Column("name", sa.String(100), nullable=False, unique=True),
        sa.Column("scope", sa.String(10), nullable=False),
        sa.Column("sha256", sa.String(64), nullable=False, unique=True),
        sa.Column("made_ns", sa.BigInteger, nullable=False),
        sa.Column("revoked_ns", sa.BigInteger),
    )
    op.create_table(
        "notice",
        sa.Column("id", sa.Integer, primary_key=True, autoincrement=True),
        sa.Column("mark", sa.String(64), nullable=False, unique=True),
        sa.Column("rule", sa.String(100), nullable=False),
        sa.Column("sentence", sa.Text, nullable=False),
        sa.Column("facts", sa.Text, nullable=False),
        sa.Column("made_ns", sa.BigInteger, nullable=False),
    )
    op.create_table(
        "delivery",
        sa.Column("notice", sa.Integer, sa.ForeignKey("notice.id", ondelete="CASCADE"), primary_key=True),
        sa.Column("target", sa.String(300), primary_key=True),
        sa.Column("attempts", sa.Integer, nullable=False),
        sa.Column("not_before_ns", sa.BigInteger, nullable=False),
        sa.Column("delivered_ns", sa.BigInteger),
        sa.Column("said", sa.Text, nullable=False),
    )
    op.execute("INSERT INTO schema_version (version) VALUES (2)")


def downgrade() -> None:
    """Not offered: the copy made before the step is the way back."""
