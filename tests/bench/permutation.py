"""Permutation tests against scipy.stats.permutation_test on one group."""

from collections.abc import Callable
from typing import Any

import numpy as np
import scipy.stats
from measuring import Figure, seconds, session_with_table

RESAMPLES = 9999
STATISTICS = ("mean", "median")
TIMED_BY_SCIPY = 20
SECOND_LABEL = {"half of the rows": "few % 2 = 0", "a tenth of the rows": "few % 10 = 0"}


def measure(rows: int) -> list[Figure]:
    """scipy's time for 9,999 resamples over ours, on a tenth of the rows in one group."""
    figures = []
    count = rows // 10
    with session_with_table(count) as session:
        for statistic in STATISTICS:  # compiled before the clock runs
            session.query(f"SELECT {_test('few % 2 = 0', statistic, 30)} FROM bench.t")
        for words, label in SECOND_LABEL.items():
            table = session.query(f"SELECT x, {label} AS is_second FROM bench.t").arrow()
            x = np.array(table["x"])
            is_second = np.array(table["is_second"])
            for statistic in STATISTICS:
                sql = f"SELECT {_test(label, statistic, RESAMPLES)} FROM bench.t"
                ours = seconds(lambda sql=sql: session.query(sql))
                theirs = _seconds_of_scipy(x[is_second], x[~is_second], getattr(np, statistic))
                what = f"{statistic}, {count:,} rows, second label {words}"
                promised = "≥ 30" if statistic == "mean" else ""
                figures.append(Figure(f"scipy / ours: {what}", theirs / ours, "×", promised))
                figures.append(Figure(f"ours: {what}", ours, "s"))
    return figures


def _test(label: str, statistic: str, resamples: int) -> str:
    return f"permutation_test(x, {label}, '{statistic}', resamples := {resamples})"


def _seconds_of_scipy(
    first: np.ndarray[Any, Any], second: np.ndarray[Any, Any], compute: Callable[..., Any]
) -> float:
    """The time of all resamples: what is spent once, and the time of each, one at a time.

    More at a time do not fit into memory. Counting the arrangements takes seconds by itself.
    """

    def taken(resamples: int) -> float:
        return seconds(
            lambda: scipy.stats.permutation_test(
                (first, second),
                lambda a, b, axis: compute(a, axis=axis) - compute(b, axis=axis),
                vectorized=True,
                n_resamples=resamples,
                batch=1,
            )
        )

    once, more = taken(1), taken(1 + TIMED_BY_SCIPY)
    return once + (more - once) * RESAMPLES / TIMED_BY_SCIPY
