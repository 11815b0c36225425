"""Queries made at random give the same with and without the rewrites that are not needed."""

import math
from typing import Any, Final

import duckdb
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from midspread.engine.rewriting import rewrite
from midspread.udfs import functions

COLUMNS: Final = ("dwell_s", "boardings", "v.dwell_s", "dwell_s + boardings", "-alightings")
KEYS: Final = ("route", "stop", "v.day_part", "vehicle % 2", "ramp_used", "visit // 40")
CONDITIONS: Final = ("ramp_used", "boardings > 2", "route IS NULL OR vehicle = 1", "false", "NULL")
SOURCES: Final = (
    "visits v",
    "(SELECT * FROM visits WHERE visit < 70) AS v",
    "(SELECT * FROM visits ORDER BY visit LIMIT 40) v",
    "peak AS v",
    "first_hundred v",
    "chosen v",
)


@st.composite
def calls(draw: st.DrawFn, mostly: str = COLUMNS[0]) -> str:
    """A call of one of our functions without OVER, more often than not on one column."""
    column = draw(st.sampled_from((mostly, mostly, *COLUMNS)))
    call = draw(
        st.sampled_from(
            (
                "mad_scale({})",
                "iqr_scale({})",
                "trimean( {} )",
                "trimmed_mean({}, 0.1)",
                "trimmed_mean({}, share := .25)",
                "trimmed_mean({})",
                "TRIMMED_MEAN(x := {})",
                "winsorized_sd({}, 0.2)",
                "quantile_hf({}, 0.75, 6)",
                "hodges_lehmann({})",
                "mad_scale(DISTINCT {})",
                "trimmed_mean(DISTINCT {}, 0.1)",
            )
        )
    ).format(column)
    if draw(st.integers(0, 3)) == 0:
        call += f" FILTER (WHERE {draw(st.sampled_from(CONDITIONS))})"
    return call


@st.composite
def grouped(draw: st.DrawFn) -> str:
    """A query with one row a group."""
    items = draw(st.lists(calls(draw(st.sampled_from(COLUMNS))), min_size=1, max_size=5))
    keys = draw(st.lists(st.sampled_from(KEYS), max_size=2, unique=True))
    sql = f"SELECT {', '.join([*keys, *items])} FROM {draw(st.sampled_from(SOURCES))}"
    if draw(st.booleans()):
        sql += f" WHERE {draw(st.sampled_from(CONDITIONS))} OR visit % 2 = 0"
    if keys:
        kind = draw(st.sampled_from(("{}", "ROLLUP ({})", "CUBE ({})")))
        sql += f" GROUP BY {kind.format(', '.join(keys))}"
        if draw(st.booleans()):
            sql += f" HAVING {draw(calls())} > 1 OR count(*) > 3"
    return sql


@st.composite
def windowed(draw: st.DrawFn) -> str:
    """A query with one row for every row read."""
    items = []
    for _ in range(draw(st.integers(1, 3))):
        keys = draw(st.lists(st.sampled_from(KEYS), max_size=2, unique=True))
        over = f"PARTITION BY {', '.join(keys)}" if keys else ""
        if draw(st.integers(0, 4)) == 0:
            over += " ORDER BY visit"
        items.append(f"{draw(calls())} OVER ({over})")
    if draw(st.booleans()):
        items.append(f"1 + {items[0]} AS again")
    first = draw(st.sampled_from(("visit", "*", "v.*", "* EXCLUDE (payment)", "ramp_used AS r")))
    sql = f"SELECT {', '.join([first, *items])} FROM {draw(st.sampled_from(SOURCES))}"
    if draw(st.booleans()):
        sql += f" WHERE {draw(st.sampled_from(CONDITIONS))} OR boardings = 1"
    if draw(st.booleans()):
        sql += f" QUALIFY dwell_s > {items[0]} OR v.boardings = 2"
    return sql


@st.composite
def nested(draw: st.DrawFn) -> str:
    """The same within WITH, a subquery or a set operation."""
    one = draw(st.one_of(grouped(), windowed()))
    shape = draw(
        st.sampled_from(
            (
                "{}",
                "SELECT * FROM ({}) AS s",
                "WITH w AS ({}), u AS (FROM w) SELECT * FROM u",
                "({}) UNION ALL ({})",
                "SELECT count(*), count(DISTINCT s) FROM ({}) AS s",
                "SELECT (SELECT count(s) FROM ({}) AS s) AS n",
            )
        )
    )
    return "WITH chosen AS (SELECT * FROM visits WHERE visit % 3 > 0) FROM (" + (
        shape.replace("{}", one) + ")"
    )


def rows(connection: duckdb.DuckDBPyConnection, sql: str) -> tuple[list[str], list[Any]]:
    result = connection.execute(sql)
    names = [column[0] for column in result.description or ()]
    return names, sorted((tuple(map(comparable, row)) for row in result.fetchall()), key=repr)


def comparable(value: Any) -> Any:
    return "NaN" if isinstance(value, float) and math.isnan(value) else value


@settings(
    max_examples=80,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)
@given(sql=nested())
def test_faster_rules_change_nothing(connection: duckdb.DuckDBPyConnection, sql: str) -> None:
    faster = rewrite(connection, sql, functions())
    slow = rewrite(connection, sql, functions(), faster=False)
    assert rows(connection, faster.text) == rows(connection, slow.text)
