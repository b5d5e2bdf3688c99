"""Keys, aircraft, flights, reductions, idempotency keys, audit trail.

A migration stands for itself: what it says never changes, whatever becomes of the code, so it shares nothing with it.
"""

import sqlalchemy as sa
from alembic import op

revision = "0001"
down_revision = None

TIME = sa.DateTime(timezone=True)
OPEN = sa.text("state IN ('queued', 'running')")
NOT_DONE = sa.text("state <> 'done'")


def upgrade() -> None:
    _create_keys()
    _create_aircraft()
    _create_flights()
    _create_reductions()
    _create_idempotency()
    _create_audit()


def _ordered(length: int | None = None) -> sa.types.TypeEngine[str]:
    return sa.String(length).with_variant(sa.String(length, collation="C"), "postgresql")


def _create_keys() -> None:
    op.create_table(
        "keys",
        sa.Column("key_id", _ordered(16), nullable=False),
        sa.Column("owner", _ordered(), nullable=False),
        sa.Column("label", sa.String(), nullable=False),
        sa.Column("scopes", sa.String(), nullable=False),
        sa.Column("secret_sha256", sa.String(64), nullable=False),
        sa.Column("created_utc", TIME, nullable=False),
        sa.Column("revoked_utc", TIME),
        sa.PrimaryKeyConstraint("key_id", name="pk_keys"),
        sa.UniqueConstraint("secret_sha256", name="uq_keys_secret_sha256"),
    )


def _create_aircraft() -> None:
    op.create_table(
        "aircraft",
        sa.Column("owner", _ordered(), nullable=False),
        sa.Column("name", _ordered(), nullable=False),
        sa.Column("profile", sa.Text(), nullable=False),
        sa.Column("version", sa.Integer(), nullable=False),
        sa.Column("profile_version", sa.Integer(), nullable=False),
        sa.Column("installation_from_utc", TIME),
        sa.Column("created_utc", TIME, nullable=False),
        sa.PrimaryKeyConstraint("owner", "name", name="pk_aircraft"),
    )


def _create_flights() -> None:
    op.create_table(
        "flights",
        sa.Column("flight_id", _ordered(26), nullable=False),
        sa.Column("owner", _ordered(), nullable=False),
        sa.Column("aircraft", _ordered()),
        sa.Column("log_sha256", sa.String(64), nullable=False),
        sa.Column("log_bytes", sa.BigInteger(), nullable=False),
        sa.Column("log_media_type", sa.String(), nullable=False),
        sa.Column("created_utc", TIME, nullable=False),
        sa.Column("flown_utc", TIME, nullable=False),
        sa.Column("duplicate_of", _ordered(26)),
        sa.Column("exclusion_reason", sa.Text()),
        sa.Column("excluded_utc", TIME),
        sa.Column("log_deleted_utc", TIME),
        sa.Column("latest_number", sa.Integer(), nullable=False),
        sa.Column("done_number", sa.Integer()),
        sa.Column("verdict", sa.String(8)),
        sa.PrimaryKeyConstraint("flight_id", name="pk_flights"),
        sa.ForeignKeyConstraint(
            ["owner", "aircraft"], ["aircraft.owner", "aircraft.name"], name="fk_flights_owner_aircraft"
        ),
    )
    op.create_index("ix_flights_log_sha256", "flights", ["log_sha256"])
    op.create_index("ix_flights_created_utc", "flights", ["created_utc"])
    op.create_index("ix_flights_duplicate_of", "flights", ["duplicate_of"])
    op.create_index("ix_flights_owner_flight", "flights", ["owner", "flight_id"])
    op.create_index("ix_flights_owner_aircraft_flight", "flights", ["owner", "aircraft", "flight_id"])
    op.create_index("ix_flights_owner_flown", "flights", ["owner", "flown_utc"])
    op.create_index("ix_flights_owner_verdict_flight", "flights", ["owner", "verdict", "flight_id"])


def _create_reductions() -> None:
    op.create_table(
        "reductions",
        sa.Column("flight_id", _ordered(26), nullable=False),
        sa.Column("number", sa.Integer(), autoincrement=False, nullable=False),
        sa.Column("settings", sa.Text(), nullable=False),
        sa.Column("profile", sa.Text(), nullable=False),
        sa.Column("profile_version", sa.Integer()),
        sa.Column("state", sa.String(9), nullable=False),
        sa.Column("attempts", sa.Integer(), nullable=False),
        sa.Column("fence", sa.Integer(), nullable=False),
        sa.Column("worker", sa.String()),
        sa.Column("lease_until_s", sa.Double()),
        sa.Column("lease_s", sa.Double()),
        sa.Column("progress", sa.Double(), nullable=False),
        sa.Column("cancel_requested", sa.Boolean(), nullable=False),
        sa.Column("failure", sa.Text()),
        sa.Column("summary", sa.Text()),
        sa.Column("verdict", sa.String(8)),
        sa.Column("log_speed_scale", sa.Double()),
        sa.Column("log_speed_scale_uncertainty", sa.Double()),
        sa.Column("created_utc", TIME, nullable=False),
        sa.Column("finished_utc", TIME),
        sa.Column("series_key", sa.String()),
        sa.Column("method", sa.String()),
        sa.PrimaryKeyConstraint("flight_id", "number", name="pk_reductions"),
        sa.ForeignKeyConstraint(
            ["flight_id"], ["flights.flight_id"], name="fk_reductions_flight_id", ondelete="CASCADE"
        ),
    )
    op.create_index("ix_reductions_series_key", "reductions", ["series_key"])
    op.create_index(
        "ix_reductions_open",
        "reductions",
        ["created_utc", "flight_id", "number"],
        sqlite_where=OPEN,
        postgresql_where=OPEN,
    )
    op.create_index(
        "ix_reductions_not_done",
        "reductions",
        ["state", "flight_id"],
        sqlite_where=NOT_DONE,
        postgresql_where=NOT_DONE,
    )


def _create_idempotency() -> None:
    op.create_table(
        "idempotency",
        sa.Column("owner", _ordered(), nullable=False),
        sa.Column("key", _ordered(), nullable=False),
        sa.Column("request_hash", sa.String(64), nullable=False),
        sa.Column("flight_id", _ordered(26), nullable=False),
        sa.Column("number", sa.Integer(), nullable=False),
        sa.Column("created_utc", TIME, nullable=False),
        sa.PrimaryKeyConstraint("owner", "key", name="pk_idempotency"),
        sa.ForeignKeyConstraint(
            ["flight_id"],
            ["flights.flight_id"],
            name="fk_idempotency_flight_id",
            ondelete="CASCADE",
            deferrable=True,
            initially="DEFERRED",
        ),
    )
    op.create_index("ix_idempotency_flight_id", "idempotency", ["flight_id"])
    op.create_index("ix_idempotency_created_utc", "idempotency", ["created_utc"])


def _create_audit() -> None:
    op.create_table(
        "audit",
        sa.Column("note_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("at_utc", TIME, nullable=False),
        sa.Column("owner", _ordered(), nullable=False),
        sa.Column("key_id", sa.String()),
        sa.Column("action", sa.String(), nullable=False),
        sa.Column("object", sa.String(), nullable=False),
        sa.Column("detail", sa.Text()),
        sa.PrimaryKeyConstraint("note_id", name="pk_audit"),
    )
    op.create_index("ix_audit_owner_note", "audit", ["owner", "note_id"])
