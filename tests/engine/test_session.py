"""Sessions: several statements, sources, limits, answers, expansion."""

import tempfile
from pathlib import Path
from typing import Any

import duckdb
import pyarrow as pa
import pytest

from midspread import engine
from midspread.engine.errors import MidspreadError, UsageError
from midspread.engine.session import Session
from midspread.udfs import functions


def test_the_package_exports_it() -> None:
    assert engine.Session is Session


def test_an_answer_in_every_form(session: Session) -> None:
    answer = session.query(
        "SELECT route, count(*) AS n, mad_scale(dwell_s) FROM visits WHERE route IS NOT NULL "
        "GROUP BY route ORDER BY route"
    )
    assert answer.columns == ["route", "n", "mad_scale(dwell_s)"]
    assert answer.arrow() is answer.table and isinstance(answer.table, pa.Table)
    assert answer.pandas()["route"].tolist() == ["R0", "R1", "R2", "R3"]
    assert [row[0] for row in answer.rows()] == ["R0", "R1", "R2", "R3"]
    assert answer.from_store is None and answer.sql.startswith("SELECT route")


def test_two_columns_of_one_name(session: Session) -> None:
    answer = session.query("SELECT 1 AS a, 2 AS a")
    assert (answer.columns, answer.rows()) == (["a", "a"], [(1, 2)])


def test_no_rows(session: Session) -> None:
    answer = session.query("SELECT mad_scale(dwell_s) AS m FROM visits WHERE false GROUP BY route")
    assert (answer.columns, answer.rows()) == (["m"], [])


def test_run_answers_every_select_and_query_the_last(session: Session) -> None:
    script = (
        "SELECT 1 AS a; CREATE TEMP VIEW three AS SELECT 3 AS a; FROM three; SET VARIABLE v = 4"
    )
    assert [answer.rows() for answer in session.run(script)] == [[(1,)], [(3,)]]
    script = "SELECT 1/0; CREATE OR REPLACE TEMP VIEW three AS SELECT 33 AS a; FROM three"
    assert session.query(script).rows() == [(33,)]
    assert session.query("SELECT getvariable('v')").rows() == [(4,)]


def test_a_script_is_judged_as_a_whole_when_it_is_handed_over(session: Session) -> None:
    with pytest.raises(MidspreadError, match="refuses DROP"):
        session.run("SELECT 1; DROP TABLE visits")


def test_a_script_without_a_question(session: Session) -> None:
    with pytest.raises(MidspreadError, match="end it with a SELECT"):
        session.query("CREATE TEMP VIEW unasked AS SELECT 5 AS a")
    assert session.query("FROM unasked").rows() == [(5,)]


def test_definitions_use_our_functions_with_all_clauses(session: Session) -> None:
    script = """
        CREATE OR REPLACE TEMP VIEW by_stop AS
            SELECT stop, mad_scale(dwell_s) FILTER (WHERE ramp_used) AS m, iqr_scale(dwell_s)
            FROM visits GROUP BY stop;
        CREATE OR REPLACE TEMP MACRO typical(a) AS trimmed_mean(a, 0.1);
        CREATE OR REPLACE TEMP MACRO mixed(a, w := 1) AS
            weighted_median(a, w) + mad_scale(DISTINCT a) FILTER (WHERE a > 3);
        CREATE OR REPLACE TEMP MACRO off(part) AS TABLE
            SELECT visit, dwell_s - trimmed_mean(dwell_s) OVER (PARTITION BY stop) AS d
            FROM visits WHERE day_part = part;
        SET VARIABLE spread = (SELECT mad_scale(DISTINCT dwell_s) FROM visits);
        FROM by_stop WHERE m IS NOT NULL
    """
    assert session.query(script).columns == ["stop", "m", "iqr_scale(dwell_s)"]
    one = session.query("SELECT typical(dwell_s), trimmed_mean(dwell_s, 0.1) FROM visits").rows()
    assert one[0][0] == one[0][1]
    other = session.query("SELECT mixed(dwell_s, w := boardings) FROM visits").rows()
    plain = session.query(
        "SELECT weighted_median(dwell_s, boardings) + mad_scale(DISTINCT CASE WHEN dwell_s > 3 "
        "THEN dwell_s END) FROM visits"
    ).rows()
    assert other == plain
    assert session.query("SELECT count(*) FROM off('peak')").rows() == [(80,)]
    spread = "SELECT getvariable('spread') = (SELECT mad_scale(DISTINCT dwell_s) FROM visits)"
    assert session.query(spread).rows() == [(True,)]


