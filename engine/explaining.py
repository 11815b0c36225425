"""Sentences about errors that need looking something up: names, files, limits."""

import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

import duckdb

from midspread.engine.engine_errors import EngineError
from midspread.engine.nearest import did_you_mean, nearest, nearest_file
from midspread.engine.parsing import one_value, tokens
from midspread.udfs import Function

_FILE_ENDINGS: Final = (".csv", ".tsv", ".parquet", ".json", ".ndjson", ".jsonl", ".gz", ".zst")
_READABLE: Final = "CSV, Parquet, JSON and DuckDB files can be read"


@dataclass(frozen=True)
class Case:
    """One error with all there is to explain it by.

    Attributes
    ----------
    index : int or None
        Where it is in the script.
    found : re.Match
        The part of the engine's words that was recognised.
    """

    connection: duckdb.DuckDBPyConnection
    functions: Mapping[str, Function]
    error: EngineError
    sql: str
    index: int | None
    found: re.Match[str]

    @property
    def place(self) -> str:
        """Where it is, with a space before it."""
        return place(self.sql, self.index)

    def names_of_functions(self) -> set[str]:
        """Every function there is, ours and the engine's."""
        rows = self.connection.execute(
            "SELECT DISTINCT function_name FROM duckdb_functions() WHERE function_type <> 'pragma'"
        ).fetchall()
        names = {name for (name,) in rows if name[0].isalpha() and "collate_" not in name}
        return names | set(self.functions)

    def is_aggregate(self, name: str) -> bool:
        """Whether a function goes in SELECT and makes one value of many rows."""
        known = self.functions.get(name)
        if known is not None:
            return known.kind != "table"
        found = one_value(
            self.connection,
            "SELECT 1 FROM duckdb_functions() WHERE function_name = ? "
            "AND function_type IN ('aggregate', 'scalar') LIMIT 1",
            [name],
        )
        return found is not None

    def names_of_tables(self) -> set[str]:
        """Every table and view there is, as one would write it."""
        rows = self.connection.execute(
            "SELECT database_name, table_name FROM duckdb_tables() WHERE NOT internal "
            "UNION ALL SELECT database_name, view_name FROM duckdb_views() WHERE NOT internal"
        ).fetchall()
        return {
            table if database in ("memory", "temp") else f"{database}.{table}"
            for database, table in rows
        }


def place(sql: str, index: int | None) -> str:
    """Where an index into a script is, in words, with a space before it.

    Examples
    --------
    >>> place("SELECT 1", 7)
    ' (line 1, column 8)'
    """
    if index is None or not 0 <= index <= len(sql):
        return ""
    line = sql.count("\n", 0, index) + 1
    column = index - (sql.rfind("\n", 0, index) + 1) + 1
    return f" (line {line}, column {column})"


def _candidates(case: Case) -> list[str]:
    """The names that the engine offers instead."""
    _, _, offered = case.error.words.partition("Candidate")
    return re.findall(r'"([^"]+)"', offered)


def _listed(start: str, names: list[str]) -> str:
    return f"{start} {', '.join(names[:8])}." if names else "check the name."


def unknown_column(case: Case) -> str:
    name = str(case.error.details.get("name") or case.found[1])
    wrong = _equals_for_walrus(case, name)
    if wrong is not None:
        return wrong
    meant = nearest(name, _candidates(case))
    return f"query: there is no column {name}{case.place}; " + did_you_mean(
        meant, "DESCRIBE followed by the table lists its columns."
    )


def _equals_for_walrus(case: Case, name: str) -> str | None:
    """The sentence for ``share = 0.5`` within a call, where ``share := 0.5`` was meant."""
    if case.index is None:
        return None
    found = tokens(case.sql)
    at = next((i for i, token in enumerate(found) if token.start == case.index), None)
    if at is None or at + 2 >= len(found) or found[at + 1].text != "=":
        return None
    depth, opening = 0, at - 1
    while opening > 0 and depth >= 0:
        depth += (found[opening].text == ")") - (found[opening].text == "(")
        if depth >= 0:
            opening -= 1
    function = case.functions.get(found[opening - 1].text.lower()) if opening > 0 else None
    if function is None or name.lower() not in [p.name for p in function.parameters]:
        return None
    end = next((i for i in range(at + 2, len(found)) if found[i].text in (",", ")")), at + 3)
    value = case.sql[found[at + 2].start : found[end - 1].stop]
    return (
        f"{function.name}: {name} = {value} compares a column called {name}{case.place}; "
        f"write {name} := {value}."
    )


def unknown_function(case: Case) -> str:
    kind, name = case.found[1], case.found[2]
    if kind.startswith("Table") and case.is_aggregate(name.lower()):
        known = case.functions.get(name.lower())
        example = known.example if known else f"{name}(x)"
        return (
            f"{name}: goes in SELECT, as avg does, not in FROM{case.place}; "
            f"write SELECT {example} FROM visits."
        )
    known = case.functions.get(name.lower())
    if known is not None and known.kind == "table":
        return _wrong_place(name, case)
    names = case.names_of_functions()
    return f"query: there is no function {name}{case.place}; " + did_you_mean(
        nearest(name, names, likeness=0.7), "midspread functions lists those for robust statistics."
    )


def table_function_in_select(case: Case) -> str:
    return _wrong_place(case.found[1], case)


