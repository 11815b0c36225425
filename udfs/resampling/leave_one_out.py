"""The loops of the jackknife: a statistic with each value left out once.

Each of them writes three figures a group: how far the mean of the leave-one-out values lies from
the estimate, the sum of their squared distances from their mean, and the acceleration of bca.
`NULL` where a leave-one-out value does not exist. Of a group's work, steps in all, this is further.
"""

import math
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.sums import compensated_sum
from midspread.udfs.declaring import NULL, Values, compiled
from midspread.udfs.drivers import DONE, STOP, Indices
from midspread.udfs.resampling.statistics import statistic

SIGNATURE: Final = (
    "void(float64[::1], int64[::1], int64[::1], int64[::1], float64[::1], float64[::1], int64, "
    "int64, int64, float64[:, ::1], int64[::1])"
)
PAIRS_SIGNATURE: Final = f"void(float64[::1], {SIGNATURE.removeprefix('void(')}"
RANKS_SIGNATURE: Final = SIGNATURE.removesuffix(")") + ", int64[::1], int64[::1])"

NODES: Final = 400
"""Where not each value is left out in turn, so many are."""
_OUTER: Final = 64
"""Of these, so many are the outermost at either end."""


def left_out(
    values: Values,
    starts: Indices,
    lengths: Indices,
    rows: Indices,
    parameters: Values,
    estimates: Values,
    exact: int,
    steps: int,
    further: int,
    out: Values,
    control: Indices,
) -> None:
    """Any statistic. Of more than exact values only some are left out, see `_nodes`.

    The values in between are interpolated along x between those neighbours.
    """
    for place in range(rows.size):
        r = rows[place]
        n = lengths[r]
        x = values[starts[r] : starts[r] + n]
        nodes = _nodes(n, exact)
        y = x[1:].copy()
        found = np.empty(nodes.size)
        gone = finished = 0
        for k in range(nodes.size):
            if control[STOP] != 0:
                return
            while gone < nodes[k]:
                y[gone] = x[gone]
                gone += 1
            found[k] = statistic(y, parameters)
            finished += n * further // nodes.size
            control[DONE] += finished // steps
            finished %= steps
        left = found
        if nodes.size < n:
            left = np.empty(n)
            for k in range(nodes.size - 1):
                i, stop = nodes[k], nodes[k + 1]
                gap = x[stop] - x[i]
                for between in range(i, stop + 1):
                    part = (between - i) / (stop - i)
                    if 0.0 < gap < math.inf:
                        part = (x[between] - x[i]) / gap
                    left[between] = found[k] + part * (found[k + 1] - found[k])
        _figures(left, estimates[r], out[r])


def left_out_pairs(
    others: Values,
    values: Values,
    starts: Indices,
    lengths: Indices,
    rows: Indices,
    parameters: Values,
    estimates: Values,
    exact: int,
    steps: int,
    further: int,
    out: Values,
    control: Indices,
) -> None:
    """A statistic of pairs; of more than exact pairs some, at even distances in their order.

    Their figures then stand for all.
    """
    for place in range(rows.size):
        r = rows[place]
        n = lengths[r]
        y = values[starts[r] : starts[r] + n]
        x = others[starts[r] : starts[r] + n]
        count = n if n <= exact else exact
        rest_y = y[1:].copy()
        rest_x = x[1:].copy()
        found = np.empty(count)
        gone = finished = 0
        for k in range(count):
            if control[STOP] != 0:
                return
            while gone < (2 * k + 1) * n // (2 * count):
                rest_y[gone] = y[gone]
                rest_x[gone] = x[gone]
                gone += 1
            found[k] = statistic(rest_y, rest_x, parameters)
            finished += n * further // count
            control[DONE] += finished // steps
            finished %= steps
        _figures(found, estimates[r], out[r])
        out[r, 1] *= n / count
        out[r, 2] /= math.sqrt(n / count)


def left_out_ranks(
    values: Values,
    starts: Indices,
    lengths: Indices,
    rows: Indices,
    parameters: Values,
    estimates: Values,
    exact: int,
    steps: int,
    further: int,
    out: Values,
    control: Indices,
    ranks: Indices,
    rank_starts: Indices,
) -> None:
    """A statistic that reads a few order statistics of n − 1 values: exact in O(n)."""
    y = np.zeros(lengths.max())
    for place in range(rows.size):
        r = rows[place]
        n = lengths[r]
        x = values[starts[r] : starts[r] + n]
        read = ranks[rank_starts[r] : rank_starts[r + 1]]
        left = np.empty(n)
        for i in range(n):
            if i % 65536 == 0 and control[STOP] != 0:
                return
            for k in read:
                y[k - 1] = x[k - 1] if k <= i else x[k]
            left[i] = statistic(y[: n - 1], parameters)
        _figures(left, estimates[r], out[r])
        control[DONE] += n * further // steps


@compiled
def _nodes(n: int, exact: int) -> Indices:
    """Which values are left out: all, or the outermost ones and some at even distances."""
    if n <= exact:
        return np.arange(n)
    nodes = np.empty(NODES, np.int64)
    inner = NODES - 2 * _OUTER
    for k in range(_OUTER):
        nodes[k] = k
        nodes[NODES - 1 - k] = n - 1 - k
    for k in range(inner):
        nodes[_OUTER + k] = _OUTER + (k + 1) * (n - 2 * _OUTER - 1) // (inner + 1)
    return nodes


@compiled
def _figures(left: Values, estimate: float, out: Values) -> None:
    """The three figures of a group from its leave-one-out values."""
    n = left.size
    spread = False
    for i in range(n):
        if math.isnan(left[i]):
            out[:] = NULL
            return
        if left[i] != left[0]:
            spread = True
    if not spread:
        out[0] = left[0] - estimate if left[0] != estimate else 0.0
        out[1] = out[2] = 0.0
        return
    out[:] = math.nan
    if math.isinf(estimate):
        return
    for i in range(n):
        if math.isinf(left[i]):
            return
        left[i] -= estimate
    mean = compensated_sum(left, 0, n) / n
    largest = 0.0
    for i in range(n):
        left[i] = mean - left[i]
        largest = max(largest, abs(left[i]))
    if not math.isfinite(largest):
        return
    squares = cubes = 0.0
    for i in range(n):
        d = left[i] / largest
        squares += d * d
        cubes += d * d * d
    out[0] = mean
    out[1] = squares * largest * largest
    out[2] = cubes / (6.0 * squares * math.sqrt(squares))
