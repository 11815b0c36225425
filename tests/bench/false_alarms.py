"""How often the rules of `row_flags` and `rolling_flags` flag clean data.

Prints the tables that stand in the notes of both functions: ``python tests/bench/false_alarms.py``.
The seeds are fixed, so the tables come out the same each time.
"""

import zlib

import duckdb
import numpy as np
import pyarrow as pa

from midspread.udfs import register

SIZES = (20, 50, 100, 500, 2000)
VALUES = 1_000_000
SHAPES = {
    "uniform": lambda chance, size: chance.uniform(size=size),
    "normal": lambda chance, size: chance.normal(size=size),
    "t, 3 df": lambda chance, size: chance.standard_t(3, size=size),
    "log-normal 0.5": lambda chance, size: np.exp(0.5 * chance.normal(size=size)),
    "exponential": lambda chance, size: chance.exponential(size=size),
    "log-normal 1": lambda chance, size: np.exp(chance.normal(size=size)),
}
RULES = ("fences", "adjusted_fences", "median_mad")
SERIES, LENGTH = 200, 1000
STEPS = {"unrounded": 0.0, "step 1": 1.0, "step 2": 2.0}
HALF_WIDTHS = (3, 5, 10, 25)


def chance_for(*words: object) -> np.random.Generator:
    """A generator keyed by words, so that no table depends on the order of the others."""
    return np.random.default_rng(zlib.crc32(repr(words).encode()))


def row_alarms(connection: duckdb.DuckDBPyConnection, shape: str, rule: str, n: int) -> str:
    """Per cent of values flagged and of groups with a flag."""
    groups = VALUES // n
    values = SHAPES[shape](chance_for(shape, n), groups * n)
    connection.register("clean", pa.table({"g": np.repeat(np.arange(groups), n), "x": values}))
    found = connection.execute(
        "SELECT 100 * avg(flagged) / ?, 100 * avg(CAST(flagged > 0 AS INTEGER)) FROM ("
        "SELECT count(*) FILTER (outside) AS flagged FROM "
        f"row_flags('clean', 'x', by := 'g', rule := '{rule}') GROUP BY g)",
        [n],
    ).fetchall()[0]
    return f"{found[0]:.1f} / {found[1]:.0f}"


def rolling_alarms(
    connection: duckdb.DuckDBPyConnection, step: float, width: int, more: str
) -> str:
    """Per cent of rows flagged in normal series, rounded to a step."""
    values = chance_for("rolling", width).normal(size=SERIES * LENGTH)
    if step:
        values = np.round(values / step) * step
    table = {
        "g": np.repeat(np.arange(SERIES), LENGTH),
        "place": np.tile(np.arange(LENGTH), SERIES),
        "x": values,
    }
    connection.register("clean", pa.table(table))
    found = connection.execute(
        "SELECT 100 * count(*) FILTER (outside) / count(*) FROM "
        f"rolling_flags('clean', 'x', 'place', by := 'g', half_width := {width}{more})"
    ).fetchall()[0]
    return f"{found[0]:.1f}"


def main() -> None:
    """Print both tables."""
    with duckdb.connect() as connection:
        register(connection)
        print(f"{'rule':<17}{'shape':<15}" + "".join(f"n = {n:<7}" for n in SIZES))
        for rule in RULES:
            for shape in SHAPES:
                cells = [row_alarms(connection, shape, rule, n) for n in SIZES]
                print(f"{rule:<17}{shape:<15}" + "".join(f"{cell:<11}" for cell in cells))
        print(f"\n{'floor':<17}{'values':<15}" + "".join(f"h = {h:<7}" for h in HALF_WIDTHS))
        for floor, more in (("as by default", ""), ("none", ", floor := 0")):
            for words, step in STEPS.items():
                cells = [rolling_alarms(connection, step, h, more) for h in HALF_WIDTHS]
                print(f"{floor:<17}{words:<15}" + "".join(f"{cell:<11}" for cell in cells))


if __name__ == "__main__":
    main()
