"""Which way of drawing, and of leaving out, serves which statistic."""

import functools
from collections.abc import Callable
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.declaring import declared
from midspread.udfs.drivers import Indices
from midspread.udfs.grouped import row_numbers
from midspread.udfs.resampling import middles
from midspread.udfs.resampling.samples import Samples
from midspread.udfs.resampling.statistics import Statistic, compiled_for

MIDDLES: Final = {
    "trimmed_mean": middles.TRIMMED_MEAN,
    "winsorized_mean": middles.WINSORIZED_MEAN,
    "winsorized_sd": middles.DEVIATION,
    "trimmed_mean_se": middles.ERROR,
}
"""Drawn from the order statistics that bound what is kept, or by counts."""
FEW_RANKS: Final = ("quantile_hf", "trimean", "iqr_scale", "bowley_skew", "octile_skew")
"""Read a few order statistics, which are drawn alone; so do medians."""

_HUGE: Final = 2.0**500
_TINY: Final = 2.0**-450


def has_error(statistic: Statistic) -> bool:
    """Whether the statistic has a standard error of its own."""
    return statistic.function.name == "trimmed_mean" and statistic.parameters[0] != 0.5


def is_plain(samples: Samples) -> npt.NDArray[np.bool_]:
    """Which groups' values are finite, and neither sums nor squares leave a double's range."""
    low = samples.values[samples.starts]
    high = samples.values[samples.starts + samples.lengths - 1]
    with np.errstate(invalid="ignore", over="ignore"):
        spread = high - low
        return np.isfinite(spread) & (spread < _HUGE) & ((spread > _TINY) | (spread == 0.0))


def reads_few_ranks(statistic: Statistic) -> bool:
    """Whether the statistic depends on a handful of order statistics."""
    name = statistic.function.name
    return name in FEW_RANKS or (name in MIDDLES and statistic.parameters[0] == 0.5)


class _Recorder:
    """Stands for n sorted values and notes which of them a kernel reads."""

    def __init__(self, n: int) -> None:
        self.size = n
        self.read: set[int] = set()

    def __getitem__(self, place: int) -> float:
        self.read.add(int(place) % self.size)
        return float(place)


def ranks_read(statistic: Statistic, lengths: Indices) -> tuple[Indices, Indices]:
    """The ranks, from 1, that the statistic reads of each group, and where each group's start."""
    sizes, place = np.unique(lengths, return_inverse=True)
    known = [_ranks_of(statistic, n) for n in sizes.tolist()]
    read = [known[i] for i in place.tolist()]
    return np.concatenate(read), row_numbers(np.array([ranks.size for ranks in read]))


def _ranks_of(statistic: Statistic, n: int) -> Indices:
    if n < 1:
        return np.empty(0, dtype=np.int64)
    recorder = _Recorder(n)
    assert statistic.function.kernel is not None
    statistic.function.kernel(recorder, *statistic.parameters)
    return np.array(sorted(recorder.read), dtype=np.int64) + 1


@functools.cache
def loop_for(name: str, template: Callable[..., Any], signature: str) -> Callable[..., Any]:
    """A loop compiled around the kernel of a function."""
    return compiled_for(template, declared()[name], signature)
