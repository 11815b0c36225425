"""Letter values: order statistics at depths that halve."""

from typing import Final

from midspread.udfs.arithmetic.order_statistics import at_depth, distance, midpoint
from midspread.udfs.declaring import Values, aggregate, compiled

_SINGLE: Final = "MFEDCBAZYXWVUTSRQPONLKJIHG"
LETTERS: Final = (*_SINGLE, *(letter * 2 for letter in "ZYXWVUTSRQPONLKJIHG"))
"""Median, fourths, eighths, and on through the letters; enough for 2^44 values."""


@compiled
def letter_count(n: int) -> int:
    """How many letter values n values have, the extremes included."""
    count = 1
    depth = (n + 1) / 2
    while depth > 1.0:
        depth = (depth // 1 + 1) / 2
        count += 1
    return count


@aggregate(
    family="shape",
    fields=("letter", "depth", "lower", "mid", "upper", "spread"),
    rows=letter_count,
    labels={"letter": LETTERS},
    formula="depth of M (n+1)/2, each next depth (floor(depth) + 1)/2 down to 1; lower and upper "
    "at that depth from either end, mid their midpoint, spread their difference",
    source="Tukey 1977, Exploratory Data Analysis; Hoaglin, Mosteller & Tukey 1983, "
    "Understanding Robust and Exploratory Data Analysis",
    breakdown="of each row, the share of values beyond its depth",
    cost="O(n log n) time, O(n) memory",
    smallest_n=1,
    example="letter_values(dwell_s)",
)
def letter_values(x: Values, out: Values) -> None:
    """Median, fourths, eighths and on outwards, with the middles and spreads of each pair.

    Parameters
    ----------
    x : array
        Sorted values.
    out : array
        Takes a row a letter, from the median (M) outwards: F the fourths, E the eighths, then
        D, C, B, A, Z, Y and on. The last row holds the extremes, at depth 1, under the letter
        whose turn it is; one value alone is M and has no other row.

    Notes
    -----
    Where the mids drift upwards the values are skewed to the right. The outer rows rest on few
    values: the last on two. A depth that ends in a half is midway between two values.

    References
    ----------
    Hoaglin, D. C., Mosteller, F. and Tukey, J. W. (1983). Understanding Robust and Exploratory
    Data Analysis. Wiley, chapter 2.
    """
    depth = (x.size + 1) / 2
    for row in range(out.shape[0]):
        lower = at_depth(x, depth, False)
        upper = at_depth(x, depth, True)
        out[row, 0] = row
        out[row, 1] = depth
        out[row, 2] = lower
        out[row, 3] = midpoint(lower, upper)
        out[row, 4] = upper
        out[row, 5] = distance(lower, upper)
        depth = (depth // 1 + 1) / 2
