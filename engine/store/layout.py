"""What a store's file holds.

``ledger`` holds what we know, one table a kind; ``about`` says whose file it is and of which
format. ``answers`` holds the contents of kept answers, a few megabytes to a table (a shelf),
because the engine rewrites the last rows of a table at every commit. ``main`` holds the grids as
plain tables that any client can read, ``earlier`` their earlier versions, and ``aside`` what `undo`
may bring back.
"""

from typing import Final

from midspread.engine.store.quoting import literal, quoted

FORMAT = 2
PROGRAM = "midspread"
# Every engine since 1.0 reads files of this version.
STORAGE_VERSION = "v1.0.0"
ALIAS = "store"


_GRID_TABLES: Final = {
    "grids": (
        "grid VARCHAR NOT NULL, kind VARCHAR NOT NULL, sql VARCHAR NOT NULL, keys VARCHAR NOT NULL,"
        " stamp BIGINT NOT NULL, version INTEGER NOT NULL, row_count BIGINT NOT NULL,"
        " changed TIMESTAMPTZ, failure VARCHAR NOT NULL, reads VARCHAR NOT NULL,"
        " record VARCHAR NOT NULL, folder VARCHAR NOT NULL"
    ),
    "columns": (
        "grid VARCHAR NOT NULL, name VARCHAR NOT NULL, kind VARCHAR NOT NULL,"
        " type VARCHAR NOT NULL, expression VARCHAR NOT NULL, place INTEGER NOT NULL"
    ),
    # Values people typed into columns of derived grids, by the row's key, so that they outlive it.
    "entries": (
        "grid VARCHAR NOT NULL, key VARCHAR NOT NULL, name VARCHAR NOT NULL, value VARCHAR,"
        " note VARCHAR NOT NULL, entered TIMESTAMPTZ NOT NULL"
    ),
    "versions": (
        "grid VARCHAR NOT NULL, version INTEGER NOT NULL, made TIMESTAMPTZ NOT NULL,"
        " cause VARCHAR NOT NULL, row_count BIGINT NOT NULL, sql VARCHAR NOT NULL,"
        " record VARCHAR NOT NULL, is_kept BOOLEAN NOT NULL"
    ),
    "changes": (
        "stamp BIGINT NOT NULL, moment TIMESTAMPTZ NOT NULL, grid VARCHAR NOT NULL,"
        " action VARCHAR NOT NULL, key VARCHAR NOT NULL, name VARCHAR NOT NULL, old VARCHAR,"
        " new VARCHAR, note VARCHAR NOT NULL"
    ),
    # How to take a change back: statements to run, in order.
    "undo": "stamp BIGINT NOT NULL, grid VARCHAR NOT NULL, place INTEGER NOT NULL, step VARCHAR",
    "sources": "name VARCHAR NOT NULL, path VARCHAR NOT NULL, kind VARCHAR NOT NULL",
}


def creating_grids(alias: str) -> list[str]:
    """Statements that make room for grids in an attached store."""
    database = quoted(alias)
    tables = [
        f"CREATE TABLE {database}.ledger.{name} ({columns})"
        for name, columns in _GRID_TABLES.items()
    ]
    return [
        f"CREATE SCHEMA {database}.earlier",
        f"CREATE SCHEMA {database}.aside",
        *tables,
        f"INSERT INTO {database}.ledger.about VALUES ('changes', '0')",
    ]


def creating(alias: str) -> list[str]:
    """Statements that make an empty store in an attached database."""
    database = quoted(alias)
    return [
        f"CREATE SCHEMA {database}.ledger",
        f"CREATE SCHEMA {database}.answers",
        f"CREATE TABLE {database}.ledger.about (name VARCHAR NOT NULL, value VARCHAR)",
        f"INSERT INTO {database}.ledger.about VALUES ('program', {literal(PROGRAM)}),"
        f" ('format', {literal(str(FORMAT))}), ('made', now()::VARCHAR), ('numbered', '0')",
        f"CREATE TABLE {database}.ledger.answers ("
        "answer BIGINT NOT NULL, key VARCHAR NOT NULL, sql VARCHAR NOT NULL,"
        " kept TIMESTAMPTZ NOT NULL, last_used TIMESTAMPTZ NOT NULL, row_count BIGINT NOT NULL,"
        " bytes BIGINT NOT NULL, shelf BIGINT NOT NULL, midspread_version VARCHAR)",
        *creating_grids(alias),
    ]


def shelf_table(shelf: int) -> str:
    """Name of the table that holds a shelf's contents."""
    return f"{quoted(ALIAS)}.answers.{quoted(f'shelf_{shelf}')}"


def creating_shelf(shelf: int) -> str:
    """Statement that makes an empty shelf."""
    return (
        f"CREATE TABLE {shelf_table(shelf)}"
        " (answer BIGINT NOT NULL, part INTEGER NOT NULL, inputs VARCHAR, content BLOB NOT NULL)"
    )
