"""How time grows with the number of rows."""

from measuring import Figure, grouped, seconds, session_with_table


def measure(rows: int) -> list[Figure]:
    """trimmed_mean and robust_summary in 1,000 groups, at a tenth of the rows up to ten times."""
    taken: dict[str, list[float]] = {}
    sizes = (rows // 10, rows, rows * 10)
    for size in sizes:
        with session_with_table(size) as session:
            runs = {
                "trimmed_mean(x, 0.1)": grouped(session, "trimmed_mean(x, 0.1)", "few"),
                "robust_summary": lambda s=session: s.query(
                    "FROM robust_summary('bench.t', 'x', by := 'few')"
                ),
            }
            for name, run in runs.items():
                run()
                taken.setdefault(name, []).append(min(seconds(run) for _ in range(3)))
    figures = []
    for name, times in taken.items():
        for i, promised in ((1, ""), (2, "≤ 11")):
            what = f"{name}, {sizes[i]:,} rows / {sizes[i - 1]:,} rows"
            figures.append(Figure(what, times[i] / times[i - 1], "×", promised))
    return figures
