"""A statistic computed for many groups from Python."""

from typing import TYPE_CHECKING

import numpy as np

from midspread.udfs.declaring import NULL, Values
from midspread.udfs.drivers import driver
from midspread.udfs.grouped import Groups, Task, row_numbers, run
from midspread.udfs.resampling.statistics import Statistic

if TYPE_CHECKING:
    # Not at run time: it loads Arrow, and looking up the catalogue must not.
    from midspread.udfs.binding.computing import Work


def evaluate(statistic: Statistic, groups: Groups, work: "Work") -> Values:
    """The statistic of each group; NaN where a group holds NaN, `NULL` where it has too few values.

    Values need not be sorted. A group's answer does not depend on the order of its values.
    """
    count = len(groups.offsets) - 1
    out = np.full((count, 1), NULL)
    parameters = np.repeat(np.array(statistic.parameters)[:, np.newaxis], max(count, 1), axis=1)
    if not statistic.parameters:
        parameters = np.empty((0, 1))
    function = statistic.function
    task = Task(driver(function), np.ascontiguousarray(parameters), function.smallest_n, 0)
    run(groups, [task], out, row_numbers(np.ones(count, np.int64)), work.control, work.threads)
    return out[:, 0]
