"""What rules for outlying values keep of two samples pooled: they do not see the labels.

A loop of its own, so that the limits, which take long to compile, are compiled once for the grid of
choices and its shuffles.
"""

import functools
import math
from collections.abc import Callable
from typing import Final

import numpy as np

from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import Values, compiled
from midspread.udfs.drivers import STOP, Indices
from midspread.udfs.outlying.limits import LIMIT_FIELDS, limits_of_group
from midspread.udfs.outlying.limits import RULES as LIMIT_RULES
from midspread.udfs.sensitivity.pooled import Windows, loses, pool, re_express

NO_RULE: Final = "none"
RULES: Final = (NO_RULE, *LIMIT_RULES)
"""Rules for outlying values; kernels know them by their place."""
_FENCE_SPREADS: Final = 1.5
_MAD_SCALES: Final = 3.0
_MEDIAN_MAD: Final = RULES.index("median_mad")


def _over_rules(
    values: Values,
    starts: Indices,
    pairs: Indices,
    powers: Values,
    rules: Indices,
    windows: Windows,
    control: Indices,
) -> None:
    """Fill ``windows[r, power, rule]`` for the samples pairs[r], the baseline, and pairs[r] + 1.

    First and stop of the pooled values, sorted, that a rule leaves.
    """
    for r in range(pairs.size):
        s = pairs[r]
        baseline, other = values[starts[s] : starts[s + 1]], values[starts[s + 1] : starts[s + 2]]
        n = baseline.size + other.size
        x, labels, y = np.empty(n), np.empty(n, np.int8), np.empty(n)
        pool(baseline, other, x, labels)
        for p in range(powers.size):
            judged = not loses(x, powers[p]) and not math.isnan(x[n - 1])
            if judged:
                re_express(x, powers[p], y)
            for rule in range(rules.size):
                if control[STOP] != 0:
                    return
                first, stop = 0, n
                if judged:
                    first, stop = kept_by_rule(y, rules[rule])
                windows[r, p, rule, 0], windows[r, p, rule, 1] = first, stop


@functools.cache
def rules_loop() -> Callable[..., None]:
    """`_over_rules`, compiled or loaded on the first call."""
    return compile_driver(
        _over_rules,
        {},
        "over_rules",
        "void(float64[::1], int64[::1], int64[::1], float64[::1], int64[::1], "
        "int64[:, :, :, ::1], int64[::1])",
    )


@compiled
def kept_by_rule(y: Values, rule: int) -> tuple[int, int]:
    """First and stop of the sorted values that a rule leaves; limits without width leave all."""
    if rule == 0:
        return 0, y.size
    limits, settings = np.empty(len(LIMIT_FIELDS)), np.empty(2)
    settings[0] = rule - 1
    settings[1] = _MAD_SCALES if rule == _MEDIAN_MAD else _FENCE_SPREADS
    limits_of_group(y, settings, limits)
    if not limits[0] < limits[1]:
        return 0, y.size
    first, stop = 0, y.size
    while first < stop and y[first] < limits[0]:
        first += 1
    while stop > first and y[stop - 1] > limits[1]:
        stop -= 1
    return first, stop
