"""The first schema."""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0001"
down_revision = None

BIG = sa.BigInteger().with_variant(sa.Integer(), "sqlite")
REAL: sa.types.TypeEngine[float] = sa.Double().with_variant(sa.REAL(), "sqlite")


def upgrade() -> None:
    op.create_table(
        "alerts",
        sa.Column("id", BIG, primary_key=True, autoincrement=True, nullable=False),
        sa.Column("stream", sa.Text, nullable=False),
        sa.Column("direction", sa.Text, nullable=False),
        sa.Column("state", sa.Text, nullable=False),
        sa.Column("raised_us", BIG, nullable=False),
        sa.Column("noticed_us", BIG, nullable=False),
        sa.Column("evidence", sa.Text, nullable=False),
        sa.Column("taken_by", sa.Text),
        sa.Column("taken_us", BIG),
        sa.Column("settled_by", sa.Text),
        sa.Column("settled_us", BIG),
        sa.Column("finding", sa.Text),
        sa.Column("note", sa.Text),
        sa.Column("withdrawn_us", BIG),
        sa.Column("withdrawn_why", sa.Text),
        sa.Column("reminded_us", BIG),
        sqlite_strict=True,
    )
    op.create_table(
        "baselines",
        sa.Column("id", BIG, primary_key=True, autoincrement=True, nullable=False),
        sa.Column("stream", sa.Text, nullable=False),
        sa.Column("data", sa.Text, nullable=False),
        sa.Column("at_us", BIG, nullable=False),
        sa.Column("by", sa.Text, nullable=False),
        sa.Column("why", sa.Text, nullable=False),
        sqlite_strict=True,
    )
    op.create_index("baselines_of", "baselines", ["stream"])
    op.create_table(
        "channels",
        sa.Column("channel", sa.Text, primary_key=True, nullable=False),
        sa.Column("paused_until_us", BIG),
        sa.Column("fingerprint", sa.Text),
        sa.Column("error", sa.Text),
        sa.Column("last_delivery_us", BIG),
        sqlite_strict=True,
    )
    op.create_table(
        "digests",
        sa.Column("period", sa.Text, primary_key=True, nullable=False),
        sa.Column("at_us", BIG, nullable=False),
        sqlite_strict=True,
    )
    op.create_table(
        "drops",
        sa.Column("source", sa.Text, primary_key=True, nullable=False),
        sa.Column("file", sa.Text, primary_key=True, nullable=False),
        sa.Column("size", BIG, nullable=False),
        sa.Column("modified_us", BIG, nullable=False),
        sa.Column("fingerprint", sa.Text, nullable=False),
        sa.Column("complete", BIG, nullable=False),
        sa.Column("rows", BIG, nullable=False),
        sa.Column("new", BIG, nullable=False),
        sa.Column("changed", BIG, nullable=False),
        sa.Column("voided", BIG, nullable=False),
        sa.Column("repeated", BIG, nullable=False),
        sa.Column("set_aside", BIG, nullable=False),
        sa.Column("read_us", BIG, nullable=False),
        sqlite_strict=True,
    )
    op.create_table(
        "lease",
        sa.Column("name", sa.Text, primary_key=True, nullable=False),
        sa.Column("owner", sa.Text, nullable=False),
        sa.Column("token", BIG, nullable=False),
        sa.Column("expires_us", BIG, nullable=False),
        sqlite_strict=True,
    )
    op.create_table(
        "notices",
        sa.Column("subject", sa.Text, primary_key=True, nullable=False),
        sa.Column("state", sa.Text, nullable=False),
        sa.Column("at_us", BIG, nullable=False),
        sqlite_strict=True,
    )
    op.create_table(
        "outbox",
        sa.Column("id", BIG, primary_key=True, autoincrement=True, nullable=False),
        sa.Column("message_id", sa.Text, nullable=False),
        sa.Column("kind", sa.Text, nullable=False),
        sa.Column("alert_id", BIG),
        sa.Column("stream", sa.Text),
        sa.Column("recipient", sa.Text, nullable=False),
        sa.Column("channel", sa.Text, nullable=False),
        sa.Column("to", sa.Text, nullable=False),
        sa.Column("thread", sa.Text),
        sa.Column("payload", sa.Text, nullable=False),
        sa.Column("created_us", BIG, nullable=False),
        sa.Column("next_us", BIG, nullable=False),
        sa.Column("tries", BIG, nullable=False),
        sa.Column("state", sa.Text, nullable=False),
        sa.Column("accepted", sa.Text, nullable=False),
        sa.Column("error", sa.Text),
        sa.UniqueConstraint("message_id", "channel", "recipient", name="one_message"),
        sqlite_strict=True,
    )
    op.create_index("outbox_due", "outbox", ["state", "next_us"])
    op.create_table(
        "records",
        sa.Column("id", BIG, primary_key=True, autoincrement=True, nullable=False),
        sa.Column("source", sa.Text, nullable=False),
        sa.Column("identity", sa.Text, nullable=False),
        sa.Column("content", sa.Text, nullable=False),
        sa.Column("key", sa.Text, nullable=False),
        sa.Column("time_us", BIG, nullable=False),
        sa.Column("unit", sa.Text),
        sa.Column("quantity", REAL, nullable=False),
        sa.Column("defects", REAL),
        sa.Column("opportunities", REAL),
        sa.Column("cells", sa.Text, nullable=False),
        sa.Column("file", sa.Text, nullable=False),
        sa.Column("line", BIG, nullable=False),
        sa.Column("modified_us", BIG, nullable=False),
        sa.Column("revision", BIG, nullable=False),
        sa.Column("voided", BIG, nullable=False),
        sa.UniqueConstraint("source", "identity", name="one_record"),
        sqlite_strict=True,
    )
    op.create_table(
        "rejects",
        sa.Column("id", BIG, primary_key=True, autoincrement=True, nullable=False),
        sa.Column("mark", sa.Text, nullable=False),
        sa.Column("source", sa.Text, nullable=False),
        sa.Column("file", sa.Text, nullable=False),
        sa.Column("line", BIG),
        sa.Column("column", sa.Text),
        sa.Column("value", sa.Text),
        sa.Column("reason", sa.Text, nullable=False),
        sa.Column("at_us", BIG, nullable=False),
        sa.Column("fingerprint", sa.Text, nullable=False),
        sa.Column("cleared_us", BIG),
        sa.UniqueConstraint("mark", name="one_reject"),
        sqlite_strict=True,
    )
    op.create_table(
        "sources",
        sa.Column("source", sa.Text, primary_key=True, nullable=False),
        sa.Column("version", BIG, nullable=False, server_default="0"),
        sa.Column("last_contact_us", BIG),
        sa.Column("last_record_us", BIG),
        sa.Column("last_file_us", BIG),
        sa.Column("error", sa.Text),
        sa.Column("fingerprint", sa.Text),
        sqlite_strict=True,
    )
    op.create_table(
        "standings",
        sa.Column("stream", sa.Text, primary_key=True, nullable=False),
        sa.Column("standing", sa.Text, nullable=False),
        sa.Column("data", sa.Text, nullable=False),
        sa.Column("inputs", sa.Text, nullable=False),
        sa.Column("assessed_us", BIG, nullable=False),
        sqlite_strict=True,
    )
    op.create_table(
        "alert_history",
        sa.Column("id", BIG, primary_key=True, autoincrement=True, nullable=False),
        sa.Column("alert_id", BIG, sa.ForeignKey("alerts.id"), nullable=False),
        sa.Column("at_us", BIG, nullable=False),
        sa.Column("what", sa.Text, nullable=False),
        sa.Column("by", sa.Text),
        sa.Column("note", sa.Text),
        sa.Column("data", sa.Text),
        sqlite_strict=True,
    )
    op.create_table(
        "deliveries",
        sa.Column("id", BIG, primary_key=True, autoincrement=True, nullable=False),
        sa.Column("outbox_id", BIG, sa.ForeignKey("outbox.id"), nullable=False),
        sa.Column("at_us", BIG, nullable=False),
        sa.Column("outcome", sa.Text, nullable=False),
        sa.Column("detail", sa.Text, nullable=False),
        sa.Column("accepted", sa.Text, nullable=False),
        sa.Column("refused", sa.Text, nullable=False),
        sqlite_strict=True,
    )
    op.create_table(
        "revisions",
        sa.Column("id", BIG, primary_key=True, autoincrement=True, nullable=False),
        sa.Column("record_id", BIG, sa.ForeignKey("records.id"), nullable=False),
        sa.Column("content", sa.Text, nullable=False),
        sa.Column("file", sa.Text, nullable=False),
        sa.Column("body", sa.Text, nullable=False),
        sa.Column("seen_us", BIG, nullable=False),
        sqlite_strict=True,
    )
    op.create_index("revisions_of", "revisions", ["record_id"])
