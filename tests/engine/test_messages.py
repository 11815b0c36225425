"""What goes wrong is told in one sentence that says what to do."""

from pathlib import Path
from typing import Final

import pytest

from midspread.engine.errors import MidspreadError
from midspread.engine.session import Session

# SQL, and words that its sentence must hold.
SENTENCES: Final = {
    # names
    "SELECT dwel_s FROM visits": ["no column dwel_s", "line 1, column 8", "mean dwell_s"],
    "SELECT\n  max(dwell)\nFROM visits": ["no column dwell ", "line 2, column 7", "dwell_s"],
    "SELECT nothing_like_it FROM visits": ["no column nothing_like_it", "DESCRIBE"],
    "SELECT x.dwell_s FROM visits": ["called x", "visits"],
    "SELECT v.dwel_s FROM visits v": ["v has no column dwel_s"],
    "SELECT trimed_mean(dwell_s) FROM visits": ["no function trimed_mean", "mean trimmed_mean"],
    "SELECT medain(dwell_s) FROM visits": ["no function medain", "mean median"],
    "SELECT no_such_thing_at_all(1)": ["no function no_such_thing_at_all", "midspread functions"],
    "FROM robust_sumary('visits', 'dwell_s')": ["no function robust_sumary", "robust_summary"],
    "FROM visit": ["no table visit ", "mean visits"],
    "FROM nothing_like_it": ["no table nothing_like_it", "SHOW ALL TABLES"],
    "FROM warehouse.stops": ["warehouse", "--attach warehouse=PATH"],
    "SELECT dwell_s FROM visits GROUP BY rout": ["no column rout ", "mean route"],
    "SELECT s.nope FROM (SELECT {'typical': 1} AS s)": ["no field nope", "typical"],
    # our functions
    "SELECT trimmed_mean(dwell_s, share = 0.5) FROM visits": ["write share := 0.5."],
    "SELECT trimmed_mean(boardings, share = boardings / 9) FROM (SELECT *, 1 AS share "
    "FROM visits)": ["write share := boardings / 9."],
    "SELECT trimmed_mean(dwell_s, shre := 0.1) FROM visits": ["no parameter shre", "share :="],
    "SELECT trimmed_mean(dwell_s, 0.7) FROM visits": ["trimmed_mean", "share", "0 to 0.5", "0.7"],
    "SELECT trimmed_mean(dwell_s, 0.7), mad_scale(dwell_s) FROM visits": ["0 to 0.5", "0.7"],
    "SELECT trimmed_mean(dwell_s, -0.1) OVER () FROM visits": ["0 to 0.5", "-0.1"],
    "SELECT trimmed_mean(dwell_s, NULL) FROM visits": ["share", "NULL"],
    "SELECT trimmed_mean(dwell_s, '0.1') FROM visits": ["share must be a number", "VARCHAR"],
    "SELECT trimmed_mean(dwell_s, 0.1, 3) FROM visits": ["at most 2 arguments", "got 3"],
    "SELECT trimmed_mean() FROM visits": ["x is missing", "trimmed_mean(x, share := 0.2)"],
    "SELECT quantile_hf(dwell_s) FROM visits": ["prob is missing"],
    "SELECT weighted_median(dwell_s) FROM visits": ["w is missing"],
    "SELECT theil_sen(dwell_s) FROM visits": ["x is missing"],
    "SELECT mad_scale(DISTINCT dwell_s, 1) FROM visits": ["takes one argument", "got 2"],
    "SELECT trimmed_mean(dwell_s, share := 0.1, share := 0.2) FROM visits": ["twice"],
    "SELECT mad_scale(stop) FROM visits": ["mad_scale: x must be a number", "VARCHAR", "CAST"],
    "SELECT mad_scale(day) FROM visits": ["must be a number", "DATE", "epoch"],
    "SELECT mad_scale(ramp_used) FROM visits": ["must be a number", "BOOLEAN"],
    "SELECT mad_scale([dwell_s]) FROM visits": ["mad_scale: x must be a number"],
    "SELECT mad_scale(stop), iqr_scale(stop) FROM visits": ["must be a number", "VARCHAR"],
    "SELECT mad_scale(DISTINCT stop) FROM visits": ["mad_scale: x must be a number", "stop"],
    "SELECT mad_scale(stop) OVER (ORDER BY day) FROM visits": ["must be a number", "stop"],
    "SELECT mad_scale(stop) OVER (PARTITION BY route) FROM visits": ["must be a number"],
    "SELECT mad_scale(stop) FILTER (WHERE ramp_used) FROM visits": ["must be a number", "VARCHAR"],
    "SELECT weighted_median(dwell_s, stop) FROM visits": ["w must be a number", "VARCHAR"],
    "SELECT mad_scale(dwel_s) FROM visits": ["no column dwel_s", "column 18", "mean dwell_s"],
    "SELECT mad_scale(dwell_s), iqr_scale(dwel_s) FROM visits": ["no column dwel_s", "column 38"],
    "SELECT mad_scale(dwell_s) FILTER (WHERE ramp_use) FROM visits": ["ramp_use ", "ramp_used"],
    "SELECT mad_scale(dwel_s) OVER (PARTITION BY route) FROM visits": [
        "no column dwel_s",
        "column 18",
    ],
    "SELECT mad_scale(dwell_s) OVER (PARTITION BY rout) FROM visits": [
        "no column rout ",
        "column 46",
    ],
    "WITH a AS (SELECT mad_scale(DISTINCT dwel_s) FROM visits) FROM a": ["no column dwel_s"],
    "SELECT trimmed_mean(dwell_s, shar) FROM visits": ["no column shar "],
    "SELECT weighted_median(DISTINCT dwell_s, boardings) FROM visits": ["DISTINCT", "one column"],
    "SELECT spearman(DISTINCT dwell_s, boardings) FROM visits": ["DISTINCT", "one column"],
    "SELECT dwell_s.mad_scale() FILTER (WHERE ramp_used) FROM visits": ["FILTER", "mad_scale(x)"],
    "SELECT mad_scale(iqr_scale(dwell_s)) FROM visits": ["one aggregate is within another"],
    # where a function goes
    "FROM trimmed_mean(dwell_s)": ["trimmed_mean: goes in SELECT", "not in FROM"],
    "FROM visits, mad_scale('visits', 'dwell_s')": ["mad_scale: goes in SELECT"],
    "FROM avg(dwell_s)": ["avg: goes in SELECT"],
    "SELECT robust_summary('visits', 'dwell_s')": ["robust_summary: goes in FROM", "not in SELECT"],
    # files
    "FROM 'no_such.parquet'": ["no file no_such.parquet"],
    "FROM 'visit.parquet'": ["no file visit.parquet", "mean visits.parquet"],
    "FROM 'nothing/*.parquet'": ["no file matches nothing/*.parquet"],
    "FROM read_csv('no_such.csv')": ["no file no_such.csv"],
    "FROM 'notes.txt.docx'": ["no table notes.txt.docx"],
    "FROM 'https://larkmoor.example/visits.parquet'": ["another machine", "copy"],
    "FROM 'visits.xlsx'": ["spreadsheet"],
    "FROM 'broken.parquet'": ["broken.parquet is not a Parquet file"],
    "FROM 'broken.json'": ["broken.json is not readable as JSON"],
    # syntax
    "SELECT 1 +": ["near", "line 1"],
    "SELECT dwell_s FRM visits": ['near "visits"', "line 1, column 20"],
    "SELECT 1;\n\nSELECT a b c": ['near "c"', "line 3, column 12"],
    "SELECT trimmed_mean(dwell_s, 0.1 FROM visits": ["bracket (", "column 20", "never closed"],
    "SELECT 'Süd": ["text that begins (line 1, column 8)", "close it with '"],
    'SELECT "Süd': ["name that begins", 'close it with "'],
    "SELECT 1 /* Süd": ["comment", "*/"],
    "SELECT 'Süd', 1 FRM x y": ['near "x"', "column 21"],
    # the rest of SQL
    "SELECT route, count(*) FROM visits": ["route", "GROUP BY"],
    "SELECT stop FROM visits WHERE mad_scale(dwell_s) > 3": ["WHERE cannot hold", "HAVING"],
    "SELECT stop FROM visits WHERE mad_scale(dwell_s) OVER () > 3": [
        "WHERE cannot hold",
        "QUALIFY",
    ],
    "SELECT stop FROM visits v JOIN visits w USING (visit)": ["more than one table", "v.stop"],
    "SELECT sum(stop) FROM visits": ["sum does not take text"],
    "SELECT stop + 1 FROM visits": ["+ does not work between text and INTEGER"],
    "SELECT CAST(stop AS INT) FROM visits": ["stop", "TRY_CAST"],
    "SELECT (SELECT stop FROM visits)": ["several rows"],
    "SELECT 1 UNION SELECT 1, 2": ["numbers of columns"],
    "SELECT ?": ["placeholder"],
    "SELECT 5 // 0": ["division by zero"],
    "SELECT 2147483647::INT + 1::INT": ["too large"],
    "CREATE TEMP VIEW visits AS SELECT 1": ["already a View called visits", "OR REPLACE"],
    "CREATE TEMP VIEW w AS SELECT dwel_s FROM visits": ["no column dwel_s", "mean dwell_s"],
    "CREATE TEMP MACRO m(a) AS mad_scale(a, 3)": ["takes one argument", "got 2"],
    "SET VARIABLE a = (SELECT dwel_s FROM visits)": ["no column dwel_s"],
    "USE nowhere": ["nowhere"],
}


