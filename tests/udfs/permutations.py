"""Asking permutation tests about columns given as lists."""

from collections.abc import Sequence
from typing import Any

import duckdb
import numpy as np

TWO_LABELS = "permutation_test(x, label{})"
NOTHING = dict.fromkeys(("estimate", "p_value", "resamples", "exact"))


def ask(connection: duckdb.DuckDBPyConnection, call: str, **columns: Sequence[Any]) -> Any:
    """The answer of one call over columns given as lists."""
    kinds = {"label": "VARCHAR", "stratum": "INTEGER"}
    lists = ", ".join(f"unnest(${c}::{kinds.get(c, 'DOUBLE')}[]) AS {c}" for c in columns)
    given = {name: np.array(values, object).tolist() for name, values in columns.items()}
    ((answer,),) = connection.execute(f"SELECT {call} FROM (SELECT {lists})", given).fetchall()
    return answer
