"""Forty dwell times of two of Larkmoor's routes, on which the reference shows its examples."""

from typing import Final

ABOUT: Final = "visits, 40 dwell times of routes L3 and L6 with a layover and two stuck clocks"
VEHICLES: Final = 8

# route, day_part, boardings, payment, dwell_s
_ROWS: Final = (
    ("L3", "early", 1, "cash box", 9.8),
    ("L3", "early", 0, "cash box", 7.2),
    ("L3", "early", 2, "tap reader", 12.1),
    ("L3", "early", 1, "cash box", 10.4),
    ("L3", "morning peak", 4, "cash box", 18.3),
    ("L3", "morning peak", 3, "tap reader", 15.9),
    ("L3", "morning peak", 6, "cash box", 27.5),
    ("L3", "morning peak", 2, "cash box", 14.0),
    ("L3", "morning peak", 5, "tap reader", 21.7),
    ("L3", "midday", 2, "cash box", 13.4),
    ("L3", "midday", 1, "cash box", 11.0),
    ("L3", "midday", 3, "tap reader", 16.6),
    ("L3", "midday", 2, "cash box", 421.3),
    ("L3", "afternoon peak", 4, "cash box", 17.7),
    ("L3", "afternoon peak", 3, "tap reader", 15.2),
    ("L3", "afternoon peak", 2, "cash box", 13.9),
    ("L3", "afternoon peak", 7, "cash box", 30.8),
    ("L3", "evening", 1, "tap reader", 10.1),
    ("L3", "evening", 2, "cash box", 12.9),
    ("L3", "evening", 0, "cash box", 8.3),
    ("L6", "early", 2, "tap reader", 15.7),
    ("L6", "early", 1, "cash box", 13.3),
    ("L6", "early", 0, "cash box", 0.0),
    ("L6", "early", 3, "tap reader", 19.9),
    ("L6", "morning peak", 5, "cash box", 28.4),
    ("L6", "morning peak", 4, "cash box", 24.6),
    ("L6", "morning peak", 8, "tap reader", 41.2),
    ("L6", "morning peak", 3, "cash box", 22.0),
    ("L6", "morning peak", 6, "cash box", 33.1),
    ("L6", "midday", 2, "tap reader", 18.8),
    ("L6", "midday", 3, "cash box", 21.4),
    ("L6", "midday", 1, "cash box", 16.2),
    ("L6", "midday", 4, "tap reader", 25.9),
    ("L6", "afternoon peak", 5, "cash box", 27.1),
    ("L6", "afternoon peak", 3, "cash box", 23.5),
    ("L6", "afternoon peak", 2, "tap reader", 20.3),
    ("L6", "afternoon peak", 9, "cash box", 5218.6),
    ("L6", "evening", 1, "cash box", 14.6),
    ("L6", "evening", 2, "tap reader", 17.5),
    ("L6", "evening", 1, "cash box", 16.9),
)


def with_sample(query: str) -> str:
    """A script that answers a query over the sample, a view called visits.

    Visits are numbered in order; eight vehicles take them in turn.
    """
    rows = ", ".join(
        f"({visit}, 'V{101 + visit % VEHICLES}', '{route}', '{day_part}', {boardings}, "
        f"'{payment}', {dwell_s!r}::DOUBLE)"
        for visit, (route, day_part, boardings, payment, dwell_s) in enumerate(_ROWS, start=1)
    )
    return (
        "CREATE TEMP VIEW visits AS "
        f"SELECT * FROM (VALUES {rows}) "
        f"AS t(visit, vehicle, route, day_part, boardings, payment, dwell_s);\n{query}"
    )
