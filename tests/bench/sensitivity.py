"""Whether a difference of two levels holds, within groups, against the engine's own median."""

from measuring import Figure, grouped, in_turn, seconds, session_with_table

TWO_LEVELS = "(SELECT few, x, many % 2 AS payment FROM bench.t)"


def measure(rows: int) -> list[Figure]:
    """rows_to_reverse in 1,000 groups; choices_table of a hundredth of the rows."""
    with session_with_table(rows) as session:
        call = f"FROM rows_to_reverse('{TWO_LEVELS}', 'x', 'payment', by := 'few')"
        ratios = in_turn(
            grouped(session, "median(x)", "few"),
            {"rows_to_reverse, 2 levels": lambda: session.query(call)},
            rounds=3,
        )
        figures = [
            Figure(f"{name} / median(x), 1,000 groups", ratio, "×")
            for name, ratio in ratios.items()
        ]
        part = TWO_LEVELS.replace("bench.t", f"bench.t LIMIT {rows // 100}")
        choices = f"FROM choices_table('{part}', 'x', 'payment', by := 'few')"
        few = choices.replace(f"LIMIT {rows // 100}", "LIMIT 100")
        session.query(few)  # compiles
        taken = seconds(lambda: session.query(choices))
        name = f"choices_table, {rows // 100:,} rows, 1,000 groups, 36 choices, 200 shuffles"
        return [*figures, Figure(name, taken, "s")]
