"""What the table functions return: columns, groups, figures, notes."""

import math
from typing import Any

import duckdb
import pytest

from midspread.udfs import functions
from tests.udfs.table_calls import CALLS, EVERY, answer

SUMMARY = """
    n n_null n_nan minimum lower_fourth median upper_fourth maximum mean trimmed_mean_10
    trimmed_mean_20 winsorized_mean_20 huber_location sd mad_scale winsorized_sd_20
    trimmed_mean_20_se bowley_skew octile_skew moors_kurtosis fence_lower fence_upper n_outside note
""".split()  # noqa: SIM905 - a column a line would be long
DEEP = ["hodges_lehmann", "qn_scale", "sn_scale", "medcouple"]
PATH = ["share", "n_kept", "trimmed_mean", "se", "winsorized_mean"]
PROFILE = """
    column_name column_type n n_null n_nan n_infinite n_zero n_negative n_distinct most_frequent
    most_frequent_share longest_run suspected_sentinels n_duplicated_rows
""".split()  # noqa: SIM905


def shape(connection: duckdb.DuckDBPyConnection, sql: str) -> tuple[list[str], list[str]]:
    relation = connection.sql(sql)
    return relation.columns, [str(kind) for kind in relation.types]


def test_columns_of_robust_summary(larkmoor: duckdb.DuckDBPyConnection) -> None:
    names, types = shape(larkmoor, "FROM robust_summary('visits', 'dwell_s', by := 'stop')")
    assert names == ["stop", *SUMMARY]
    whole = {"n", "n_null", "n_nan", "n_outside"}
    expected = ["BIGINT" if n in whole else "DOUBLE" for n in SUMMARY[:-1]]
    assert types == ["VARCHAR", *expected, "VARCHAR"]


def test_deep_columns_follow(larkmoor: duckdb.DuckDBPyConnection) -> None:
    names, types = shape(larkmoor, "FROM robust_summary('visits', 'dwell_s', deep := true)")
    assert names == [*SUMMARY, *DEEP]
    assert types[-4:] == ["DOUBLE"] * 4


def test_columns_of_trim_path(larkmoor: duckdb.DuckDBPyConnection) -> None:
    names, types = shape(larkmoor, "FROM trim_path('visits', 'dwell_s', by := ['route', 'day'])")
    assert names == ["route", "day", *PATH]
    assert types == ["VARCHAR", "DATE", "DOUBLE", "BIGINT", "DOUBLE", "DOUBLE", "DOUBLE"]


def test_columns_of_value_profile(larkmoor: duckdb.DuckDBPyConnection) -> None:
    names, types = shape(larkmoor, "FROM value_profile('visits', by := 'ramp_used')")
    assert names == ["ramp_used", *PROFILE]
    assert types == [
        "BOOLEAN", "VARCHAR", "VARCHAR", *["BIGINT"] * 7, "VARCHAR", "DOUBLE", "BIGINT",
        "VARCHAR[]", "BIGINT",
    ]  # fmt: skip


@EVERY
def test_declared_fields_are_the_columns(
    larkmoor: duckdb.DuckDBPyConnection, function: str
) -> None:
    names, _ = shape(larkmoor, "FROM " + CALLS[function].format("'visits'", ""))
    declared = [field for field in functions()[function].fields if "deep" not in field]
    assert names == declared


@EVERY
def test_groups_come_in_the_order_of_the_keys_and_null_is_one(
    larkmoor: duckdb.DuckDBPyConnection, function: str
) -> None:
    call = CALLS[function].format("'visits'", ", by := ['stop', 'ramp_used']")
    keys = [(r["stop"], r["ramp_used"]) for r in answer(larkmoor, f"FROM {call}")]
    expected = larkmoor.execute("SELECT DISTINCT stop, ramp_used FROM visits ORDER BY ALL")
    assert list(dict.fromkeys(keys)) == expected.fetchall()
    assert None in {stop for stop, _ in keys}