@pytest.fixture
def in_folder(visits_file: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(visits_file.parent)
    Path("broken.parquet").write_text("not a Parquet file at all, only some words")
    Path("broken.json").write_text('{"stop": ')


@pytest.mark.usefixtures("in_folder")
@pytest.mark.parametrize(("sql", "words"), SENTENCES.items(), ids=SENTENCES.keys())
def test_the_sentence(session: Session, sql: str, words: list[str]) -> None:
    with pytest.raises(MidspreadError) as caught:
        list(session.run(sql))
    sentence = str(caught.value)
    for word in words:
        assert word in sentence
    assert "\n" not in sentence
    assert sentence.endswith((".", "?"))
    assert "Error" not in sentence and "_midspread" not in sentence and "_values" not in sentence
    assert caught.value.__suppress_context__ or caught.value.__context__ is None


def test_the_session_goes_on_after_an_error(session: Session) -> None:
    for sql in ("SELECT dwel_s FROM visits", "SELECT trimmed_mean(dwell_s, 7) FROM visits"):
        with pytest.raises(MidspreadError):
            session.query(sql)
    assert session.query("SELECT count(*) FROM visits").rows() == [(240,)]


def test_out_of_memory() -> None:
    with (
        Session(use_store=False, memory="60MB", threads=1) as small,
        pytest.raises(MidspreadError, match="memory limit") as caught,
    ):
        small.query("SELECT mad_scale(i) FROM range(20000000) AS r(i)")
    assert "--memory" in str(caught.value)


def test_a_definition_that_fails_is_forgotten(session: Session) -> None:
    with pytest.raises(MidspreadError, match="dwel_s"):
        session.query("CREATE TEMP VIEW w AS SELECT dwel_s FROM visits; FROM w")
    assert session.query("CREATE TEMP VIEW w AS SELECT 1 AS a; FROM w").rows() == [(1,)]


def test_a_full_disk() -> None:
    with Session(use_store=False, memory="100MB", threads=2) as small:
        small.query("SELECT 1")
        small._connection.execute("SET max_temp_directory_size = '2MB'")
        with pytest.raises(MidspreadError, match="the disk is full") as caught:
            small.query(
                "SELECT count(*) FROM (SELECT DISTINCT i, i::VARCHAR FROM range(4000000) r(i))"
            )
    assert "TMPDIR" in str(caught.value)
