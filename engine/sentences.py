"""One sentence of ours for each thing that the engine may say."""

import re
from collections.abc import Callable
from typing import Final

from midspread.engine.explaining import (
    Case,
    ambiguous,
    converted,
    csv,
    disk_full,
    no_file,
    no_such_types,
    out_of_memory,
    table_function_in_select,
    ungrouped,
    unknown_column,
    unknown_column_of,
    unknown_field,
    unknown_function,
    unknown_qualifier,
    unknown_source,
    unknown_table,
    wrong_arguments,
)


def _own_words(text: str) -> Callable[[Case], str]:
    """A sentence that is always the same but for the parts of the engine's words in it."""

    def sentence(case: Case) -> str:
        parts = [part or "" for part in case.found.groups()]
        return text.format(*parts, place=case.place)

    return sentence


def _table(
    *rows: tuple[str, Callable[[Case], str | None] | str],
) -> tuple[tuple[re.Pattern[str], Callable[[Case], str | None]], ...]:
    return tuple(
        (re.compile(pattern, re.DOTALL), _own_words(made) if isinstance(made, str) else made)
        for pattern, made in rows
    )


SENTENCES: Final = _table(
    (r'^Referenced column "([^"]+)" (?:not found|was not found)', unknown_column),
    (
        r'^((?:Scalar|Table|Aggregate) Function) with name "?(\w+)"? does not exist',
        unknown_function,
    ),
    (r'^Function "(\w+)" is a table function but it was used', table_function_in_select),
    (
        r'^(Table) Function with name "(\w+)" is not in the catalog, .* of a different type',
        unknown_function,
    ),
    (
        r'^(?:Table|Scalar|Aggregate)? ?Function with name "(\w+)" is not in the catalog, but',
        "query: {0} belongs to an extension that is not here{place}, and nothing is downloaded; "
        "use another function.",
    ),
    (r'^Table with name "([^"]+)" does not exist because schema', unknown_source),
    (r'^Table with name "?(.+?)"? does not exist!', unknown_table),
    (r'^No files found that match the pattern "(.*?)"', no_file),
    (
        r'^No extension found that is capable of reading the file "(.*?)"',
        "query: {0} is of a kind that cannot be read{place}; "
        "name a reader, for example FROM read_csv('{0}').",
    ),
    (
        r"^File (\S+) requires the extension",
        "query: {0} is on another machine, and nothing is downloaded here; copy it here first.",
    ),
    (
        r"extension (\w+)? ?.*(?:INSTALL|autoload)",
        "query: this needs an extension that is not here{place}, and nothing is downloaded; "
        "write it without.",
    ),
    (r"^CSV Error on Line: (\d+)", csv),
    (
        r'^Error when sniffing file "(.*?)"',
        "query: {0} cannot be read as CSV; say how it is written, for example "
        "read_csv('{0}', delim = ';', header = true).",
    ),
    (
        r"(?:File|file) ['\"]?([^'\"\n]+?)['\"]? (?:too small to be a Parquet|is not a Parquet)",
        "query: {0} is not a Parquet file; name the reader that fits, for example read_csv('{0}').",
    ),
    (
        r"No magic bytes found at (?:the )?(?:end|beginning|start) of file ['\"](.*?)['\"]",
        "query: {0} is not a Parquet file; name the reader that fits, for example read_csv('{0}').",
    ),
    (r"^Malformed JSON in file \"(.*?)\"", "query: {0} is not readable as JSON; check the file."),
    (r"No space left on device|[Dd]isk (?:is )?full|max_temp_directory_size", disk_full),
    (
        r"^(?:failed to (?:allocate|pin)|could not allocate|Out of Memory)|memory_limit",
        out_of_memory,
    ),
    (
        r"[Cc]annot open file \"(.*?)\": Permission denied",
        "query: {0} cannot be read; you lack the permission.",
    ),
    (r"\"(.*?)\": Is a directory", "query: {0} is a folder; name its files: '{0}/*.parquet'."),
    (r'^[Cc]olumn "([^"]+)" must appear in the GROUP BY', ungrouped),
    (
        r"""^Ambiguous reference to (?:column name )?"([^"]+)" \(use: '(.*?)' or '(.*?)'""",
        ambiguous,
    ),
    (r'^Referenced table "([^"]+)" not found', unknown_qualifier),
    (
        r'^(?:Table|Values list) "([^"]+)" does not have a column named "([^"]+)"',
        unknown_column_of,
    ),
    (r'^Could not find key "([^"]+)" in struct', unknown_field),
    (r"^No function matches the given name and argument types '(.+?)\((.*?)\)'", no_such_types),
    (
        r"^Could not choose a best candidate function for the function call \"(\w+)\(",
        "query: it is not clear which {0} is meant{place}; convert its arguments with "
        "CAST(... AS ...).",
    ),
    (
        r"^(\w+) clause cannot contain aggregates",
        "query: {0} cannot hold an aggregate{place}; use HAVING for conditions on groups.",
    ),
    (
        r"^(\w+) clause cannot contain window functions",
        "query: {0} cannot hold OVER{place}; use QUALIFY for conditions on it.",
    ),
    (
        r"^aggregate function(?: calls cannot be nested|s are not allowed in FILTER)",
        "query: one aggregate is within another{place}; compute the inner one in a subquery first.",
    ),
    (
        r'^Function "(\w+)" is a Macro Function',
        "query: {0} is a macro, which takes no FILTER, DISTINCT or ORDER BY{place}; "
        "write them inside the macro.",
    ),
    (
        r"^Window function macro bodies",
        "query: a macro of yours is used with OVER{place}, which it cannot be; "
        "write out what it stands for.",
    ),
    (
        r"^Values were not provided for the following parameters: (.*)$",
        "query: the SQL holds a placeholder (? or ${0}) for a value; write the value itself.",
    ),
    (
        r'^(View|Macro) (?:Function )?with name "([^"]+)" already exists',
        "query: there is already a {0} called {1}; "
        "write CREATE OR REPLACE TEMP {0} to define it anew.",
    ),
    (r"^Macro \"?(\w+)\"?\(\) (?:does not|has)", wrong_arguments),
    (
        r"^More than one row returned by a subquery",
        "query: a subquery that stands for one value gives several rows{place}; "
        "narrow it with WHERE, or take an aggregate of it.",
    ),
    (
        r"^Set operations can only apply to expressions with the same number of result columns",
        "query: the two sides of UNION, INTERSECT or EXCEPT have different numbers of columns; "
        "select as many on both sides, or write UNION BY NAME.",
    ),
    (r"^(?:Could not convert|invalid \w+ field format|date field value)", converted),
    (
        r"^Division by zero in expression",
        "query: a division by zero; write nullif(divisor, 0) to get NULL there.",
    ),
    (
        r"^Overflow in (\w+)",
        "query: a number is too large for its type in an {0}; convert to DOUBLE before it.",
    ),
)
