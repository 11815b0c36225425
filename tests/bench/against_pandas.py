"""Ours against pandas' groupby with scipy.stats.trim_mean."""

from measuring import GROUPS, Figure, grouped, seconds, session_with_table
from scipy import stats

PROMISED = {"few": "≥ 4", "many": "≥ 40"}


def measure(rows: int) -> list[Figure]:
    """How many times longer pandas and scipy take; reading the table is not counted for them."""
    figures = []
    with session_with_table(rows) as session:
        frame = session.query("SELECT few, many, x FROM bench.t").pandas()
        for words, key in GROUPS.items():
            ours = grouped(session, "trimmed_mean(x, 0.1)", key)
            ours()
            mine = min(seconds(ours) for _ in range(3))
            theirs = seconds(lambda key=key: frame.groupby(key).x.apply(stats.trim_mean, 0.1))
            figures.append(
                Figure(
                    f"pandas + scipy trim_mean / trimmed_mean, {words}",
                    theirs / mine,
                    "×",
                    PROMISED[key],
                )
            )
    return figures
