"""Inserting where there may be a row already, in both dialects."""

from collections.abc import Mapping
from typing import Any

from sqlalchemy import Connection, Table
from sqlalchemy.dialects import postgresql, sqlite


def insert_if_absent(connection: Connection, table: Table, values: Mapping[str, Any]) -> bool:
    """Insert a row unless one has its primary key; whether it was inserted.

    In PostgreSQL it waits for another transaction that is inserting the same key to end.
    """
    # the key comes back if a row went in; a count of rows is not promised for insertions
    made = table.primary_key.columns
    if connection.dialect.name == "sqlite":
        in_sqlite = sqlite.insert(table).values(**values).on_conflict_do_nothing(index_elements=made)
        return connection.execute(in_sqlite.returning(*made)).one_or_none() is not None
    statement = postgresql.insert(table).values(**values).on_conflict_do_nothing(index_elements=made)
    return connection.execute(statement.returning(*made)).one_or_none() is not None