def test_users_columns_may_be_called_like_our_parameters(session: Session) -> None:
    sql = """
        WITH t AS (SELECT dwell_s AS x, boardings AS w, 0.1 AS share, 1 AS power, visit % 2 AS "by",
                          0.5 AS prob, 7 AS kind, dwell_s AS v, dwell_s AS "values"
                   FROM visits)
        SELECT "by", trimmed_mean(x, share), trimmed_mean(v, share := share), mad_scale("values"),
               weighted_median(x, w), quantile_hf(x, prob, kind) FILTER (WHERE w > power)
        FROM t GROUP BY "by", share, prob, kind ORDER BY ALL
    """
    rows = session.query(sql).rows()
    plain = session.query(
        "SELECT visit % 2, trimmed_mean(dwell_s, 0.1), trimmed_mean(dwell_s, 0.1), "
        "mad_scale(dwell_s), weighted_median(dwell_s, boardings), quantile_hf(CASE WHEN boardings "
        "> 1 THEN dwell_s END, 0.5, 7) FROM visits GROUP BY 1 ORDER BY 1"
    ).rows()
    assert rows == plain


def test_explain_takes_the_rewritten_query(session: Session) -> None:
    answer = session.query(
        "EXPLAIN SELECT mad_scale(DISTINCT dwell_s), iqr_scale(dwell_s) FROM visits"
    )
    assert answer.columns == ["explain_key", "explain_value"]


def test_expand_shows_what_would_run(session: Session) -> None:
    assert session.expand("SELECT 1 -- as it is") == "SELECT 1"
    text = session.expand("SELECT mad_scale(dwell_s), iqr_scale(dwell_s) FROM visits; FROM visits")
    first, second = text.split(";\n")
    assert "_estimates" in first and second == "FROM visits"
    assert session._connection.execute(first).fetchall()
    text = session.expand(
        "CREATE OR REPLACE TEMP VIEW e AS SELECT mad_scale(DISTINCT visit) AS m FROM visits; FROM e"
    )
    assert "list_distinct" in text and text.endswith(";\nFROM e")


def test_a_rewrite_that_the_engine_refuses_is_left_out(session: Session) -> None:
    sql = (
        "SELECT unnamed_subquery.visit, mad_scale(dwell_s) OVER (PARTITION BY stop) AS m "
        "FROM (SELECT * FROM visits LIMIT 9) ORDER BY 1"
    )
    assert len(session.query(sql).rows()) == 9
    assert "_midspread" not in session.expand(sql)


class TestSources:
    """Attached files."""

    @pytest.fixture
    def warehouse(self, tmp_path: Path) -> Path:
        path = tmp_path / "the 'ware' house.duckdb"
        with duckdb.connect(path) as made:
            made.execute("CREATE TABLE routes AS SELECT 'R1' AS route, 'Harbour' AS name")
            made.execute("CREATE VIEW named AS SELECT upper(name) AS name FROM routes")
        return path

    def test_by_any_name_and_path(self, warehouse: Path) -> None:
        with Session(use_store=False, sources={'la"rk moor': warehouse}) as session:
            assert session.query('FROM "la""rk moor".routes').rows() == [("R1", "Harbour")]
            assert session.query('USE "la""rk moor"; FROM named').rows() == [("HARBOUR",)]
            assert session.query("SELECT mad_scale(length(name)) FROM routes").rows() == [(0.0,)]

    @pytest.mark.parametrize("name", ["", "main", "TEMP", "system", "memory"])
    def test_names_that_cannot_be_taken(self, warehouse: Path, name: str) -> None:
        with pytest.raises(UsageError, match="cannot name a source"):
            Session(use_store=False, sources={name: warehouse})

    def test_files_that_cannot_be_attached(self, tmp_path: Path) -> None:
        words = tmp_path / "words.duckdb"
        words.write_text("only words" * 1000)
        for path, said in ((tmp_path / "no.duckdb", "does not exist"), (tmp_path, "is a folder")):
            with pytest.raises(MidspreadError, match=said):
                Session(use_store=False, sources={"w": path})
        with (
            Session(use_store=False, sources={"w": words}) as session,
            pytest.raises(MidspreadError, match=r"--attach w: .* is not a DuckDB file"),
        ):
            session.query("SELECT 1")
        assert words.read_text() == "only words" * 1000


