"""What is refused, and that nothing gets around it."""

import hashlib
from collections.abc import Iterator
from pathlib import Path
from typing import Final

import duckdb
import pytest

from midspread.engine.errors import MidspreadError, RefusedStatement
from midspread.engine.session import Session

SCRATCH: Final = "/nowhere/midspread-test"

REFUSED: Final = {
    "COPY": [
        f"COPY town.stops TO '{SCRATCH}.csv'",
        f"COPY (SELECT 1) TO '{SCRATCH}.csv'",
        f"WITH q AS (COPY town.stops TO '{SCRATCH}.csv') SELECT * FROM q",
        f"with a as (select 1), q as materialized (copy town.stops to '{SCRATCH}.csv') from a",
        f"EXPLAIN ANALYZE COPY town.stops TO '{SCRATCH}.csv'",
        f"EXPLAIN (ANALYZE) WITH q AS (COPY town.stops TO '{SCRATCH}.csv') FROM q",
        f"PIVOT (WITH q AS (COPY town.stops TO '{SCRATCH}.csv') FROM q) ON stop",
        f"WITH q AS (COPY town.stops TO '{SCRATCH}.csv') FROM (PIVOT q ON stop)",
        f"/* SELECT */ copy town.stops to '{SCRATCH}.csv' -- SELECT",
        f"CREATE TEMP VIEW v AS WITH q AS (COPY town.stops TO '{SCRATCH}.csv') FROM q",
    ],
    "INSERT": [
        "INSERT INTO town.stops VALUES ('new')",
        "WITH q AS (INSERT INTO town.stops VALUES ('new') RETURNING *) FROM q",
        "WITH a AS (WITH q AS (INSERT INTO town.stops VALUES ('new') RETURNING *) FROM q) FROM a",
        "WITH q AS (SELECT 1) INSERT INTO town.stops FROM q",
        "SELECT (WITH q AS (INSERT INTO town.stops VALUES ('x') RETURNING stop) SELECT 1 FROM q)",
        "EXPLAIN INSERT INTO town.stops VALUES ('new')",
        "FROM query('WITH q AS (INSERT INTO town.stops VALUES (1) RETURNING *) FROM q')",
        "FROM robust_summary('(WITH q AS (INSERT INTO town.stops VALUES (1) RETURNING *) "
        "FROM q)', 'a')",
        "CREATE TEMP MACRO m() AS TABLE WITH q AS (INSERT INTO town.stops VALUES (1)) FROM q",
    ],
    "UPDATE": [
        "UPDATE town.stops SET stop = 'x'",
        "WITH q AS (UPDATE town.stops SET stop = 'x' RETURNING *) SELECT 1",
    ],
    "DELETE": [
        "DELETE FROM town.stops",
        "WITH q AS MATERIALIZED (DELETE FROM town.stops RETURNING *) SELECT * FROM q",
        "SELECT 1; WITH q AS (DELETE FROM town.stops RETURNING *) FROM q",
        "FROM query('FROM query(''WITH q AS (DELETE FROM town.stops) FROM q'')')",
        "FROM query($$WITH q AS (DELETE FROM town.stops RETURNING *) FROM q$$)",
        "FROM bootstrap_expression('town.stops', "
        "'(WITH q AS (DELETE FROM town.stops RETURNING *) SELECT count(*) FROM q)')",
        "FROM query(e'WITH q AS (\\x44ELETE FROM town.stops RETURNING *) FROM q')",
        "SUMMARIZE WITH q AS (DELETE FROM town.stops RETURNING *) FROM q",
        "DESCRIBE WITH q AS (DELETE FROM town.stops RETURNING *) FROM q",
    ],
    "MERGE": [
        "MERGE INTO town.stops USING (SELECT 1) ON true WHEN MATCHED THEN DELETE",
    ],
    "TRUNCATE": ["TRUNCATE town.stops"],
    "ALTER": ["ALTER TABLE town.stops ADD COLUMN x INT"],
    "COMMENT": ["COMMENT ON TABLE town.stops IS 'x'"],
    "DROP": ["DROP TABLE town.stops", "DROP VIEW v", "SELECT 1; DROP SCHEMA s"],
    "CREATE": [
        "CREATE TABLE town.t AS SELECT 1",
        "CREATE TEMP TABLE t AS SELECT 1",
        "CREATE VIEW town.v AS SELECT 1",
        "CREATE SEQUENCE s",
        "CREATE TYPE e AS ENUM ('a')",
        "CREATE SECRET s (TYPE s3)",
        "CREATE MACRO m(a) AS a",
        "EXPLAIN CREATE TABLE t AS SELECT 1",
    ],
    "ATTACH": [f"ATTACH '{SCRATCH}.duckdb' AS x", f"ATTACH '{SCRATCH}.duckdb' (READ_ONLY)"],
    "DETACH": ["DETACH town"],
    "EXPORT": [f"EXPORT DATABASE '{SCRATCH}'"],
    "IMPORT": [f"IMPORT DATABASE '{SCRATCH}'"],
    "INSTALL": ["INSTALL httpfs", "FORCE INSTALL httpfs"],
    "LOAD": ["LOAD json"],
    "PRAGMA": ["PRAGMA show_tables", "PRAGMA enable_profiling", "PRAGMA threads=1"],
    "CALL": ["CALL pragma_version()", "CALL enable_logging('FileSystem')"],
    "CHECKPOINT": ["CHECKPOINT", "CHECKPOINT town"],
    "VACUUM": ["VACUUM"],
    "BEGIN": ["BEGIN; SELECT 1; COMMIT"],
    "PREPARE": ["PREPARE p AS DELETE FROM town.stops"],
    "EXECUTE": ["EXECUTE p"],
    "SET": [
        "SET enable_external_access = true",
        "SET python_enable_replacements = true",
        "SET temp_directory = '/'",
        "SET autoinstall_known_extensions = 1",
        "SET GLOBAL lock_configuration = false",
        "SET threads = (SELECT 1)",
        "RESET python_enable_replacements",
        "SET profiling_output = '/x'",
        "SET log_query_path = '/x'",
        "SET file_search_path = '/'",
    ],
    "nextval": [
        "SELECT nextval('town.numbers')",
        "SELECT \"NextVal\"('town.numbers')",
        "SELECT 'town.numbers'.nextval()",
        "SELECT system.main.nextval('town.numbers')",
        "SELECT list_transform([1], lambda x: nextval('town.numbers'))",
        "FROM (VALUES (nextval('town.numbers')))",
        "SELECT 1 ORDER BY nextval('town.numbers')",
        "SELECT 1 LIMIT nextval('town.numbers')",
        "SET VARIABLE a = nextval('town.numbers')",
        "CREATE TEMP MACRO m() AS nextval('town.numbers')",
        "FROM robust_summary('(SELECT nextval(''town.numbers'') AS a)', 'a')",
        "SELECT sum(1) FILTER (WHERE nextval('town.numbers') > 0)",
        "FROM bootstrap_expression('town.numbers_seen', 'sum(n) + nextval(''town.numbers'')')",
        "FROM bootstrap_expression('town.numbers_seen', expression := 'nextval(''town.numbers'')')",
    ],
    "setval": ["SELECT setval('town.numbers', 5)"],
    "write_log": ["SELECT write_log('x')"],
    "checkpoint": ["SELECT * FROM checkpoint()", "FROM main.CheckPoint('town')"],
    "force_checkpoint": ["FROM force_checkpoint()"],
    "enable_logging": ["FROM enable_logging('FileSystem')"],
    "json_execute_serialized_sql": ["FROM json_execute_serialized_sql('{}')"],
    "python_map_function": ["FROM python_map_function(1)"],
    "seq_scan": ["FROM seq_scan()"],
    "computed text": [
        "FROM query('DELETE FROM ' || 'town.stops')",
        "FROM query(getvariable('a'))",
        "CREATE TEMP MACRO m(t) AS TABLE FROM query(t)",
        "CREATE TEMP MACRO m(t) AS TABLE FROM robust_summary(t, 'a')",
        "FROM robust_summary('(SELECT ' || '1)', 'a')",
        "FROM bootstrap_expression('town.numbers_seen', 'sum' || '(n)')",
        "CREATE TEMP MACRO m(e) AS TABLE FROM bootstrap_expression('town.numbers_seen', e)",
    ],
    "trimmed_mean": [
        "CREATE OR REPLACE TEMP MACRO trimmed_mean(x) AS 1",
        "CREATE OR REPLACE TEMP MACRO Trimmed_Mean(x) AS TABLE SELECT 1",
    ],
    "_values": ["CREATE OR REPLACE TEMP MACRO _values(x) AS [1]"],
    "_estimates": ["CREATE OR REPLACE TEMP VIEW _estimates AS SELECT 1"],
    "_mad_scale": ["CREATE OR REPLACE TEMP MACRO _mad_scale(x) AS 1"],
}

