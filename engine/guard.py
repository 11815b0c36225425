"""Refuses every statement that could change a source, write a file or loosen these safeguards.

What may run is listed, what may not is not: a statement passes when DuckDB's own syntax tree of it
holds nothing but query nodes and functions known to be harmless. A statement whose tree cannot be
had is refused.
"""

from collections.abc import Collection, Mapping, Sequence
from typing import Any, Final

import duckdb

from midspread.engine.errors import RefusedStatement
from midspread.engine.harmless import (
    ALLOWED_SETTINGS,
    HARMLESS_TABLE_FUNCTIONS,
    REFUSED_TABLE_FUNCTIONS,
    REFUSED_VOLATILE_FUNCTIONS,
)
from midspread.engine.parsing import Node, NotParsed, Tree, function_name, nodes, one_value, parse
from midspread.engine.pivoting import parse_with_pivots, without_listed_values
from midspread.engine.statements import Kind, Statement

_INTERNAL_NAMES: Final = frozenset(
    {"_values", "_values_of_pairs", "_numbers", "_number", "_text", "_flag", "_estimates"}
)
_QUERY_NODES: Final = frozenset(
    {"SELECT_NODE", "SET_OPERATION_NODE", "RECURSIVE_CTE_NODE", "CTE_NODE"}
)

_INSTEAD: Final[Mapping[str, str]] = {
    "ALTER": "it would change a table; select the columns you want under the names you want",
    "ANALYZE": "it would change a database; leave it out",
    "ATTACH": "it would open a database for writing; use --attach NAME=PATH, which only reads",
    "BEGIN": "a query needs no transaction; leave it out",
    "CALL": "it may change a database; select from the function if it only reads: FROM name(...)",
    "CHECKPOINT": "it would write a database; leave it out",
    "COMMENT": "it would change a table; leave it out",
    "COMMIT": "a query needs no transaction; leave it out",
    "COPY": "it would write a file or a table; use --out FILE to write the answer, "
    "and FROM 'file.csv' to read a file",
    "CREATE": "it would create something that stays; "
    "use CREATE TEMP VIEW, CREATE TEMP MACRO or WITH name AS (...)",
    "DEALLOCATE": "statements are not prepared here; leave it out",
    "DELETE": "it would change a table; use WHERE to leave rows out",
    "DETACH": "it would close a source; leave it out of --attach instead",
    "DROP": "it would remove something; use CREATE OR REPLACE TEMP VIEW to define a view anew",
    "EXECUTE": "statements are not prepared here; write the SELECT itself",
    "EXPORT": "it would write files; use --out FILE to write the answer",
    "IMPORT": "it would change a database; read the files in place: FROM 'file.parquet'",
    "INSERT": "it would change a table; use UNION ALL to add rows to an answer",
    "INSTALL": "it would download an extension, and nothing is downloaded here; leave it out",
    "LOAD": "it would run another program's code; leave it out",
    "MERGE": "it would change a table; use JOIN to combine rows in an answer",
    "PRAGMA": "it may change a database or a setting; "
    "use SHOW TABLES, DESCRIBE name or FROM duckdb_settings()",
    "PREPARE": "statements are not prepared here; write the SELECT itself",
    "REPLACE": "it would change a table; use UNION ALL to add rows to an answer",
    "ROLLBACK": "a query needs no transaction; leave it out",
    "SET": "it may change a setting that keeps files safe; "
    "use SET with one plain value for one of: " + ", ".join(sorted(ALLOWED_SETTINGS)),
    "TRUNCATE": "it would change a table; use WHERE to leave rows out",
    "UPDATE": "it would change a table; compute the new value in SELECT",
    "VACUUM": "it would write a database; leave it out",
}
_SYNONYMS: Final = {
    "ABORT": "ROLLBACK",
    "ANALYSE": "ANALYZE",
    "END": "COMMIT",
    "FORCE": "INSTALL",
    "RESET": "SET",
    "START": "BEGIN",
    "UPSERT": "INSERT",
}