def test_summary_agrees_with_the_aggregates_of_the_same_names(
    larkmoor: duckdb.DuckDBPyConnection,
) -> None:
    summary = answer(larkmoor, "FROM robust_summary('visits', 'dwell_s', 'stop', deep := true)")
    separate = answer(
        larkmoor,
        """SELECT stop, count(dwell_s) AS n, count(*) - n AS n_null, 0 AS n_nan,
            min(dwell_s) AS minimum, max(dwell_s) AS maximum, median(dwell_s) AS median,
            trimmed_mean(dwell_s, 0.1) AS trimmed_mean_10,
            trimmed_mean(dwell_s) AS trimmed_mean_20,
            winsorized_mean(dwell_s) AS winsorized_mean_20,
            huber_location(dwell_s) AS huber_location, mad_scale(dwell_s) AS mad_scale,
            winsorized_sd(dwell_s) AS winsorized_sd_20,
            trimmed_mean_se(dwell_s) AS trimmed_mean_20_se, bowley_skew(dwell_s) AS bowley_skew,
            octile_skew(dwell_s) AS octile_skew, moors_kurtosis(dwell_s) AS moors_kurtosis,
            fences(dwell_s).lower AS fence_lower, fences(dwell_s).upper AS fence_upper,
            hodges_lehmann(dwell_s) AS hodges_lehmann, qn_scale(dwell_s) AS qn_scale,
            sn_scale(dwell_s) AS sn_scale, medcouple(dwell_s) AS medcouple
        FROM visits GROUP BY stop ORDER BY stop""",
    )
    assert len(summary) == len(separate) == 5
    for ours, theirs in zip(summary, separate, strict=True):
        assert {name: ours[name] for name in theirs} == theirs
    # DuckDB's own avg and stddev_samp
    for ours, (mean, sd) in zip(
        summary,
        larkmoor.execute(
            "SELECT avg(dwell_s), stddev_samp(dwell_s) FROM visits GROUP BY stop ORDER BY stop"
        ).fetchall(),
        strict=True,
    ):
        assert ours["mean"] == pytest.approx(mean, rel=1e-13)
        assert ours["sd"] == pytest.approx(sd, rel=1e-13)


def test_trim_path_agrees_with_the_aggregates(larkmoor: duckdb.DuckDBPyConnection) -> None:
    path = answer(
        larkmoor, "FROM trim_path('visits', 'dwell_s', by := 'route', shares := [0.5, 0.12, 0])"
    )
    assert [(row["route"], row["share"]) for row in path] == [
        (route, share) for route in ("R0", "R1", "R2") for share in (0.0, 0.12, 0.5)
    ]
    for row in path:
        expected = answer(
            larkmoor,
            f"""SELECT count(dwell_s) AS n, trimmed_mean(dwell_s, {row["share"]}) AS trimmed_mean,
                trimmed_mean_se(dwell_s, {row["share"]}) AS se,
                winsorized_mean(dwell_s, {row["share"]}) AS winsorized_mean
            FROM visits WHERE route = '{row["route"]}'""",
        )[0]
        n = expected.pop("n")
        assert {name: row[name] for name in expected} == expected
        kept = 2 - n % 2 if row["share"] == 0.5 else n - 2 * math.floor(row["share"] * n)
        assert row["n_kept"] == kept
        assert (row["se"] is None) == (row["share"] == 0.5)


def summary_of(connection: duckdb.DuckDBPyConnection, values: str, more: str = "") -> Any:
    table = f"(SELECT unnest({values}) AS v)"
    (row,) = answer(connection, f"FROM robust_summary('{table}', 'v'{more})")
    return row


