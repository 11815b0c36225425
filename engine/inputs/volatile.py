"""What makes an answer worth nothing a moment later: clocks, chance, the session, the catalogue."""

from collections.abc import Collection, Sequence

import duckdb

from midspread.engine.inputs.definitions import meaning_of, own_names, own_table_functions
from midspread.engine.inputs.scanning import FILE_READERS, TABLE_NAMERS, mentions_of
from midspread.engine.inputs.tokens import Token, tokens_of

# Words that are calls without parentheses.
_CLOCK_WORDS = frozenset(
    ("current_date", "current_time", "current_timestamp", "localtime", "localtimestamp")
)
# Table functions of the engine that read nothing but their arguments.
_PURE_TABLE_FUNCTIONS = frozenset(
    (
        "generate_series",
        "histogram",
        "histogram_values",
        "json_each",
        "json_tree",
        "range",
        "repeat",
        "repeat_row",
        "summary",
        "unnest",
    )
)
_CATALOGUE = ("duckdb_", "pg_", "pragma_", "sqlite_")
_STATEMENT_TEXT = """
( create desc describe from pivot pivot_longer pivot_wider select summarize table unpivot values
with
"""
_STATEMENTS = frozenset(_STATEMENT_TEXT.split())


def uses_volatile(sql: str, connection: duckdb.DuckDBPyConnection) -> bool:
    """Whether an answer may differ from one run to the next though no input changed.

    Parameters
    ----------
    sql : str
        One or more statements.
    connection : duckdb.DuckDBPyConnection
        Where they run.

    Returns
    -------
    bool
    """
    return why_volatile([sql], connection) is not None


def why_volatile(
    script: Sequence[str],
    connection: duckdb.DuckDBPyConnection,
    *,
    table_functions: Collection[str] | None = None,
) -> str | None:
    """Say what in a script, its views or its macros is volatile; None when nothing is.

    Parameters
    ----------
    script : sequence of str
        The statements.
    connection : duckdb.DuckDBPyConnection
        Where they run.
    table_functions : collection of str, optional
        Our own table functions; by default those of the catalogue.

    Returns
    -------
    str or None
    """
    own_tables = own_table_functions() if table_functions is None else frozenset(table_functions)
    functions = _Functions(connection)
    meaning = meaning_of(script, connection, own_tables, own_names() | own_tables)
    bodies = list(meaning.definitions.values())
    calls = set(meaning.mentions.calls)
    followed: set[str] = set()
    while names := (calls & functions.macros.keys()) - followed:
        followed |= names
        for name in names:
            bodies.append(functions.macros[name])
            calls |= mentions_of(functions.macros[name], in_macro=True).calls
    known = own_tables | FILE_READERS | TABLE_NAMERS | _PURE_TABLE_FUNCTIONS
    for name in sorted(calls):
        if name in functions.volatile:
            return f"{name}() may give something else at every run"
        if name in functions.tables and name not in known:
            return f"{name}() reads the session, not its inputs"
    reasons = [_why_no_question(sql) for sql in script]
    reasons += [_why_text_is_volatile(sql, functions.macros) for sql in [*script, *bodies]]
    return next(filter(None, reasons), None)


class _Functions:
    """The engine's functions, as far as they matter here."""

    def __init__(self, connection: duckdb.DuckDBPyConnection) -> None:
        rows = connection.execute(
            "SELECT function_name,"
            " bool_and(stability <> 'CONSISTENT'),"
            " bool_or(function_type = 'table'),"
            " string_agg(macro_definition, '; ') FILTER (internal)"
            " FROM duckdb_functions() GROUP BY ALL"
        ).fetchall()
        self.volatile = {name for name, volatile, _, _ in rows if volatile} - {"error"}
        self.tables = {name for name, _, is_table, _ in rows if is_table}
        self.macros: dict[str, str] = {name: body for name, _, _, body in rows if body}


def _why_no_question(sql: str) -> str | None:
    """Refuse whatever does not ask about data: SHOW, EXPLAIN, SET, DESCRIBE without a table."""
    tokens = tokens_of(sql)
    first = True
    for place, token in enumerate(tokens):
        after = tokens[place + 1].word if place + 1 < len(tokens) else ";"
        bare = token.word in ("desc", "describe", "summarize") and after == ";"
        if first and (token.word not in _STATEMENTS or bare):
            return f"{token.text} asks about the session, not about data"
        first = token.word == ";"
    return None


def _why_text_is_volatile(sql: str, macros: Collection[str]) -> str | None:
    tokens = tokens_of(sql)
    for place, token in enumerate(tokens):
        before = tokens[place - 1].word if place else ""
        after = tokens[place + 1].word if place + 1 < len(tokens) else ""
        if token.word in _CLOCK_WORDS and before not in (".", "as"):
            return f"{token.text} is the time of the run"
        if token.word == "tablesample" or (token.word == "sample" and before == "using"):
            return "it draws a sample"
        if token.word == "age" and after == "(" and _has_one_argument(tokens, place + 1):
            return "age() of one time counts from today"
        name = (token.name or "").casefold()
        is_macro = after == "(" and name in macros
        if name == "information_schema" or (name.startswith(_CATALOGUE) and not is_macro):
            return f"{token.name} reads the session, not its inputs"
    return None


def _has_one_argument(tokens: Sequence[Token], opening: int) -> bool:
    depth = 0
    for token in tokens[opening:]:
        depth += (token.word in ("(", "[", "{")) - (token.word in (")", "]", "}"))
        if depth == 1 and token.word == ",":
            return False
        if depth == 0:
            break
    return True
