"""Canonical SQL: one-sided sameness, checked against what the engine itself answers."""

import itertools

import duckdb
import pytest
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

from midspread.engine.inputs.canonical import _FRAME_PHRASES, _PHRASES, KEYWORDS, canonical_sql
from midspread.engine.inputs.tokens import tokens_of

SETUP = """
CREATE TABLE visits AS
    SELECT range AS visit, range % 3 AS route, range * 1.5 AS dwell_s, 'R' || range % 2 AS "Stop"
    FROM range(12);
CREATE MACRO doubled(a, factor := 2) AS a * factor;
"""

QUERIES = [
    "SELECT Count(*) AS Visits, doubled(dwell_s, Factor := 3) FROM visits GROUP BY 1 ORDER BY 1",
    "SELECT route, Sum(dwell_s) FILTER (WHERE visit > 2) FROM visits GROUP BY ALL ORDER BY ALL",
    "SELECT visit, Row_Number() OVER (PARTITION BY route ORDER BY visit DESC NULLS LAST) AS Rank"
    " FROM visits QUALIFY Rank = 1 ORDER BY visit",
    "SELECT Avg(dwell_s) OVER (ORDER BY visit ROWS BETWEEN 2 PRECEDING AND CURRENT ROW) FROM visits"
    " ORDER BY visit",
    'WITH Q(A, b) AS (SELECT visit, "Stop" FROM visits) SELECT Q.A, B, Q FROM Q ORDER BY a LIMIT 2',
    "SELECT {Year: 1, 'b c': 'It''s'}.Year AS Select, [1, 2, 3][1:2], x'41', e'a\\tb', $$ A  b $$",
    "SELECT CASE WHEN route BETWEEN 1 AND 2 THEN 'A' ELSE 'a' END, NOT True FROM visits ORDER BY 1",
    "SELECT 1 - -1, 2+-1, 1E3, .5, 5 // 2, @ -1, 'a' 'b', 'a'\n'b'",
    "SELECT 'a'\n'b' AS Joined, Date '2031-02-03', Extract(YEAR FROM DATE '2031-02-03')",
    'FROM visits AS V SELECT V.route, V."Stop" WHERE NOT v.visit IS NULL ORDER BY Visit',
    'PIVOT visits ON route USING Sum(dwell_s), Max(visit) GROUP BY "Stop" ORDER BY "Stop"',
    "SELECT route, Grouping(route) FROM visits GROUP BY Cube(route) ORDER BY 1, 2",
    "SELECT Cast(1 AS Decimal(10,2)), TRY_CAST('x' AS Integer), 1::Struct(A Integer) FROM visits",
    "SELECT * EXCLUDE (visit) REPLACE (route + 1 AS route) FROM visits ORDER BY dwell_s LIMIT 3",
    "SELECT a.visit FROM visits A Left Join visits B USING (visit) WHERE A.route IN (1, 2)",
    "SELECT list_transform([1], lambda X: X + 1), list_filter([1], y -> y > 0), 1 Is Not Null",
    "SELECT Interval 1 DAY, TIMESTAMP '2031-01-01' At Time Zone 'UTC', Coalesce(NULL, 'X')",
    "DESCRIBE SELECT Sum(visit), visit AS V FROM visits",
    "SUMMARIZE visits",
    "VALUES (1, 'A'), (2, 'a')",
    "SELECT route Route, visit FROM visits WHERE NOT False UNION ALL SELECT 1, 2 ORDER BY ALL",
]

Outcome = tuple[list[str], list[str], list[tuple[object, ...]]] | None


@pytest.fixture(scope="module")
def engine() -> duckdb.DuckDBPyConnection:
    connection = duckdb.connect(config={"threads": 1})
    connection.execute(SETUP)
    return connection


def outcome(engine: duckdb.DuckDBPyConnection, sql: str) -> Outcome:
    """Headers, types and rows; None where the engine refuses."""
    try:
        result = engine.execute(sql)
        described = result.description or []
        return [d[0] for d in described], [str(d[1]) for d in described], result.fetchall()
    except duckdb.Error:
        return None