@pytest.mark.parametrize(
    ("values", "note"),
    [
        ("range(1, 21)", ""),
        ("range(1, 10)", "fewer than 10 values"),
        ("range(1, 11)", ""),
        ("CAST([] AS DOUBLE[])", "no values"),
        ("CAST([NULL, NULL] AS DOUBLE[])", "no values"),
        ("[5]", "fewer than 10 values"),
        ("[5, 5]", "fewer than 10 values; all values are equal"),
        ("range(1, 21) || [NULL for i in range(20)]", ""),
        ("range(1, 21) || [NULL for i in range(21)]", "more than half of the rows are NULL"),
        (
            "range(1, 21)::DOUBLE[] || [''nan''::DOUBLE]",
            "NaN among the values, so every figure is NaN",
        ),
        ("range(1, 21)::DOUBLE[] || [''inf''::DOUBLE]", "infinite values"),
        ("range(1, 21)::DOUBLE[] || [''-inf''::DOUBLE]", "infinite values"),
        (
            "range(1, 21)::DOUBLE[] || [''inf''::DOUBLE, ''nan''::DOUBLE]",
            "NaN among the values, so every figure is NaN; infinite values",
        ),
        ("[4 for i in range(20)]", "all values are equal"),
        (
            "[4 for i in range(20)] || [5]",
            "half of the values or more are equal, so mad_scale is 0; "
            "the fourths are equal, so the fences have no width",
        ),
        (
            "[4 for i in range(14)] || [5, 6, 7, 8, 9, 10]",
            "half of the values or more are equal, so mad_scale is 0; "
            "more than a tenth of the values lie outside the fences",
        ),
        (
            "range(1, 41) || [900, 901, 902, 903, 904]",
            "more than a tenth of the values lie outside the fences",
        ),
        ("range(1, 41) || [900, 901, 902]", ""),
    ],
)
def test_notes(larkmoor: duckdb.DuckDBPyConnection, values: str, note: str) -> None:
    assert summary_of(larkmoor, values)["note"] == note


def test_nan_is_counted_and_makes_figures_nan(larkmoor: duckdb.DuckDBPyConnection) -> None:
    row = summary_of(larkmoor, "[1::DOUBLE, 2, ''nan'', NULL]", ", deep := true")
    assert (row["n"], row["n_null"], row["n_nan"]) == (3, 1, 1)
    figures = [row[name] for name in (*SUMMARY[3:-2], *DEEP)]
    assert all(math.isnan(value) for value in figures)


def test_infinity_is_a_value(larkmoor: duckdb.DuckDBPyConnection) -> None:
    row = summary_of(larkmoor, "range(1, 20)::DOUBLE[] || [''inf''::DOUBLE]")
    assert row["maximum"] == row["mean"] == math.inf
    assert row["median"] == 10.5
    assert math.isfinite(row["trimmed_mean_10"])
    assert row["n_outside"] == 1


def test_nothing_to_summarise_gives_null(larkmoor: duckdb.DuckDBPyConnection) -> None:
    for values in ("CAST([] AS DOUBLE[])", "CAST([NULL] AS DOUBLE[])"):
        row = summary_of(larkmoor, values, ", deep := true")
        assert (row["n"], row["n_nan"]) == (0, 0)
        assert all(row[name] is None for name in (*SUMMARY[3:-1], *DEEP))


@EVERY
def test_no_rows_give_one_row_alone_and_none_by_group(
    larkmoor: duckdb.DuckDBPyConnection, function: str
) -> None:
    nothing = "'(FROM visits LIMIT 0)'"
    rows = answer(larkmoor, "FROM " + CALLS[function].format(nothing, ""))
    # Levels of a label make the rows of some; where there are none, there are no rows.
    expected = {"trim_path": 8, "held_out_errors": 3, "power_ladder": 8, "group_differences": 0}
    expected |= {"straightening_pairs": 36, "spread_by_level": 0, "rows_to_reverse": 0}
    expected |= {"choices_table": 0}
    expected |= {"location_estimates": 9, "leave_one_out": 0, "influential_values": 0}
    expected |= {"bootstrap_draws": 0}
    assert len(rows) == expected.get(function, 1)
    assert answer(larkmoor, "FROM " + CALLS[function].format(nothing, ", by := 'route'")) == []


@pytest.mark.parametrize(
    "kind",
    [
        *["TINYINT", "SMALLINT", "INTEGER", "BIGINT", "HUGEINT"],
        *["UTINYINT", "USMALLINT", "UINTEGER", "UBIGINT", "UHUGEINT"],
        *["FLOAT", "DOUBLE", "DECIMAL(4,1)", "DECIMAL(18,3)", "DECIMAL(38,10)"],
    ],
)
def test_every_number_type_gives_the_same(larkmoor: duckdb.DuckDBPyConnection, kind: str) -> None:
    table = f"(SELECT CAST(i AS {kind}) AS v FROM range(30) t(i))"
    doubles = table.replace(kind, "DOUBLE")
    for call in ("robust_summary('{}', 'v')", "trim_path('{}', 'v')"):
        assert answer(larkmoor, f"FROM {call.format(table)}") == answer(
            larkmoor, f"FROM {call.format(doubles)}"
        )
