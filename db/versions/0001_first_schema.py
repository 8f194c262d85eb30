"""The first schema: nights, requests, order revisions, attempts, results, leases, audit, quarantine, documents."""

import sqlalchemy as sa
from alembic import op

revision = "0001"
down_revision = None
branch_labels = None
depends_on = None

# STRICT tables of SQLite know INTEGER and REAL alone
WHOLE = sa.BigInteger().with_variant(sa.Integer(), "sqlite")
REAL = sa.Double().with_variant(sa.REAL(), "sqlite")


def upgrade() -> None:
    """Make every table."""
    op.create_table(
        "documents",
        sa.Column("sha256", sa.Text(), nullable=False),
        sa.Column("kind", sa.Text(), nullable=False),
        sa.Column("coding", sa.Text(), nullable=False),
        sa.Column("size", WHOLE, nullable=False),
        sa.Column("body", sa.LargeBinary(), nullable=False),
        sa.CheckConstraint("coding IN ('plain', 'zlib')", name=op.f("ck_documents_coding")),
        sa.CheckConstraint(
            "kind IN ('sequence', 'rig', 'table', 'order', 'timeline', 'record')", name=op.f("ck_documents_kind")
        ),
        sa.CheckConstraint("length(sha256) = 64", name=op.f("ck_documents_sha256_length")),
        sa.CheckConstraint("size >= 0", name=op.f("ck_documents_size")),
        sa.PrimaryKeyConstraint("sha256", name=op.f("pk_documents")),
        sqlite_strict=True,
    )
    op.create_table(
        "rigs",
        sa.Column("id", WHOLE, nullable=False),
        sa.Column("name", sa.Text(), nullable=False),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_rigs")),
        sa.UniqueConstraint("name", name=op.f("uq_rigs_name")),
        sqlite_strict=True,
    )
    op.create_table(
        "leases",
        sa.Column("rig_id", WHOLE, nullable=False),
        sa.Column("epoch", WHOLE, nullable=False),
        sa.Column("owner", sa.Text(), nullable=False),
        sa.Column("until_us", WHOLE, nullable=False),
        sa.CheckConstraint("epoch >= 1", name=op.f("ck_leases_epoch")),
        sa.ForeignKeyConstraint(["rig_id"], ["rigs.id"], name=op.f("fk_leases_rig_id")),
        sa.PrimaryKeyConstraint("rig_id", name=op.f("pk_leases")),
        sqlite_strict=True,
    )
    op.create_table(
        "nights",
        sa.Column("id", WHOLE, nullable=False),
        sa.Column("name", sa.Text(), nullable=False),
        sa.Column("rig_id", WHOLE, nullable=False),
        sa.Column("state", sa.Text(), nullable=False),
        sa.Column("source", sa.Text(), nullable=False),
        sa.Column("clock", sa.Text(), nullable=False),
        sa.Column("rig_file", sa.Text(), nullable=True),
        sa.Column("link", sa.Text(), nullable=False),
        sa.Column("length_s", REAL, nullable=False),
        sa.Column("begins_us", WHOLE, nullable=True),
        sa.Column("next_position", WHOLE, nullable=False),
        sa.Column("unattended", sa.Text(), nullable=True),
        sa.Column("booked_us", WHOLE, nullable=False),
        sa.Column("why", sa.Text(), nullable=True),
        sa.CheckConstraint("clock IN ('real', 'simulated', 'unknown')", name=op.f("ck_nights_clock")),
        sa.CheckConstraint("source IN ('link', 'hand')", name=op.f("ck_nights_source")),
        sa.CheckConstraint("state IN ('booked', 'running', 'stopped', 'done', 'over')", name=op.f("ck_nights_state")),
        sa.CheckConstraint("next_position >= 0", name=op.f("ck_nights_next_position")),
        sa.ForeignKeyConstraint(["rig_file"], ["documents.sha256"], name=op.f("fk_nights_rig_file")),
        sa.ForeignKeyConstraint(["rig_id"], ["rigs.id"], name=op.f("fk_nights_rig_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_nights")),
        sa.UniqueConstraint("name", name=op.f("uq_nights_name")),
        sqlite_strict=True,
    )
    op.create_index(
        "ix_nights_open",
        "nights",
        ["rig_id"],
        unique=False,
        sqlite_where=sa.text("state IN ('booked', 'running', 'stopped')"),
        postgresql_where=sa.text("state IN ('booked', 'running', 'stopped')"),
    )
    op.create_table(
        "anchors",
        sa.Column("night_id", WHOLE, nullable=False),
        sa.Column("boot", sa.Text(), nullable=False),
        sa.Column("utc_us", WHOLE, nullable=False),
        sa.Column("uptime_s", REAL, nullable=False),
        sa.ForeignKeyConstraint(["night_id"], ["nights.id"], name=op.f("fk_anchors_night_id")),
        sa.PrimaryKeyConstraint("night_id", "boot", name=op.f("pk_anchors")),
        sqlite_strict=True,
    )
    op.create_table(
        "audit",
        sa.Column("id", WHOLE, nullable=False),
        sa.Column("at_us", WHOLE, nullable=False),
        sa.Column("who", sa.Text(), nullable=False),
        sa.Column("what", sa.Text(), nullable=False),
        sa.Column("night_id", WHOLE, nullable=True),
        sa.Column("detail", sa.Text(), nullable=False),
        sa.CheckConstraint("json_valid(detail)", name=op.f("ck_audit_detail_json")).ddl_if(dialect="sqlite"),
        sa.ForeignKeyConstraint(["night_id"], ["nights.id"], name=op.f("fk_audit_night_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_audit")),
        sqlite_strict=True,
    )
    op.create_index("ix_audit_night_id", "audit", ["night_id"], unique=False)
    op.create_table(
        "quarantine",
        sa.Column("id", WHOLE, nullable=False),
        sa.Column("at_us", WHOLE, nullable=False),
        sa.Column("night_id", WHOLE, nullable=False),
        sa.Column("key", sa.Text(), nullable=True),
        sa.Column("why", sa.Text(), nullable=False),
        sa.Column("answer", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(["night_id"], ["nights.id"], name=op.f("fk_quarantine_night_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_quarantine")),
        sqlite_strict=True,
    )
    op.create_index("ix_quarantine_night_id", "quarantine", ["night_id"], unique=False)
    op.create_table(
        "requests",
        sa.Column("id", WHOLE, nullable=False),
        sa.Column("night_id", WHOLE, nullable=False),
        sa.Column("number", WHOLE, nullable=False),
        sa.Column("title", sa.Text(), nullable=False),
        sa.Column("sequence", sa.Text(), nullable=False),
        sa.Column("shot_table", sa.Text(), nullable=False),
        sa.Column("goal", sa.Text(), nullable=False),
        sa.Column("seed", WHOLE, nullable=False),
        sa.Column("share", REAL, nullable=False),
        sa.Column("priority", WHOLE, nullable=False),
        sa.Column("state", sa.Text(), nullable=False),
        sa.Column("details", sa.Text(), nullable=False),
        sa.CheckConstraint("state IN ('open', 'done', 'ended')", name=op.f("ck_requests_state")),
        sa.CheckConstraint("json_valid(details)", name=op.f("ck_requests_details_json")).ddl_if(dialect="sqlite"),
        sa.CheckConstraint("share > 0 AND share <= 1", name=op.f("ck_requests_share")),
        sa.ForeignKeyConstraint(["night_id"], ["nights.id"], name=op.f("fk_requests_night_id")),
        sa.ForeignKeyConstraint(["sequence"], ["documents.sha256"], name=op.f("fk_requests_sequence")),
        sa.ForeignKeyConstraint(["shot_table"], ["documents.sha256"], name=op.f("fk_requests_shot_table")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_requests")),
        sa.UniqueConstraint("night_id", "number", name=op.f("uq_requests_night_id_number")),
        sqlite_strict=True,
    )
    op.create_table(
        "revisions",
        sa.Column("night_id", WHOLE, nullable=False),
        sa.Column("number", WHOLE, nullable=False),
        sa.Column("why", sa.Text(), nullable=False),
        sa.Column("seed", WHOLE, nullable=False),
        sa.Column("versions", sa.Text(), nullable=False),
        sa.Column("shot_order", sa.Text(), nullable=False),
        sa.Column("from_position", WHOLE, nullable=False),
        sa.Column("positions", WHOLE, nullable=False),
        sa.Column("made_us", WHOLE, nullable=False),
        sa.CheckConstraint("from_position >= 0 AND positions >= from_position", name=op.f("ck_revisions_positions")),
        sa.CheckConstraint("json_valid(versions)", name=op.f("ck_revisions_versions_json")).ddl_if(dialect="sqlite"),
        sa.CheckConstraint("number >= 1", name=op.f("ck_revisions_number")),
        sa.ForeignKeyConstraint(["night_id"], ["nights.id"], name=op.f("fk_revisions_night_id")),
        sa.ForeignKeyConstraint(["shot_order"], ["documents.sha256"], name=op.f("fk_revisions_shot_order")),
        sa.PrimaryKeyConstraint("night_id", "number", name=op.f("pk_revisions")),
        sqlite_strict=True,
    )
    op.create_table(
        "attempts",
        sa.Column("id", WHOLE, nullable=False),
        sa.Column("key", sa.Text(), nullable=False),
        sa.Column("night_id", WHOLE, nullable=False),
        sa.Column("request_id", WHOLE, nullable=False),
        sa.Column("revision", WHOLE, nullable=False),
        sa.Column("position", WHOLE, nullable=False),
        sa.Column("try_number", WHOLE, nullable=False),
        sa.Column("state", sa.Text(), nullable=False),
        sa.Column("epoch", WHOLE, nullable=False),
        sa.Column("digest", sa.Text(), nullable=False),
        sa.Column("boot", sa.Text(), nullable=True),
        sa.Column("ordinal", WHOLE, nullable=True),
        sa.Column("settle_s", REAL, nullable=False),
        sa.Column("intended_us", WHOLE, nullable=False),
        sa.Column("start_by_us", WHOLE, nullable=True),
        sa.Column("ended_us", WHOLE, nullable=True),
        sa.Column("why", sa.Text(), nullable=True),
        sa.CheckConstraint(
            "(state IN ('done', 'failed', 'withdrawn', 'lost')) = (ended_us IS NOT NULL)",
            name=op.f("ck_attempts_ended"),
        ),
        sa.CheckConstraint(
            "state IN ('intended', 'sent', 'accepted', 'running', 'done', 'failed', 'withdrawn', 'lost')",
            name=op.f("ck_attempts_state"),
        ),
        sa.CheckConstraint(
            "position >= 0 AND try_number >= 1 AND revision >= 1 AND settle_s >= 0", name=op.f("ck_attempts_numbers")
        ),
        sa.ForeignKeyConstraint(["night_id"], ["nights.id"], name=op.f("fk_attempts_night_id")),
        sa.ForeignKeyConstraint(["request_id"], ["requests.id"], name=op.f("fk_attempts_request_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_attempts")),
        sa.UniqueConstraint("key", name=op.f("uq_attempts_key")),
        sa.UniqueConstraint(
            "night_id", "position", "try_number", name=op.f("uq_attempts_night_id_position_try_number")
        ),
        sqlite_strict=True,
    )
    op.create_index(
        "ix_attempts_open",
        "attempts",
        ["night_id", "position", "try_number"],
        unique=False,
        sqlite_where=sa.text("state IN ('intended', 'sent', 'accepted', 'running')"),
        postgresql_where=sa.text("state IN ('intended', 'sent', 'accepted', 'running')"),
    )
    op.create_table(
        "results",
        sa.Column("attempt_id", WHOLE, nullable=False),
        sa.Column("atoms_a", REAL, nullable=True),
        sa.Column("atoms_b", REAL, nullable=True),
        sa.Column("background", REAL, nullable=True),
        sa.Column("saturated", REAL, nullable=True),
        sa.Column("started_us", WHOLE, nullable=True),
        sa.Column("finished_us", WHOLE, nullable=True),
        sa.Column("started_uptime_s", REAL, nullable=True),
        sa.Column("finished_uptime_s", REAL, nullable=True),
        sa.Column("applied", sa.Text(), nullable=False),
        sa.Column("readings", sa.Text(), nullable=False),
        sa.Column("flags", sa.Text(), nullable=False),
        sa.Column("data_reference", sa.Text(), nullable=True),
        sa.Column("answer_sha256", sa.Text(), nullable=False),
        sa.CheckConstraint("json_valid(applied)", name=op.f("ck_results_applied_json")).ddl_if(dialect="sqlite"),
        sa.CheckConstraint("json_valid(flags)", name=op.f("ck_results_flags_json")).ddl_if(dialect="sqlite"),
        sa.CheckConstraint("json_valid(readings)", name=op.f("ck_results_readings_json")).ddl_if(dialect="sqlite"),
        sa.ForeignKeyConstraint(["attempt_id"], ["attempts.id"], name=op.f("fk_results_attempt_id")),
        sa.PrimaryKeyConstraint("attempt_id", name=op.f("pk_results")),
        sqlite_strict=True,
    )


def downgrade() -> None:
    """Refused: going back would throw measurements away."""
    raise NotImplementedError("a logbook is never taken back to an older schema; restore a backup instead")
