"""How curved a relation stays on every pair of rungs.

Rungs keep the order of the values. So the thirds of a resistant line hold the same rows on every
pair of rungs, the medians in them are those of the same values re-expressed, and winsorizing pulls
in the same rows: one sort serves all pairs, and a pair costs one product of two columns.
"""

import math
from typing import Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.arithmetic.order_statistics import median_sorted, midpoint
from midspread.udfs.arithmetic.sums import compensated_mean
from midspread.udfs.declaring import NULL, Values, compiled
from midspread.udfs.drivers import STOP, Indices
from midspread.udfs.reexpression.ladder_figures import re_express

FIGURES: Final = ("n", "n_lost", "half_slope_ratio", "winsorized_corr")
"""What `straightening` writes for each pair of powers, those of x running faster."""

SHARE: Final = 0.2

Flags = npt.NDArray[np.bool_]

_WIDTH: Final = len(FIGURES)
_BLOCK: Final = 64
_FEWEST: Final = 3


@compiled
def straightening(y: Values, x: Values, powers: Values, out: Values, control: Indices) -> None:
    """Fill FIGURES for each pair of powers; the pairs come sorted by y, then x, NaN last in y."""
    n = y.size
    spoilt = math.isnan(y[n - 1])
    for i in range(n):
        spoilt = spoilt or math.isnan(x[i])
    y_kinds, x_kinds = _kinds(y, powers, spoilt), _kinds(x, powers, spoilt)
    for y_kind in range(3):
        for x_kind in range(3):
            wanted = False
            for kind in y_kinds:
                wanted = wanted or kind == y_kind
            other = False
            for kind in x_kinds:
                other = other or kind == x_kind
            if not (wanted and other):
                continue
            if control[STOP] != 0:
                return
            rows = np.empty(n, np.int64)
            kept = 0
            for i in range(n):
                if _fits(y[i], y_kind) and _fits(x[i], x_kind):
                    rows[kept] = i
                    kept += 1
            some = rows[:kept]
            _one_kind(
                y[some],
                x[some],
                powers,
                y_kinds == y_kind,
                x_kinds == x_kind,
                n,
                spoilt,
                out,
                control,
            )


@compiled
def _kinds(values: Values, powers: Values, spoilt: bool) -> Indices:
    """Which values each power takes: 0 all, 1 those from 0 up, 2 those above 0.

    Powers that take the same values are of one kind, whatever they would take of others.
    """
    lost, lost_with_zeros = 0, 0
    if not spoilt:
        for value in values:
            lost += int(value < 0.0)
            lost_with_zeros += int(value <= 0.0)
    kinds = np.zeros(powers.size, np.int64)
    for place in range(powers.size):
        if powers[place] <= 0.0 and lost_with_zeros > lost:
            kinds[place] = 2
        elif powers[place] != 1.0 and lost > 0:
            kinds[place] = 1
    return kinds


@compiled
def _fits(value: float, kind: int) -> bool:
    return kind == 0 or value > 0.0 or (kind == 1 and value == 0.0)


@compiled
def _one_kind(
    y: Values,
    x: Values,
    powers: Values,
    is_y_power: Flags,
    is_x_power: Flags,
    rows: int,
    spoilt: bool,
    out: Values,
    control: Indices,
) -> None:
    """The pairs of powers that take the same rows, which are given."""
    n, count = y.size, powers.size
    order = np.argsort(x)
    sorted_x = x[order]
    ends = np.empty((2, 6))
    has_thirds = n >= _FEWEST and not spoilt and _ends_of_medians(y, sorted_x, order, ends)
    unit_y = np.empty((count, n))
    unit_x = np.empty((count, n))
    room = np.empty(n)
    if n >= _FEWEST and not spoilt:
        for place in range(count):
            if control[STOP] != 0:
                return
            if is_y_power[place]:
                _winsorized_unit(y, powers[place], room, unit_y[place])
            if is_x_power[place]:
                _winsorized_unit(sorted_x, powers[place], room, unit_x[place])
                for i in range(n):
                    room[order[i]] = unit_x[place, i]
                for i in range(n):
                    unit_x[place, i] = room[i]
    for i in range(count):
        for j in range(count):
            if not (is_y_power[i] and is_x_power[j]):
                continue
            if control[STOP] != 0:
                return
            figures = out[(i * count + j) * _WIDTH : (i * count + j + 1) * _WIDTH]
            figures[0] = n
            figures[1] = rows - n
            if spoilt:
                figures[2:] = math.nan
            elif n >= _FEWEST:
                if has_thirds:
                    figures[2] = _half_slope_ratio(
                        ends, powers[i], median_sorted(y), powers[j], median_sorted(sorted_x)
                    )
                figures[3] = _product(unit_y[i], unit_x[j])