def lexes_as(text: str, expected: list[str]) -> bool:
    return [token.text for token in tokens_of(text)] == expected


@st.composite
def respelled(draw: st.DrawFn, preserve_meaning: bool) -> tuple[str, str]:
    """A query and the same with other gaps and, here and there, other case or content."""
    sql = draw(st.sampled_from(QUERIES))
    tokens = tokens_of(sql)
    texts = [token.text for token in tokens]
    if not preserve_meaning:
        for place in draw(st.lists(st.integers(0, len(texts) - 1), max_size=6)):
            change = draw(st.sampled_from([str.swapcase, str.lower, str.upper, str.title]))
            texts[place] = change(texts[place])
        if draw(st.booleans()):
            place = draw(st.integers(0, len(texts) - 1))
            texts[place] = draw(st.sampled_from(texts))
    gaps = [" ", "  ", "\n", "\t", " -- Note 'x'\n", " /* SELECT /* b */ */ "]
    if not preserve_meaning:
        gaps.append("")
    pieces = []
    for place, text in enumerate(texts):
        adjacent = place and tokens[place].kind == tokens[place - 1].kind
        glued = place and not tokens[place].gap
        keep_gap = preserve_meaning and (adjacent or glued)
        gap = tokens[place].gap if keep_gap else draw(st.sampled_from(gaps))
        pieces.append(("" if not place else gap) + text)
    return sql, "".join(pieces) + draw(st.sampled_from(["", ";", " ; ", "\n-- end"]))


