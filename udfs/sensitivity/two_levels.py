"""What functions of two levels a group share: reading them, and answering as Arrow columns."""

from typing import Any

import numpy as np

from midspread.udfs.comparison.samples import Samples, read_samples
from midspread.udfs.declaring import Values
from midspread.udfs.parameters import ParameterError


def two_levels(function: str, lists: Any) -> Samples:
    """The samples of one or two levels a group; ParameterError where there are more."""
    samples = read_samples(lists)
    levels = samples.levels
    if levels.size and int(levels.max()) > 2:
        raise ParameterError(
            f"{function}: label must have two levels in a group, got {int(levels.max())}; choose "
            f"two in a query in parentheses, for example "
            f"tbl := '(FROM visits WHERE payment IN (…))'."
        )
    return samples


def whole_numbers(numbers: Values) -> Any:
    """An Arrow column of BIGINT, NULL where a number is NaN."""
    from midspread.udfs.binding.arrow_columns import arrow_view

    missing = np.isnan(numbers)
    return arrow_view(np.where(missing, 0.0, numbers).astype(np.int64), missing)