class Guard:
    """Judges statements against the functions of one session.

    Parameters
    ----------
    connection : duckdb.DuckDBPyConnection
        Any connection; it parses and looks up names, it never runs the statement.
    own_names : collection of str
        Our functions, which no macro may take over.
    own_tables : mapping of str to sequence of str
        Our table functions with the names of their required arguments. `tbl` and `expression` hold
        SQL to be judged as well.
    """

    def __init__(
        self,
        connection: duckdb.DuckDBPyConnection,
        own_names: Collection[str],
        own_tables: Mapping[str, Sequence[str]],
    ) -> None:
        self._connection = connection
        self._own_names = own_names
        self._own_tables = own_tables

    def check(self, statement: Statement) -> None:
        """Raise RefusedStatement unless the statement only reads.

        Raises
        ------
        RefusedStatement
            With a sentence that says what to use instead.
        NotParsed
            When what it holds is no SQL.
        """
        if statement.kind is Kind.OTHER:
            word = statement.first_word
            is_known = word in _INSTEAD or word in _SYNONYMS
            raise refusal(word if is_known else statement.engine_type)
        if statement.kind is Kind.SETTING:
            if statement.name not in ALLOWED_SETTINGS:
                raise refusal("SET", f"SET {statement.name}")
        elif statement.kind is not Kind.USE:
            if statement.kind in (Kind.VIEW, Kind.MACRO):
                self._check_name(statement)
            self.check_tree(self._tree(statement), in_macro=statement.kind is Kind.MACRO)

    def check_tree(self, tree: Tree, *, in_macro: bool = False) -> None:
        """Raise RefusedStatement unless a query only reads.

        Within a macro a bare name may be a parameter, and stand for any text.
        """
        for node in nodes(tree.root):
            kind = node.get("type")
            if isinstance(kind, str) and kind.endswith("_NODE") and kind not in _QUERY_NODES:
                word = kind.split("_")[0]
                raise refusal(word, f"{word} inside WITH")
            if kind == "TABLE_FUNCTION":
                self._check_table_function(node["function"], in_macro)
            elif (name := function_name(node)) and _is_refused_function(name):
                raise RefusedStatement(
                    f"query refuses {name}(): it would change something outside the answer; "
                    f"leave it out."
                )

    def _tree(self, statement: Statement) -> Tree:
        text = statement.body_text
        if statement.is_expression:
            try:
                return parse(self._connection, f"SELECT ({text})")
            except NotParsed:
                raise RefusedStatement(
                    f"query refuses this CREATE TEMP MACRO: {statement.name} must have a single "
                    f"definition that is one expression; split it into several macros."
                    if statement.kind is Kind.MACRO
                    else f"query refuses this SET VARIABLE: {statement.name} must be set to one "
                    f"expression; write SET VARIABLE {statement.name} = value."
                ) from None
        try:
            return parse_with_pivots(self._connection, text)
        except NotParsed as error:
            if error.is_syntax:
                raise
            raise _unseen(statement, error) from None

    def _check_name(self, statement: Statement) -> None:
        name = statement.name.lower()
        if name.lstrip("_") in self._own_names or name in _INTERNAL_NAMES:
            raise RefusedStatement(
                f"query refuses CREATE {statement.name}: this name is one of Midspread's own; "
                f"choose another name."
            )

    def _check_table_function(self, call: Node, in_macro: bool) -> None:
        name = function_name(call) or ""
        if name in REFUSED_TABLE_FUNCTIONS or self._is_unknown_builtin(name):
            raise RefusedStatement(
                f"query refuses {name}(): it would change or reach something outside the answer; "
                f"leave it out."
            )
        if name == "query":
            self._check_text(name, call, "", in_macro)
        elif name in self._own_tables:
            self._check_text(name, call, "FROM ", in_macro)
            if "expression" in self._own_tables[name]:
                self._check_expression(name, call)

    def _check_text(self, name: str, call: Node, before: str, in_macro: bool) -> None:
        """Judge SQL that a function is given as text."""
        given = next((a for a in call["arguments"] if a["name"] in ("", "tbl")), None)
        if given is None:
            return
        text = _constant_text(given["expression"])
        if text is None and before and not in_macro and _is_name(given["expression"]):
            return
        if text is None:
            example = f"{name}('visits', ...)" if before else "the query itself in parentheses"
            raise RefusedStatement(
                f"query refuses {name}() over a computed text: what it reads must be written out "
                f"as one string; write {example}."
            )
        if before and not _is_sql(text):
            return
        try:
            self.check_tree(parse_with_pivots(self._connection, before + text))
        except NotParsed as error:
            raise RefusedStatement(
                f"query refuses {name}() over this text: it is no query ({error.reason}); "
                f"give a table, a file or a query in parentheses."
            ) from None

    def _check_expression(self, name: str, call: Node) -> None:
        """Judge an SQL expression that one of our table functions is given as text."""
        place = self._own_tables[name].index("expression")
        given = next(
            (
                argument["expression"]
                for position, argument in enumerate(call["arguments"])
                if argument["name"] == "expression" or (position == place and not argument["name"])
            ),
            None,
        )
        if given is None:
            return
        text = _constant_text(given)
        if text is None:
            raise RefusedStatement(
                f"query refuses {name}() over a computed text: expression must be written out as "
                f"one string; write expression := 'sum(boardings) / sum(dwell_s)'."
            )
        try:
            # The line break ends a comment.
            self.check_tree(parse(self._connection, f"SELECT ({text}\n)"))
        except NotParsed as error:
            raise RefusedStatement(
                f"query refuses {name}() over this text: it is no expression ({error.reason}); "
                f"write expression := 'sum(boardings) / sum(dwell_s)'."
            ) from None

    def _is_unknown_builtin(self, name: str) -> bool:
        if name in HARMLESS_TABLE_FUNCTIONS or name in self._own_tables:
            return False
        found = one_value(
            self._connection,
            "SELECT 1 FROM duckdb_functions() "
            "WHERE lower(function_name) = ? AND function_type = 'table' LIMIT 1",
            [name],
        )
        return found is not None


