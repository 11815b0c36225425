"""Levels of a label compared within groups, against the engine's own median."""

from measuring import Figure, grouped, in_turn, seconds, session_with_table

TWO_LEVELS = "(SELECT few, x, many % 2 AS payment FROM bench.t)"


def measure(rows: int) -> list[Figure]:
    """group_differences and trimmed_anova of two levels in 1,000 groups; deciles of a tenth."""
    with session_with_table(rows) as session:
        others = {
            "group_differences, 2 levels": f"FROM group_differences('{TWO_LEVELS}', 'x', "
            "'payment', by := 'few')",
            "group_differences, against the rest": f"FROM group_differences('{TWO_LEVELS}', 'x', "
            "'payment', by := 'few', against := 'rest')",
            "trimmed_anova, 2 levels": "SELECT few, trimmed_anova(x, many % 2) FROM bench.t "
            "GROUP BY few",
        }
        promised = {"group_differences, 2 levels": "≤ 12"}
        ratios = in_turn(
            grouped(session, "median(x)", "few"),
            {name: (lambda sql=sql: session.query(sql)) for name, sql in others.items()},
            rounds=3,
        )
        figures = [
            Figure(f"{name} / median(x), 1,000 groups", ratio, "×", promised.get(name, ""))
            for name, ratio in ratios.items()
        ]
        tenth = TWO_LEVELS.replace("bench.t", f"bench.t LIMIT {rows // 10}")
        taken = seconds(
            lambda: session.query(f"FROM decile_shifts('{tenth}', 'x', 'payment', by := 'few')")
        )
        figures.append(
            Figure(
                f"decile_shifts, {rows // 10:,} rows, 1,000 groups, 1,000 resamples",
                taken,
                "s",
                "tens of s",
            )
        )
    return figures
