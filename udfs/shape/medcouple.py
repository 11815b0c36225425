"""The medcouple, a robust measure of skewness."""

import math
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.order_statistics import median_sorted
from midspread.udfs.arithmetic.pair_selection import ordered_ratios
from midspread.udfs.arithmetic.pair_tables import count_up_to_ratio
from midspread.udfs.declaring import Values, aggregate, compiled

_LARGEST_TO_ADD: Final = 8.9e307
_ONE: Final = -1
_ZERO: Final = -2
_MINUS_ONE: Final = -3


@aggregate(
    family="shape",
    formula=(
        "median of ((x_i − m) − (m − x_j)) / (x_i − x_j) over all x_j ≤ m ≤ x_i, m the median; "
        "where k values equal m, the k² pairs among them count as k(k−1)/2 times −1, k times 0, "
        "k(k−1)/2 times 1"
    ),
    source="Brys, Hubert & Struyf 2004, J. Comput. Graph. Statist. 13, 996–1017",
    breakdown="0.25",
    cost="O(n log n) time, O(n) memory",
    smallest_n=1,
    example="medcouple(dwell_s)",
    linear=False,
)
def medcouple(x: Values) -> float:
    """Skewness between −1 and 1 from pairs of values astride the median; 0 when symmetric.

    Parameters
    ----------
    x : array of float
        Sorted values of one group.

    Returns
    -------
    float
        Without unit; the mean of the two middle pairs where their number is even.

    Notes
    -----
    An infinite value is taken as the limit of ever larger ones: its pairs give 1 or −1, and 0
    with its opposite. Where all values but one are equal the definition gives ±0.5; code that
    answers ±1 whenever the median is the smallest or the largest value differs in this case.

    References
    ----------
    Brys, G., Hubert, M. & Struyf, A. (2004). J. Comput. Graph. Statist. 13, 996–1017.
    """
    centre = median_sorted(x)
    if math.isnan(centre):
        return math.nan
    n = x.size
    below = 0
    while x[below] < centre and below < n - 1:
        below += 1
    above = 0
    while x[n - 1 - above] > centre and above < n - 1:
        above += 1
    ties = n - below - above
    pairs = (below + ties) * (above + ties)
    first, last = (pairs + 1) // 2, pairs // 2 + 1  # ranks, counted from the largest
    infinite_below, infinite_above = 0, 0
    while infinite_below < below and x[infinite_below] == -math.inf:
        infinite_below += 1
    while infinite_above < above and x[n - 1 - infinite_above] == math.inf:
        infinite_above += 1
    up, down = _finite_distances(x, centre, below, above, infinite_below, infinite_above)
    ones = ties * above + ties * (ties - 1) // 2 + infinite_above * down.size
    zeros = ties + infinite_above * infinite_below
    smaller, not_larger = 0, 0
    if zeros > 0:
        smaller, not_larger = _count_from_below_one(up, down)
    strict = up.size * down.size
    rank = _rank_of_ratio(first - ones, strict, zeros, smaller, not_larger)
    rank_last = _rank_of_ratio(last - ones, strict, zeros, smaller, not_larger)
    if rank <= 0 and rank_last <= 0:
        return (_worth(rank) + _worth(rank_last)) / 2
    ratio, ratio_last = ordered_ratios(
        up,
        down,
        rank if rank > 0 else rank_last,
        rank_last if rank_last > 0 else rank,
    )
    upper = _kernel(up, down, ratio) if rank > 0 else _worth(rank)
    if ratio_last == ratio and rank > 0 and rank_last > 0:
        return upper
    lower = _kernel(up, down, ratio_last) if rank_last > 0 else _worth(rank_last)
    return (upper + lower) / 2


@compiled
def _finite_distances(
    x: Values, centre: float, below: int, above: int, infinite_below: int, infinite_above: int
) -> tuple[Values, Values]:
    """Finite distances of the values above and of those below the centre, each ascending."""
    n = x.size
    up = np.empty(above - infinite_above)
    down = np.empty(below - infinite_below)
    if up.size == 0 or down.size == 0:
        return up, down
    widest = max(x[n - 1 - infinite_above] - centre, centre - x[infinite_below])
    unit = 1.0 if widest <= _LARGEST_TO_ADD else 0.25
    for i in range(up.size):
        up[i] = x[n - above + i] * unit - centre * unit
    for i in range(down.size):
        down[i] = centre * unit - x[below - 1 - i] * unit
    return up, down


@compiled
def _count_from_below_one(up: Values, down: Values) -> tuple[int, int]:
    """How many pairs lie closer below than above, and how many no farther below than above."""
    closer, not_farther = 0, 0
    j, k = 0, 0
    for i in range(up.size):
        while j < down.size and down[j] < up[i]:
            j += 1
        while k < down.size and down[k] <= up[i]:
            k += 1
        closer += j
        not_farther += k
    return closer, not_farther


@compiled
def _rank_of_ratio(rank: int, strict: int, zeros: int, smaller: int, not_larger: int) -> int:
    """The rank of a pair among the strict ones; a code where its kernel is 1, 0 or −1.

    A pair with neither a tie nor an infinite value is strict. It has the kernel (1 − r) / (1 + r)
    with r = (m − x_j) / (x_i − m): the largest kernel has the smallest ratio, and the zeros
    stand where r is 1. The rank comes counted from behind the pairs whose kernel is 1.
    """
    if rank <= 0:
        return _ONE
    if rank <= smaller:
        return rank
    if zeros > 0 and rank <= not_larger + zeros:
        return _ZERO
    if rank <= strict + zeros:
        return rank - zeros
    return _MINUS_ONE


@compiled
def _worth(code: int) -> float:
    """The kernel that a code of `_rank_of_ratio` stands for."""
    if code == _ONE:
        return 1.0
    return 0.0 if code == _ZERO else -1.0


@compiled
def _kernel(up: Values, down: Values, ratio: float) -> float:
    """The kernel of a pair with this ratio of distances, found on one walk through the table.

    From the pair itself, because a kernel near 0 has more digits than a ratio near 1.
    """
    ends = np.empty(up.size, np.int32)
    count_up_to_ratio(up, down, ratio, ends)
    for i in range(up.size):
        j = ends[i] - 1
        if j >= 0 and down[j] / up[i] == ratio:
            while j > 0 and down[j - 1] / up[i] == ratio:
                j -= 1
            return (up[i] - down[j]) / (up[i] + down[j])
    return (1.0 - ratio) / (1.0 + ratio)
