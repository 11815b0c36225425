"""Columns of a result as texts for machines: every value in full, in a form that reads back.

Floats take the fewest digits that give the same bits back. Times are ISO 8601. What JSON has no
word for, it gets as a string: "NaN", "Infinity" and "-Infinity", as in the JSON mapping of Protocol
Buffers, so that none of them turns into a missing value.
"""

import json
from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray
from pyarrow import types

Texts = list[str | None]

_TRAILING_ZEROS = r"(\.\d*?)0+($|[Z+-])"
_EMPTY_FRACTION = r"\.($|[Z+-])"
_ZONE = r"([+-]\d\d)(\d\d)$"
_NOT_FINITE = {"nan": "NaN", "inf": "Infinity", "-inf": "-Infinity"}
# The engine keeps infinite dates and times at the ends of the range.
_ENDS = {2**63 - 1, 2**31 - 1}
_FEW = 5_000
_UNITS_PER_SECOND = 1_000_000_000


def plain_texts(column: pa.Array, *, time_mark: str = " ") -> Texts:
    """Texts of a column, as in CSV; None for NULL.

    Parameters
    ----------
    column : pyarrow.Array
        One piece of a column.
    time_mark : str
        What stands between a date and a time.

    Returns
    -------
    list of str or None
        Nested values are spelled as JSON.
    """
    kind = column.type
    if types.is_dictionary(kind):
        return plain_texts(column.dictionary_decode(), time_mark=time_mark)
    if isinstance(kind, pa.BaseExtensionType):
        return _extension_texts(column)
    if is_nested(kind):
        missing = column.is_null().to_pylist()
        return [
            None if null else text for null, text in zip(missing, json_texts(column), strict=True)
        ]
    if types.is_integer(kind) or types.is_floating(kind):
        return _number_texts(column)
    if types.is_decimal(kind):
        return [None if v is None else f"{v:f}" for v in column.to_pylist()]
    if types.is_boolean(kind):
        return [None if v is None else "true" if v else "false" for v in column.to_pylist()]
    if types.is_temporal(kind):
        return _time_texts(column, time_mark)
    if _is_binary(kind):
        return [None if v is None else _bytes_text(v) for v in column.to_pylist()]
    if len(column) > _FEW and (types.is_string(kind) or types.is_large_string(kind)):
        texts: Texts = column.to_numpy(zero_copy_only=False).tolist()  # quick, but imports pandas
        return texts
    return [None if v is None else str(v) for v in column.to_pylist()]


def json_texts(column: pa.Array) -> list[str]:
    """Fragments of JSON, one for each value of a column.

    Parameters
    ----------
    column : pyarrow.Array
        One piece of a column.

    Returns
    -------
    list of str
        ``null`` for NULL.
    """
    kind = column.type
    if types.is_dictionary(kind):
        return json_texts(column.dictionary_decode())
    if types.is_union(kind):
        return [_json_of_union(value) for value in column]
    if types.is_map(kind):
        return _json_of_lists(column, kind)
    if is_nested(kind):
        if types.is_struct(kind):
            return _json_of_structs(column)
        return _json_of_lists(column, kind)
    texts = plain_texts(column, time_mark="T")
    if types.is_boolean(kind) or types.is_integer(kind) or types.is_decimal(kind):
        return ["null" if text is None else text for text in texts]
    if types.is_floating(kind):
        return [
            "null" if t is None else f'"{_NOT_FINITE[t]}"' if t in _NOT_FINITE else t for t in texts
        ]
    return [json.dumps(text, ensure_ascii=False) for text in texts]


def is_nested(kind: pa.DataType) -> bool:
    """Whether values of a type hold other values."""
    return bool(types.is_nested(kind)) and not isinstance(kind, pa.BaseExtensionType)


def unique_names(names: Sequence[str]) -> list[str]:
    """Give later columns of one name a number, for formats where a name may occur once.

    Examples
    --------
    >>> unique_names(["route", "n", "n", "n_2"])
    ['route', 'n', 'n_3', 'n_2']
    """
    taken = set(names)
    unique: list[str] = []
    for name in names:
        number = 2
        chosen = name
        while chosen in unique or (chosen != name and chosen in taken):
            chosen = f"{name}_{number}"
            number += 1
        unique.append(chosen)
    return unique


def json_object(keys: Iterable[str], values: Iterable[str]) -> str:
    """Put fragments of JSON together to an object."""
    return "{" + ", ".join(f"{key}: {value}" for key, value in zip(keys, values, strict=True)) + "}"


def _number_texts(column: pa.Array) -> Texts:
    """Texts of integers or floats, each with the fewest digits that give it back."""
    values, valid = _primitive(column)
    texts: Texts
    if values.dtype == np.float64 or values.dtype.kind in "iu":
        texts = list(map(repr, values.tolist()))
    else:
        texts = values.astype(str).tolist()
    if valid is not None:
        texts = [text if is_valid else None for text, is_valid in zip(texts, valid, strict=True)]
    return texts


def _primitive(column: pa.Array) -> tuple[NDArray[Any], list[bool] | None]:
    """Values of a column of numbers, and which of them are not NULL (None: all)."""
    bitmap, data = column.buffers()
    start, stop = column.offset, column.offset + len(column)
    dtype = column.type.to_pandas_dtype()
    values = np.frombuffer(data, dtype)[start:stop] if data is not None else np.empty(0, dtype)
    if column.null_count == 0 or bitmap is None:
        return values, None
    bits = np.unpackbits(np.frombuffer(bitmap, np.uint8), bitorder="little")
    return values, bits[start:stop].astype(bool).tolist()


def _is_binary(kind: pa.DataType) -> bool:
    return bool(
        types.is_binary(kind)
        or types.is_large_binary(kind)
        or types.is_binary_view(kind)
        or types.is_fixed_size_binary(kind)
    )


