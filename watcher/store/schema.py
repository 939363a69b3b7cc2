"""The tables. A change here needs a migration beside it; a test compares the two."""

from __future__ import annotations

import sqlalchemy as sa

__all__ = [
    "alert_history", "alerts", "baselines", "channels", "deliveries", "digests", "drops", "lease", "metadata",
    "notices", "outbox", "records", "rejects", "revisions", "sources", "standings",
]  # fmt: skip

metadata = sa.MetaData()

# STRICT tables of SQLite know INTEGER, REAL and TEXT only
Big = sa.BigInteger().with_variant(sa.Integer(), "sqlite")
Real: sa.types.TypeEngine[float] = sa.Double().with_variant(sa.REAL(), "sqlite")


def _table(name: str, *parts: sa.schema.SchemaItem) -> sa.Table:
    return sa.Table(name, metadata, *parts, sqlite_strict=True)


def _id() -> sa.Column[int]:
    return sa.Column("id", Big, primary_key=True, autoincrement=True)


def _text(name: str, *, null: bool = False, key: bool = False) -> sa.Column[str]:
    return sa.Column(name, sa.Text, nullable=null, primary_key=key)


def _big(name: str, *, null: bool = False, default: str | None = None) -> sa.Column[int]:
    return sa.Column(name, Big, nullable=null, server_default=default)


sources = _table(
    "sources", _text("source", key=True), _big("version", default="0"), _big("last_contact_us", null=True),
    _big("last_record_us", null=True), _big("last_file_us", null=True), _text("error", null=True), _text("fingerprint", null=True),
)  # fmt: skip
drops = _table(
    "drops", _text("source", key=True), _text("file", key=True), _big("size"), _big("modified_us"), _text("fingerprint"),
    _big("complete"), _big("rows"), _big("new"), _big("changed"), _big("voided"), _big("repeated"), _big("set_aside"),
    _big("read_us"),
)  # fmt: skip
records = _table(
    "records", _id(), _text("source"), _text("identity"), _text("content"), _text("key"), _big("time_us"),
    _text("unit", null=True), sa.Column("quantity", Real, nullable=False), sa.Column("defects", Real), sa.Column("opportunities", Real),
    _text("cells"), _text("file"), _big("line"), _big("modified_us"), _big("revision"), _big("voided"),
    sa.UniqueConstraint("source", "identity", name="one_record"),
)  # fmt: skip
revisions = _table(
    "revisions", _id(), sa.Column("record_id", Big, sa.ForeignKey("records.id"), nullable=False), _text("content"), _text("file"),
    _text("body"), _big("seen_us"), sa.Index("revisions_of", "record_id"),
)  # fmt: skip
rejects = _table(
    "rejects", _id(), _text("mark"), _text("source"), _text("file"), _big("line", null=True), _text("column", null=True),
    _text("value", null=True), _text("reason"), _big("at_us"), _text("fingerprint"), _big("cleared_us", null=True),
    sa.UniqueConstraint("mark", name="one_reject"),
)  # fmt: skip
standings = _table(
    "standings", _text("stream", key=True), _text("standing"), _text("data"), _text("inputs"), _big("assessed_us"),
)  # fmt: skip
baselines = _table(
    "baselines", _id(), _text("stream"), _text("data"), _big("at_us"), _text("by"), _text("why"), sa.Index("baselines_of", "stream"),
)  # fmt: skip
alerts = _table(
    "alerts", _id(), _text("stream"), _text("direction"), _text("state"), _big("raised_us"), _big("noticed_us"), _text("evidence"),
    _text("taken_by", null=True), _big("taken_us", null=True), _text("settled_by", null=True), _big("settled_us", null=True),
    _text("finding", null=True), _text("note", null=True), _big("withdrawn_us", null=True), _text("withdrawn_why", null=True),
    _big("reminded_us", null=True),
)  # fmt: skip
alert_history = _table(
    "alert_history", _id(), sa.Column("alert_id", Big, sa.ForeignKey("alerts.id"), nullable=False), _big("at_us"), _text("what"),
    _text("by", null=True), _text("note", null=True), _text("data", null=True),
)  # fmt: skip
outbox = _table(
    "outbox", _id(), _text("message_id"), _text("kind"), _big("alert_id", null=True), _text("stream", null=True), _text("recipient"),
    _text("channel"), _text("to"), _text("thread", null=True), _text("payload"), _big("created_us"), _big("next_us"), _big("tries"),
    _text("state"), _text("accepted"), _text("error", null=True),
    sa.UniqueConstraint("message_id", "channel", "recipient", name="one_message"), sa.Index("outbox_due", "state", "next_us"),
)  # fmt: skip
deliveries = _table(
    "deliveries", _id(), sa.Column("outbox_id", Big, sa.ForeignKey("outbox.id"), nullable=False), _big("at_us"), _text("outcome"),
    _text("detail"), _text("accepted"), _text("refused"),
)  # fmt: skip
channels = _table(
    "channels", _text("channel", key=True), _big("paused_until_us", null=True), _text("fingerprint", null=True), _text("error", null=True),
    _big("last_delivery_us", null=True),
)  # fmt: skip
digests = _table("digests", _text("period", key=True), _big("at_us"))
notices = _table("notices", _text("subject", key=True), _text("state"), _big("at_us"))
lease = _table("lease", _text("name", key=True), _text("owner"), _big("token"), _big("expires_us"))
