"""The tables, on SQLite and PostgreSQL alike. Owns the schema; no queries here.

Times of people are ISO 8601 strings in UTC; times of samples are float seconds since the experiment's first sample.
"""

from __future__ import annotations

from sqlalchemy import (
    JSON,
    BigInteger,
    Boolean,
    Column,
    Float,
    ForeignKey,
    Index,
    Integer,
    LargeBinary,
    MetaData,
    String,
    Table,
    Text,
    text,
)
from sqlalchemy.dialects.postgresql import JSONB

metadata = MetaData(
    naming_convention={
        "ix": "ix_%(table_name)s_%(column_0_N_name)s",
        "uq": "uq_%(table_name)s_%(column_0_N_name)s",
        "ck": "ck_%(table_name)s_%(constraint_name)s",
        "fk": "fk_%(table_name)s_%(column_0_N_name)s_%(referred_table_name)s",
        "pk": "pk_%(table_name)s",
    }
)

Document = JSON().with_variant(JSONB(), "postgresql")
Serial = BigInteger().with_variant(Integer, "sqlite")

people = Table(
    "people",
    metadata,
    Column("name", String(80), primary_key=True),
    Column("created_at", String(32), nullable=False),
)

tokens = Table(
    "tokens",
    metadata,
    Column("hash", String(64), primary_key=True),
    Column("person", String(80), ForeignKey("people.name"), nullable=False, index=True),
    Column("label", String(80), nullable=False, server_default=""),
    Column("created_at", String(32), nullable=False),
    Column("revoked_at", String(32)),
)

loops = Table(
    "loops",
    metadata,
    Column("tag", String(64), primary_key=True),
    Column("site", String(32), nullable=False, index=True),
    Column("definition", Document, nullable=False),
    Column("version", Integer, nullable=False),
    Column("registered_at", String(32), nullable=False),
    Column("registered_by", String(80), nullable=False),
    Column("updated_at", String(32), nullable=False),
)

tasks = Table(
    "tasks",
    metadata,
    Column("id", String(32), primary_key=True),
    Column("number", Serial, nullable=False, unique=True),
    Column("kind", String(16), nullable=False),
    Column("tag", String(64), ForeignKey("loops.tag"), nullable=False),
    Column("site", String(32), nullable=False),
    Column("state", String(16), nullable=False),
    Column("drives", Boolean, nullable=False),
    Column("loop", Document, nullable=False),
    Column("request", Document, nullable=False),
    Column("requested_by", String(80), nullable=False),
    Column("created_at", String(32), nullable=False),
    Column("worker", String(64)),
    Column("started_at", String(32)),
    Column("finished_at", String(32)),
    Column("stop_requested_at", String(32)),
    Column("stop_requested_by", String(80)),
    Column("phase", String(16)),
    Column("outcome", String(16)),
    Column("exit", String(16), nullable=False, server_default="pending"),
    Column("exit_detail", Text, nullable=False, server_default=""),
    Column("exit_acknowledged_by", String(80)),
    Column("exit_acknowledged_at", String(32)),
    Column("ownership", Document),
    Column("last_command", Document),
    Column("last_command_at", Float),
    Column("plan", Document),
    Column("as_found", Document),
    Column("progress", Document, nullable=False),
    Column("limit", Document),
    Column("result", Document),
    Column("problem", Document),
    Index("ix_tasks_site_state", "site", "state"),
    Index("ix_tasks_tag_number", "tag", "number"),
    Index(
        "uq_tasks_driving",
        "tag",
        unique=True,
        sqlite_where=text("drives = 1 AND state <> 'finished'"),
        postgresql_where=text("drives AND state <> 'finished'"),
    ),
)

group_claims = Table(
    "group_claims",
    metadata,
    Column("interaction_group", String(200), primary_key=True),
    Column("task_id", String(32), ForeignKey("tasks.id"), nullable=False, index=True),
)

sample_chunks = Table(
    "sample_chunks",
    metadata,
    Column("task_id", String(32), ForeignKey("tasks.id"), primary_key=True),
    Column("first_number", Integer, primary_key=True, autoincrement=False),
    Column("samples", Integer, nullable=False),
    Column("columns", LargeBinary, nullable=False),
)

records = Table(
    "records",
    metadata,
    Column("id", String(32), primary_key=True),
    Column("number", Serial, nullable=False, unique=True),
    Column("tag", String(200), nullable=False),
    Column("by", String(80), nullable=False),
    Column("at", String(32), nullable=False),
    Column("samples", Integer, nullable=False),
    Column("columns", LargeBinary, nullable=False),
    Column("request", Document, nullable=False),
    Column("result", Document, nullable=False),
)

sign_offs = Table(
    "sign_offs",
    metadata,
    Column("task_id", String(32), ForeignKey("tasks.id"), primary_key=True),
    Column("item", String(8), primary_key=True),
    Column("verdict", String(8), nullable=False),
    Column("reason", String(200), nullable=False),
    Column("person", String(80), nullable=False),
    Column("at", String(32), nullable=False),
)

journal = Table(
    "journal",
    metadata,
    Column("number", Serial, primary_key=True, autoincrement=False),
    Column("at", String(32), nullable=False),
    Column("person", String(80), nullable=False),
    Column("act", String(48), nullable=False),
    Column("subject", String(200), nullable=False, index=True),
    Column("detail", Document, nullable=False),
    Column("previous_hash", String(64), nullable=False),
    Column("hash", String(64), nullable=False),
)

answers = Table(
    "answers",
    metadata,
    Column("person", String(80), primary_key=True),
    Column("key", String(128), primary_key=True),
    Column("request_hash", String(64), nullable=False),
    Column("status", Integer, nullable=False),
    Column("headers", Document, nullable=False),
    Column("body", Text, nullable=False),
    Column("at", String(32), nullable=False),
)

sites = Table(
    "sites",
    metadata,
    Column("site", String(32), primary_key=True),
    Column("worker", String(64), nullable=False),
    Column("confirmed_at", Float, nullable=False),
    Column("released", Boolean, nullable=False),
)
