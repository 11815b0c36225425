"""Median and median absolute deviation of a window that runs along a series."""

import functools
import math
from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt

from midspread.udfs.arithmetic.order_statistics import median_absolute_deviation, median_sorted
from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import NULL, Values, compiled
from midspread.udfs.drivers import DONE, STOP, Indices


@compiled
def place_of(window: Values, size: int, value: float) -> int:
    """The first index of the sorted window[:size] whose value is at least this one."""
    low, high = 0, size
    while low < high:
        middle = (low + high) // 2
        if window[middle] < value:
            low = middle + 1
        else:
            high = middle
    return low


@compiled
def put_in(window: Values, size: int, value: float) -> None:
    """Add a value to the sorted window[:size]."""
    at = place_of(window, size, value)
    for i in range(size, at, -1):
        window[i] = window[i - 1]
    window[at] = value


@compiled
def take_out(window: Values, size: int, value: float) -> None:
    """Remove a value that the sorted window[:size] holds."""
    for i in range(place_of(window, size, value), size - 1):
        window[i] = window[i + 1]


@compiled
def exchange(window: Values, size: int, old: float, new: float) -> None:
    """Put a value in the stead of one that the sorted window[:size] holds: one shift, not two."""
    at, to = place_of(window, size, old), place_of(window, size, new)
    if to > at:
        to -= 1
        for i in range(at, to):
            window[i] = window[i + 1]
    else:
        for i in range(at, to, -1):
            window[i] = window[i - 1]
    window[to] = new


def running_windows(
    x: Values,
    missing: npt.NDArray[np.bool_],
    offsets: Indices,
    first: int,
    last: int,
    half_width: int,
    centres: Values,
    deviations: Values,
    control: Indices,
) -> None:
    """Write each place's window median and median absolute deviation, for groups first to last.

    Parameters
    ----------
    x : ndarray
        Values of group g at ``offsets[g]`` to ``offsets[g + 1]``, in the order of the series.
    missing : ndarray of bool
        Places without a value: they take part in no window and still take up room.
    half_width : int
        Places on each side of the middle one; fewer at the ends of a group.
    centres, deviations : ndarray
        NULL where a window holds no value, NaN where it holds a NaN.
    """
    longest = 0
    for g in range(first, last):
        longest = max(longest, offsets[g + 1] - offsets[g])
    window = np.empty(min(longest, 2 * half_width + 1) + 1)
    for g in range(first, last):
        start, stop = offsets[g], offsets[g + 1]
        size, n_nan = 0, 0
        done = start
        for i in range(start - half_width, stop):
            # Before the start of a group the window only fills up.
            entering, leaving = i + half_width, i - half_width - 1
            comes = entering < stop and not missing[entering]
            goes = leaving >= start and not missing[leaving]
            if comes and math.isnan(x[entering]):
                n_nan += 1
                comes = False
            if goes and math.isnan(x[leaving]):
                n_nan -= 1
                goes = False
            if comes and goes:
                exchange(window, size, x[leaving], x[entering])
            elif comes:
                put_in(window, size, x[entering])
                size += 1
            elif goes:
                take_out(window, size, x[leaving])
                size -= 1
            if i < start:
                continue
            if n_nan > 0:
                centres[i] = math.nan
                deviations[i] = math.nan
            elif size > 0:
                held = window[:size]
                centre = median_sorted(held)
                centres[i] = centre
                deviations[i] = median_absolute_deviation(held, centre)
            else:
                centres[i] = NULL
                deviations[i] = NULL
            if (i - start) % 1024 == 0:
                if control[STOP] != 0:
                    return
                control[DONE] += i - done
                done = i
        control[DONE] += stop - done


@functools.cache
def running_windows_driver() -> Callable[..., Any]:
    """The compiled loop; it releases the GIL."""
    return compile_driver(
        running_windows,
        {},
        "running_windows",
        "void(float64[::1], boolean[::1], int64[::1], int64, int64, int64, float64[::1], "
        "float64[::1], int64[::1])",
    )
