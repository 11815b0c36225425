"""Each rule on pairs of SQL: what is given, and what it becomes."""

from pathlib import Path
from typing import Final, NamedTuple

import duckdb
import pytest

from midspread.engine.rewriting import RULES, Rule
from midspread.engine.rewriting.catalog import Catalog
from midspread.engine.rewriting.edits import apply, without_overlaps
from midspread.engine.rewriting.query import Query
from midspread.udfs import functions

FIXTURES: Final = Path(__file__).parent / "fixtures"
FILES: Final = (
    "column_names",
    "order_inside",
    "filter_clause",
    "over_partition",
    "distinct",
    "window_call",
    "shared_sort",
    "direct_call",
)


class Pair(NamedTuple):
    rule: Rule
    title: str
    given: str
    becomes: str


def pairs() -> list[Pair]:
    found = []
    for name, rule in zip(FILES, RULES, strict=True):
        text = (FIXTURES / f"{name}.sql").read_text(encoding="utf-8")
        for block in text.strip().split("\n\n"):
            before, becomes = block.split("\n-- becomes\n")
            title, given = before.removeprefix("-- ").split("\n", 1)
            becomes = given if becomes == "(the same)" else becomes
            found.append(Pair(rule, f"{name}: {title}", given, becomes))
    return found


def applied(connection: duckdb.DuckDBPyConnection, rule: Rule, sql: str) -> str:
    query = Query(connection, sql, functions())
    catalog = Catalog(connection, frozenset(functions()))
    for _ in range(10):
        edits = without_overlaps(rule.edits(query, catalog))
        if not edits:
            break
        query = Query(connection, apply(query.text, edits), functions())
        if not rule.repeats:
            break
    return query.text


@pytest.mark.parametrize("pair", pairs(), ids=lambda pair: pair.title)
def test_what_a_rule_makes(connection: duckdb.DuckDBPyConnection, pair: Pair) -> None:
    assert applied(connection, pair.rule, pair.given) == pair.becomes