class TestLimits:
    """Memory, threads, scratch files."""

    def test_they_reach_the_engine(self) -> None:
        with Session(use_store=False, memory="200MB", threads=3) as session:
            rows = session.query(
                "SELECT current_setting('memory_limit'), current_setting('threads')"
            ).rows()
        assert rows == [("190.7 MiB", 3)]

    @pytest.mark.parametrize(
        "limits", [{"memory": "much"}, {"memory": "12 bananas"}, {"threads": 0}, {"threads": -2}]
    )
    def test_what_is_no_limit(self, limits: dict[str, Any]) -> None:
        with pytest.raises(UsageError, match="must be"):
            Session(use_store=False, **limits)

    def test_scratch_files_are_removed(
        self, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
    ) -> None:
        monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
        session = Session(use_store=False, memory="100MB", threads=2)
        sql = "SELECT count(*) FROM (SELECT DISTINCT i, i::VARCHAR FROM range(3000000) r(i))"
        assert session.query(sql).rows() == [(3_000_000,)]
        assert list(tmp_path.iterdir())
        session.close()
        del session
        assert not list(tmp_path.iterdir())


@pytest.mark.parametrize(
    "function", [f for f in functions().values() if f.kind == "aggregate"], ids=lambda f: f.name
)
def test_every_clause_on_every_function(session: Session, function: Any) -> None:
    columns = ["dwell_s", "boardings"][: len(function.columns)]
    given = [f"{p.name} := 0.5" for p in function.parameters if p.default is None]
    call = f"{function.name}({', '.join([*columns, *given])})"
    windows = (
        f"SELECT stop, visit, {call} OVER (PARTITION BY stop) AS b, "
        f"{call} OVER (PARTITION BY stop ORDER BY visit) AS c FROM visits"
    )
    rows = session.query(
        f"SELECT stop, any_value(b), last(c ORDER BY visit) FROM ({windows}) GROUP BY 1 ORDER BY 1"
    ).rows()
    plain = session.query(
        f"SELECT stop, {call}, {call} FROM visits GROUP BY stop ORDER BY stop"
    ).rows()
    assert repr(rows) == repr(plain)
    filtered = session.query(
        f"SELECT stop, {call} FILTER (WHERE ramp_used) FROM visits GROUP BY stop ORDER BY stop"
    ).rows()
    where = session.query(
        f"SELECT stop, {call} FROM visits WHERE ramp_used GROUP BY stop ORDER BY stop"
    ).rows()
    assert repr([row for row in filtered if row[0] in dict(where)]) == repr(where)


def test_a_view_of_a_source_names_a_function_that_the_query_does_not(tmp_path: Path) -> None:
    path = tmp_path / "extract.duckdb"
    with duckdb.connect(str(path)) as made:
        made.execute("CREATE MACRO trimmed_mean(x, share) AS sum(x)")  # so that the view is taken
        made.execute("CREATE VIEW middle AS SELECT trimmed_mean(i, 0.25) AS m FROM range(5) t(i)")
        made.execute("DROP MACRO trimmed_mean")
    with Session(use_store=False, sources={"depot": path}) as session:
        assert session.query("SELECT mad_scale(i) FROM range(5) t(i)").rows() != []
        assert session.query("FROM depot.middle").rows() == [(2.0,)]
        assert session.query("SELECT huber_location(i) FROM range(5) t(i)").rows() == [(2.0,)]