def _bytes_text(value: bytes) -> str:
    """Spell bytes as the engine reads them back: printable ones as they are, others in hex."""
    return "".join(chr(b) if 32 <= b < 127 and b not in b"\\'\"" else f"\\x{b:02X}" for b in value)


def _extension_texts(column: pa.Array) -> Texts:
    if column.type.extension_name == "arrow.uuid":
        return [None if value is None else str(value) for value in column.to_pylist()]
    return plain_texts(column.storage)


def _time_texts(column: pa.Array, time_mark: str) -> Texts:
    kind = column.type
    if types.is_interval(kind):
        return [None if v is None else _interval_text(*v) for v in column.to_pylist()]
    if types.is_duration(kind):
        per_second = {"s": 1, "ms": 10**3, "us": 10**6, "ns": 10**9}[kind.unit]
        counts = column.cast(pa.int64()).to_pylist()
        return [
            None if n is None else _interval_text(0, 0, n * (_UNITS_PER_SECOND // per_second))
            for n in counts
        ]
    if len(column) <= _FEW and not types.is_time(kind):
        texts = _few_time_texts(column, time_mark)
        if texts is not None:
            return texts
    return _many_time_texts(column, time_mark)


def _few_time_texts(column: pa.Array, time_mark: str) -> Texts | None:
    """Texts of dates and of times to the microsecond without a zone; None for anything else.

    It spares the import of Arrow's compute functions, which takes longer than most answers.
    """
    kind = column.type
    if types.is_timestamp(kind) and (kind.tz is not None or kind.unit == "ns"):
        return None
    try:
        values = column.to_pylist()
    except (OverflowError, ValueError):  # beyond the years 1 to 9999
        return None
    if types.is_date(kind):
        return [None if v is None else v.isoformat() for v in values]
    texts = [None if v is None else v.isoformat(time_mark) for v in values]
    return [t.rstrip("0") if t is not None and "." in t else t for t in texts]


def _many_time_texts(column: pa.Array, time_mark: str) -> Texts:
    import pyarrow.compute as pc

    kind = column.type
    is_short = types.is_date32(kind) or types.is_time32(kind)
    numbers = column.cast(pa.int32() if is_short else pa.int64())
    texts = pc.cast(column, pa.large_string())
    texts = pc.replace_substring_regex(texts, _TRAILING_ZEROS, r"\1\2")
    texts = pc.replace_substring_regex(texts, _EMPTY_FRACTION, r"\1")
    if types.is_timestamp(kind):
        texts = pc.replace_substring_regex(texts, r"^(-?\d+-\d\d-\d\d) ", rf"\1{time_mark}")
        if kind.tz is not None:
            texts = pc.replace_substring_regex(texts, _ZONE, r"\1:\2")
            texts = pc.replace_substring_regex(texts, "Z$", "+00:00")
    spelled: Texts = texts.to_pylist()
    for place, number in enumerate(numbers.to_pylist()):
        if number is not None and abs(number) in _ENDS and not types.is_time(kind):
            spelled[place] = "infinity" if number > 0 else "-infinity"
    return spelled


def _interval_text(months: int, days: int, nanoseconds: int) -> str:
    """Spell an interval as the engine reads it back.

    Examples
    --------
    >>> _interval_text(14, 2, -1_500_000_000)
    '14 months 2 days -00:00:01.5'
    """
    parts = [f"{months} months"] * (months != 0) + [f"{days} days"] * (days != 0)
    if nanoseconds or not parts:
        seconds, rest = divmod(abs(nanoseconds), _UNITS_PER_SECOND)
        fraction = f".{rest:09}".rstrip("0") if rest else ""
        sign = "-" if nanoseconds < 0 else ""
        parts.append(
            f"{sign}{seconds // 3600:02}:{seconds // 60 % 60:02}:{seconds % 60:02}{fraction}"
        )
    return " ".join(parts)


def _json_of_structs(column: pa.Array) -> list[str]:
    fields = [column.type.field(place) for place in range(column.type.num_fields)]
    keys = [json.dumps(name, ensure_ascii=False) for name in unique_names([f.name for f in fields])]
    columns = [json_texts(child) for child in column.flatten()]
    rows = zip(*columns, strict=True) if columns else [()] * len(column)
    missing = column.is_null().to_pylist()
    return [
        "null"
        if null
        else "{" + ", ".join(f"{k}: {v}" for k, v in zip(keys, row, strict=True)) + "}"
        for null, row in zip(missing, rows, strict=True)
    ]


def _json_of_lists(column: pa.Array, kind: pa.DataType) -> list[str]:
    import pyarrow.compute as pc

    is_map = types.is_map(kind)
    if is_map:
        entry = pa.struct([pa.field("key", kind.key_type), pa.field("value", kind.item_type)])
        column = column.cast(pa.list_(entry))
    lengths = pc.list_value_length(column).to_pylist()
    values = column.flatten()
    if is_map:
        keys = [json.dumps(text, ensure_ascii=False) for text in plain_texts(values.field(0))]
        pieces = [f"{k}: {v}" for k, v in zip(keys, json_texts(values.field(1)), strict=True)]
    else:
        pieces = json_texts(values)
    opening, closing = "{}" if is_map else "[]"
    result: list[str] = []
    start = 0
    for length in lengths:
        if length is None:
            result.append("null")
            continue
        result.append(opening + ", ".join(pieces[start : start + length]) + closing)
        start += length
    return result


def _json_of_union(scalar: pa.Scalar) -> str:
    value = scalar.value
    if value is None or not value.is_valid:
        return "null"
    return json_texts(pa.array([value.as_py()], value.type))[0]
