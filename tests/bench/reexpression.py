"""Re-expression against the engine's own median on the same table."""

from measuring import GROUPS, Figure, grouped, in_turn, session_with_table

AGGREGATES = ("symmetry_power(x)", "box_cox_power(x)", "yeo_johnson_power(x)")


def measure(rows: int) -> list[Figure]:
    """Ratios to median(x): the ladder of eight rungs, and the estimated powers."""
    figures = []
    with session_with_table(rows) as session:
        for words, key in GROUPS.items():
            ladder = f"SELECT count(medcouple) FROM power_ladder('bench.t', 'x', by := '{key}')"
            others = {"power_ladder, eight rungs": lambda sql=ladder: session.query(sql)}
            if key == "few":
                others |= {name: grouped(session, name, key) for name in AGGREGATES}
            ratios = in_turn(grouped(session, "median(x)", key), others, rounds=3)
            for name, ratio in ratios.items():
                promised = "≤ 12" if "ladder" in name and key == "few" else ""
                figures.append(Figure(f"{name} / median(x), {words}", ratio, "×", promised))
    return figures
