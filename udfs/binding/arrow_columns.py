"""Between DuckDB's Arrow columns and numpy arrays, without a copy where there is no need."""

from typing import Any

import numpy as np
import numpy.typing as npt
import pyarrow as pa

from midspread.udfs.declaring import Values, null_mask


def single_chunk(array: Any) -> Any:
    """The one Arrow array behind what DuckDB hands over."""
    if isinstance(array, pa.ChunkedArray):
        return array.chunk(0) if array.num_chunks == 1 else array.combine_chunks()
    return array


def numpy_view(array: pa.Array) -> np.ndarray[Any, Any]:
    """Arrow numbers as a numpy array over the same memory; under a NULL stands anything.

    Arrow's own to_numpy imports pandas, which takes longer than a small query.
    """
    kind = np.dtype(array.type.to_pandas_dtype())
    buffer = array.buffers()[1]
    if buffer is None:
        return np.empty(0, kind)
    return np.frombuffer(buffer, kind)[array.offset : array.offset + len(array)]


def is_missing(array: pa.Array) -> npt.NDArray[np.bool_]:
    """Where an Arrow array holds NULL."""
    if not array.null_count:
        return np.zeros(len(array), dtype=np.bool_)
    bits = np.unpackbits(np.frombuffer(array.buffers()[0], np.uint8), bitorder="little")
    return bits[array.offset : array.offset + len(array)] == 0


def arrow_view(
    numbers: np.ndarray[Any, Any], missing: npt.NDArray[np.bool_] | None = None
) -> pa.Array:
    """A contiguous numpy array as Arrow numbers over the same memory, NULL where missing.

    pa.array would import pandas.
    """
    validity = None
    if missing is not None and missing.any():
        validity = pa.py_buffer(np.packbits(~missing, bitorder="little"))
    kind = pa.from_numpy_dtype(numbers.dtype)
    return pa.Array.from_buffers(kind, numbers.size, [validity, pa.py_buffer(numbers)])


def arrow_mask(flags: npt.NDArray[np.bool_]) -> pa.Array:
    """Flags as an Arrow array of booleans."""
    bits = pa.py_buffer(np.packbits(flags, bitorder="little"))
    return pa.Array.from_buffers(pa.bool_(), flags.size, [None, bits])


def numbers_or_null(numbers: Values) -> pa.Array:
    """An Arrow column in which the kernels' NULL marker is NULL."""
    return arrow_view(np.ascontiguousarray(numbers), null_mask(numbers))
