"""Migrations: what they make is what the tables say, once, whoever comes first."""

import fcntl
from pathlib import Path

import pytest
from alembic.autogenerate import compare_metadata
from alembic.migration import MigrationContext
from alembic.script import ScriptDirectory
from sqlalchemy import URL, inspect, text
from sqlalchemy.dialects import postgresql

from service.storage import migrate
from service.storage.engine import open_engine, reading, sqlite_url, writing
from service.storage.errors import DatabaseTooNew, StorageUnavailable
from service.storage.migrate import LOCK_SUFFIX, alembic_config, bring_up_to_date, is_up_to_date
from service.storage.tables import metadata
from tests.storage.conftest import SQLITE
from tests.storage.processes import at_once


def test_four_processes_on_an_empty_database(empty_url: URL) -> None:
    assert at_once(4, "migrate", empty_url) == [True] * 4
    engine = open_engine(empty_url)
    assert is_up_to_date(engine)
    assert set(inspect(engine).get_table_names()) == {*metadata.tables, "alembic_version"}
    engine.dispose()


def test_the_migrations_make_the_tables_that_the_code_uses(url: URL) -> None:
    engine = open_engine(url)
    with reading(engine) as connection:
        context = MigrationContext.configure(connection, opts={"compare_type": True, "compare_server_default": True})
        assert compare_metadata(context, metadata) == []
    engine.dispose()


def test_sqlite_is_migrated_by_one_process_at_a_time(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Its lock beside the file is needed: two that turn an empty file to write-ahead logging disturb each other."""

    def look(_engine: object) -> bool:
        with open(tmp_path / f"loiterwise.sqlite{LOCK_SUFFIX}", "w") as other, pytest.raises(BlockingIOError):
            fcntl.flock(other, fcntl.LOCK_EX | fcntl.LOCK_NB)
        looked.append(True)
        return True

    looked: list[bool] = []
    monkeypatch.setattr(migrate, "is_up_to_date", look)
    bring_up_to_date(sqlite_url(tmp_path))
    bring_up_to_date(sqlite_url(tmp_path))
    assert looked == [True, True]


def test_what_pages_hang_on_is_ordered_by_its_bytes_in_every_locale(url: URL, database: str) -> None:
    wanted = {
        (table.name, column.name)
        for table in metadata.sorted_tables
        for column in table.columns
        if getattr(column.type.dialect_impl(postgresql.dialect()), "collation", None) == "C"
    }
    assert {("flights", "flight_id"), ("aircraft", "name"), ("reductions", "flight_id")} < wanted
    if database == SQLITE:
        return
    engine = open_engine(url)
    with reading(engine) as connection:
        found = connection.execute(
            text(
                "SELECT table_name, column_name FROM information_schema.columns"
                " WHERE collation_name = 'C' AND table_schema = 'public'"
            )
        )
        assert {(row.table_name, row.column_name) for row in found} == wanted
    engine.dispose()


def test_an_empty_database_is_not_up_to_date_and_a_second_time_changes_nothing(empty_url: URL) -> None:
    engine = open_engine(empty_url)
    assert not is_up_to_date(engine)
    bring_up_to_date(empty_url)
    assert is_up_to_date(engine)
    with writing(engine) as connection:
        connection.execute(text("INSERT INTO aircraft VALUES ('o', 'n', '{}', 1, 1, NULL, '2026-01-01 00:00')"))
    bring_up_to_date(empty_url)
    with reading(engine) as connection:
        assert connection.execute(text("SELECT count(*) FROM aircraft")).scalar_one() == 1
    engine.dispose()


def test_a_database_of_a_newer_version_is_left_alone(own_url: URL) -> None:
    engine = open_engine(own_url)
    with writing(engine) as connection:
        connection.execute(text("UPDATE alembic_version SET version_num = 'of tomorrow'"))
    with pytest.raises(DatabaseTooNew):
        bring_up_to_date(own_url)
    with pytest.raises(DatabaseTooNew):
        is_up_to_date(engine)
    engine.dispose()


def test_a_migration_that_fails_leaves_nothing(empty_url: URL, monkeypatch: pytest.MonkeyPatch) -> None:
    def break_off(config: object, revision: str) -> None:
        upgrade(config, revision)
        raise ZeroDivisionError

    upgrade = migrate.command.upgrade
    monkeypatch.setattr(migrate.command, "upgrade", break_off)
    with pytest.raises(ZeroDivisionError):
        bring_up_to_date(empty_url)
    engine = open_engine(empty_url)
    assert inspect(engine).get_table_names() == []
    monkeypatch.undo()
    bring_up_to_date(empty_url)
    assert is_up_to_date(engine)
    engine.dispose()


def test_copying_a_table_in_sqlite_keeps_its_children(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A batch migration drops the old table; with foreign keys on, the rows that refer to it would go along."""

    def copy_flights(config: object, _revision: str) -> None:
        connection = config.attributes["connection"]  # type: ignore[attr-defined]
        connection.execute(text("CREATE TABLE copy AS SELECT * FROM flights"))
        connection.execute(text("DROP TABLE flights"))
        connection.execute(text("ALTER TABLE copy RENAME TO flights"))
        connection.execute(text("CREATE UNIQUE INDEX of_copy ON flights (flight_id)"))

    url = sqlite_url(tmp_path)
    bring_up_to_date(url)
    engine = open_engine(url)
    with writing(engine) as connection:
        connection.execute(
            text(
                "INSERT INTO flights (flight_id, owner, log_sha256, log_bytes, log_media_type, created_utc, flown_utc,"
                " latest_number) VALUES ('f', 'o', 'h', 1, 'm', '2026-01-01', '2026-01-01', 1)"
            )
        )
        connection.execute(text("INSERT INTO idempotency VALUES ('o', 'k', 'h', 'f', 1, '2026-01-01')"))
    monkeypatch.setattr(migrate, "is_up_to_date", lambda _engine: False)
    monkeypatch.setattr(migrate.command, "upgrade", copy_flights)
    bring_up_to_date(url)
    with reading(engine) as connection:
        assert connection.execute(text("SELECT count(*) FROM idempotency")).scalar_one() == 1
    engine.dispose()


def test_a_folder_that_cannot_be_made(tmp_path: Path) -> None:
    (tmp_path / "a file").write_text("in the way")
    with pytest.raises(StorageUnavailable):
        bring_up_to_date(sqlite_url(tmp_path / "a file" / "data"))


def test_the_folder_of_a_new_database_is_made(tmp_path: Path) -> None:
    bring_up_to_date(sqlite_url(tmp_path / "new" / "data"))
    assert (tmp_path / "new" / "data" / "loiterwise.sqlite").is_file()


def test_there_is_one_line_of_migrations() -> None:
    assert len(ScriptDirectory.from_config(alembic_config()).get_heads()) == 1
