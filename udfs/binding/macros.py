"""The macros of the catalogue, as the statements that create them."""

from typing import Final

from midspread.udfs.binding.underlying import parameter_value
from midspread.udfs.declaring import Function
from midspread.udfs.parameters import Parameter

NUMBER_TYPES: Final = "a number (any integer type, DECIMAL, FLOAT or DOUBLE)"
OTHER_TYPES: Final = (
    "VARCHAR",
    "BOOLEAN",
    "DATE",
    "TIME",
    "TIMESTAMP",
    "TIMESTAMP WITH TIME ZONE",
    "INTERVAL",
    "BLOB",
    "UUID",
)
_SQL_TYPES: Final = {"number": " DOUBLE", "text": " VARCHAR", "flag": " BOOLEAN"}


def shared_macros() -> list[str]:
    """What all functions rest on: the macros that collect values and give parameters a type."""
    return [
        "CREATE OR REPLACE TEMP MACRO _values(x DOUBLE) AS list(x) FILTER (x IS NOT NULL)",
        "CREATE OR REPLACE TEMP MACRO _values_of_pairs(x DOUBLE, w DOUBLE) AS "
        "list(x) FILTER (x IS NOT NULL AND w IS NOT NULL)",
        "CREATE OR REPLACE TEMP MACRO _number(v DOUBLE) AS v",
        "CREATE OR REPLACE TEMP MACRO _text(v VARCHAR) AS v",
        "CREATE OR REPLACE TEMP MACRO _flag(v BOOLEAN) AS v",
        "CREATE OR REPLACE TEMP MACRO _numbers(x DOUBLE, function_name, column_name) AS "
        f"list(x) FILTER (x IS NOT NULL), {', '.join(_other_types('any_value(x)'))}",
        # One value rather than a list, NULL included.
        "CREATE OR REPLACE TEMP MACRO _number_of(x DOUBLE, function_name, column_name) AS "
        f"x, {', '.join(_other_types('x'))}",
        # A FLOAT as the shortest decimal that reads back to it: 0.1 and not 0.10000000149.
        "CREATE OR REPLACE TEMP MACRO _as_written(x FLOAT) AS CAST(CAST(x AS VARCHAR) AS DOUBLE), "
        "(x DOUBLE) AS x, (x) AS x",
    ]


def _other_types(sample: str) -> list[str]:
    """The overloads that refuse a column which holds no numbers."""
    refusals = [
        f"({'x ' + kind}, function_name, column_name) AS error(function_name || ': ' || "
        f"column_name || ' must be {NUMBER_TYPES}, not {kind}; turn it into a number first, "
        f"for example with CAST(' || column_name || ' AS DOUBLE).')"
        for kind in OTHER_TYPES
    ]
    refusals.append(
        "(x, function_name, column_name) AS error(function_name || ': ' || column_name || "
        f"' must be {NUMBER_TYPES}, not ' || typeof({sample}) || "
        "'; take the numbers out of it first, in a query in parentheses.')"
    )
    return refusals


def aggregate_macro(function: Function) -> str:
    """The statement that creates an aggregate's macro.

    A typed parameter takes every numeric type and nothing else; more overloads answer other types
    with a sentence of ours: those of simple types at once, while the engine plans.
    """
    collected = list(function.columns)
    collected += [p.name for p in function.parameters if p.kind == "column"]
    present = " AND ".join(f"{_identifier(name)} IS NOT NULL" for name in function.columns)
    # Not `_values(x)`: a macro within a macro does not work under OVER.
    lists = [f"list({_identifier(name)}) FILTER ({present})" for name in collected]
    values = [
        parameter_value(p, _identifier(p.name), "any_value(label)")
        if p.kind == "level"
        else _identifier(p.name)
        for p in function.parameters
        if p.kind != "column"
    ]
    return _with_refusals(function, f"_{function.name}({', '.join([*lists, *values])})")


def row_macro(function: Function) -> str:
    """The statement that creates a row function's macro."""
    names = [*function.columns, *(parameter.name for parameter in function.parameters)]
    body = function.body or f"_{function.name}({', '.join(_identifier(name) for name in names)})"
    return _with_refusals(function, body)


def _with_refusals(function: Function, body: str) -> str:
    # A batch aggregate takes any type, and says itself what is wrong.
    is_typed = function.kind != "batch"
    parameters = [_macro_parameter(p, typed=is_typed) for p in function.parameters]
    columns = [
        _identifier(name) + ("" if name in function.keys else " DOUBLE")
        for name in function.columns
    ]
    whose = "any_value({})" if function.is_aggregate else "{}"
    overloads = [f"({', '.join([*columns, *parameters])}) AS {body}"]
    for wrong, column in enumerate(function.columns):
        if column in function.keys:
            continue
        before, after = columns[:wrong], [*columns[wrong + 1 :], *parameters]
        name = _identifier(column)
        for other in OTHER_TYPES:
            sentence = _quoted(wrong_type(function.name, column, other))
            listed = ", ".join([*before, f"{name} {other}", *after])
            overloads.append(f"({listed}) AS error({sentence})")
        start = _quoted(f"{function.name}: {column} must be {NUMBER_TYPES}, not ")
        overloads.append(
            f"({', '.join([*before, name, *after])}) AS error({start} || "
            f"typeof({whose.format(name)}) || '; take the numbers out of it first.')"
        )
    for wrong, parameter in enumerate(function.parameters):
        if not is_typed or any(p.default_text for p in function.parameters[:wrong]):
            continue
        # Without its default, so that a call which leaves it out fits the first overload only.
        name = _identifier(parameter.name)
        listed = ", ".join([*columns, *parameters[:wrong], name, *parameters[wrong + 1 :]])
        start = _quoted(f"{function.name}: {parameter.name} must be {parameter.allowed}, got type ")
        end = _quoted(f"; write for example {parameter.name} := {parameter.example()}.")
        overloads.append(f"({listed}) AS error({start} || typeof({whose.format(name)}) || {end})")
    return f"CREATE OR REPLACE TEMP MACRO {function.name}{', '.join(overloads)}"


def wrong_type(function: str, column: str, given: str) -> str:
    """The sentence about a column of a type that no statistic takes."""
    return (
        f"{function}: {column} must be {NUMBER_TYPES}, not {given}; "
        f"turn it into a number first, for example CAST({column} AS DOUBLE) or epoch({column})."
    )


def table_macro(function: Function) -> str:
    """The statement that creates a table function's macro.

    The query it stands for is written by the function's own Python code while DuckDB plans.
    """
    arguments = [*function.columns, *(parameter.name for parameter in function.parameters)]
    handed = ", ".join(f"{_quoted(name)}: {_identifier(name)}" for name in arguments)
    parameters = [_identifier(name) for name in function.columns]
    parameters += [_macro_parameter(parameter, typed=False) for parameter in function.parameters]
    return (
        f"CREATE OR REPLACE TEMP MACRO {function.name}({', '.join(parameters)}) AS TABLE "
        f"SELECT * FROM query(_table_query({_quoted(function.name)}, "
        f"CAST(to_json({{{handed}}}) AS VARCHAR)))"
    )


def _macro_parameter(parameter: Parameter, *, typed: bool = True) -> str:
    kind = _SQL_TYPES.get(parameter.kind, "") if typed else ""
    default = parameter.default_text
    return f"{_identifier(parameter.name)}{kind}" + (f" := {default}" if default else "")


def _identifier(name: str) -> str:
    return f'"{name}"'


def _quoted(text: str) -> str:
    return "'" + text.replace("'", "''") + "'"