def _wrong_place(name: str, case: Case) -> str:
    known = case.functions.get(name.lower())
    example = known.example if known else f"{name}(...)"
    starts = {"SELECT": "", "FROM": "SELECT * "}
    start = starts.get(example.split(" ", 1)[0].upper(), "SELECT * FROM ")
    return (
        f"{name}: goes in FROM, as a table does, not in SELECT{case.place}; write {start}{example}."
    )


def unknown_table(case: Case) -> str:
    name = case.found[1]
    if name.lower().endswith(_FILE_ENDINGS) or "/" in name:
        return f"query: there is no file {name}{case.place}; " + did_you_mean(
            nearest_file(name), f"check the path; {_READABLE}."
        )
    if name.lower().endswith((".xlsx", ".xls", ".ods")):
        return (
            f"query: {name} is a spreadsheet, which cannot be read{case.place}; "
            f"save it as CSV first."
        )
    return f"query: there is no table {name}{case.place}; " + did_you_mean(
        nearest(name, case.names_of_tables()) or ("." in name and nearest_file(name)) or None,
        "SHOW ALL TABLES lists what there is, and a file is named by its path: 'visits.parquet'.",
    )


def unknown_source(case: Case) -> str:
    return (
        f"query: there is no source or schema {case.found[1]}{case.place}; "
        f"attach one with --attach {case.found[1].split('.')[0]}=PATH."
    )


def no_file(case: Case) -> str:
    pattern = case.found[1]
    if any(mark in pattern for mark in "*?["):
        return f"query: no file matches {pattern}{case.place}; check the folder and the pattern."
    return f"query: there is no file {pattern}{case.place}; " + did_you_mean(
        nearest_file(pattern), "check the path."
    )


def ungrouped(case: Case) -> str:
    name = case.found[1]
    return (
        f"query: {name} is neither grouped by nor within an aggregate{case.place}; "
        f"add it to GROUP BY, or write any_value({name})."
    )


def ambiguous(case: Case) -> str:
    return (
        f"query: {case.found[1]} is a column of more than one table{case.place}; "
        f"write {case.found[2]} or {case.found[3]}."
    )


def no_such_types(case: Case) -> str:
    name, types = case.found[1], _types(case.found[2])
    if not name[0].isalpha():
        return (
            f"query: {name} does not work between {types}{case.place}; "
            f"convert one side with CAST(... AS ...)."
        )
    if not types:
        return f"query: {name} needs arguments{case.place}; give it some."
    return (
        f"query: {name} does not take {types}{case.place}; "
        f"convert with CAST(... AS ...), or check the arguments."
    )


def _types(listed: str) -> str:
    named = [part.strip().removesuffix("_LITERAL") for part in listed.split(", ") if part.strip()]
    named = ["text" if part in ("STRING", "VARCHAR") else part for part in named]
    return " and ".join(named)


def unknown_qualifier(case: Case) -> str:
    candidates = _candidates(case)
    meant = nearest(case.found[1], candidates) or (candidates[0] if len(candidates) == 1 else None)
    return f"query: no table in FROM is called {case.found[1]}{case.place}; " + did_you_mean(
        meant, "give a table this name, or write the name it has."
    )


def unknown_column_of(case: Case) -> str:
    candidates = _candidates(case)
    return f"query: {case.found[1]} has no column {case.found[2]}{case.place}; " + did_you_mean(
        nearest(case.found[2], candidates), _listed("it has", candidates)
    )


def unknown_field(case: Case) -> str:
    candidates = _candidates(case)
    return f"query: there is no field {case.found[1]}{case.place}; " + did_you_mean(
        nearest(case.found[1], candidates), _listed("there is", candidates)
    )


def csv(case: Case) -> str:
    cause = re.search(r"Original Line: [^\n]*\n([^\n]+)", case.error.words)
    what = f": {cause[1].strip().rstrip('.')}" if cause else ""
    return (
        f"query: line {case.found[1]} of a CSV file cannot be read{what}; "
        f"say how it is written, for example read_csv('visits.csv', delim = ';', "
        f"types = {{'dwell_s': 'DOUBLE'}})."
    )


def out_of_memory(case: Case) -> str:
    limit = one_value(case.connection, "SELECT current_setting('memory_limit')")
    return (
        f"query: the answer needs more than the memory limit "
        f"({limit}); raise it with --memory, "
        f"or ask for fewer rows or groups at a time with WHERE."
    )


def disk_full(case: Case) -> str:
    folder = one_value(case.connection, "SELECT current_setting('temp_directory')")
    return (
        f"query: the disk is full, where {folder} holds what does not "
        f"fit into memory; free some space, or set TMPDIR to a folder on another disk."
    )


def converted(case: Case) -> str:
    return (
        f"query: {case.error.first_line[0].lower()}{case.error.first_line[1:]}{case.place}; "
        f"use TRY_CAST(... AS ...) to get NULL for what cannot be converted."
    )


def wrong_arguments(case: Case) -> str:
    name = case.found[1]
    known = case.functions.get(name.lower())
    if known is not None:
        return f"{name}: these are not the arguments it takes{case.place}; write {known.signature}."
    return (
        f"query: {name} is a macro that is not called with the arguments it takes{case.place}; "
        f"compare with its definition."
    )
