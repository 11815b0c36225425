"""The reference of a function, laid out for reading, with its example computed on the spot."""

import re
from collections.abc import Iterable, Iterator, Mapping
from typing import TYPE_CHECKING, Any, Final

from rich.text import Text

from midspread.cli.numbers import single_text
from midspread.cli.tables import FAINT, HEAD, INDENT
from midspread.cli.wrapping import longest, wrapped

if TYPE_CHECKING:
    from midspread.udfs import Function, Parameter

# The families in the order of the reference, each with the question it answers.
FAMILIES: Final[Mapping[str, str]] = {
    "location": "what is typical",
    "weighted": "what is typical, each value with a weight",
    "scale": "how much the values spread",
    "shape": "how the values are shaped",
    "association": "how two columns hang together",
    "re-expression": "values on another scale, and which scale to choose",
    "comparison": "how groups differ",
    "resampling": "how sure it is, from the data themselves",
    "tables": "whole tables of answers, in FROM",
}
_COLUMNS: Final[Mapping[str, str]] = {
    "x": "a column or expression of any numeric type; NULL is skipped, NaN makes the result NaN",
    "y": "another such column, often what may depend on x; a row where either is NULL is skipped",
    "w": "weights, 0 or more; a row where x or w is NULL is skipped",
}
WIDEST: Final = 100
_SECTION: Final = re.compile(r"^(\w[\w ]*)\n-{3,}$", re.MULTILINE)
_CODE_MARKS: Final = re.compile("``|`")


def families(catalogue: Iterable["Function"]) -> Iterator[tuple[str, list["Function"]]]:
    """Heading and functions of each family, in the order of the reference."""
    listed = sorted(catalogue, key=lambda function: function.name)
    known = list(FAMILIES) + sorted({f.family for f in listed} - set(FAMILIES))
    for family in known:
        members = [function for function in listed if function.family == family]
        if members:
            yield f"{family.capitalize()}: {FAMILIES.get(family, '')}".rstrip(": "), members


