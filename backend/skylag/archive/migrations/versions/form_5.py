"""Form 5: what people changed about a region's sites, and the sigma of a front's speed beside its flag."""

import sqlalchemy as sa
from alembic import op

revision = "5"
down_revision = "4"
branch_labels = None
depends_on = None


def upgrade() -> None:
    """Add a table and a column that may be empty; nothing that is there changes."""
    op.create_table(
        "site_change",
        sa.Column("region", sa.String(200), primary_key=True),
        sa.Column("revision", sa.Integer, primary_key=True, autoincrement=False),
        sa.Column("made_at", sa.DateTime(timezone=True), server_default=sa.text("CURRENT_TIMESTAMP"), nullable=False),
        sa.Column("said", sa.String(300), nullable=False),
        sa.Column("facts", sa.Text, nullable=False),
    )
    op.add_column("flag", sa.Column("speed_sigma_m_s", sa.Float(53)))
    op.execute("INSERT INTO schema_version (version) VALUES (5)")


def downgrade() -> None:
    """Not offered: the copy made before the step is the way back."""
