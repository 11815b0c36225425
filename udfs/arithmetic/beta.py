"""Masses of the beta distribution in n cells of equal width.

Weights that are divided by their own sum need no beta function, so neither a gamma function nor
its cancellation for large arguments comes in. The density is followed from cell to cell by the
power series of its differential equation, which gives the integral over each cell on the way.
"""

import math
from typing import Final

import numpy as np

from midspread.udfs.declaring import Values, compiled

NEGLIGIBLE: Final = 1e-20
"""Masses below this part of the largest are left out."""
_MOST_TERMS: Final = 64
_ROUNDING: Final = 1e-17
_RECIPROCALS: Final = 1.0 / np.arange(1.0, _MOST_TERMS + 2.0)


@compiled
def beta_masses(a: float, b: float, masses: Values) -> tuple[int, int]:
    """Masses of a beta distribution between i/n and (i+1)/n, up to a common factor.

    Parameters
    ----------
    a, b : float
        Parameters of the distribution, above 0; a + b = n + 1, as order statistics have it.
    masses : array
        n ≥ 2 cells; those that are not negligible are filled.

    Returns
    -------
    first, stop : int
        The cells first ≤ i < stop are filled; the others are negligible.
    """
    n = masses.size
    half = 0.5 / n
    if n == 2:
        masses[0] = _beta_end(a, b, 0.5)
        masses[1] = _beta_end(b, a, 0.5)
        return 0, 2
    # Start at the mode, or as near to it as leaves a cell's width to 0 and to 1.
    mode = (a - 1.0) / (n - 1)
    start = min(max(int(math.floor(mode * n)), 1), n - 2)
    integral, left, right = _beta_cell(a, n, start)
    masses[start] = largest = integral

    first = start
    edge = left
    while first > 0:
        if first == 1:
            mass = edge * _beta_end(a, b, 2.0 * half)
        else:
            integral, before, after = _beta_cell(a, n, first - 1)
            mass = edge / after * integral
            edge *= before / after
        if mass < NEGLIGIBLE * largest:
            break
        first -= 1
        masses[first] = mass
        largest = max(largest, mass)

    stop = start + 1
    if a == b:
        while stop < n - first:
            masses[stop] = masses[n - 1 - stop]
            stop += 1
        return first, stop
    edge = right
    while stop < n:
        if stop == n - 1:
            mass = edge * _beta_end(b, a, 2.0 * half)
        else:
            integral, before, after = _beta_cell(a, n, stop)
            mass = edge / before * integral
            edge *= after / before
        if mass < NEGLIGIBLE * largest:
            break
        masses[stop] = mass
        stop += 1
        largest = max(largest, mass)
    return first, stop


@compiled
def _beta_cell(a: float, n: int, i: int) -> tuple[float, float, float]:
    """A beta density over cell i of n, in units of the density at the cell's middle.

    Returns its integral in half-widths and the density at the lower and the upper end. The cell
    must be neither the first nor the last.

    With x = middle + half · s the density g obeys x (1−x) g' = half (a−1 − (a+b−2) x) g, which
    is a recurrence of three terms for its Taylor coefficients in s.
    """
    half = 0.5 / n
    middle = (2 * i + 1) * half
    stretch = half / (middle * (1.0 - middle))
    # a − 1 − (a+b−2) middle, with a + b = n + 1 put in so that nothing cancels.
    slope = stretch * ((a - 1.5 - i) + middle)
    bend = stretch * half * (n - 1)
    skew = stretch * (1.0 - 2.0 * middle)
    curve = stretch * half
    term, following = 1.0, slope
    even, odd, integral = 1.0, 0.0, 1.0
    # Two terms a turn: term is of even degree k, following of odd degree k + 1.
    for k in range(0, _MOST_TERMS - 2, 2):
        odd += following
        term = ((slope - skew * (k + 1)) * following + (curve * k - bend) * term) * _RECIPROCALS[
            k + 1
        ]
        even += term
        integral += term * _RECIPROCALS[k + 2]
        following = (
            (slope - skew * (k + 2)) * term + (curve * (k + 1) - bend) * following
        ) * _RECIPROCALS[k + 2]
        if abs(term) + abs(following) <= _ROUNDING * even:
            break
    return 2.0 * integral, even - odd, even + odd


@compiled
def _beta_end(a: float, b: float, edge: float) -> float:
    """A beta density's integral from 0 to an edge, in half-edges, over its value at the edge.

    The series (1−x)/a · Σ (a+b)_k / (a+1)_k x^k has positive terms only, and holds where the
    density is infinite at 0.
    """
    term = total = 1.0
    k = 0
    while term > _ROUNDING * total:
        term *= edge * ((a + b + k) / (a + 1.0 + k))
        total += term
        k += 1
    return 2.0 * (1.0 - edge) / a * total