@given(respelled(preserve_meaning=False))
@example(("SELECT 'a' 'b'", "SELECT 'a'\n'b'"))
@example(
    ("SELECT Range BETWEEN 1 AND 2 FROM range(3)", "SELECT range BETWEEN 1 AND 2 FROM range(3)")
)
@settings(
    max_examples=600, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
def test_queries_that_share_a_key_share_their_answer(
    engine: duckdb.DuckDBPyConnection, pair: tuple[str, str]
) -> None:
    one, other = pair
    if canonical_sql(one) == canonical_sql(other):
        assert outcome(engine, one) == outcome(engine, other)


@given(respelled(preserve_meaning=True))
@settings(max_examples=200, deadline=None)
def test_spacing_and_comments_do_not_matter(pair: tuple[str, str]) -> None:
    one, other = pair
    assert canonical_sql(one) == canonical_sql(other)


@given(st.text(max_size=60) | st.text(alphabet="aA1'\"$-/*\n .;:@#?{}[]()éx\\", max_size=40))
@settings(max_examples=500, deadline=None)
def test_any_text_gives_a_spelling_that_keeps_every_token(text: str) -> None:
    tokens = tokens_of(text)
    assert (
        "".join(token.gap + token.text for token in tokens)
        == text[: len(text)][: sum(len(token.gap + token.text) for token in tokens)]
    )
    spelled = canonical_sql(text)
    while tokens and tokens[-1].text == ";":
        tokens.pop()
    assert [t.text.lower() for t in tokens_of(spelled)] == [t.text.lower() for t in tokens]


TEMPLATES = [
    "SELECT 1 {w}",
    "SELECT 1 AS {w}",
    "SELECT {w} FROM (SELECT 1 AS {q})",
    "SELECT a.{w} FROM (SELECT 1 AS {q}) a",
    "SELECT {w}: 1",
    "SELECT {{{w}: 1}}",
    "SELECT {{{w}: 1}}.{w}",
    "SELECT struct_pack({w} := 1)",
    "SELECT struct_pack({w} => 1)",
    "SELECT row({w} := 1)",
    "SELECT * FROM (SELECT 1) t({w})",
    "SELECT {w} FROM (SELECT 1) {w}(a)",
    "SELECT {w} FROM (SELECT 1 a) {w}",
    "WITH {w}(a) AS (SELECT 1) SELECT * FROM {w}",
    "WITH {w} AS (SELECT 1) SELECT {w} FROM {w}",
    "SELECT * RENAME (a AS {w}) FROM (SELECT 1 a)",
    "SELECT * EXCLUDE ({w}) FROM (SELECT 1 a, 2 {q})",
    "SELECT * REPLACE (2 AS {w}) FROM (SELECT 1 AS {q})",
    "SELECT {w}('a')",
    "SELECT {w}(1)",
    "SELECT {w} 'a'",
    "SELECT {w} '2031-01-01'",
    "SELECT CAST(NULL AS STRUCT({w} INTEGER))",
    "SELECT CAST(NULL AS UNION({w} INTEGER))",
    "SELECT CAST('1' AS {w})",
    "SELECT '1'::{w}",
    "SELECT list_transform([1], lambda {w}: {w} + 1)",
    "SELECT list_transform([1], {w} -> {w} + 1)",
    "SELECT extract({w} FROM TIMESTAMP '2031-01-01')",
    "SELECT {w} BETWEEN 1 AND 2 FROM (SELECT 1 AS {q})",
    "SELECT 1 {w} 2",
    "SELECT true {w} false",
    "SELECT {w} true",
    "SELECT {w}",
    "SELECT 'a' COLLATE {w}",
    "SELECT 1 ORDER BY 1 {w}",
    "SELECT 1 GROUP BY {w}",
    "SELECT * FROM (SELECT 1 AS {q}) GROUP BY {w}",
    "PIVOT (SELECT 1 a, 2 {q}) ON {w} USING sum(a)",
    "PIVOT (SELECT 1 a, 2 b) ON b USING sum(a) AS {w}",
    "UNPIVOT (SELECT 1 a, 2 b) ON a, b INTO NAME {w} VALUE v",
    "UNPIVOT (SELECT 1 a, 2 b) ON a, b INTO NAME n VALUE {w}",
    "SELECT sum(a) OVER {w} FROM (SELECT 1 a) WINDOW {w} AS (ORDER BY a)",
    "SELECT COLUMNS({w}) FROM (SELECT 1 AS {q})",
    "SELECT doubled({w} := 1)",
    "SELECT doubled(1, {w} := 1)",
    "SELECT ({w}).a FROM (SELECT {{a: 1}} AS {q})",
    "SELECT 1 a, {w} FROM (SELECT 1 AS {q})",
    "SELECT INTERVAL 1 {w}",
    "SELECT 1 AS a {w} BY NAME SELECT 2 AS a",
    "SELECT {w} IS NULL FROM (SELECT 1 AS {q})",
    "SELECT {w} + 1 FROM (SELECT 1 AS {q})",
    "SELECT {w}[1] FROM (SELECT [1] AS {q})",
    "SELECT MAP {{{w}: 1}} FROM (SELECT 1 AS {q})",
    "SELECT (SELECT {w} FROM (SELECT 1 AS {q}))",
    "DESCRIBE SELECT 1 AS {w}",
    "SELECT {w} AND true FROM (SELECT true AS {q})",
    "SELECT [{w} FOR {w} IN [1, 2]]",
    "SELECT sum(1) OVER ({w}) FROM (SELECT 1 AS {q})",
    "SELECT sum(1) OVER (PARTITION BY {w}) FROM (SELECT 1 AS {q})",
    "SELECT sum(1) OVER (ORDER BY {w}) FROM (SELECT 1 AS {q})",
    "SELECT sum(1) OVER (ORDER BY (SELECT 1 {w})) FROM (SELECT 1 AS {q})",
    "SELECT 1 {w}, 2",
    "SELECT * FROM (SELECT 1 {w})",
    "SELECT 1 {w} (2)",
    "SELECT sum(a) FILTER (WHERE {w}) FROM (SELECT 1 a, true AS {q})",
    "SELECT 1 = {w}(SELECT 1)",
    "SELECT {w} (SELECT 1)",
]


def test_no_keyword_hides_a_name_the_engine_would_show(engine: duckdb.DuckDBPyConnection) -> None:
    """Wherever the engine takes a keyword and answers differently by its case, keys differ."""
    known = _PHRASES + _FRAME_PHRASES
    words = KEYWORDS | {"between"} | {word for phrase in known for word in phrase} - {"0"}
    phrases = {" ".join(phrase).replace("0", "3") for phrase in known}
    taken = 0
    for word, template in itertools.product(sorted(words | phrases), TEMPLATES):
        quoted = '"' + word.title() + '"'
        spellings = [template.format(w=w, q=quoted) for w in (word, word.upper(), word.title())]
        if len({canonical_sql(sql) for sql in spellings}) == len(spellings):
            continue
        outcomes = [outcome(engine, sql) for sql in spellings]
        for one, other in itertools.combinations(range(3), 2):
            if canonical_sql(spellings[one]) == canonical_sql(spellings[other]):
                taken += outcomes[one] is not None
                assert outcomes[one] == outcomes[other], spellings[one]
    assert taken > 100, "the templates must reach queries that the engine accepts"


def test_keywords_are_keywords_of_the_engine(engine: duckdb.DuckDBPyConnection) -> None:
    found = engine.execute(
        "SELECT keyword_name FROM duckdb_keywords()"
        " WHERE keyword_category IN ('reserved', 'type_function')"
    ).fetchall()
    assert {name for (name,) in found} >= KEYWORDS


@pytest.mark.parametrize(
    ("one", "other"),
    [
        ("SELECT Count(*) FROM visits", "select count( * )from visits"),
        ("SELECT 1;", "select 1"),
        ("SELECT a FROM t GROUP BY a ORDER BY a", "select a from t group by a order by a;;"),
        ("SELECT Trimmed_Mean(x, 0.1) FROM t", "select trimmed_mean(x,0.1) from t"),
        ("SELECT a FROM t WHERE x BETWEEN 1 AND 2", "select a from t where x between 1 and 2"),
        (
            "SELECT sum(x) OVER (PARTITION BY g ROWS BETWEEN 2 PRECEDING AND CURRENT ROW) FROM t",
            "select sum(x) over (partition by g rows between 2 preceding and current row) from t",
        ),
    ],
)
def test_spellings_of_one_query(one: str, other: str) -> None:
    assert canonical_sql(one) == canonical_sql(other)


@pytest.mark.parametrize(
    ("one", "other"),
    [
        ("SELECT 'a'", "SELECT 'A'"),
        ("SELECT 'a b'", "SELECT 'a  b'"),
        ('SELECT "A"', 'SELECT "a"'),
        ('SELECT "a"', "SELECT a"),
        ("SELECT 1 AS Foo", "SELECT 1 AS foo"),
        ("SELECT 1 AS Select", "SELECT 1 AS select"),
        ("SELECT Dwell_s FROM t", "SELECT dwell_s FROM t"),
        ("SELECT 1.0", "SELECT 1.00"),
        ("SELECT 'a'\n'b'", "SELECT 'a' 'b'"),
        ("SELECT Straße(1), Éclair(2)", "SELECT Straße(1), éclair(2)"),
        ("SELECT 1 - -1", "SELECT 1 --1"),
        ("SELECT 2 @-1", "SELECT 2 @ -1"),
        ("SELECT x'41'", "SELECT x '41'"),
        ("SELECT 1e5", "SELECT 1 e5"),
        ("SELECT $$ a $$", "SELECT $$ a$$"),
        ("SELECT '-- a'", "SELECT '-- b'"),
        ("SELECT a -- 'b'\n, c", "SELECT a 'b', c"),
    ],
)
def test_different_queries_keep_apart(one: str, other: str) -> None:
    assert canonical_sql(one) != canonical_sql(other)


def test_only_the_named_functions_are_folded_when_named() -> None:
    assert canonical_sql("SELECT SUM(x), Foo(y)", ["foo"]) == "select SUM ( x ) , foo ( y )"


def test_unlexable_and_odd_text_is_taken_as_it_is() -> None:
    assert canonical_sql("") == ""
    assert canonical_sql("-- only a comment") == ""
    assert canonical_sql("SELECT 'Zü' AS Ø") == "select 'Zü' as Ø"
    assert tokens_of("é €'ß'")[1].start == 2
