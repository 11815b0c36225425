"""Ours against the engine's own median, mad and quantile_cont on the same table."""

from measuring import GROUPS, Figure, grouped, in_turn, seconds, session_with_table

PROMISED = {
    "trimmed_mean(x, 0.1)": {"few": "≤ 1.2", "many": "≤ 1.0"},
    "five functions in one SELECT": {"few": "≤ 1.8", "many": "≤ 1.5"},
    "robust_summary": {"few": "≤ 2.0", "many": "≤ 2.0"},
    "robust_summary, deep": {"few": "≤ 8", "many": "≤ 6"},
}
ONE_COLUMN = {
    "trimmed_mean(x, 0.1)": "trimmed_mean(x, 0.1)",
    "five functions in one SELECT": (
        "trimmed_mean(x, 0.1) AS a, winsorized_mean(x, 0.1) AS b, mad_scale(x) AS c, "
        "bowley_skew(x) AS d, trimmed_mean_se(x, 0.2) AS e"
    ),
    "huber_location(x)": "huber_location(x)",
    "harrell_davis(x)": "harrell_davis(x)",
    "letter_values(x)": "letter_values(x)",
    "the engine's mad(x)": "mad(x)",
    "the engine's quantile_cont(x, 0.9)": "quantile_cont(x, 0.9)",
}
COSTLIER = ("hodges_lehmann", "qn_scale", "sn_scale", "medcouple")
ONE_GROUP = 1_000_000


def measure(rows: int) -> list[Figure]:
    """Ratios to median(x) at both numbers of groups, then the costlier functions on one group."""
    figures = []
    with session_with_table(rows) as session:
        for words, key in GROUPS.items():
            others = {name: grouped(session, sql, key) for name, sql in ONE_COLUMN.items()}
            for name, deep in (("robust_summary", "false"), ("robust_summary, deep", "true")):
                sql = f"FROM robust_summary('bench.t', 'x', by := '{key}', deep := {deep})"
                others[name] = lambda sql=sql: session.query(sql)
            ratios = in_turn(grouped(session, "median(x)", key), others)
            for name, ratio in ratios.items():
                promised = PROMISED.get(name, {}).get(key, "")
                figures.append(Figure(f"{name} / median(x), {words}", ratio, "×", promised))
    with session_with_table(ONE_GROUP) as session:
        for name in COSTLIER:
            session.query(f"SELECT {name}(x) FROM (SELECT x FROM bench.t LIMIT 10)")
            taken = seconds(lambda name=name: session.query(f"SELECT {name}(x) FROM bench.t"))
            figures.append(Figure(f"{name}(x), one group of 1,000,000", taken, "s", "seconds"))
    return figures
