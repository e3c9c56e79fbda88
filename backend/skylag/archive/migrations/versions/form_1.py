"""Form 1: days of products with their maps, flags and biases.

Archives that were made before forms were counted by steps are of this form already, and are taken as they are.
"""

import sqlalchemy as sa
from alembic import op

revision = "1"
down_revision = None
branch_labels = None
depends_on = None


def upgrade() -> None:
    """Make the tables of a new archive."""
    stamp = sa.text("CURRENT_TIMESTAMP")
    op.create_table(
        "schema_version",
        sa.Column("version", sa.Integer, primary_key=True),
        sa.Column("since", sa.DateTime(timezone=True), server_default=stamp, nullable=False),
    )
    op.create_table(
        "region",
        sa.Column("name", sa.String(200), primary_key=True),
        sa.Column("saves", sa.Integer, nullable=False),
    )
    op.create_table(
        "product",
        sa.Column("id", sa.Integer, primary_key=True, autoincrement=True),
        sa.Column("region", sa.String(200), sa.ForeignKey("region.name"), nullable=False),
        sa.Column("day", sa.String(10), nullable=False),
        sa.Column("version", sa.Integer, nullable=False),
        sa.Column("pinned", sa.Boolean, nullable=False),
        sa.Column("saved_at", sa.DateTime(timezone=True), server_default=stamp, nullable=False),
        sa.Column("simulated", sa.Boolean, nullable=False),
        sa.Column("summary", sa.Text, nullable=False),
        sa.Column("record", sa.Text, nullable=False),
        sa.Column("slant_sha256", sa.String(64), nullable=False),
        sa.Column("slant_rows", sa.Integer, nullable=False),
        sa.UniqueConstraint("region", "day", "version", name="one_row_per_version"),
    )
    op.create_table(
        "document",
        sa.Column("product", sa.Integer, sa.ForeignKey("product.id", ondelete="CASCADE"), primary_key=True),
        sa.Column("name", sa.String(40), primary_key=True),
        sa.Column("dtype", sa.String(20), nullable=False),
        sa.Column("shape", sa.String(60), nullable=False),
        sa.Column("data", sa.LargeBinary, nullable=False),
        sa.Column("sha256", sa.String(64), nullable=False),
    )
    op.create_table(
        "chunk",
        sa.Column("product", sa.Integer, sa.ForeignKey("product.id", ondelete="CASCADE"), primary_key=True),
        sa.Column("layer", sa.String(40), primary_key=True),
        sa.Column("hour", sa.Integer, primary_key=True, autoincrement=False),
        sa.Column("dtype", sa.String(20), nullable=False),
        sa.Column("shape", sa.String(60), nullable=False),
        sa.Column("data", sa.LargeBinary, nullable=False),
        sa.Column("sha256", sa.String(64), nullable=False),
    )
    op.create_table(
        "flag",
        sa.Column("product", sa.Integer, sa.ForeignKey("product.id", ondelete="CASCADE"), primary_key=True),
        sa.Column("number", sa.Integer, primary_key=True, autoincrement=False),
        sa.Column("start_ns", sa.BigInteger, nullable=False),
        sa.Column("end_ns", sa.BigInteger, nullable=False),
        sa.Column("lat", sa.Float(53), nullable=False),
        sa.Column("lon", sa.Float(53), nullable=False),
        sa.Column("kind", sa.String(20), nullable=False),
        sa.Column("slope_mm_per_km", sa.Float(53)),
        sa.Column("sigma_mm_per_km", sa.Float(53)),
        sa.Column("speed_m_s", sa.Float(53)),
        sa.Column("heading_deg", sa.Float(53)),
        sa.Column("state", sa.String(20), nullable=False),
        sa.Column("evidence", sa.Text, nullable=False),
        sa.Column("confirmed", sa.Boolean, nullable=False),
        sa.Column("track", sa.Text, nullable=False),
    )
    op.create_table(
        "bias",
        sa.Column("product", sa.Integer, sa.ForeignKey("product.id", ondelete="CASCADE"), primary_key=True),
        sa.Column("number", sa.Integer, primary_key=True, autoincrement=False),
        sa.Column("kind", sa.String(20), nullable=False),
        sa.Column("name", sa.String(40), nullable=False),
        sa.Column("system", sa.String(4), nullable=False),
        sa.Column("code1", sa.String(8), nullable=False),
        sa.Column("code2", sa.String(8), nullable=False),
        sa.Column("value_ns", sa.Float(53)),
        sa.Column("sigma_ns", sa.Float(53)),
        sa.Column("start_ns", sa.BigInteger),
        sa.Column("end_ns", sa.BigInteger),
    )
    op.create_index("flag_by_kind", "flag", ["kind", "start_ns"])
    op.create_index("bias_by_name", "bias", ["name"])
    op.execute("INSERT INTO schema_version (version) VALUES (1)")


def downgrade() -> None:
    """There is nothing before."""
