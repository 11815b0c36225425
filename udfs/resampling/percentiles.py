"""Percentile limits of values drawn by a query."""

from typing import TYPE_CHECKING, Any, Final

import numpy as np

from midspread.udfs.declaring import NULL, helper

if TYPE_CHECKING:
    from midspread.udfs.binding.computing import Work

_AT_ONCE: Final = 1 << 22
"""Draws whose limits are found at once."""

FIELDS: Final = ("lower", "upper", "se", "resamples")


@helper(
    "_percentile_limits",
    "STRUCT(lower DOUBLE, upper DOUBLE, se DOUBLE, resamples BIGINT)",
)
def percentile_limits(
    _work: "Work", draws: Any, numbers: Any, estimates: Any, confidence: Any
) -> Any:
    """Limits and standard error of each group.

    Parameters
    ----------
    draws : list of DOUBLE a group
        The values drawn, in any order; NULL where a resample has none.
    numbers : list of INTEGER a group
        The resample of each, which puts them in order.
    estimates, confidence : DOUBLE
        One a group.
    """
    from midspread.udfs.binding.arrow_columns import is_missing, numpy_view, single_chunk
    from midspread.udfs.binding.batches import records
    from midspread.udfs.resampling.intervals import intervals

    draws, numbers = single_chunk(draws), single_chunk(numbers)
    offsets = numpy_view(draws.offsets).astype(np.int64)
    order_offsets = numpy_view(numbers.offsets).astype(np.int64)
    values = numpy_view(draws.values).copy()
    values[is_missing(draws.values)] = NULL
    places = numpy_view(numbers.values)
    centres = numpy_view(single_chunk(estimates)).copy()
    centres[is_missing(single_chunk(estimates))] = NULL
    level = numpy_view(single_chunk(confidence))
    size = len(draws)
    found = {name: np.full(size, NULL) for name in FIELDS}
    lengths = np.diff(offsets)
    for length in np.unique(lengths[lengths > 0]).tolist():
        members = np.flatnonzero(lengths == length)
        step = max(_AT_ONCE // length, 1)
        for start in range(0, members.size, step):
            own = members[start : start + step]
            along = np.arange(length)
            matrix = values[offsets[own, np.newaxis] + along]
            order = np.argsort(places[order_offsets[own, np.newaxis] + along], axis=1)
            matrix = np.take_along_axis(matrix, order, axis=1)
            limits = intervals("percentile", centres[own], matrix, level[own])
            for name in FIELDS:
                found[name][own] = getattr(limits, name)
    return records(FIELDS, {"resamples": "BIGINT"}, found, lengths == 0)
