"""The tables of the database, the same on SQLite and PostgreSQL, and the number of their present form.

Numbers of type time are GPS-time nanoseconds as 64-bit integers; days are text like 2031-05-11, GPS-time days.
A product row is one version of one region's day and is never changed after it was written, but for its pin.
Steps from one form to the next are files of `migrations.versions`; a test compares their sum with the tables here.
Never opens a connection.
"""

from sqlalchemy import (
    BigInteger,
    Boolean,
    Column,
    DateTime,
    Float,
    ForeignKey,
    Index,
    Integer,
    LargeBinary,
    MetaData,
    String,
    Table,
    Text,
    UniqueConstraint,
    false,
    func,
)

SCHEMA_VERSION = 5

metadata = MetaData()

schema_version = Table(
    "schema_version",
    metadata,
    Column("version", Integer, primary_key=True),
    Column("since", DateTime(timezone=True), server_default=func.current_timestamp(), nullable=False),
)

region = Table(
    "region",
    metadata,
    Column("name", String(200), primary_key=True),
    Column("saves", Integer, nullable=False),  # counted up by every save, which also makes saves of a region take turns
)

product = Table(
    "product",
    metadata,
    Column("id", Integer, primary_key=True, autoincrement=True),
    Column("region", String(200), ForeignKey("region.name"), nullable=False),
    Column("day", String(10), nullable=False),
    Column("version", Integer, nullable=False),
    Column("pinned", Boolean, nullable=False, default=False),
    Column("saved_at", DateTime(timezone=True), server_default=func.current_timestamp(), nullable=False),
    Column("simulated", Boolean, nullable=False),
    Column("summary", Text, nullable=False),  # JSON: what a list of days shows
    Column("record", Text, nullable=False),  # JSON: region, receivers, grid, origin, calibration facts
    Column("slant_sha256", String(64), nullable=False),
    Column("slant_rows", Integer, nullable=False),
    # A day that is still being added to: the next save of the day takes its place.
    Column("provisional", Boolean, nullable=False, default=False, server_default=false()),
    UniqueConstraint("region", "day", "version", name="one_row_per_version"),
)

# Whole arrays of a product: times, site states, reasons.
document = Table(
    "document",
    metadata,
    Column("product", Integer, ForeignKey("product.id", ondelete="CASCADE"), primary_key=True),
    Column("name", String(40), primary_key=True),
    Column("dtype", String(20), nullable=False),
    Column("shape", String(60), nullable=False),
    Column("data", LargeBinary, nullable=False),
    Column("sha256", String(64), nullable=False),
)

# One layer of the maps over one hour.
chunk = Table(
    "chunk",
    metadata,
    Column("product", Integer, ForeignKey("product.id", ondelete="CASCADE"), primary_key=True),
    Column("layer", String(40), primary_key=True),
    Column("hour", Integer, primary_key=True, autoincrement=False),
    Column("dtype", String(20), nullable=False),
    Column("shape", String(60), nullable=False),
    Column("data", LargeBinary, nullable=False),
    Column("sha256", String(64), nullable=False),
)

flag = Table(
    "flag",
    metadata,
    Column("product", Integer, ForeignKey("product.id", ondelete="CASCADE"), primary_key=True),
    Column("number", Integer, primary_key=True, autoincrement=False),
    Column("start_ns", BigInteger, nullable=False),
    Column("end_ns", BigInteger, nullable=False),
    Column("lat", Float(53), nullable=False),
    Column("lon", Float(53), nullable=False),
    Column("kind", String(20), nullable=False),
    Column("slope_mm_per_km", Float(53)),
    Column("sigma_mm_per_km", Float(53)),
    Column("speed_m_s", Float(53)),
    Column("heading_deg", Float(53)),
    Column("state", String(20), nullable=False),
    Column("evidence", Text, nullable=False),
    Column("confirmed", Boolean, nullable=False),
    Column("track", Text, nullable=False),  # JSON: [[ns, lat, lon], ...]
    Column("speed_sigma_m_s", Float(53)),
)

bias = Table(
    "bias",
    metadata,
    Column("product", Integer, ForeignKey("product.id", ondelete="CASCADE"), primary_key=True),
    Column("number", Integer, primary_key=True, autoincrement=False),
    Column("kind", String(20), nullable=False),
    Column("name", String(40), nullable=False),
    Column("system", String(4), nullable=False),
    Column("code1", String(8), nullable=False),
    Column("code2", String(8), nullable=False),
    Column("value_ns", Float(53)),
    Column("sigma_ns", Float(53)),
    Column("start_ns", BigInteger),
    Column("end_ns", BigInteger),
)

Index("flag_by_kind", flag.c.kind, flag.c.start_ns)
Index("bias_by_name", bias.c.name)

