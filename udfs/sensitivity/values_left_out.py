"""A statistic of each group without each of its values, in runs of values that move it alike."""

import functools
import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.comparison.samples import work_off
from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import (
    NULL,
    ParameterError,
    Values,
    declared,
    helper,
    null_mask,
)
from midspread.udfs.drivers import DONE, STOP, Indices
from midspread.udfs.grouped import Stopped
from midspread.udfs.location.trimming import cut_of
from midspread.udfs.resampling.evaluating import evaluate
from midspread.udfs.resampling.statistics import Statistic, compiled_for, read_statistic, statistic
from midspread.udfs.resampling.ways_of_drawing import FEW_RANKS, ranks_read, reads_few_ranks
from midspread.udfs.sensitivity.kept_windows import TOTAL_SIGNATURE, scale_down, total_of
from midspread.udfs.sensitivity.remainders import (
    MIDDLES,
    Remainder,
    changes_from,
    statistic_by_rank,
)

if TYPE_CHECKING:
    from midspread.udfs.binding.computing import Work

FIGURES: Final = ("lowest", "highest", "estimate", "estimate_without", "change")
COUNTS: Final = ("count", "rank")
MOST_STEPS: Final = 400_000_000
"""Values times distinct values where each of these is left out in turn: 20,000 squared."""
_EACH_SIGNATURE: Final = (
    "void(float64[::1], int64[::1], float64[::1], int64, int64, float64[::1], int64[::1])"
)


@dataclass(frozen=True)
class _Runs:
    """Neighbouring sorted values: where each run starts, and what is left without one of it."""

    firsts: Indices
    without: Values
    changes: Values


def without_each(
    x: Values,
    places: Indices,
    parameters: Values,
    first: int,
    stop: int,
    out: Values,
    control: Indices,
) -> None:
    """Any statistic of sorted values without the one at each of the places."""
    y = x[1:].copy()
    gone = 0
    for k in range(first, stop):
        if control[STOP] != 0:
            return
        while gone < places[k]:
            y[gone] = x[gone]
            gone += 1
        out[k] = statistic(y, parameters)
        control[DONE] += x.size // places.size


@helper(
    "_influential_values",
    "STRUCT("
    + ", ".join([*(f'"{n}" BIGINT' for n in COUNTS), *(f'"{n}" DOUBLE' for n in FIGURES)])
    + ")[]",
)
def influential_values_of(work: "Work", lists: Any, text: Any, top: Any) -> Any:
    """The runs of values of each group that move the statistic most, one record each, in order.

    Parameters
    ----------
    lists : list of numbers a group
        The values.
    text, top : text and whole number
        The statistic, and how many records a group; the same for all groups.
    """
    import pyarrow as pa

    from midspread.udfs.binding.arrow_columns import arrow_view, numbers_or_null, single_chunk
    from midspread.udfs.binding.computing import groups_of

    groups = groups_of(lists)
    count = len(groups.offsets) - 1
    found: list[dict[str, Values]] = []
    if count:
        chosen = read_statistic("influential_values", single_chunk(text)[0].as_py())
        most = int(single_chunk(top)[0].as_py())
        estimates = evaluate(chosen, groups, work)
        for start, stop in zip(
            groups.offsets[:-1].tolist(), groups.offsets[1:].tolist(), strict=True
        ):
            if work.control.stopped:
                raise Stopped("stopped on request")
            x = groups.values[start:stop] + 0.0
            x.sort()
            found.append(_largest(x, float(estimates[len(found)]), chosen, most, work))
    rows = np.cumsum([0, *(part["count"].size for part in found)]).astype(np.int32)
    names = (*COUNTS, *FIGURES)
    columns = {
        name: np.concatenate([part[name] for part in found]) if found else np.empty(0)
        for name in names
    }
    arrays = []
    for name in names:
        if name in COUNTS:
            missing = np.isnan(columns[name])
            whole = np.where(missing, 0.0, columns[name]).astype(np.int64)
            arrays.append(arrow_view(whole, missing))
        else:
            arrays.append(numbers_or_null(columns[name]))
    records = pa.StructArray.from_arrays(arrays, names=list(names))
    return pa.ListArray.from_arrays(arrow_view(rows), records)


