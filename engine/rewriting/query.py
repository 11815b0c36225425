"""A query as the rewrite rules see it: its text, its tree, and the calls of our functions in it."""

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from functools import cached_property

import duckdb

from midspread.engine.parsing import (
    Node,
    Token,
    Tree,
    function_name,
    tokens,
    unquoted,
    without_places,
)
from midspread.engine.pivoting import parse_with_pivots
from midspread.engine.rewriting.clauses import ClauseMap
from midspread.udfs import Function, Parameter
from midspread.udfs.binding.underlying import underlying_call

_CONDITIONAL_CLASSES = ("CASE", "CONJUNCTION")
_CONDITIONAL_OPERATORS = ("OPERATOR_COALESCE", "OPERATOR_TRY", "OPERATOR_NULLIF")
_OWN_SCHEMAS = ("main", "temp")


@dataclass(frozen=True)
class Argument:
    """One argument of a call: ``name := text``."""

    name: str
    node: Node
    start: int
    stop: int
    text: str


@dataclass(frozen=True)
class Select:
    """A SELECT of the tree and what surrounds it."""

    node: Node
    in_expression: bool
    in_recursion: bool


@dataclass(frozen=True)
class Call:
    """One call of one of our aggregate functions.

    Attributes
    ----------
    start, stop : int
        The whole call with its FILTER and OVER.
    opening, closing : int
        Tokens of its brackets; -1 when the call is not in the plain form ``name(...)``.
    select : int
        Which SELECT of the query it belongs to; -1 for none.
    clause : str
        The key of that SELECT's node under which it stands.
    conditional : bool
        Whether it stands within CASE, AND, COALESCE or the like, which may not evaluate it.
    """

    function: Function
    node: Node
    start: int
    stop: int
    opening: int
    closing: int
    arguments: tuple[Argument, ...]
    select: int
    clause: str
    conditional: bool

    @property
    def is_plain(self) -> bool:
        """Whether it is written ``name(...)`` (and not ``column.name(...)``)."""
        return self.opening >= 0

    @property
    def is_window(self) -> bool:
        """Whether it has an OVER."""
        return bool(self.node["class"] == "WINDOW")

    @property
    def filter(self) -> Node | None:
        """The condition of its FILTER."""
        found: Node | None = self.node.get("filter_expr" if self.is_window else "filter")
        return found

    @property
    def is_distinct(self) -> bool:
        """Whether it says DISTINCT."""
        return bool(self.node.get("distinct"))

    @property
    def is_ordered_inside(self) -> bool:
        """Whether it has an ORDER BY within its brackets."""
        if self.is_window:
            return bool(self.node.get("arg_orders"))
        return bool(self.node["order_bys"]["orders"])

    def columns(self) -> list[Argument] | None:
        """The arguments for its columns, in order; None when some are missing."""
        found = [self._given(index, name) for index, name in enumerate(self.function.columns)]
        return None if None in found else [argument for argument in found if argument]

    def parameters(self) -> list[tuple[Parameter, Argument | None]] | None:
        """Its parameters with what is given for them; None when it could not be called so."""
        shift = len(self.function.columns)
        given = [
            (parameter, self._given(shift + index, parameter.name))
            for index, parameter in enumerate(self.function.parameters)
        ]
        known = {*self.function.columns, *(p.name for p in self.function.parameters)}
        named = [argument.name for argument in self.arguments if argument.name]
        positional = len(self.arguments) - len(named)
        if positional > shift + len(given) or not known.issuperset(named):
            return None
        if len(set(named)) < len(named):
            return None
        if any(argument is None and parameter.default is None for parameter, argument in given):
            return None
        return given

    def underlying(self, *, condition: str = "", over: str = "", distinct: bool = False) -> str:
        """The call of the function behind the macro, with the same arguments."""
        return underlying_call(
            self.function,
            [column.text for column in self.columns() or ()],
            {p.name: argument.text for p, argument in self.parameters() or () if argument},
            condition=condition,
            over=over,
            distinct=distinct,
        )

    def _given(self, index: int, name: str) -> Argument | None:
        for argument in self.arguments:
            if argument.name == name:
                return argument
        if index < len(self.arguments) and not self.arguments[index].name:
            return self.arguments[index]
        return None


