"""The user's own text, with the calls that DuckDB would refuse or do slowly written otherwise.

Each rule stands in a file of its own: a function from a query to the edits it wants. Nothing is
ever written anew from a tree; what a rule does not change stays as the user typed it.
"""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import duckdb

from midspread.engine.pivoting import insertions
from midspread.engine.rewriting.catalog import Catalog
from midspread.engine.rewriting.column_names import column_names
from midspread.engine.rewriting.direct_call import direct_call
from midspread.engine.rewriting.distinct import distinct
from midspread.engine.rewriting.edits import Edit, apply, origin, without_overlaps
from midspread.engine.rewriting.filter_clause import filter_clause
from midspread.engine.rewriting.order_inside import order_inside
from midspread.engine.rewriting.over_partition import over_partition
from midspread.engine.rewriting.query import Query
from midspread.engine.rewriting.query_text import query_text
from midspread.engine.rewriting.shared_sort import shared_sort
from midspread.engine.rewriting.window_call import window_call
from midspread.udfs import Function

_MOST_PASSES: Final = 100


@dataclass(frozen=True)
class Rule:
    """One rewrite rule.

    Attributes
    ----------
    edits : callable
        From a query to the edits the rule wants.
    is_needed : bool
        Whether DuckDB would refuse the query without it; other rules only make it faster.
    repeats : bool
        Whether its edits may call for the rule again.
    only_in_macros : bool
        Whether it is for the bodies of macros only.
    """

    edits: Callable[[Query, Catalog], Sequence[Edit]]
    is_needed: bool
    repeats: bool = True
    only_in_macros: bool = False


RULES: Final[tuple[Rule, ...]] = (
    Rule(lambda query, _: column_names(query), is_needed=True, repeats=False),
    Rule(lambda query, _: order_inside(query), is_needed=True),
    Rule(filter_clause, is_needed=True),
    Rule(over_partition, is_needed=False),
    Rule(lambda query, _: distinct(query), is_needed=True),
    Rule(lambda query, _: window_call(query), is_needed=True),
    Rule(shared_sort, is_needed=False),
    Rule(lambda query, _: direct_call(query), is_needed=True, only_in_macros=True),
)


@dataclass(frozen=True)
class Rewritten:
    """A query after the rules.

    Attributes
    ----------
    text : str
        What to run.
    passes : tuple
        The edits that led to it, in order.
    is_faster : bool
        Whether a rule that DuckDB does not need was used.
    """

    text: str
    passes: tuple[tuple[Edit, ...], ...] = ()
    is_faster: bool = False

    def origin(self, position: int) -> int:
        """Where a place of the text was in the user's."""
        for edits in reversed(self.passes):
            position = origin(position, edits)
        return position


def rewrite(
    connection: duckdb.DuckDBPyConnection,
    text: str,
    functions: Mapping[str, Function],
    *,
    faster: bool = True,
    keep_names: bool = True,
    in_macro: bool = False,
) -> Rewritten:
    """Apply the rules to one query.

    Parameters
    ----------
    connection : duckdb.DuckDBPyConnection
        Parses the query and knows its views and macros; it runs nothing.
    text : str
        The query.
    functions : mapping
        Our functions by name.
    faster : bool
        Whether to apply rules that DuckDB does not need as well.
    keep_names : bool
        Whether the columns of the query keep their names.
    in_macro : bool
        Whether the query is the body of a macro.

    Raises
    ------
    NotParsed
        When DuckDB cannot read the query.
    MidspreadError
        When a call of one of our functions has a form that cannot be computed.
    """
    query = Query(connection, text, functions)
    passes = [_insertions_as_edits(query.text)]
    did_more = used_faster = False
    within = query_text(
        query,
        lambda inner: rewrite(connection, inner, functions, faster=faster).text,
        lambda inner: rewrite(connection, inner, functions, faster=False, keep_names=False).text,
    )
    if within:
        passes.append(tuple(within))
        query = Query(connection, apply(query.text, within), functions)
        did_more = used_faster = True
    if not (query.calls or within):
        return Rewritten(text)
    catalog = Catalog(connection, frozenset(functions))
    for position, rule in enumerate(RULES):
        if not (rule.is_needed or faster) or (position == 0 and not keep_names):
            continue
        if rule.only_in_macros and not in_macro:
            continue
        for _ in range(_MOST_PASSES):
            edits = tuple(without_overlaps(rule.edits(query, catalog)))
            if not edits:
                break
            passes.append(edits)
            query = Query(connection, apply(query.text, edits), functions)
            did_more = did_more or position > 0
            used_faster = used_faster or not rule.is_needed
            if not rule.repeats:
                break
    if not did_more:
        return Rewritten(text)
    passes.append(tuple(Edit(start, stop, "") for start, stop in insertions(query.text)))
    return Rewritten(apply(query.text, passes[-1]), tuple(passes), used_faster)


def _insertions_as_edits(readable: str) -> tuple[Edit, ...]:
    """What led from the user's text to one whose tree DuckDB shows; see `pivoting`."""
    edits, inserted = [], 0
    for start, stop in insertions(readable):
        edits.append(Edit(start - inserted, start - inserted, readable[start:stop]))
        inserted += stop - start
    return tuple(edits)