def _largest(
    x: Values, estimate: float, chosen: Statistic, most: int, work: "Work"
) -> dict[str, Values]:
    """At most so many runs of one group's sorted values, those that move the statistic most."""
    n = x.size
    if n == 0:
        return {name: np.empty(0) for name in (*COUNTS, *FIGURES)}
    if math.isnan(x[-1]):
        return _one_run(np.nan, np.nan, n, np.nan)
    if n - 1 < chosen.function.smallest_n or null_mask(np.array([estimate]))[0]:
        return _one_run(float(x[0]), float(x[-1]), n, NULL, estimate)
    runs = _merged(_runs(x, estimate, chosen, work))
    stops = np.append(runs.firsts[1:], n)
    with np.errstate(invalid="ignore"):
        size = np.where(np.isnan(runs.changes), -1.0, np.abs(runs.changes))
    kept = np.arange(size.size)
    if size.size > most:  # all that are as large as the last one that is wanted
        kept = np.flatnonzero(size >= np.partition(size, size.size - most)[size.size - most])
    order = kept[np.argsort(-size[kept], kind="stable")][:most]
    ranks = 1.0 + np.searchsorted(-size[order], -size[order], side="left")
    return {
        "lowest": x[runs.firsts[order]],
        "highest": x[stops[order] - 1],
        "count": (stops - runs.firsts)[order].astype(np.float64),
        "estimate": np.full(order.size, estimate),
        "estimate_without": runs.without[order],
        "change": runs.changes[order],
        "rank": np.where(size[order] < 0.0, np.nan, ranks),
    }


def _one_run(
    lowest: float, highest: float, n: int, figure: float, estimate: float | None = None
) -> dict[str, Values]:
    """All values as one run without a figure of its own."""
    estimate = figure if estimate is None else estimate
    row = (lowest, highest, estimate, figure, figure, float(n), np.nan)
    return {name: np.array([number]) for name, number in zip((*FIGURES, *COUNTS), row, strict=True)}


def _runs(x: Values, estimate: float, chosen: Statistic, work: "Work") -> _Runs:
    """Runs that cover all values; neighbours may still move the statistic alike."""
    if reads_few_ranks(chosen):
        ranks, _ = ranks_read(chosen, np.array([x.size - 1], dtype=np.int64))
        firsts = np.unique(np.append(0, ranks))
        without = np.array(
            [statistic_by_rank(chosen, Remainder(x, firsts[i : i + 1])) for i in range(firsts.size)]
        )
        return _Runs(firsts, without, changes_from(estimate, without))
    if chosen.function.name in MIDDLES:
        return _runs_of_middle(
            x, estimate, chosen.parameters[0], winsorize=chosen.function.name == MIDDLES[1]
        )
    firsts = np.flatnonzero(np.append(True, x[1:] != x[:-1])).astype(np.int64)
    if firsts.size * x.size > MOST_STEPS:
        raise ParameterError(_too_many(chosen, x.size, firsts.size))
    without = np.full(firsts.size, NULL)
    loop = _loop_for(chosen.function.name)
    given = np.array(chosen.parameters, dtype=np.float64)

    def compute(first: int, stop: int) -> None:
        loop(x, firsts, given, first, stop, without, work.control.cells)

    work_off(compute, np.full(firsts.size, x.size, dtype=np.int64), work)
    return _Runs(firsts, without, changes_from(estimate, without))


def _too_many(chosen: Statistic, n: int, distinct: int) -> str:
    return (
        f"influential_values: statistic must be mean, median, {', '.join((*MIDDLES, *FEW_RANKS))} "
        f"where a group's values times its distinct values are above {MOST_STEPS:,}, got "
        f"{chosen.text} of {n:,} values, {distinct:,} of them distinct; write for example "
        f"statistic := 'trimmed_mean(0.2)', or split the rows with by."
    )