def list_lines(functions: Iterable["Function"], width: int) -> list[Text]:
    """A line or two for each function: how it is written, what it gives."""
    functions = list(functions)
    names = min(longest(function.signature for function in functions), max(24, width // 2 - 8))
    room = max(24, min(width, WIDEST) - names - 4 - INDENT)
    lines = []
    for function in functions:
        meaning = wrapped(plain(function.meaning), room)
        signature = wrapped(function.signature, names)
        for i in range(max(len(meaning), len(signature))):
            line = Text("  ")
            written = signature[i] if i < len(signature) else ""
            line.append(written.ljust(names + 2), style="bold" if i == 0 else "")
            line.append(meaning[i] if i < len(meaning) else "")
            line.rstrip()
            lines.append(line)
    return lines


def entry_lines(function: "Function", width: int) -> list[Text]:
    """The whole entry of a function but for its example."""
    room = min(width, WIDEST) - INDENT
    lines = [Text(line, style=HEAD) for line in wrapped(function.signature, room)]
    lines.append(Text())
    about = sections(function.description)
    for paragraph in about[""]:
        lines += [Text(line) for line in wrapped(paragraph, room)]
        lines.append(Text())
    facts = list(_facts(function, about))
    names = longest(name for name, _ in facts)
    for name, words in facts:
        for i, line in enumerate(wrapped(words, room - names - 2)):
            lines.append(Text((name if i == 0 else "").ljust(names + 2), style=FAINT))
            lines[-1].append(line, style="not dim")
    return lines


def sections(description: str) -> dict[str, list[str]]:
    """The paragraphs of a numpydoc text by section; those before the first stand under ''."""
    pieces = _SECTION.split(description)
    found = {"": _paragraphs(pieces[0])}
    for title, body in zip(pieces[1::2], pieces[2::2], strict=True):
        found[title] = _paragraphs(body)
    return found


def plain(text: str) -> str:
    """A text without the marks of its source."""
    return _CODE_MARKS.sub("", text)


def example_query(function: "Function") -> str:
    """The example as a whole query over the sample."""
    if function.kind == "table" or function.example.lstrip().upper().startswith("SELECT"):
        return function.example
    call = function.example
    if function.rows is not None:
        call = f"unnest({call}, recursive := true)"
    elif function.fields:
        call = f"unnest({call})"
    return f"SELECT {call} FROM visits"


def as_record(function: "Function") -> dict[str, Any]:
    """A function as plain data."""
    return {
        "name": function.name,
        "family": function.family,
        "signature": function.signature,
        "place": function.place,
        "meaning": plain(function.meaning),
        "parameters": [
            {"name": p.name, "meaning": p.meaning, "default": p.default, "allowed": _allowed(p)}
            for p in function.parameters
        ],
        "fields": list(function.fields),
        "formula": function.formula,
        "source": function.source,
        "breakdown_point": function.breakdown,
        "cost": function.cost,
        "smallest_n": function.smallest_n,
        "example": example_query(function),
    }


def _facts(function: "Function", about: Mapping[str, list[str]]) -> Iterator[tuple[str, str]]:
    yield "goes", function.place
    yield from _column_words(function)
    for parameter in function.parameters:
        yield parameter.name, _parameter_words(parameter)
    if about.get("Returns"):
        yield "result", " ".join(_without_type(about["Returns"]))
    if function.fields:
        yield ("columns" if function.kind == "table" else "fields"), ", ".join(function.fields)
    yield "formula", function.formula
    yield "source", function.source
    yield "breakdown point", function.breakdown
    yield "cost", function.cost
    if function.is_aggregate:
        fewest = function.smallest_n
        yield "smallest n", f"{fewest}; a group with fewer values gives NULL"
    if about.get("Notes"):
        yield "note", "\n".join(about["Notes"])


def _column_words(function: "Function") -> Iterator[tuple[str, str]]:
    # A kernel's own text speaks of sorted arrays; who writes SQL has columns.
    meanings = _COLUMNS if function.kind == "aggregate" else _item_meanings(function.description)
    for name in function.columns:
        if name in meanings:
            yield name, meanings[name]


def _parameter_words(parameter: "Parameter") -> str:
    words = parameter.meaning
    allowed = _allowed(parameter)
    if allowed:
        words += f"; {allowed}"
    default = parameter.default
    if default is None:
        return words
    if isinstance(default, bool):
        return f"{words}; {str(default).lower()} when left out"
    shown = default if isinstance(default, str) else single_text(default)
    return f"{words}; {shown} when left out"


def _allowed(parameter: "Parameter") -> str:
    """The range in words; parameters of table functions say it in their meaning."""
    if parameter.kind == "text":
        return parameter.allowed if parameter.choices else ""
    is_literal = isinstance(parameter.default, bool | str) and not parameter.is_optional
    return "" if parameter.kind != "number" or is_literal else parameter.allowed


def _item_meanings(description: str) -> dict[str, str]:
    """What the section on parameters says about each name."""
    pieces = _SECTION.split(description)
    bodies = dict(zip(pieces[1::2], pieces[2::2], strict=True))
    meanings: dict[str, str] = {}
    name = ""
    for line in bodies.get("Parameters", "").splitlines():
        if " : " in line and not line.startswith(" "):
            name = line.split(" : ")[0].strip()
        elif line.strip() and name:
            meanings[name] = plain(f"{meanings.get(name, '')} {line.strip()}".strip())
    return meanings


def _without_type(paragraphs: list[str]) -> list[str]:
    """numpydoc puts the type of what is returned in front: of no use to who writes SQL."""
    first, *rest = paragraphs
    for kind in ("float ", "struct ", "list of struct ", "list "):
        if first.startswith(kind):
            first = first.removeprefix(kind)
            break
    return [first, *rest]


def _paragraphs(text: str) -> list[str]:
    parts = [" ".join(part.split()) for part in re.split(r"\n\s*\n|\n(?=- )", text)]
    return [plain(part) for part in parts if part]