ALLOWED: Final = [
    "FROM town.stops",
    "SELECT 'DELETE FROM town.stops', $$ DROP TABLE x $$ -- COPY",
    'SELECT 1 AS "insert", 2 AS "copy to"',
    "SELECT random() IS NOT NULL, now() IS NOT NULL, uuid() IS NOT NULL",
    "WITH q AS (SELECT 1 AS a), r AS (FROM q) FROM r",
    "WITH RECURSIVE r AS (SELECT 1 AS i UNION ALL SELECT i + 1 FROM r WHERE i < 3) FROM r",
    "FROM query('SELECT 1')",
    "FROM query_table('town.stops')",
    "FROM glob('*')",
    "FROM duckdb_settings() LIMIT 1",
    "SHOW ALL TABLES",
    "SUMMARIZE town.stops",
    "EXPLAIN SELECT 1",
    "EXPLAIN ANALYZE SELECT 1",
    "PIVOT town.stops ON stop USING count(*)",
    "WITH p AS (PIVOT town.stops ON stop || 'x', substr(stop, 1, 1) USING count(*)) FROM p",
    "FROM (PIVOT town.stops ON (CASE WHEN stop = 'A' THEN 1 ELSE 2 END)) ORDER BY ALL LIMIT 1",
    "SET TimeZone = 'UTC'; SELECT 1",
    "SET VARIABLE a = (SELECT 3); SELECT getvariable('a')",
    "USE town; FROM stops",
    "CREATE OR REPLACE TEMP VIEW v AS FROM town.stops; FROM v",
    "CREATE OR REPLACE TEMP MACRO twice(a) AS 2 * a; SELECT twice(3)",
    "CREATE OR REPLACE TEMP MACRO top(n) AS TABLE FROM town.stops LIMIT n; FROM top(1)",
    "FROM robust_summary('town.numbers_seen', 'n')",
    "FROM robust_summary('(SELECT n FROM town.numbers_seen)', 'n')",
    "FROM bootstrap_expression('town.numbers_seen', 'sum(n) / count(*) -- why')",
    "FROM bootstrap_expression('town.numbers_seen', 'mad_scale(n) FILTER (WHERE n > 2)')",
    "FROM bootstrap_expression(expression := 'median(DISTINCT n)', tbl := 'town.numbers_seen')",
]


