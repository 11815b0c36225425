"""What the names in a script stand for: views, macros, tables and attached databases."""

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, field

import duckdb

from midspread.engine.inputs.scanning import Mentions, mentions_of, mentions_of_table_text


@dataclass
class Meaning:
    """Everything a script reaches through names.

    Attributes
    ----------
    mentions : Mentions
        What the script, and every view and macro it reaches, mention together.
    definitions : dict
        Text of every view and macro reached, by qualified name.
    databases : dict
        Files of the attached databases that are used, by alias.
    obstacle : str or None
        Why the answer cannot be known again from its inputs, in words.
    """

    mentions: Mentions
    definitions: dict[str, str] = field(default_factory=dict)
    databases: dict[str, str] = field(default_factory=dict)
    obstacle: str | None = None


@dataclass(frozen=True)
class _Macro:
    database: str
    qualified: str
    definition: str


def own_table_functions() -> frozenset[str]:
    """Names of the catalogue's table functions."""
    from midspread.udfs import functions

    return frozenset(name for name, one in functions().items() if one.kind == "table")


def own_names() -> frozenset[str]:
    """Names of all the catalogue's functions."""
    from midspread.udfs import functions

    return frozenset(functions())


def meaning_of(
    script: Sequence[str],
    connection: duckdb.DuckDBPyConnection,
    table_functions: Collection[str],
    own_names: Collection[str],
    *,
    macros_possible: bool = True,
    grids: Mapping[str, int] | None = None,
) -> Meaning:
    """Follow the names in a script through the catalogue.

    Parameters
    ----------
    script : sequence of str
        The statements, in order.
    connection : duckdb.DuckDBPyConnection
        Where they run.
    table_functions : collection of str
        Our own table functions, folded.
    own_names : collection of str
        All our own functions, folded: their bodies are known by their versions.
    macros_possible : bool
        Whether anybody can have made a macro in this session or an attached database.
    grids : mapping, optional
        Stamps of the grids that are tables of this session, by folded name.

    Returns
    -------
    Meaning
    """
    meaning = Meaning(Mentions())
    created: set[str] = set()
    looked_up: set[str] = set()
    for statement in script:
        mentioned = mentions_of(statement, table_functions)
        looked_up |= mentioned.names - created - mentioned.created
        created |= mentioned.created
        meaning.mentions.add(mentioned)
    meaning.mentions.created = created

    views = _views(connection)
    macros = _macros(connection, own_names) if macros_possible else {}
    followed: set[str] = set()
    read_literals: set[str] = set()
    while True:
        texts = [
            text
            for owner, literals in meaning.mentions.literals.items()
            if owner in macros or owner in created
            for text in literals - read_literals
        ]
        names = looked_up & (views.keys() | macros.keys()) - followed
        if not texts and not names:
            break
        for text in texts:
            read_literals.add(text)
            found = mentions_of_table_text(text, table_functions)
            meaning.mentions.add(found)
            looked_up |= found.names - created
        for name in names:
            followed.add(name)
            for found in _follow(name, views, macros, table_functions, meaning):
                meaning.mentions.add(found)
                looked_up |= found.names
    for name in sorted(looked_up & (grids or {}).keys()):
        meaning.definitions["grid " + name] = str((grids or {})[name])
    _find_databases(connection, looked_up, meaning)
    return meaning


def _follow(
    name: str,
    views: Mapping[str, Sequence[tuple[str, str]]],
    macros: Mapping[str, Sequence[_Macro]],
    table_functions: Collection[str],
    meaning: Meaning,
) -> list[Mentions]:
    found = []
    for qualified, sql in views.get(name, ()):
        meaning.definitions["view " + qualified] = sql
        body = mentions_of(sql, table_functions)
        body.created.clear()
        found.append(body)
    for macro in macros.get(name, ()):
        key = "macro " + macro.qualified
        meaning.definitions[key] = meaning.definitions.get(key, "") + macro.definition + ";"
        found.append(mentions_of(macro.definition, table_functions, in_macro=True))
        if macro.database in ("temp", "memory"):
            # The catalogue does not tell the defaults of a macro's parameters.
            meaning.obstacle = f"{name} is a macro made earlier in this session"
    return found


def _views(connection: duckdb.DuckDBPyConnection) -> dict[str, list[tuple[str, str]]]:
    rows = connection.execute(
        "SELECT view_name, database_name || '.' || schema_name || '.' || view_name, sql"
        " FROM duckdb_views() WHERE NOT internal ORDER BY ALL"
    ).fetchall()
    views: dict[str, list[tuple[str, str]]] = {}
    for name, qualified, sql in rows:
        views.setdefault(name.casefold(), []).append((qualified, sql))
    return views


def _macros(
    connection: duckdb.DuckDBPyConnection, own_names: Collection[str]
) -> dict[str, list[_Macro]]:
    rows = connection.execute(
        "SELECT function_name, database_name, schema_name, parameters::VARCHAR, macro_definition"
        " FROM duckdb_functions()"
        " WHERE NOT internal AND function_type IN ('macro', 'table_macro') ORDER BY ALL"
    ).fetchall()
    macros: dict[str, list[_Macro]] = {}
    for name, database, schema, parameters, definition in rows:
        if name.casefold() not in own_names:
            macros.setdefault(name.casefold(), []).append(
                _Macro(database, f"{database}.{schema}.{name}{parameters}", definition or "")
            )
    return macros


def _find_databases(
    connection: duckdb.DuckDBPyConnection, names: set[str], meaning: Meaning
) -> None:
    """Note the attached databases in use, and tables that no file stands behind."""
    search_path, current = connection.execute(
        "SELECT current_setting('search_path'), current_database()"
    ).fetchall()[0]
    default = {current.casefold()} | {
        t.casefold() for t in search_path.replace(".", ",").split(",")
    }
    rows = connection.execute(
        "SELECT database_name, path, type, readonly FROM duckdb_databases()"
        " WHERE database_name NOT IN ('system', 'temp') ORDER BY ALL"
    ).fetchall()
    without_file = {"temp"}
    for name, path, kind, readonly in rows:
        if path is None:
            without_file.add(name)
        elif name.casefold() in names | default:
            meaning.databases[name] = path
            if kind != "duckdb" or not readonly:
                meaning.obstacle = f"{name} is not a DuckDB file attached read-only"
    tables = connection.execute(
        "SELECT table_name, database_name FROM duckdb_tables() WHERE NOT internal"
    ).fetchall()
    for table, database in tables:
        if database in without_file and table.casefold() in names:
            meaning.obstacle = f"{table} is a table of this session only"
