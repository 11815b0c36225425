"""Whole rows with flags against the engine's own median, grouped and joined back, or windowed."""

from collections.abc import Callable

import duckdb
from measuring import GROUPS, Figure, fill, in_turn

from midspread.udfs import register

# Every column is read and every figure used, so that the engine cannot leave any of them out.
JOINED_BACK = """
    SELECT count(*), sum(place), sum(few), sum(many), sum(x), sum(m), count(*) FILTER (x > m)
    FROM t JOIN (SELECT {key}, median(x) AS m FROM t GROUP BY {key}) USING ({key})
"""
FLAGGED = """
    SELECT count(*), sum(place), sum(few), sum(many), sum(x), sum(lower), sum(upper),
        sum(distance), count(*) FILTER (outside), count(rule)
    FROM row_flags('t', 'x', by := '{key}'{more})
"""
WINDOWED = """
    SELECT count(*), sum(place), sum(few), sum(many), sum(x), sum(m), count(*) FILTER (x > m)
    FROM (SELECT *, median(x) OVER (PARTITION BY {key} ORDER BY place
        ROWS BETWEEN {half_width} PRECEDING AND {half_width} FOLLOWING) AS m FROM t)
"""
ROLLED = """
    SELECT count(*), sum(place), sum(few), sum(many), sum(x), sum(median), sum(scale),
        sum(distance), count(*) FILTER (outside)
    FROM rolling_flags('t', 'x', 'place', by := '{key}', half_width := {half_width})
"""
RULES = {
    "row_flags, rule NULL": "",
    "row_flags, fences": ", rule := 'fences'",
    "row_flags, adjusted_fences": ", rule := 'adjusted_fences'",
    "row_flags, median_mad": ", rule := 'median_mad'",
}
PROMISED = {"few": "≤ 4"}
HALF_WIDTHS = (5, 50)


def measure(rows: int) -> list[Figure]:
    """Ratios of `row_flags` and `rolling_flags` to the engine's form, of `heaping` to median."""
    figures = []
    with duckdb.connect(config={"threads": 2}) as connection:
        register(connection)
        fill(connection, rows)
        connection.execute("ALTER TABLE t ADD COLUMN place BIGINT; UPDATE t SET place = rowid")

        def asked(sql: str) -> Callable[[], object]:
            return lambda: connection.execute(sql).fetchall()

        for words, key in GROUPS.items():
            others = {
                name: asked(FLAGGED.format(key=key, more=more)) for name, more in RULES.items()
            }
            for name, ratio in in_turn(asked(JOINED_BACK.format(key=key)), others, 2).items():
                what = f"{name} / median joined back, {words}"
                figures.append(Figure(what, ratio, "×", PROMISED.get(key, "")))
            others = {"heaping": asked(f"SELECT sum(step) FROM heaping('t', 'x', by := '{key}')")}
            reference = asked(f"SELECT sum(m) FROM (SELECT median(x) AS m FROM t GROUP BY {key})")
            for name, ratio in in_turn(reference, others, 2).items():
                figures.append(Figure(f"{name} / median, {words}", ratio))
        for half_width in HALF_WIDTHS:
            reference = asked(WINDOWED.format(key="few", half_width=half_width))
            ours = asked(ROLLED.format(key="few", half_width=half_width))
            for name, ratio in in_turn(reference, {"rolling_flags": ours}, 1).items():
                what = f"{name} / windowed median, 1,000 groups, half_width {half_width}"
                figures.append(Figure(what, ratio, "×", "≤ 6"))
    return figures