class Query:
    """A query read once by DuckDB's parser.

    Parameters
    ----------
    connection : duckdb.DuckDBPyConnection
        Parses; runs nothing.
    text : str
        The query.
    functions : mapping
        Our functions by name.
    """

    def __init__(
        self, connection: duckdb.DuckDBPyConnection, text: str, functions: Mapping[str, Function]
    ) -> None:
        self.connection = connection
        self.tree: Tree = parse_with_pivots(connection, text)
        self.text = self.tree.text
        self.functions = functions
        self.selects: list[Select] = []
        self.calls: list[Call] = sorted(self._calls(), key=lambda call: call.start)

    @cached_property
    def tokens(self) -> tuple[Token, ...]:
        """The tokens of the text."""
        return tokens(self.text)

    @cached_property
    def clauses(self) -> ClauseMap:
        """Where its clauses stand."""
        return ClauseMap(self.tokens)

    def between(self, first: int, stop: int) -> str:
        """The text of a range of tokens."""
        return self.text[self.tokens[first].start : self.tokens[stop - 1].stop]

    def token_at(self, start: int) -> int:
        """The token that starts here; -1 when none does."""
        return self._token_at.get(start, -1)

    @cached_property
    def _token_at(self) -> dict[int, int]:
        return {token.start: index for index, token in enumerate(self.tokens)}

    def _calls(self) -> Iterator[Call]:
        seen = set()
        for node, select, clause, conditional in self._walk():
            if node.get("class") not in ("FUNCTION", "WINDOW"):
                continue
            function = self.functions.get(function_name(node) or "")
            span = self.tree.span(node)
            if function is None or not function.is_aggregate or span is None or span in seen:
                continue
            seen.add(span)  # a named window repeats the nodes of its definition
            opening, closing = self._brackets_of(node, span)
            arguments = self._arguments(node, opening, closing) if opening >= 0 else None
            if arguments is None:
                opening, closing, arguments = -1, -1, ()
            yield Call(
                function, node, *span, opening, closing, arguments, select, clause, conditional
            )

    def _walk(self) -> Iterator[tuple[Node, int, str, bool]]:
        """Every node with the SELECT it belongs to, that SELECT's clause, and its condition."""
        waiting: list[tuple[object, int, str, bool, bool, bool]] = [
            (self.tree.root, -1, "", False, False, False)
        ]
        while waiting:
            item, select, clause, conditional, in_expression, in_recursion = waiting.pop()
            if isinstance(item, list):
                waiting.extend(
                    (part, select, clause, conditional, in_expression, in_recursion)
                    for part in item
                )
                continue
            if not isinstance(item, dict):
                continue
            kind = item.get("type")
            if kind == "SELECT_NODE":
                self.selects.append(Select(item, in_expression, in_recursion))
                select = len(self.selects) - 1
                waiting.extend(
                    (part, select, key, False, in_expression, in_recursion)
                    for key, part in item.items()
                )
                continue
            if isinstance(kind, str) and kind.endswith("_NODE"):
                select, clause, conditional = -1, "", False
                in_recursion = in_recursion or kind == "RECURSIVE_CTE_NODE"
            yield item, select, clause, conditional
            in_expression = in_expression or item.get("class") == "SUBQUERY"
            conditional = conditional or _is_conditional(item)
            waiting.extend(
                (part, select, clause, conditional, in_expression, in_recursion)
                for part in item.values()
            )

    def _brackets_of(self, node: Node, span: tuple[int, int]) -> tuple[int, int]:
        """The tokens of a plain call's brackets, (-1, -1) for any other form."""
        index = self.token_at(span[0])
        path = [part.lower() for part in node["qualified_name"]["path"]]
        if index < 0 or any(part not in _OWN_SCHEMAS for part in path[:-1]):
            return -1, -1
        for part in path[:-1]:
            if unquoted(self.tokens[index].text).lower() != part:
                return -1, -1
            index += 2
        if index + 1 >= len(self.tokens):
            return -1, -1
        if unquoted(self.tokens[index].text).lower() != path[-1]:
            return -1, -1
        if self.tokens[index + 1].text != "(":
            return -1, -1
        return index + 1, self.clauses.closing(index + 1)

    def _arguments(self, node: Node, opening: int, closing: int) -> tuple[Argument, ...] | None:
        """The arguments' texts, None when the tokens do not show as many as the tree."""
        start = opening + 1
        if self.tokens[start].says("DISTINCT", "ALL") and start + 1 < closing:
            start += 1
        stop = closing
        for index in range(start, closing - 1):
            is_order = self.tokens[index].says("ORDER") and self.tokens[index + 1].says("BY")
            if is_order and self.clauses.level(index) == opening:
                stop = index
                break
        ranges = self.clauses.split(start, stop)
        given = node["arguments"]
        if len(ranges) != len(given):
            return None
        found = []
        for (first, end), argument in zip(ranges, given, strict=True):
            name = argument["name"].lower()
            value = first + 2 if name else first
            if value >= end or (name and not self.tokens[first + 1].says(":=", "=>")):
                return None
            found.append(
                Argument(
                    name,
                    argument["expression"],
                    self.tokens[value].start,
                    self.tokens[end - 1].stop,
                    self.between(value, end),
                )
            )
        return tuple(found)


def same(left: Node, right: Node) -> bool:
    """Whether two nodes mean the same, however they are spaced."""
    return bool(without_places(left) == without_places(right))


def _is_conditional(node: Node) -> bool:
    return (
        node.get("class") in _CONDITIONAL_CLASSES
        or node.get("type") in _CONDITIONAL_OPERATORS
        or function_name(node) in ("if", "ifnull")
    )