# The work queue: one row per network day to be computed.
task = Table(
    "task",
    metadata,
    Column("id", Integer, primary_key=True, autoincrement=True),
    Column("kind", String(20), nullable=False),
    Column("title", String(300), nullable=False),
    Column("spec", Text, nullable=False),  # JSON: what to compute, from which files
    Column("spec_sha256", String(64), nullable=False),  # the same work is not queued twice at a time
    Column("state", String(12), nullable=False),
    Column("attempts", Integer, nullable=False),  # how often it was begun and gave an error
    Column("losses", Integer, nullable=False),  # how often its holder vanished
    Column("not_before_ns", BigInteger, nullable=False),  # UTC nanoseconds, as all times of these tables
    Column("holder", String(200), nullable=False),
    Column("held_until_ns", BigInteger, nullable=False),
    Column("stage", String(40), nullable=False),
    Column("share", Float(53), nullable=False),
    Column("word", String(300), nullable=False),
    Column("said", Text, nullable=False),  # the last error, in words
    Column("result", Text, nullable=False),  # JSON
    Column("added_ns", BigInteger, nullable=False),
    Column("changed_ns", BigInteger, nullable=False),
)
Index("task_by_state", task.c.state, task.c.not_before_ns)

# Keys that let somebody read or write; only their hash is kept.
access_key = Table(
    "access_key",
    metadata,
    Column("id", Integer, primary_key=True, autoincrement=True),
    Column("name", String(100), nullable=False, unique=True),
    Column("scope", String(10), nullable=False),
    Column("sha256", String(64), nullable=False, unique=True),
    Column("made_ns", BigInteger, nullable=False),
    Column("revoked_ns", BigInteger),
)

# What somebody is to be told, and to whom it was told already.
notice = Table(
    "notice",
    metadata,
    Column("id", Integer, primary_key=True, autoincrement=True),
    Column("mark", String(64), nullable=False, unique=True),  # the same occasion makes one notice
    Column("rule", String(100), nullable=False),
    Column("sentence", Text, nullable=False),
    Column("facts", Text, nullable=False),  # JSON
    Column("made_ns", BigInteger, nullable=False),
)
delivery = Table(
    "delivery",
    metadata,
    Column("notice", Integer, ForeignKey("notice.id", ondelete="CASCADE"), primary_key=True),
    Column("target", String(300), primary_key=True),
    Column("attempts", Integer, nullable=False),
    Column("not_before_ns", BigInteger, nullable=False),
    Column("delivered_ns", BigInteger),
    Column("said", Text, nullable=False),
)

# Outlooks as they were made, one for each occasion, and their scores once the days they speak of are in.
outlook = Table(
    "outlook",
    metadata,
    Column("id", Integer, primary_key=True, autoincrement=True),
    Column("region", String(200), nullable=False),
    Column("known_until", String(10), nullable=False),  # the last day used
    Column("entered", String(64), nullable=False),  # what marks the inputs it was made from
    Column("made_at", DateTime(timezone=True), server_default=func.current_timestamp(), nullable=False),
    Column("facts", Text, nullable=False),  # JSON: what are no arrays
    Column("data", LargeBinary, nullable=False),
    Column("sha256", String(64), nullable=False),
    UniqueConstraint("region", "known_until", "entered", name="one_outlook_per_occasion"),
)
outlook_score = Table(
    "outlook_score",
    metadata,
    Column("outlook", Integer, ForeignKey("outlook.id", ondelete="CASCADE"), primary_key=True),
    Column("days", Integer, primary_key=True, autoincrement=False),  # how many of its days were in
    Column("facts", Text, nullable=False),  # JSON
)
# Hours of a day at the places of an outlook: follows from the day and can be made again, but not quickly.
day_digest = Table(
    "day_digest",
    metadata,
    Column("region", String(200), primary_key=True),
    Column("day", String(10), primary_key=True),
    Column("version", Integer, primary_key=True, autoincrement=False),
    Column("mark", String(64), primary_key=True),  # of the places and uses
    Column("data", LargeBinary, nullable=False),
    Column("sha256", String(64), nullable=False),
)

# Activity of a UTC day: what was measured, what was foretold of it.  Rows are added, never changed; the newest counts.
activity = Table(
    "activity",
    metadata,
    Column("id", Integer, primary_key=True, autoincrement=True),
    Column("day", String(10), nullable=False),
    Column("facts", Text, nullable=False),  # JSON: kp, ap (8), daily_ap, f107
    Column("source", String(200), nullable=False),
    Column("entered_ns", BigInteger, nullable=False),  # UTC
)
activity_outlook = Table(
    "activity_outlook",
    metadata,
    Column("id", Integer, primary_key=True, autoincrement=True),
    Column("day", String(10), nullable=False),  # spoken of
    Column("made_ns", BigInteger, nullable=False),  # UTC, when it was foretold
    Column("facts", Text, nullable=False),  # JSON: ap (8)
    Column("source", String(200), nullable=False),
    Column("entered_ns", BigInteger, nullable=False),
)
Index("activity_by_day", activity.c.day)
Index("activity_outlook_by_day", activity_outlook.c.day, activity_outlook.c.made_ns)

# What people changed about the sites of a region's own file: every state of it stays, the newest counts.
site_change = Table(
    "site_change",
    metadata,
    Column("region", String(200), primary_key=True),
    Column("revision", Integer, primary_key=True, autoincrement=False),  # from 1
    Column("made_at", DateTime(timezone=True), server_default=func.current_timestamp(), nullable=False),
    Column("said", String(300), nullable=False),  # what was done, in words
    Column("facts", Text, nullable=False),  # JSON: sites that are there instead or besides, names taken away
)
