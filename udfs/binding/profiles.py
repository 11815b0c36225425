"""The Arrow functions and macros behind `value_profile`.

Unlike the aggregates they must see each column in its own type, as a double would merge long
numbers; so the macros choose by type and hand the column over uncast.
"""

from typing import Any, Final

import numpy as np
import pyarrow as pa

from midspread.udfs.binding.arrow_columns import numpy_view, single_chunk
from midspread.udfs.binding.exact_numbers import exact_numbers
from midspread.udfs.declaring import NULL, Values
from midspread.udfs.drivers import ranked_driver, summary_driver
from midspread.udfs.grouped import Control, Groups, Task, row_numbers, run
from midspread.udfs.tables.value_counts import COUNTS, MOST_SUSPECTS, count_values, longest_run

_FIELD_TYPES: Final = tuple(
    (name, "VARCHAR" if name == "most_frequent" else "BIGINT") for name in COUNTS
)
COUNTS_TYPE: Final = (
    f"STRUCT({', '.join(f'{name} {kind}' for name, kind in _FIELD_TYPES)}, "
    "suspected_sentinels VARCHAR[])"
)

_COUNTED: Final = (
    "{{n_rows: count(*), n: count(x), "
    "counts: _value_counts(list(x) FILTER (x IS NOT NULL), {unsigned})}}"
)
_NOT_COUNTED: Final = f"{{n_rows: count(*), n: count(x), counts: NULL::{COUNTS_TYPE}}}"

PROFILE_MACROS: Final = (
    "CREATE OR REPLACE TEMP MACRO _column_profile"
    f"(kind DOUBLE, x) AS {_COUNTED.format(unsigned='false')}, "
    f"(kind UHUGEINT, x) AS {_COUNTED.format(unsigned='true')}, "
    f"(kind BIGNUM, x) AS {_NOT_COUNTED}, (kind, x) AS {_NOT_COUNTED}",
    "CREATE OR REPLACE TEMP MACRO _text_unless_number(kind DOUBLE, x) AS NULL::VARCHAR, "
    "(kind UHUGEINT, x) AS NULL::VARCHAR, "
    "(kind BIGNUM, x) AS CAST(x AS VARCHAR), (kind, x) AS CAST(x AS VARCHAR)",
    "CREATE OR REPLACE TEMP MACRO _run_of_column(starts) AS _longest_run("
    "list_append(list(starts) FILTER (starts IS NOT NULL), 2.0 * count(*) + 2.0))",
)
"""The first two are called with a column twice: only the first is cast to the parameter's type.

They must stay macros: a filter over COLUMNS(…) written out would join all the columns' conditions.
"""


class ProfileFunctions:
    """Counts over batches of groups, each group a list of one column's values."""

    def __init__(self, control: Control, threads: int) -> None:
        self._control = control
        self._threads = threads

    def value_counts(self, lists: Any, unsigned: Any) -> pa.Array:
        """What `count_values` finds in each list of numbers, its values as text."""
        array = single_chunk(lists)
        is_unsigned = bool(len(array)) and bool(single_chunk(unsigned)[0].as_py())
        numbers = exact_numbers(array.values, is_unsigned)
        groups = Groups(numbers.values, numpy_view(array.offsets).astype(np.int64))
        found = self._run(
            groups,
            ranked_driver("value_counts", count_values),
            numbers.points[np.newaxis, :],
            len(COUNTS) + 2 * MOST_SUSPECTS,
        )
        empty = groups.lengths == 0
        arrays = []
        for place, (name, _) in enumerate(_FIELD_TYPES):
            column = found[:, place]
            if name == "most_frequent":
                texts = [
                    None if missing else numbers.text(value)
                    for value, missing in zip(column.tolist(), empty, strict=True)
                ]
                arrays.append(pa.array(texts, pa.string()))
            else:
                arrays.append(pa.array(np.where(empty, 0.0, column).astype(np.int64)))
        suspects = [_listed(row, numbers.text) for row in found[:, len(COUNTS) :]]
        arrays.append(pa.array(suspects, pa.list_(pa.string())))
        return pa.StructArray.from_arrays(arrays, names=[*COUNTS, "suspected_sentinels"])

    def longest_run(self, starts: Any) -> pa.Array:
        """The longest run of each sequence; see the kernel for how runs are written."""
        array = single_chunk(starts)
        values = numpy_view(array.values)
        groups = Groups(values, numpy_view(array.offsets).astype(np.int64))
        loop = summary_driver("longest_run", longest_run)
        found = self._run(groups, loop, np.empty((0, 1)), 1)
        return pa.array(np.where(groups.lengths == 0, 0.0, found[:, 0]).astype(np.int64))

    def _run(self, groups: Groups, loop: Any, parameters: Values, width: int) -> Values:
        count = len(groups.offsets) - 1
        out = np.full((count, width), NULL)
        task = Task(loop, parameters, 1, 0)
        rows = row_numbers(np.ones(count, np.int64))
        run(groups, [task], out, rows, self._control, self._threads)
        return out


def _listed(suspects: Values, text: Any) -> list[str]:
    """Suspects in words, the most frequent first."""
    pairs = [pair for pair in suspects.reshape(-1, 2).tolist() if pair[1] == pair[1]]
    pairs.sort(key=lambda pair: (-pair[1], pair[0]))
    return [f"{text(value)} ({count:.0f} times)" for value, count in pairs]
