"""In which resamples each row of a table is drawn, for queries that write the resamples out."""

import functools
from collections.abc import Callable
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import helper
from midspread.udfs.resampling.multinomial import count_rows, write_resamples

if TYPE_CHECKING:
    from midspread.udfs.binding.computing import Work

_SIGNATURES: Final = {
    count_rows: (
        "void(uint64[::1], int64[::1], int64[::1], uint64[::1], int64, int32[:, ::1], int64[::1])"
    ),
    write_resamples: "void(int32[:, ::1], int64, int32[::1], int32[::1])",
}


@functools.cache
def _loop(template: Callable[..., None]) -> Callable[..., None]:
    return compile_driver(template, {}, template.__name__, _SIGNATURES[template])


@helper("_resamples_of_rows", "INTEGER[]")
def resamples_of_rows(
    work: "Work", keys: Any, sizes: Any, positions: Any, seeds: Any, first: Any, stop: Any
) -> Any:
    """For each row the numbers of the resamples it is drawn in, one for each time it is drawn.

    Parameters
    ----------
    keys : UBIGINT
        Made of the content of the row's group.
    sizes : BIGINT
        How many positions the group has, and how many are drawn.
    positions : BIGINT
        The row's place in its group, from 1; rows of equal position are drawn together.
    seeds : UBIGINT
        The same for all rows.
    first, stop : BIGINT
        Resamples ``first + 1`` to ``stop``; the same for all rows.
    """
    import pyarrow as pa

    from midspread.udfs.binding.arrow_columns import arrow_view, numpy_view, single_chunk
    from midspread.udfs.grouped import Stopped

    group_keys, group_sizes, places, chances = (
        np.ascontiguousarray(numpy_view(single_chunk(column)))
        for column in (keys, sizes, positions, seeds)
    )
    if group_keys.size == 0:
        return pa.array([], pa.list_(pa.int32()))
    start, end = int(single_chunk(first)[0].as_py()), int(single_chunk(stop)[0].as_py())
    counts = np.empty((end - start, group_keys.size), dtype=np.int32)
    cells = work.control.cells
    _loop(count_rows)(group_keys, group_sizes, places - 1, chances, start + 1, counts, cells)
    if work.control.stopped:
        raise Stopped("stopped on request")
    ends = np.zeros(group_keys.size + 1, dtype=np.int32)
    np.cumsum(counts.sum(axis=0), out=ends[1:])
    numbers = np.empty(int(ends[-1]), dtype=np.int32)
    _loop(write_resamples)(counts, start + 1, ends, numbers)
    return pa.ListArray.from_arrays(arrow_view(ends), arrow_view(numbers))
