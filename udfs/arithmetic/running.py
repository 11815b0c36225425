"""Adding one value at a time without losing digits."""

from midspread.udfs.declaring import compiled


@compiled
def add(total: float, lost: float, value: float) -> tuple[float, float]:
    """Add a value to a running sum; the sum is total + lost.

    The exact rounding error of each addition (Knuth 1969) gathers in `lost`.
    """
    new = total + value
    part = new - total
    return new, lost + ((total - (new - part)) + (value - part))
