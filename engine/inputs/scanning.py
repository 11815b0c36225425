"""What a piece of SQL mentions: paths, names, calls, and paths it computes.

Works on tokens, not on a parse, so that views, macros, PIVOT and whatever else the engine takes are
read alike. Where it errs it finds too much, which at worst recomputes an answer.
"""

from collections.abc import Collection, Sequence
from dataclasses import dataclass, field

from midspread.engine.inputs.tokens import Kind, Token, tokens_of

# Table functions of the engine whose first argument names files, tables or SQL.
FILE_READERS = frozenset(
    (
        "glob",
        "parquet_bloom_probe",
        "parquet_file_metadata",
        "parquet_full_metadata",
        "parquet_kv_metadata",
        "parquet_metadata",
        "parquet_page_index",
        "parquet_scan",
        "parquet_schema",
        "read_blob",
        "read_csv",
        "read_csv_auto",
        "read_duckdb",
        "read_json",
        "read_json_auto",
        "read_json_objects",
        "read_json_objects_auto",
        "read_ndjson",
        "read_ndjson_auto",
        "read_ndjson_objects",
        "read_parquet",
        "read_single_csv_file",
        "read_single_json_file",
        "read_single_parquet_file",
        "read_text",
        "sniff_csv",
    )
)
TABLE_NAMERS = frozenset(("query", "query_table"))

_OPENS = frozenset(("(", "[", "{"))
_CLOSES = frozenset((")", "]", "}"))
_TABLE_FOLLOWS = frozenset(
    ("from", "join", "pivot", "pivot_longer", "pivot_wider", "summarize", "table", "unpivot")
)
_FROM_ENDS = frozenset(
    (
        "except",
        "group",
        "having",
        "intersect",
        "limit",
        "offset",
        "order",
        "qualify",
        "select",
        "set",
        "union",
        "where",
        "window",
    )
)
_NOT_FUNCTION_TEXT = """
all and any as by else filter from in join lateral materialized not on or over select then using
values when where
"""
_NOT_FUNCTIONS = frozenset(_NOT_FUNCTION_TEXT.split())
_LIST_MAKERS = frozenset(("(", ")", "[", "]", ",", "list_value", "list_pack", "array"))
_DEPTH = 6

_EXPRESSION_ARGUMENT = ("bootstrap_expression", 1)


@dataclass
class Mentions:
    """What some SQL mentions.

    Attributes
    ----------
    paths : set of str
        Text in a place where the engine would take it for a file or a pattern of files.
    names : set of str
        Every word and quoted name, folded, also those inside strings that name tables.
    calls : set of str
        The names that are called, folded.
    literals : dict
        For every call of a function not known here, the strings among its arguments.
    created : set of str
        Names of views, tables and macros that the SQL itself creates, folded.
    computed : bool
        Whether a path, a table's name or SQL is put together by an expression.
    """

    paths: set[str] = field(default_factory=set)
    names: set[str] = field(default_factory=set)
    calls: set[str] = field(default_factory=set)
    literals: dict[str, set[str]] = field(default_factory=dict)
    created: set[str] = field(default_factory=set)
    computed: bool = False

    def add(self, other: "Mentions") -> None:
        """Take over everything another piece of SQL mentions, but for what it creates."""
        self.paths |= other.paths
        self.names |= other.names
        self.calls |= other.calls
        for owner, texts in other.literals.items():
            self.literals.setdefault(owner, set()).update(texts)
        self.computed = self.computed or other.computed


def mentions_of(
    sql: str,
    table_functions: Collection[str] = (),
    *,
    in_macro: bool = False,
    depth: int = _DEPTH,
) -> Mentions:
    """Read what SQL mentions.

    Parameters
    ----------
    sql : str
        A statement, or the body of a view or macro.
    table_functions : collection of str
        Our own table functions, folded: their argument ``tbl`` names a table, file or query.
    in_macro : bool
        Whether it is a macro's body, where a bare name may be a parameter.
    depth : int
        How many levels of SQL inside strings to follow; deeper text counts as computed.

    Returns
    -------
    Mentions
    """
    return _Scan(tokens_of(sql), frozenset(table_functions), in_macro, depth).run()


