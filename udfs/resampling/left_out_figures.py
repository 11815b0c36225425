"""The jackknife's figures of many groups, each by the loop that serves the statistic."""

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from midspread.udfs.declaring import NULL, Function, null_mask
from midspread.udfs.drivers import DONE, Indices
from midspread.udfs.resampling import leave_one_out
from midspread.udfs.resampling.middles_left_out import middles_left_out
from midspread.udfs.resampling.samples import Samples
from midspread.udfs.resampling.statistics import Statistic
from midspread.udfs.resampling.ways_of_drawing import (
    MIDDLES,
    is_plain,
    loop_for,
    ranks_read,
    reads_few_ranks,
)

if TYPE_CHECKING:
    from midspread.udfs.binding.computing import Work


def left_out_work(statistic: Statistic) -> int:
    """What leaving out values costs beside resampling, counted in resamples."""
    if reads_few_ranks(statistic) or statistic.function.name in MIDDLES:
        return 0
    return leave_one_out.NODES


def _marked(size: int, chosen: Indices) -> npt.NDArray[np.bool_]:
    marks = np.zeros(size, dtype=np.bool_)
    marks[chosen] = True
    return marks


def left_out_figures(
    statistic: Statistic, samples: Samples, exact: int, steps: int, further: int, work: "Work"
) -> npt.NDArray[np.float64]:
    """The jackknife's figures of each group, one row each: see `leave_one_out`.

    Parameters
    ----------
    exact : int
        Up to so many values each is left out in turn where there is no closed form.
    steps, further : int
        All of a group's work, and how much of it this is, for the progress.
    """
    function = statistic.function
    out = np.full((samples.size, 3), NULL)
    rows = np.flatnonzero(
        samples.clean & (samples.lengths > function.smallest_n) & ~null_mask(samples.estimates)
    )
    out[~samples.clean] = np.nan
    parameters = np.array(statistic.parameters, dtype=np.float64)

    def run(loop: Callable[..., Any], chosen: Indices, *more: Any) -> None:
        if chosen.size:
            loop(
                *((samples.others,) if samples.others.size else ()),
                samples.values,
                samples.starts,
                samples.lengths,
                chosen,
                parameters,
                samples.estimates,
                exact,
                steps,
                further,
                out,
                work.control.cells,
                *more,
            )

    if reads_few_ranks(statistic):
        loop = loop_for(function.name, leave_one_out.left_out_ranks, leave_one_out.RANKS_SIGNATURE)
        run(loop, rows, *ranks_read(statistic, samples.lengths - 1))
        return out
    if function.name in MIDDLES:
        plain = is_plain(samples)[rows]
        if plain.any():
            chosen = rows[plain]
            lengths = samples.lengths[chosen]
            values = samples.values
            if chosen.size < samples.size:
                values = values[np.repeat(_marked(samples.size, chosen), samples.lengths)]
            out[chosen] = middles_left_out(
                values, lengths, statistic.parameters[0], MIDDLES[function.name]
            )
            work.control.cells[DONE] += int((lengths * further // steps).sum())
        rows = rows[~plain]
    if rows.size:
        run(_left_out_loop(function), rows)
    return out


def _left_out_loop(function: Function) -> Callable[..., Any]:
    if len(function.columns) == 2:
        return loop_for(function.name, leave_one_out.left_out_pairs, leave_one_out.PAIRS_SIGNATURE)
    return loop_for(function.name, leave_one_out.left_out, leave_one_out.SIGNATURE)
