"""The Arrow function behind `rows_to_reverse`: two levels of each group, one record a group."""

from typing import TYPE_CHECKING, Any, Final

import numpy as np

from midspread.udfs.comparison.samples import work_off
from midspread.udfs.declaring import NULL, helper
from midspread.udfs.sensitivity.reversing import (
    AFTER,
    DIFFERENCE,
    FROM_BASELINE,
    FROM_OTHER,
    ROWS,
    STATE,
    WIDTH,
    reversing_loop,
)
from midspread.udfs.sensitivity.two_levels import two_levels, whole_numbers

if TYPE_CHECKING:
    from midspread.udfs.binding.computing import Work

_PLACES: Final = {
    "difference": DIFFERENCE,
    "rows_to_reverse": ROWS,
    "difference_after": AFTER,
    "removed_from_other": FROM_OTHER,
    "other_lowest": FROM_OTHER + 1,
    "other_highest": FROM_OTHER + 2,
    "removed_from_baseline": FROM_BASELINE,
    "baseline_lowest": FROM_BASELINE + 1,
    "baseline_highest": FROM_BASELINE + 2,
    "state": STATE,
}
_COUNTS: Final = ("rows_to_reverse", "removed_from_other", "removed_from_baseline", "state")
_MOST_SAMPLES: Final = 1 << 18
_RESULT: Final = (
    "STRUCT("
    + ", ".join(f"{name} {'BIGINT' if name in _COUNTS else 'DOUBLE'}" for name in _PLACES)
    + ")"
)


@helper("_rows_to_reverse", _RESULT)
def rows_to_reverse_of(work: "Work", lists: Any, share: Any) -> Any:
    """One record a group: the first level is subtracted from the second; one level has no figures.

    Parameters
    ----------
    lists : Arrow array of lists of lists
        For each group the values of one or two levels.
    share : Arrow array
        Of the trimmed mean; the same for all groups.
    """
    import pyarrow as pa

    from midspread.udfs.binding.arrow_columns import numbers_or_null, single_chunk

    samples = two_levels("rows_to_reverse", lists)
    count = len(samples.groups) - 1
    out = np.full((count, WIDTH), NULL)
    cut = float(single_chunk(share)[0].as_py()) if count else 0.0
    loop = reversing_loop() if count else None
    for start, stop in samples.portions(_MOST_SAMPLES):
        chosen = np.flatnonzero(samples.levels[start:stop] == 2)
        if not chosen.size or loop is None:
            continue
        portion = samples.in_order(start, stop, work)
        pairs = portion.groups[chosen]
        found = np.full((chosen.size, WIDTH), NULL)

        def reverse(first: int, last: int) -> None:
            loop(
                portion.values,  # noqa: B023 - called before the next portion
                portion.starts,  # noqa: B023
                pairs[first:last],  # noqa: B023
                cut,
                found[first:last],  # noqa: B023
                work.control.cells,
            )

        work_off(reverse, portion.starts[pairs + 2] - portion.starts[pairs], work)
        out[start + chosen] = found
    arrays = []
    for name, place in _PLACES.items():
        numbers = np.ascontiguousarray(out[:, place])
        arrays.append(whole_numbers(numbers) if name in _COUNTS else numbers_or_null(numbers))
    return pa.StructArray.from_arrays(arrays, names=list(_PLACES))
