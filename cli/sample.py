"""Forty dwell times of two of Larkmoor's routes, on which the reference shows its examples."""

from typing import Final

ABOUT: Final = "visits, 40 dwell times of routes L3 and L6 with a layover and two stuck clocks"

# route, day_part, boardings, dwell_s
_ROWS: Final = (
    ("L3", "early", 1, 9.8),
    ("L3", "early", 0, 7.2),
    ("L3", "early", 2, 12.1),
    ("L3", "early", 1, 10.4),
    ("L3", "morning peak", 4, 18.3),
    ("L3", "morning peak", 3, 15.9),
    ("L3", "morning peak", 6, 27.5),
    ("L3", "morning peak", 2, 14.0),
    ("L3", "morning peak", 5, 21.7),
    ("L3", "midday", 2, 13.4),
    ("L3", "midday", 1, 11.0),
    ("L3", "midday", 3, 16.6),
    ("L3", "midday", 2, 421.3),
    ("L3", "afternoon peak", 4, 17.7),
    ("L3", "afternoon peak", 3, 15.2),
    ("L3", "afternoon peak", 2, 13.9),
    ("L3", "afternoon peak", 7, 30.8),
    ("L3", "evening", 1, 10.1),
    ("L3", "evening", 2, 12.9),
    ("L3", "evening", 0, 8.3),
    ("L6", "early", 2, 15.7),
    ("L6", "early", 1, 13.3),
    ("L6", "early", 0, 0.0),
    ("L6", "early", 3, 19.9),
    ("L6", "morning peak", 5, 28.4),
    ("L6", "morning peak", 4, 24.6),
    ("L6", "morning peak", 8, 41.2),
    ("L6", "morning peak", 3, 22.0),
    ("L6", "morning peak", 6, 33.1),
    ("L6", "midday", 2, 18.8),
    ("L6", "midday", 3, 21.4),
    ("L6", "midday", 1, 16.2),
    ("L6", "midday", 4, 25.9),
    ("L6", "afternoon peak", 5, 27.1),
    ("L6", "afternoon peak", 3, 23.5),
    ("L6", "afternoon peak", 2, 20.3),
    ("L6", "afternoon peak", 9, 5218.6),
    ("L6", "evening", 1, 14.6),
    ("L6", "evening", 2, 17.5),
    ("L6", "evening", 1, 16.9),
)


def with_sample(query: str) -> str:
    """A script that answers a query over the sample, a view called visits."""
    rows = ", ".join(
        f"('{route}', '{day_part}', {boardings}, {dwell_s!r}::DOUBLE)"
        for route, day_part, boardings, dwell_s in _ROWS
    )
    return (
        "CREATE TEMP VIEW visits AS "
        f"SELECT * FROM (VALUES {rows}) AS t(route, day_part, boardings, dwell_s);\n{query}"
    )
