"""One spelling for queries that differ only in spacing, comments and the case of keywords.

The canonical text goes into the key of a kept answer, so the rule is one-sided: two queries that
the engine could answer differently, be it only by a column's header, never share it; two that
mean the same may still differ. Strings, numbers, quoted names, unquoted names, aliases and types
stay as written, because the engine shows their case in headers.
"""

from collections.abc import Collection

from midspread.engine.inputs.tokens import Kind, Token, tokens_of

# Words the grammar lets nobody use as a bare name; the tests ask the engine whether that holds.
_KEYWORD_TEXT = """
    all analyse analyze and anti any array as asc asof asymmetric at both by case cast create cross
    desc describe distinct else end except false fetch for from full group having ilike in inner
    intersect into is isnull join lateral leading left like limit natural not notnull null offset
    on only or order outer pivot positional qualify right select semi show similar some summarize
    symmetric table tablesample then to trailing true union unpivot using when where window with
"""
KEYWORDS = frozenset(_KEYWORD_TEXT.split())

# Words that may also be names, in company that shows they are keywords.
_PHRASES = (
    ("partition", "by"),
    ("nulls", "first"),
    ("nulls", "last"),
    ("within", "group"),
    ("with", "recursive"),
    ("with", "ordinality"),
    ("grouping", "sets"),
    ("at", "time", "zone"),
    ("create", "view"),
    ("create", "temp", "view"),
    ("create", "temporary", "view"),
    ("create", "or", "replace", "view"),
    ("create", "or", "replace", "temp", "view"),
    ("create", "or", "replace", "temporary", "view"),
)
# The same, only directly inside OVER ( … ), where no alias can stand; "0" stands for a number.
_FRAME_PHRASES = (
    ("rows", "between"),
    ("range", "between"),
    ("groups", "between"),
    ("unbounded", "preceding"),
    ("unbounded", "following"),
    ("0", "preceding"),
    ("0", "following"),
    ("current", "row"),
)
_LONGEST_PHRASE = max(len(phrase) for phrase in _PHRASES)
_OPERAND_STARTS = frozenset({"(", "[", "{", "-", "+", "@", "~", "$", "?"})
_KEYED_BY = frozenset({":", ":=", "=>", "="})


def canonical_sql(sql: str, function_names: Collection[str] | None = None) -> str:
    """Spell a query canonically.

    Parameters
    ----------
    sql : str
        One or more statements.
    function_names : collection of str, optional
        The functions whose case does not matter, where they are called; by default all, as the
        engine shows every function in lower case.

    Returns
    -------
    str
        The tokens of the query, comments dropped, one space between them.

    Examples
    --------
    >>> canonical_sql("SELECT  Count(*) AS Visits -- all of them\\nFROM dwell;")
    'select count ( * ) as Visits from dwell'
    """
    functions = None if function_names is None else {name.casefold() for name in function_names}
    tokens = tokens_of(sql)
    while tokens and tokens[-1].word == ";":
        tokens.pop()
    lowered = _keyword_places(tokens) | _call_places(tokens, functions)
    pieces: list[str] = []
    for place, token in enumerate(tokens):
        if place:
            pieces.append(_separator(tokens[place - 1], token))
        # The engine folds the case of ASCII letters only.
        folds = place in lowered and token.text.isascii()
        pieces.append(token.text.lower() if folds else token.text)
    return "".join(pieces)


def _separator(before: Token, token: Token) -> str:
    if before.kind is Kind.STRING and token.kind is Kind.STRING:
        return token.gap  # 'a' 'b' on two lines is one string, on one line it is an error
    if not token.gap and (before.word in ("$", "#", "?") or token.word in ("$", "#", "?")):
        return ""  # $1, #1: a space may change what it is
    return " "


def _word(tokens: list[Token], place: int) -> str:
    if not 0 <= place < len(tokens):
        return ""
    return "0" if tokens[place].kind is Kind.NUMBER else tokens[place].word


def _is_label(tokens: list[Token], place: int) -> bool:
    """Whether a word stands where the grammar takes even a keyword for a name."""
    return _word(tokens, place - 1) in ("as", ".") or _word(tokens, place + 1) in _KEYED_BY


def _is_between(tokens: list[Token], place: int) -> bool:
    """Whether a word is the BETWEEN of ``a BETWEEN b AND c``, and not a name."""
    if tokens[place].word != "between" or place == 0 or place + 1 == len(tokens):
        return False
    before, after = tokens[place - 1], tokens[place + 1]
    if before.word in KEYWORDS or (before.kind is Kind.SYMBOL and before.text not in (")", "]")):
        return False
    if after.kind is Kind.SYMBOL and after.text not in _OPERAND_STARTS:
        return False
    return _next_keyword(tokens, place + 1) == "and"


def _next_keyword(tokens: list[Token], place: int) -> str:
    """Give the first keyword from a place on, at its own depth; "" where a list item ends first."""
    depth = 0
    for token in tokens[place:]:
        depth += (token.word in ("(", "[", "{")) - (token.word in (")", "]", "}"))
        if depth < 0 or (depth == 0 and token.word == ","):
            return ""
        if depth == 0 and token.word in KEYWORDS:
            return token.word
    return ""


def _window_places(tokens: list[Token]) -> set[int]:
    """Places directly inside the parentheses of an OVER."""
    places: set[int] = set()
    openers: list[bool] = []
    for place, token in enumerate(tokens):
        if token.word == "(":
            openers.append(_word(tokens, place - 1) == "over")
        elif token.word == ")" and openers:
            openers.pop()
        elif openers and openers[-1]:
            places.add(place)
    return places


def _keyword_places(tokens: list[Token]) -> set[int]:
    places: set[int] = set()
    windows = _window_places(tokens)
    for place, token in enumerate(tokens):
        if _is_label(tokens, place):
            continue
        if token.word in KEYWORDS or _is_between(tokens, place):
            places.add(place)
        words = tuple(_word(tokens, place + ahead) for ahead in range(_LONGEST_PHRASE))
        for phrase in _PHRASES + (_FRAME_PHRASES if place in windows else ()):
            if words[: len(phrase)] == phrase and not _is_label(tokens, place + len(phrase) - 1):
                places.update(range(place, place + len(phrase)))
    return places


def _call_places(tokens: list[Token], functions: set[str] | None) -> set[int]:
    return {
        place
        for place, token in enumerate(tokens)
        if token.kind is Kind.WORD
        and _word(tokens, place + 1) == "("
        and not _is_label(tokens, place)
        and (functions is None or token.word in functions)
    }
