"""Where some values, such as those near a centre, begin and end among sorted values."""

from typing import Any

import numpy.typing as npt

from midspread.udfs.declaring import Values, compiled


@compiled
def first_from(x: Values, centre: float, bound: float) -> int:
    """The first index whose value − centre is at least the bound; n where there is none."""
    low, high = 0, x.size
    while low < high:
        middle = (low + high) // 2
        if x[middle] - centre < bound:
            low = middle + 1
        else:
            high = middle
    return low


@compiled
def first_above(x: Values, centre: float, bound: float) -> int:
    """The first index whose value − centre exceeds the bound; n where there is none."""
    low, high = 0, x.size
    while low < high:
        middle = (low + high) // 2
        if x[middle] - centre <= bound:
            low = middle + 1
        else:
            high = middle
    return low


@compiled
def first_not_below(x: npt.NDArray[Any], value: float) -> int:
    """The first index of what is not below a value; n where there is none.

    numba's own search takes long to compile.
    """
    low, high = 0, x.size
    while low < high:
        middle = (low + high) // 2
        if x[middle] < value:
            low = middle + 1
        else:
            high = middle
    return low
