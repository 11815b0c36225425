"""What a store's file holds.

``ledger`` holds what we know, one table a kind; ``about`` says whose file it is and of which
format. ``answers`` holds the contents of kept answers, a few megabytes to a table (a shelf),
because the engine rewrites the last rows of a table at every commit. The schema ``main`` is left
to the tables that people keep.
"""

from midspread.engine.store.quoting import literal, quoted

FORMAT = 1
PROGRAM = "midspread"
# Every engine since 1.0 reads files of this version.
STORAGE_VERSION = "v1.0.0"
ALIAS = "store"


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
