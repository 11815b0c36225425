"""Correlations of ranks."""

import math

import numpy as np

from midspread.udfs.arithmetic.pair_sorting import (
    end_of_tie,
    pairs_tied_in_both,
    sort_with,
    tied_pairs,
)
from midspread.udfs.arithmetic.running import add
from midspread.udfs.declaring import NULL, Values, aggregate, compiled


@aggregate(
    family="association",
    columns=("y", "x"),
    formula="Pearson's correlation of the ranks; tied values share the mean of their ranks",
    source="Spearman 1904, American Journal of Psychology 15, 72–101",
    breakdown="about 0.21: the share of rows that can turn perfect agreement into none "
    "(Capéraà & Garralda Guillem 1997)",
    cost="O(n log n) time, O(n) memory",
    smallest_n=2,
    example="spearman(dwell_s, boardings)",
    linear=False,
)
def spearman(y: Values, x: Values) -> float:
    """How nearly one column rises, or falls, whenever another does, by ranks.

    Parameters
    ----------
    y, x : array of float
        Pairs sorted by y.

    Returns
    -------
    float
        From −1 to 1; NULL where all values of a column are equal.

    Notes
    -----
    It sees relations that rise or fall throughout, and no others. Association is not cause:
    whatever drives both columns drives it too.

    References
    ----------
    Spearman, C. (1904). The proof and measurement of association between two things. American
    Journal of Psychology 15, 72–101.
    """
    n = x.size
    # Twice a midrank less its mean is a whole number, so products lose nothing.
    ranks = np.empty(n)
    start = 0
    while start < n:
        stop = end_of_tie(y, start)
        ranks[start:stop] = start + stop - n
        start = stop
    keys = x.copy()
    sort_with(keys, ranks)
    both = both_lost = squares_y = lost_y = squares_x = lost_x = 0.0
    start = 0
    while start < n:
        stop = end_of_tie(keys, start)
        rank = float(start + stop - n)
        for i in range(start, stop):
            both, both_lost = add(both, both_lost, ranks[i] * rank)
            squares_y, lost_y = add(squares_y, lost_y, ranks[i] * ranks[i])
            squares_x, lost_x = add(squares_x, lost_x, rank * rank)
        start = stop
    return ratio_to_roots(both + both_lost, squares_y + lost_y, squares_x + lost_x)


@aggregate(
    family="association",
    columns=("y", "x"),
    formula="τ_b = (C − D) / √((P − T_y) (P − T_x)): of P = n (n − 1) / 2 pairs of rows C stand in "
    "the same order in both columns, D in opposite order, T_y and T_x are tied in y and in x",
    source="Kendall 1945, Biometrika 33, 239–251; computing: Knight 1966, J. Amer. Statist. "
    "Assoc. 61, 436–439",
    breakdown="about 0.29: the share of rows that can turn perfect agreement into none "
    "(Capéraà & Garralda Guillem 1997)",
    cost="O(n log n) time, O(n) memory",
    smallest_n=2,
    example="kendall_tau(dwell_s, boardings)",
    linear=False,
)
def kendall_tau(y: Values, x: Values) -> float:
    """How much more often two rows stand in the same order in both columns than in opposite.

    Parameters
    ----------
    y, x : array of float
        Pairs sorted by y, then x.

    Returns
    -------
    float
        From −1 to 1 (Kendall's tau-b, corrected for ties); NULL where all values of a column are
        equal.

    Notes
    -----
    Without ties (1 + tau) / 2 is the chance that two rows drawn at random stand in the same
    order. Association is not cause: whatever drives both columns drives it too.

    References
    ----------
    Kendall, M. G. (1945). The treatment of ties in ranking problems. Biometrika 33, 239–251.
    Knight, W. R. (1966). A computer method for calculating Kendall's tau with ungrouped data.
    Journal of the American Statistical Association 61, 436–439.
    """
    n = x.size
    pairs = n * (n - 1) // 2
    tied_y, tied_both = tied_pairs(y), pairs_tied_in_both(y, x)
    keys, others = x.copy(), y.copy()
    discordant = sort_with(keys, others)
    tied_x = tied_pairs(keys)
    excess = pairs - tied_y - tied_x + tied_both - 2 * discordant
    return ratio_to_roots(float(excess), float(pairs - tied_y), float(pairs - tied_x))


@compiled
def ratio_to_roots(both: float, first: float, second: float) -> float:
    """both / √(first · second), within −1 and 1; NULL where a column does not vary."""
    if first == 0.0 or second == 0.0:
        return NULL
    ratio = both / math.sqrt(first * second)
    return min(max(ratio, -1.0), 1.0)
