"""Numbers as a reader wants them in a table: sensible digits, points aligned, thousands apart."""

import math
from collections.abc import Iterable, Sequence

SIGNIFICANT = 6
LEAST_SIGNIFICANT = 3  # even the smallest number of a column shows as many digits
MOST_DIGITS = 10  # before and after the point together; beyond, numbers are written one by one
GROUPED_FROM = 10_000
# A number so much smaller than the largest is a rounding error, such as 1e-17 beside 0.25.
NOISE = 1e-14


def decimal_texts(numbers: Sequence[float | None]) -> list[str]:
    """Floating point numbers of one column, all with the same number of decimals.

    Examples
    --------
    >>> decimal_texts([17.04321987, 204.1129876, None])
    ['17.043', '204.113', '']
    >>> decimal_texts([28731.0, 5.0])
    ['28,731', '5']
    """
    finite = [v for v in numbers if v is not None and math.isfinite(v)]
    decimals = _decimals(finite)
    if decimals is None:
        return [_alone(v) for v in numbers]
    fixed = [f"{v:.{decimals}f}" for v in finite]
    spare = min((_trailing_zeros(text) for text in fixed), default=0)
    decimals -= spare
    comma = "," if any(abs(v) >= GROUPED_FROM for v in finite) else ""
    return [_fixed(v, decimals, comma) for v in numbers]


def whole_texts(numbers: Sequence[int | None]) -> list[str]:
    """Whole numbers; thousands are set apart once a column holds more than four digits."""
    comma = "," if any(abs(v) >= GROUPED_FROM for v in numbers if v is not None) else ""
    return ["" if v is None else f"{v:{comma}d}" for v in numbers]


def single_text(number: float) -> str:
    """One number on its own, as inside a nested value."""
    return decimal_texts([number])[0]


def count_text(count: int, noun: str) -> str:
    """A count with its noun: ``1 row``, ``12 rows``, ``28,731 rows``, ``3 queries``."""
    plural = noun[:-1] + "ies" if noun.endswith("y") else noun + "s"
    return f"{whole_texts([count])[0]} {noun if count == 1 else plural}"


def size_text(size: int) -> str:
    """A size in bytes: ``812 B``, ``14.2 kB``, ``1.35 GB``."""
    if size < 1000:
        return f"{size} B"
    power = min(int(math.log10(size) // 3), 4)
    return f"{size / 1000**power:.3g} {'kMGT'[power - 1]}B"


def _decimals(finite: Iterable[float]) -> int | None:
    """How many decimals suit all numbers, or None where no one number of decimals does."""
    sizes = [abs(v) for v in finite if v != 0]
    if not sizes:
        return 0
    largest = max(sizes)
    smallest = min(size for size in sizes if size >= largest * NOISE)
    if largest >= 1e15 or largest < 1e-4:
        return None
    decimals = max(0, SIGNIFICANT - _lead(largest))
    if _is_whole(sizes):
        return 0
    wanted = LEAST_SIGNIFICANT - _lead(smallest)
    if wanted > decimals:
        if wanted + max(_lead(largest), 1) > MOST_DIGITS:
            return None
        return wanted
    return decimals


def _lead(size: float) -> int:
    """Digits before the point; 0 for 0.5, -1 for 0.05."""
    return math.floor(math.log10(size)) + 1


def _is_whole(sizes: Iterable[float]) -> bool:
    return all(size == math.floor(size) for size in sizes)


def _trailing_zeros(text: str) -> int:
    if "." not in text:
        return 0
    return len(text) - len(text.rstrip("0"))


def _fixed(number: float | None, decimals: int, comma: str) -> str:
    if number is None or not math.isfinite(number):
        return _alone(number)
    text = f"{number:{comma}.{decimals}f}"
    if number != 0 and not text.strip("-0.,"):
        return f"{number:.2g}"  # never a bare 0 for what is not 0
    return text


def _alone(number: float | None) -> str:
    if number is None:
        return ""
    if math.isnan(number):
        return "NaN"
    if math.isinf(number):
        return "Inf" if number > 0 else "-Inf"
    return f"{number:.{SIGNIFICANT}g}"
