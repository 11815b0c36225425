"""The call that a macro of ours stands for, as SQL text.

DuckDB's Python interface registers scalar functions only. An aggregate is therefore a macro over
lists: ``trimmed_mean(x, share)`` stands for ``_trimmed_mean(list(x) FILTER (x IS NOT NULL),
share)``, where ``_trimmed_mean`` is an Arrow function over batches of such lists. Rewrite rules
write the same call for forms that a macro does not take.
"""

from collections.abc import Mapping, Sequence

from midspread.udfs.declaring import Function
from midspread.udfs.parameters import Parameter

_WRAPPED = {"number": "_number({})", "text": "_text({})", "flag": "_flag({})"}


def underlying_call(
    function: Function,
    columns: Sequence[str],
    given: Mapping[str, str],
    *,
    condition: str = "",
    over: str = "",
    distinct: bool = False,
) -> str:
    """The call of the function behind a macro.

    Parameters
    ----------
    function : Function
        An aggregate.
    columns : sequence of str
        SQL texts of its columns.
    given : mapping of str to str
        SQL texts of the parameters that are given, by name.
    condition : str
        Which rows count, besides those without NULL.
    over : str
        An OVER clause for the lists.
    distinct : bool
        Whether each value counts once.
    """
    lists = _lists(function, columns, given, condition, over)
    if distinct:
        lists = [f"list_distinct({values})" for values in lists]
    label = f"any_value({columns[1]}){over}" if "label" in function.columns else "NULL"
    values = [
        parameter_value(parameter, given.get(parameter.name, parameter.default_text), label)
        for parameter in function.parameters
        if parameter.kind != "column"
    ]
    return f"_{function.name}({', '.join([*lists, *values])})"


def parameter_value(parameter: Parameter, text: str, label: str) -> str:
    """A parameter as the function behind the macro takes it."""
    if parameter.kind == "level":
        # Takes the type of the column it is compared with.
        return f"CASE WHEN false THEN {label} ELSE {text} END"
    return _WRAPPED[parameter.kind].format(text)


def _lists(
    function: Function, columns: Sequence[str], given: Mapping[str, str], condition: str, over: str
) -> list[str]:
    """The lists of a group's values, aligned with one another."""
    further = [
        given.get(parameter.name, parameter.default_text)
        for parameter in function.parameters
        if parameter.kind == "column"
    ]
    if not (condition or over or further or function.keys):
        if len(columns) == 1:
            return [f"_values({columns[0]})"]
        if len(columns) == 2:
            return [
                f"_values_of_pairs({columns[0]}, {columns[1]})",
                f"_values_of_pairs({columns[1]}, {columns[0]})",
            ]
    present = " AND ".join(
        [*([condition] if condition else []), *(f"({column}) IS NOT NULL" for column in columns)]
    )
    wanted = [
        column if name in function.keys else f"_number({column})"
        for name, column in zip(function.columns, columns, strict=True)
    ]
    return [f"list({text}) FILTER (WHERE {present}){over}" for text in [*wanted, *further]]
