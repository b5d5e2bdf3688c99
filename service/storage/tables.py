"""The tables as they are now. How they came about is in `migrations/`; a test holds the two together."""

from sqlalchemy import (
    BigInteger,
    Boolean,
    Column,
    Double,
    ForeignKey,
    ForeignKeyConstraint,
    Index,
    Integer,
    MetaData,
    PrimaryKeyConstraint,
    String,
    Table,
    Text,
    text,
)

from service.storage.columns import JsonText, UtcTime, counting_integer, ordered_text

NAMES = {
    "ix": "ix_%(table_name)s_%(column_0_N_name)s",
    "uq": "uq_%(table_name)s_%(column_0_N_name)s",
    "fk": "fk_%(table_name)s_%(column_0_N_name)s",
    "pk": "pk_%(table_name)s",
}
"""Every constraint has a name, so that a migration can find it in both databases."""

metadata = MetaData(naming_convention=NAMES)

keys = Table(
    "keys",
    metadata,
    Column("key_id", ordered_text(16), primary_key=True),
    Column("owner", ordered_text(), nullable=False),
    Column("label", String, nullable=False),
    # scopes, separated by blanks
    Column("scopes", String, nullable=False),
    Column("secret_sha256", String(64), nullable=False, unique=True),
    Column("created_utc", UtcTime, nullable=False),
    Column("revoked_utc", UtcTime),
)

aircraft = Table(
    "aircraft",
    metadata,
    Column("owner", ordered_text()),
    Column("name", ordered_text()),
    Column("profile", JsonText, nullable=False),
    Column("version", Integer, nullable=False),
    # the version that brought the present profile: a new installation leaves results as they are
    Column("profile_version", Integer, nullable=False),
    Column("installation_from_utc", UtcTime),
    Column("created_utc", UtcTime, nullable=False),
    PrimaryKeyConstraint("owner", "name"),
)

flights = Table(
    "flights",
    metadata,
    Column("flight_id", ordered_text(26), primary_key=True),
    Column("owner", ordered_text(), nullable=False),
    Column("aircraft", ordered_text()),
    Column("log_sha256", String(64), nullable=False, index=True),
    Column("log_bytes", BigInteger, nullable=False),
    Column("log_media_type", String, nullable=False),
    Column("created_utc", UtcTime, nullable=False, index=True),
    Column("flown_utc", UtcTime, nullable=False),
    Column("duplicate_of", ordered_text(26), index=True),
    Column("exclusion_reason", Text),
    Column("excluded_utc", UtcTime),
    Column("log_deleted_utc", UtcTime),
    # numbers of the newest reduction, and of the newest one that is done
    Column("latest_number", Integer, nullable=False),
    Column("done_number", Integer),
    # of the latter; here, too, so that a rare verdict is found among a million flights
    Column("verdict", String(8)),
    ForeignKeyConstraint(["owner", "aircraft"], ["aircraft.owner", "aircraft.name"]),
    Index("ix_flights_owner_flight", "owner", "flight_id"),
    Index("ix_flights_owner_aircraft_flight", "owner", "aircraft", "flight_id"),
    Index("ix_flights_owner_flown", "owner", "flown_utc"),
    Index("ix_flights_owner_verdict_flight", "owner", "verdict", "flight_id"),
)

reductions = Table(
    "reductions",
    metadata,
    Column("flight_id", ordered_text(26), ForeignKey("flights.flight_id", ondelete="CASCADE")),
    Column("number", Integer, autoincrement=False),
    Column("settings", JsonText, nullable=False),
    # the aircraft's profile as it was when the reduction was asked for
    Column("profile", JsonText, nullable=False),
    Column("profile_version", Integer),
    Column("state", String(9), nullable=False),
    Column("attempts", Integer, nullable=False),
    Column("fence", Integer, nullable=False),
    Column("worker", String),
    # end of the lease in seconds since 1970 on the database's clock, and its length
    Column("lease_until_s", Double),
    Column("lease_s", Double),
    Column("progress", Double, nullable=False),
    Column("cancel_requested", Boolean, nullable=False),
    Column("failure", Text),
    Column("summary", JsonText),
    Column("verdict", String(8)),
    Column("log_speed_scale", Double),
    Column("log_speed_scale_uncertainty", Double),
    Column("created_utc", UtcTime, nullable=False),
    Column("finished_utc", UtcTime),
    Column("series_key", String, index=True),
    Column("method", String),
    PrimaryKeyConstraint("flight_id", "number"),
)

OPEN_STATES = "state IN ('queued', 'running')"
NOT_DONE = "state <> 'done'"
"""Written out, not bound, wherever they are asked: so a small index answers, however many are done."""

Index(
    "ix_reductions_open",
    reductions.c.created_utc,
    reductions.c.flight_id,
    reductions.c.number,
    sqlite_where=text(OPEN_STATES),
    postgresql_where=text(OPEN_STATES),
)

Index(
    "ix_reductions_not_done",
    reductions.c.state,
    reductions.c.flight_id,
    sqlite_where=text(NOT_DONE),
    postgresql_where=text(NOT_DONE),
)

idempotency = Table(
    "idempotency",
    metadata,
    Column("owner", ordered_text()),
    Column("key", ordered_text()),
    Column("request_hash", String(64), nullable=False),
    # written before the flight, in the same transaction: so two requests with one key meet here
    Column(
        "flight_id",
        ordered_text(26),
        ForeignKey("flights.flight_id", ondelete="CASCADE", deferrable=True, initially="DEFERRED"),
        nullable=False,
        index=True,
    ),
    Column("number", Integer, nullable=False),
    Column("created_utc", UtcTime, nullable=False, index=True),
    PrimaryKeyConstraint("owner", "key"),
)

audit = Table(
    "audit",
    metadata,
    Column("note_id", counting_integer(), primary_key=True),
    Column("at_utc", UtcTime, nullable=False),
    Column("owner", ordered_text(), nullable=False),
    Column("key_id", String),
    Column("action", String, nullable=False),
    Column("object", String, nullable=False),
    Column("detail", JsonText),
    Index("ix_audit_owner_note", "owner", "note_id"),
)