@pytest.fixture(scope="module")
def town(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("town") / "town.duckdb"
    with duckdb.connect(path) as made:
        made.execute("CREATE TABLE stops AS FROM (VALUES ('A'), ('B')) AS t(stop)")
        made.execute("CREATE TABLE numbers_seen AS SELECT i * 1.5 AS n FROM range(9) AS r(i)")
        made.execute("CREATE SEQUENCE numbers")
    return path


@pytest.fixture(scope="module")
def guarded(town: Path) -> Iterator[Session]:
    before = hashlib.sha256(town.read_bytes()).hexdigest()
    with Session(use_store=False, sources={"town": town}) as made:
        yield made
    assert hashlib.sha256(town.read_bytes()).hexdigest() == before
    assert [file.name for file in town.parent.iterdir()] == [town.name]


@pytest.mark.parametrize(
    ("word", "sql"), [(word, sql) for word, listed in REFUSED.items() for sql in listed]
)
def test_refused(guarded: Session, word: str, sql: str) -> None:
    with pytest.raises(RefusedStatement) as caught:
        list(guarded.run(sql))
    sentence = str(caught.value)
    assert sentence.startswith("query refuses")
    assert word.lower() in sentence.lower()
    assert "\n" not in sentence and sentence.endswith(".")
    assert ";" in sentence, "it says what to do instead"
    assert not list(Path("/nowhere").glob("*"))


@pytest.mark.parametrize("sql", ALLOWED)
def test_allowed(guarded: Session, sql: str) -> None:
    answers = list(guarded.run(sql))
    assert answers and answers[-1].columns


@pytest.mark.parametrize(
    "sql",
    [
        "SELECT * FROM (DELETE FROM town.stops RETURNING *)",
        "(COPY town.stops TO 'x')",
        "SELECT 1 UNION ALL (DELETE FROM town.stops RETURNING stop)",
        "FROM (COPY town.stops TO 'x')",
        "WITH q AS (ATTACH 'x.duckdb') SELECT 1",
        "WITH RECURSIVE q AS (DELETE FROM town.stops RETURNING *) SELECT * FROM q",
        "REPLACE INTO town.stops VALUES (1)",
        "SELECT * FROM town.stops WHERE (DROP TABLE town.stops)",
        "KILL 1",
        "\\d",
    ],
)
def test_what_the_engine_cannot_read_is_never_run(guarded: Session, sql: str) -> None:
    with pytest.raises(MidspreadError, match="cannot be read"):
        list(guarded.run(sql))


def test_nothing_of_a_script_runs_when_a_later_statement_is_refused(guarded: Session) -> None:
    with pytest.raises(RefusedStatement):
        list(guarded.run("CREATE TEMP VIEW not_made AS SELECT 1; DROP TABLE town.stops"))
    with pytest.raises(MidspreadError, match="no table not_made"):
        guarded.query("FROM not_made")


def test_the_source_itself_is_attached_for_reading_only(guarded: Session) -> None:
    guarded.query("SELECT 1")
    for sql in ("INSERT INTO town.stops VALUES ('C')", "DROP TABLE town.stops"):
        with pytest.raises(duckdb.Error, match="read-only"):
            guarded._connection.execute(sql)


def test_python_variables_are_no_tables(guarded: Session) -> None:
    visits_of_python = [1, 2, 3]
    assert visits_of_python
    with pytest.raises(MidspreadError, match="no table visits_of_python"):
        guarded.query("FROM visits_of_python")


def test_expressions_of_any_depth_are_read_or_refused(guarded: Session) -> None:
    assert guarded.query("SELECT " + " + ".join(["1"] * 900)).rows() == [(900,)]
    with pytest.raises(MidspreadError):
        guarded.query("SELECT " + " + ".join(["1"] * 5000))
