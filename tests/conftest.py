"""What all tests share: a connection with our functions, and a way to ask for one figure."""

import zlib
from collections.abc import Callable, Iterator, Sequence
from typing import Any

import duckdb
import numpy as np
import pytest

from midspread.udfs import functions, register

Estimate = Callable[..., Any]


@pytest.fixture(scope="session")
def connection() -> Iterator[duckdb.DuckDBPyConnection]:
    """An in-memory DuckDB connection equipped with every function."""
    with duckdb.connect() as opened:
        register(opened)
        yield opened


@pytest.fixture(scope="session")
def estimate(connection: duckdb.DuckDBPyConnection) -> Estimate:
    """``estimate(name, x, w?, **parameters)``: one function on one group, computed through SQL.

    NULL comes back as None; structs as dicts; lists of structs as lists of dicts.
    """

    def one_figure(name: str, *columns: Sequence[Any], **parameters: float) -> Any:
        names = functions()[name].columns
        frame = {}
        for column, values in zip(names, columns, strict=True):
            frame[column] = [None if v is None else float(v) for v in values]
        arguments = [*names, *(f"{key} := {value!r}" for key, value in parameters.items())]
        lists = ", ".join(f"unnest($values_{column}::DOUBLE[]) AS {column}" for column in names)
        ((figure,),) = connection.execute(
            f"SELECT {name}({', '.join(arguments)}) FROM (SELECT {lists})",
            {f"values_{column}": values for column, values in frame.items()},
        ).fetchall()  # all of it: an unfinished result would block the connection
        return figure

    return one_figure


@pytest.fixture
def generator() -> np.random.Generator:
    """Random numbers, the same ones in every run."""
    return np.random.default_rng(20310307)


# Products of every function with every form of a call: a quarter of their combinations, the same
# each time, keeps the run short; ``--exhaustive`` runs them all. Single tests are always run.
_PRODUCTS = ("test_table_places.py", "test_table_refusals.py")


def pytest_addoption(parser: pytest.Parser) -> None:
    """Add ``--exhaustive``."""
    parser.addoption("--exhaustive", action="store_true", help="run every combination")


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    """Leave three quarters of the large products out unless all are asked for."""
    if config.getoption("--exhaustive"):
        return
    items[:] = [
        item
        for item in items
        if not item.nodeid.partition("::")[0].endswith(_PRODUCTS)
        or "[" not in item.nodeid
        or zlib.crc32(item.nodeid.encode()) % 4 == 0
    ]