def _runs_of_middle(x: Values, estimate: float, share: float, *, winsorize: bool) -> _Runs:
    """Trimmed and winsorized means: each tail is a run, each kept value stands for itself.

    Without value i the sum of what is kept is that of the window from the first to the last value
    that is kept without some value, less the value of the window nearest to value i. Differences
    are written out, so that a change keeps its digits however many values there are.
    """
    n = x.size
    whole, cut = cut_of(n, share), cut_of(n - 1, share)
    window = x[cut : n - cut]
    firsts = np.append(0, np.arange(cut + 1, n - cut))
    weight = n - 1 if winsorize else n - 1 - 2 * cut
    if not math.isfinite(window[0]) or not math.isfinite(window[-1]):
        without = _infinite_without(window, cut, weight, winsorize=winsorize)
        return _Runs(firsts, without, changes_from(estimate, without))
    small = scale_down(float(window[0]), float(window[-1]))
    v = window * small - estimate * small
    inner = whole - cut
    low, high = v[inner], v[v.size - 1 - inner]
    own = v[inner : v.size - inner]
    tails = whole * (low + high) if winsorize else 0.0
    centre = (own.sum() + tails) / (n if winsorize else own.size)
    lost = -v
    if inner:
        outer = v[0] + v[-1]
        lost = np.where(v == v[0], v[-1], np.where(v == v[-1], v[0], outer - v))
    if winsorize:
        lows, highs = _ends_without(window)
        ends = cut * ((lows - window[inner]) + (highs - window[-1 - inner])) * small
        lost += ends - inner * (low + high) + centre
    else:
        lost += (own.size - weight) * centre
    changes = lost / weight / small
    return _Runs(firsts, _means_without(window, cut, weight, small, winsorize), changes)


def _means_without(window: Values, cut: int, weight: int, small: float, winsorize: bool) -> Values:
    """The mean without each value of the window: a wild value leaves no trace where it is gone."""
    total = np.empty(2)
    _total_loop()(np.ascontiguousarray(window), small, total)
    u = window * small
    rest = total[0] - u
    back = rest - total[0]
    rest += ((total[0] - (rest - back)) + (-u - back)) + total[1]
    lows, highs = _ends_without(u)
    if winsorize:
        rest += cut * (lows + highs)
    # The last rounding must not carry a mean past the values.
    without: Values = np.clip(rest / weight, lows, highs) / small
    return without


def _ends_without(window: Values) -> tuple[Values, Values]:
    """The lowest and the highest of what is left without each value of a sorted window."""
    lows, highs = np.full(window.size, window[0]), np.full(window.size, window[-1])
    lows[0], highs[-1] = window[1], window[-2]
    return lows, highs


def _infinite_without(window: Values, cut: int, weight: int, *, winsorize: bool) -> Values:
    """The mean without each value where some of those kept are infinite."""
    finite = np.where(np.isinf(window), 0.0, window)
    low, high = finite[np.flatnonzero(np.isfinite(window))[[0, -1]]] if finite.any() else (0.0, 0.0)
    small = scale_down(float(low), float(high))
    total = (finite * small).sum() - finite * small
    if winsorize:
        lows, highs = _ends_without(window)
        both = np.isfinite(lows) & np.isfinite(highs)
        total += cut * small * (np.where(both, lows, 0.0) + np.where(both, highs, 0.0))
    below = np.sum(window == -np.inf) - (window == -np.inf)
    above = np.sum(window == np.inf) - (window == np.inf)
    without = total / weight / small
    without[below > 0] = -np.inf
    without[above > 0] = np.inf
    without[(below > 0) & (above > 0)] = np.nan
    return without


def _merged(runs: _Runs) -> _Runs:
    """Neighbouring runs that change the statistic by the same become one."""
    changes, without = runs.changes, runs.without
    # Infinite estimates change by NaN whatever they become.
    same = _same(changes) & (np.isfinite(changes[1:]) | _same(without))
    first = np.append(True, ~same)
    return _Runs(runs.firsts[first], without[first], changes[first])


def _same(x: Values) -> npt.NDArray[np.bool_]:
    """Which values equal the one before them, NaN equal to NaN."""
    same: npt.NDArray[np.bool_] = (x[1:] == x[:-1]) | (np.isnan(x[1:]) & np.isnan(x[:-1]))
    return same


@functools.cache
def _total_loop() -> Callable[..., None]:
    return compile_driver(total_of, {}, "total_of", TOTAL_SIGNATURE)


@functools.cache
def _loop_for(name: str) -> Callable[..., Any]:
    return compiled_for(without_each, declared()[name], _EACH_SIGNATURE)
