"""Whether a call of one of our functions is given what the function takes."""

from midspread.engine.nearest import nearest
from midspread.engine.rewriting.query import Argument, Call


def misfit(call: Call) -> str | None:
    """What is wrong with the form of a plain call, as a sentence; None when nothing is.

    It is judged by its names and numbers of arguments, not by their types.
    """
    function = call.function
    known = [*function.columns, *(parameter.name for parameter in function.parameters)]
    named = [argument.name for argument in call.arguments if argument.name]
    positional = len(call.arguments) - len(named)
    for argument in call.arguments:
        text = _misread(call, argument) or _unknown(call, argument, known)
        if text is not None:
            return text
    if len(set(named)) < len(named):
        return f"{function.name}: a parameter is given twice; write {function.signature}."
    if len(call.arguments) > len(known):
        most = "one argument" if len(known) == 1 else f"at most {len(known)} arguments"
        return (
            f"{function.name}: takes {most}, got {len(call.arguments)}; write {function.signature}."
        )
    if call.columns() is None:
        missing = function.columns[min(positional, len(function.columns) - 1)]
        return f"{function.name}: the column {missing} is missing; write {function.signature}."
    for place, parameter in enumerate(function.parameters, len(function.columns)):
        if parameter.default is None and parameter.name not in named and positional <= place:
            return f"{function.name}: {parameter.name} is missing; write {function.signature}."
    return None


def _unknown(call: Call, argument: Argument, known: list[str]) -> str | None:
    if not argument.name or argument.name in known:
        return None
    function = call.function
    meant = nearest(argument.name, known)
    hint = f"did you mean {meant} := ...?" if meant else f"write {function.signature}."
    return f"{function.name}: there is no parameter {argument.name}; {hint}"


def _misread(call: Call, argument: Argument) -> str | None:
    """A star, or a comparison where a parameter was meant."""
    node, name = argument.node, call.function.name
    if node.get("class") == "STAR" and not node.get("columns"):
        return f"{name}: takes {call.function.columns[0]}, not *; name the column."
    left = node.get("left") or {}
    if argument.name or node.get("type") != "COMPARE_EQUAL" or left.get("class") != "COLUMN_REF":
        return None
    compared = left["column_names"][-1].lower()
    if compared not in [parameter.name for parameter in call.function.parameters]:
        return None
    value = argument.text.split("=", 1)[1].strip()
    return f"{name}: {argument.text} compares a column; write {compared} := {value}."
