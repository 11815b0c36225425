"""`bootstrap_blocks`: the circular block bootstrap, for series."""

import functools
from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import NO_RECORD, ParameterError, batch_aggregate
from midspread.udfs.drivers import Indices
from midspread.udfs.grouped import row_numbers
from midspread.udfs.parameters import OPTIONAL, Parameter
from midspread.udfs.resampling.block_length import LENGTH_SIGNATURE, circular_block_lengths
from midspread.udfs.resampling.counted_batches import Rows, bootstrapped
from midspread.udfs.resampling.parameters import CONFIDENCE, METHOD, RESAMPLES
from midspread.udfs.resampling.randomness import SEED
from midspread.udfs.resampling.statistics import STATISTIC

if TYPE_CHECKING:
    from midspread.udfs.binding.batches import Batch

BLOCK: Final = Parameter(
    "block",
    "values in a block, NULL to take the length from the series",
    OPTIONAL,
    low=1,
    high=1e9,
    whole=True,
)
BLOCK_METHOD: Final = replace(
    METHOD, default="'percentile'", choices=("percentile", "basic", "normal")
)


@batch_aggregate(
    family="resampling",
    columns=("x", "position"),
    keys=("position",),
    parameters=(
        BLOCK,
        replace(STATISTIC, default="'mean'"),
        CONFIDENCE,
        BLOCK_METHOD,
        RESAMPLES,
        SEED,
    ),
    fields=("estimate", "lower", "upper", "se", "bias", "n", "block", "resamples"),
    field_types={"n": "BIGINT", "block": "BIGINT", "resamples": "BIGINT"},
    formula=(
        "the statistic of ⌈n/b⌉ blocks of b successive values, the last cut so that n remain; "
        "starts uniform on the n positions, the first value following the last; b = "
        "(2 Ĝ² / D̂)^(1/3) n^(1/3) to the nearest whole number, at most ⌈min(3 √n, n/3)⌉"
    ),
    source=(
        "Politis & Romano 1992, in Exploring the Limits of Bootstrap, Wiley, 263–270; block "
        "length: Politis & White 2004, Econometric Reviews 23, 53–70, corrected by Patton, "
        "Politis & White 2009, Econometric Reviews 28, 372–375"
    ),
    breakdown="that of the statistic, counted in values of wild blocks",
    cost=(
        "O(n log n) once, the length O(n √n) at most; a resample O(n / b) for the mean, O(n) for "
        "others; O(n + resamples) memory"
    ),
    smallest_n=2,
    example="bootstrap_blocks(dwell_s, visit, statistic := 'trimmed_mean(0.2)')",
)
def bootstrap_blocks(batch: "Batch") -> dict[str, Any]:
    """Interval for a statistic of a series, whose neighbouring values resemble one another.

    Blocks of successive values are drawn, so that what follows what within a block stays as it
    is. The series is closed to a circle, which gives every value the same chance.

    Parameters
    ----------
    x : number
        The measurements.
    position : number, text, date or timestamp
        What orders them; only the order counts, gaps do not. No two rows of a group may share one.
    block : number
        Values in a block; NULL lets each group's own series decide.
    statistic : text
        A one-column function with its parameters, or mean, median, sd.
    confidence : number
        How often the interval is to cover, above 0 and below 1.
    method : text
        percentile, basic or normal.
    resamples : number
        How many series are drawn.
    seed : number
        Chooses the random numbers.

    Returns
    -------
    STRUCT
        estimate, lower, upper, se and bias in the unit of the statistic; n values, the block
        length and the number of resamples that have a value. NULL for fewer than two values and
        for a series shorter than two blocks.

    Notes
    -----
    For a series without trend or season and whose memory is short beside its length; each joint
    between blocks breaks the memory, so that with few blocks the interval is too short. Take a
    trend out first.

    The length found is the best for the mean; for other statistics it is a guide. It is taken
    from the autocovariances up to twice the lag beyond which five in a row are below
    2 √(log₁₀ n / n), as in the package arch. A series with infinite values has no
    autocovariances and gets the length ∛n, a constant one 1. There is no bca: its acceleration
    assumes independent values.

    References
    ----------
    Politis, D. N. & Romano, J. P. (1992). In Exploring the Limits of Bootstrap, Wiley, 263–270.
    Politis, D. N. & White, H. (2004). Econometric Reviews 23, 53–70.
    Patton, A., Politis, D. N. & White, H. (2009). Econometric Reviews 28, 372–375.
    """
    values, keys, asked = batch.numbers("x"), batch.keys("position"), batch.number("block")

    def lay_out(groups: Indices) -> Rows:
        lengths = batch.lengths[groups]
        starts = row_numbers(lengths)
        owner = np.repeat(np.arange(groups.size), lengths)
        at = np.arange(starts[-1]) + np.repeat(batch.offsets[groups] - starts[:-1], lengths)
        code = keys.codes[at]
        order = np.lexsort((code, owner)) if groups.size > 1 else np.argsort(code)
        code = code[order]
        repeated = (code[1:] == code[:-1]) & (owner[1:] == owner[:-1])
        if repeated.any():
            shown = keys.values[int(code[1:][repeated][0])].as_py()
            raise ParameterError(
                f"bootstrap_blocks: position must not repeat within a group, got {shown} twice; "
                f"average such rows first, or draw whole positions with "
                f"bootstrap_units(x, position)."
            )
        series = values[at][order]
        place = (np.arange(starts[-1]) - starts[:-1][owner]).astype(np.int32)
        order = (
            np.lexsort((series, owner)) if groups.size > 1 else np.argsort(series, kind="stable")
        )
        x, place = series[order], place[order]
        found = asked[groups]
        unknown = np.isnan(found) & (lengths > 1)
        if unknown.any():
            estimated = np.ones(groups.size)
            some = Rows(x, place, starts, lengths, np.zeros_like(lengths)).only(unknown)
            own = np.empty(some.units.size)
            _lengths()(
                some.values, some.codes, some.starts, some.units, own, batch.work.control.cells
            )
            estimated[unknown] = np.maximum(np.floor(own + 0.5), 1.0)
            # With fewer than four values the longest length leaves no two blocks.
            estimated = np.minimum(estimated, np.maximum(lengths // 2, 1))
            found = np.where(unknown, estimated, found)
        blocks = np.where(np.isnan(found), 1.0, found).astype(np.int64)
        return Rows(x, place, starts, np.where(lengths < 2 * blocks, 0, lengths), blocks)

    found = bootstrapped(batch, lay_out)
    found["n"], found["block"] = batch.lengths, found["blocks"]
    found[NO_RECORD] = found["units"] < 2
    return found


@functools.cache
def _lengths() -> Callable[..., None]:
    return compile_driver(circular_block_lengths, {}, "circular_block_lengths", LENGTH_SIGNATURE)