def refusal(word: str, shown: str | None = None) -> RefusedStatement:
    """The sentence for a statement that begins with this word."""
    known = _SYNONYMS.get(word, word)
    instead = _INSTEAD.get(known, "it is no query; use SELECT")
    return RefusedStatement(f"query refuses {shown or known}: {instead}.")


def _unseen(statement: Statement, error: NotParsed) -> RefusedStatement:
    """The sentence for a statement that DuckDB shows no tree of."""
    word = _first_word(statement.body_text)
    if word in _INSTEAD or word in _SYNONYMS:
        return refusal(word, f"{statement.first_word} {word}")
    if without_listed_values(statement.body_text) is not None:
        return RefusedStatement(
            "query refuses this PIVOT: what it would run cannot be seen; "
            "list its columns, for example ON day_part IN ('peak', 'evening')."
        )
    return RefusedStatement(
        f"query refuses this statement: what it would run cannot be seen ({error.reason}); "
        f"write it as a plain SELECT."
    )


def _is_refused_function(name: str) -> bool:
    return name in REFUSED_VOLATILE_FUNCTIONS or name.startswith("__internal")


def _constant_text(node: Any) -> str | None:
    literal = node.get("literal") if node.get("class") == "CONSTANT" else None
    if isinstance(literal, dict) and literal.get("kind") == "STRING":
        return str(literal.get("text"))
    return None


def _is_name(node: Node) -> bool:
    return node.get("class") == "COLUMN_REF"


def _is_sql(table: str) -> bool:
    """Whether a `tbl` argument is a query or a call rather than a name or a file."""
    return table.lstrip().startswith("(") or table.rstrip().endswith(")")


def _first_word(text: str) -> str:
    return text.split(None, 1)[0].upper() if text.split() else ""
