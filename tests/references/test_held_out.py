"""Folds against MD5 as Python computes it, held-out errors against scikit-learn (1.5 or later)."""

import datetime
import decimal
import hashlib
from typing import Any

import duckdb
import numpy as np
import pytest
from sklearn.dummy import DummyRegressor
from sklearn.metrics import mean_absolute_error, mean_squared_error
from sklearn.model_selection import (
    BaseCrossValidator,
    LeaveOneOut,
    PredefinedSplit,
    cross_val_predict,
)

from midspread.udfs.resampling.fold import fold
from tests.references.published import published


def by_hand(text: str, folds: int, seed: int) -> int:
    return int(hashlib.md5(f"{seed}:{text}".encode()).hexdigest()[:15], 16) % folds + 1


@pytest.mark.parametrize(
    ("key", "text"),
    [
        ("vehicle 7", "vehicle 7"),
        ("Straße ≠ 停留", "Straße ≠ 停留"),
        ("", ""),
        (7, "7"),
        (7.0, "7.0"),
        (0.1, "0.1"),
        (-0.0, "0.0"),
        (decimal.Decimal("7.00"), "7.00"),
        (True, "true"),
        (datetime.date(2031, 3, 7), "2031-03-07"),
        (datetime.datetime(2031, 3, 7, 8, 15), "2031-03-07 08:15:00"),
    ],
)
@pytest.mark.parametrize(("folds", "seed"), [(10, 0), (2, 1), (1_000_000, 2**53)])
def test_fold_is_what_is_documented(
    connection: duckdb.DuckDBPyConnection, key: Any, text: str, folds: int, seed: int
) -> None:
    found = connection.execute("SELECT fold(?, ?, ?)", [key, folds, seed]).fetchall()
    assert found == [(by_hand(text, folds, seed),)]
    assert fold(text, folds, seed) == found[0][0]


def test_folds_stay_as_they_are(connection: duckdb.DuckDBPyConnection) -> None:
    """These never change: the MD5 of '0:bus 1' begins with 98d3ab8dcbe74db, and so on."""
    sql = "SELECT fold('bus ' || i) FROM range(1, 13) AS t(i) ORDER BY i"
    found = [row[0] for row in connection.execute(sql).fetchall()]
    assert found == [by_hand(f"bus {i}", 10, 0) for i in range(1, 13)]
    assert found == FIRST_TWELVE


FIRST_TWELVE = [8, 7, 8, 7, 4, 9, 6, 8, 4, 2, 3, 7]


def predicted(x: np.ndarray[Any, Any], strategy: str, split: BaseCrossValidator) -> Any:
    return cross_val_predict(DummyRegressor(strategy=strategy), np.zeros((x.size, 1)), x, cv=split)


def figures(connection: duckdb.DuckDBPyConnection, table: str, more: str) -> dict[str, Any]:
    result = connection.execute(
        f"SELECT statistic, n, folds, mean_absolute_error, root_mean_squared_error, lowest, "
        f"highest FROM held_out_errors('{table}', 'x', statistics := ['mean', 'median']{more})"
    ).fetchall()
    return {row[0]: row[1:] for row in result}


@pytest.mark.parametrize("name", ["aircondit", "chem", "rivers", "newcomb"])
def test_each_value_left_out(connection: duckdb.DuckDBPyConnection, name: str) -> None:
    x = np.array(published(name))
    connection.execute("CREATE OR REPLACE TEMP TABLE held AS SELECT unnest(?) AS x", [x.tolist()])
    found = figures(connection, "held", ", folds := 1000000")
    for strategy in ("mean", "median"):
        expected = predicted(x, strategy, LeaveOneOut())
        n, folds, absolute, squared, lowest, highest = found[strategy]
        assert (n, folds) == (x.size, x.size)
        assert absolute == pytest.approx(mean_absolute_error(x, expected), rel=1e-12)
        assert squared == pytest.approx(mean_squared_error(x, expected) ** 0.5, rel=1e-12)
        assert lowest == pytest.approx(expected.min(), rel=1e-12)
        assert highest == pytest.approx(expected.max(), rel=1e-12)


@pytest.mark.parametrize(("folds", "seed"), [(10, 0), (3, 5)])
def test_units_left_out_together(
    connection: duckdb.DuckDBPyConnection, folds: int, seed: int
) -> None:
    x = np.array(published("quakes"))
    units = [f"vehicle {i % 37}" for i in range(x.size)]
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE held AS SELECT unnest(?) AS x, unnest(?) AS vehicle",
        [x.tolist(), units],
    )
    found = figures(connection, "held", f", folds := {folds}, seed := {seed}, unit := 'vehicle'")
    split = PredefinedSplit([by_hand(unit, folds, seed) for unit in units])
    assert split.get_n_splits() == folds
    for strategy in ("mean", "median"):
        expected = predicted(x, strategy, split)
        n, used, absolute, squared, lowest, highest = found[strategy]
        assert (n, used) == (x.size, folds)
        assert absolute == pytest.approx(mean_absolute_error(x, expected), rel=1e-12)
        assert squared == pytest.approx(mean_squared_error(x, expected) ** 0.5, rel=1e-12)
        assert lowest == pytest.approx(expected.min(), rel=1e-12)
        assert highest == pytest.approx(expected.max(), rel=1e-12)