@compiled
def _ends_of_medians(y: Values, sorted_x: Values, order: Indices, ends: Values) -> bool:
    """The one or two values behind each median of x and y in the three thirds; False without.

    Thirds as in `resistant_line`: up to and from the values midway between the two about a third
    and two thirds of the places, so that tied rows belong to the outer ones.
    """
    n = y.size
    first, second = (n - 1) * (1.0 / 3.0), (n - 1) * (2.0 / 3.0)
    left_edge = midpoint(sorted_x[int(math.floor(first))], sorted_x[int(math.ceil(first))])
    right_edge = midpoint(sorted_x[int(math.floor(second))], sorted_x[int(math.ceil(second))])
    left_stop, right_start = 0, n
    while left_stop < n and sorted_x[left_stop] <= left_edge:
        left_stop += 1
    while right_start > 0 and sorted_x[right_start - 1] >= right_edge:
        right_start -= 1
    if left_stop >= right_start:
        return False
    bounds = (0, left_stop, right_start, n)
    for third in range(3):
        start, stop = bounds[third], bounds[third + 1]
        along = np.empty(stop - start)
        for i in range(start, stop):
            along[i - start] = y[order[i]]
        along.sort()
        low, high = (along.size - 1) // 2, along.size // 2
        ends[0, 2 * third], ends[0, 2 * third + 1] = along[low], along[high]
        ends[1, 2 * third], ends[1, 2 * third + 1] = sorted_x[start + low], sorted_x[start + high]
    return True


@compiled
def _half_slope_ratio(
    ends: Values, y_power: float, y_centre: float, x_power: float, x_centre: float
) -> float:
    """The right half slope over the left one; NULL where one has no value or the left one is 0."""
    y_centre = y_centre if y_centre > 0.0 or y_power == 1.0 else 1.0
    x_centre = x_centre if x_centre > 0.0 or x_power == 1.0 else 1.0
    medians = np.empty((2, 3))
    for third in range(3):
        for column in range(2):
            power, centre = (y_power, y_centre) if column == 0 else (x_power, x_centre)
            low = _on_rung(ends[column, 2 * third], power, centre)
            high = _on_rung(ends[column, 2 * third + 1], power, centre)
            medians[column, third] = midpoint(low, high)
    left_run = medians[1, 1] - medians[1, 0]
    right_run = medians[1, 2] - medians[1, 1]
    left_rise = medians[0, 1] - medians[0, 0]
    right_rise = medians[0, 2] - medians[0, 1]
    if left_run == 0.0 or right_run == 0.0 or left_rise == 0.0:
        return NULL
    return (right_rise / left_rise) * (left_run / right_run)


@compiled
def _on_rung(value: float, power: float, centre: float) -> float:
    """One value as `re_express` would have it."""
    if power == 1.0:
        return value - centre
    log = math.log(value / centre) if value > 2.0 * centre else 0.0
    if log == 0.0 and value > 0.0:
        log = math.log1p((value - centre) / centre)
    if value == 0.0:
        return -1.0 / power  # a power above 0: the others have lost the value
    return log if power == 0.0 else math.expm1(power * log) / power


@compiled
def _winsorized_unit(ordered: Values, power: float, room: Values, unit: Values) -> None:
    """The winsorized values on a rung, less their mean and of length 1; NULL throughout if equal.

    Ascending values in, the same places out.
    """
    n = ordered.size
    cut = int(SHARE * n)
    low, high = ordered[cut], ordered[n - 1 - cut]
    for i in range(n):
        room[i] = min(max(ordered[i], low), high)
    re_express(room, power, unit)
    if unit[0] == unit[n - 1]:
        unit[:] = NULL
        return
    mean = compensated_mean(unit, 0, n)
    widest = max(unit[n - 1] - mean, mean - unit[0])
    squares = 0.0
    for first in range(0, n, _BLOCK):
        part = 0.0
        for i in range(first, min(first + _BLOCK, n)):
            unit[i] = (unit[i] - mean) / widest
            part += unit[i] * unit[i]
        squares += part
    length = math.sqrt(squares)
    for i in range(n):
        unit[i] /= length


@compiled
def _product(a: Values, b: Values) -> float:
    """The correlation of two such columns."""
    if math.isnan(a[0]) or math.isnan(b[0]):
        # Equal values throughout give NULL, infinite ones NaN.
        return a[0] if math.isnan(a[0]) else b[0]
    total = 0.0
    for first in range(0, a.size, _BLOCK):
        part = 0.0
        for i in range(first, min(first + _BLOCK, a.size)):
            part += a[i] * b[i]
        total += part
    return min(max(total, -1.0), 1.0)