def mentions_of_table_text(
    text: str, table_functions: Collection[str] = (), depth: int = _DEPTH
) -> Mentions:
    """Read what a string mentions that may name a file, a table, a pattern, or hold SQL.

    Parameters
    ----------
    text : str
        What the string holds.
    table_functions : collection of str
        Our own table functions, folded.
    depth : int
        How many levels of SQL inside strings to follow.

    Returns
    -------
    Mentions
    """
    found = Mentions(names={text.casefold()}, computed=depth == 0)
    if not text.lstrip().startswith("("):
        found.paths.add(text)
    if depth:
        for sql in (text, "FROM " + text):
            found.add(mentions_of(sql, table_functions, depth=depth - 1))
    return found


@dataclass
class _Frame:
    """What is known inside one pair of parentheses."""

    in_from: bool = False
    is_query: bool = True  # False inside f( … ), where FROM may belong to extract or trim


class _Scan:
    def __init__(
        self, tokens: Sequence[Token], ours: frozenset[str], in_macro: bool, depth: int
    ) -> None:
        self.tokens = tokens
        self.ours = ours
        self.depth = depth
        self.found = Mentions()
        self.closing = _closing_places(tokens)
        self.in_macro = in_macro

    def run(self) -> Mentions:
        self._read_created()
        self._read_names_and_calls()
        self._read_tables()
        return self.found

    def word(self, place: int) -> str:
        return self.tokens[place].word if 0 <= place < len(self.tokens) else ""

    def _read_created(self) -> None:
        words = [self.word(place) for place in range(min(5, len(self.tokens)))]
        if not words or words[0] != "create":
            return
        rest = [w for w in words if w in ("view", "table", "macro", "function")]
        if not rest:
            return
        self.in_macro = rest[0] in ("macro", "function")
        place = words.index(rest[0]) + 1
        if self.word(place) == "if":  # IF NOT EXISTS may leave an older one in place
            return
        parts, _ = self._dotted(place)
        if parts:
            self.found.created.add(parts[-1].casefold())

    def _read_names_and_calls(self) -> None:
        for place, token in enumerate(self.tokens):
            if token.name is None:
                continue
            self.found.names.add(token.name.casefold())
            if self.word(place + 1) == "(" and token.word not in _NOT_FUNCTIONS:
                self._read_call(token.name.casefold(), place + 1)

    def _read_call(self, name: str, opening: int) -> None:
        self.found.calls.add(name)
        closing = self.closing.get(opening, len(self.tokens))
        if name in FILE_READERS or name in TABLE_NAMERS or name in self.ours:
            self._read_path_argument(name, opening + 1, closing)
            return
        texts = {t.value for t in self.tokens[opening:closing] if t.value is not None}
        if texts:
            self.found.literals.setdefault(name, set()).update(texts)

    def _read_path_argument(self, name: str, start: int, end: int) -> None:
        arguments = self._arguments(start, end)
        if name in self.ours:
            self._read_expressions(name, arguments)
        wanted = [a for a in arguments if name in self.ours and _label(a) == "tbl"]
        if not wanted and arguments and _label(arguments[0]) is None:
            wanted = arguments[:1]
        if not wanted:
            self.found.computed = True
            return
        argument = wanted[0][2:] if _label(wanted[0]) else wanted[0]
        if self.in_macro and len(argument) == 1 and argument[0].name is not None:
            return  # the macro's parameter: its value is among the literals where it is called
        previous: Token | None = None
        for token in argument:
            if token.value is not None and not (previous and previous.kind is Kind.STRING):
                self._take_text(token.value, name)
            elif token.word not in _LIST_MAKERS:
                self.found.computed = True
            previous = token

    def _read_expressions(self, name: str, arguments: list[list[Token]]) -> None:
        """Read the expressions that our table functions are given as text."""
        for place, argument in enumerate(arguments):
            label = _label(argument)
            if label == "expression" or (label is None and (name, place) == _EXPRESSION_ARGUMENT):
                for token in argument:
                    if token.value is not None:
                        self.found.add(mentions_of(token.value, self.ours, depth=self.depth))

    def _take_text(self, text: str, function: str) -> None:
        if function in FILE_READERS:
            self.found.paths.add(text)
        elif function == "query" and self.depth:
            self.found.add(mentions_of(text, self.ours, depth=self.depth - 1))
        else:
            self.found.add(mentions_of_table_text(text, self.ours, self.depth))

    def _arguments(self, start: int, end: int) -> list[list[Token]]:
        arguments: list[list[Token]] = [[]]
        depth = 0
        for token in self.tokens[start:end]:
            depth += (token.word in _OPENS) - (token.word in _CLOSES)
            if token.word == "," and depth == 0:
                arguments.append([])
            else:
                arguments[-1].append(token)
        return arguments if arguments != [[]] else []

    def _read_tables(self) -> None:
        """Find what stands where a table is expected: after FROM, JOIN or a comma between them."""
        frames = [_Frame()]
        expected = False
        for place, token in enumerate(self.tokens):
            word = token.word
            if word == "(":
                called = place > 0 and self.tokens[place - 1].name is not None
                called = called and self.word(place - 1) not in _NOT_FUNCTIONS
                expected = expected and not called
                frames.append(_Frame(in_from=expected, is_query=not called))
            elif word == ")":
                frames = frames[:-1] or [_Frame()]
                expected = False
            elif self._announces_table(place, frames[-1]):
                frames[-1].in_from = expected = True
            elif word in _FROM_ENDS:
                frames[-1].is_query = frames[-1].is_query or word == "select"
                frames[-1].in_from = expected = False
            elif word == "," and frames[-1].in_from:
                expected = True
            elif expected and word not in ("lateral", ":"):
                expected = self._read_table(place)

    def _announces_table(self, place: int, frame: _Frame) -> bool:
        word, before = self.word(place), self.word(place - 1)
        begins = place == 0 or before in ("(", "as", ";")
        if word == "from":
            frame.is_query = frame.is_query or begins
            return frame.is_query and before != "distinct"
        return word in _TABLE_FOLLOWS or word == "describe" or (word == "desc" and begins)

    def _read_table(self, place: int) -> bool:
        """Take the table at a place; True when it was an alias and the table still follows."""
        token = self.tokens[place]
        if token.kind is Kind.STRING:
            if token.value is None:
                self.found.computed = True
            else:
                self.found.paths.add(token.value)
                self.found.names |= _names(token.value)
            return False
        parts, end = self._dotted(place)
        if self.word(end) == ":":
            return True
        if parts and self.word(end) != "(":
            joined = ".".join(parts)
            if "." in joined:
                self.found.paths.add(joined)
        return False

    def _dotted(self, place: int) -> tuple[list[str], int]:
        """Names joined by dots from a place on, and the place after them."""
        parts: list[str] = []
        while place < len(self.tokens):
            name = self.tokens[place].name
            if name is None:
                break
            parts.append(name)
            place += 1
            if self.word(place) != ".":
                break
            place += 1
        return parts, place


def _names(text: str) -> set[str]:
    return {text.casefold()} | {t.name.casefold() for t in tokens_of(text) if t.name is not None}


def _label(argument: Sequence[Token]) -> str | None:
    """Name of a named argument, folded."""
    if len(argument) > 1 and argument[1].word in (":=", "=>", "=") and argument[0].name is not None:
        return argument[0].name.casefold()
    return None


def _closing_places(tokens: Sequence[Token]) -> dict[int, int]:
    """Map the place of every opening bracket to that of its closing one."""
    closing: dict[int, int] = {}
    open_places: list[int] = []
    for place, token in enumerate(tokens):
        if token.word in _OPENS:
            open_places.append(place)
        elif token.word in _CLOSES and open_places:
            closing[open_places.pop()] = place
    return closing
