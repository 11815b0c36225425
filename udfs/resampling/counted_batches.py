"""Resamples of whole units or blocks for a batch of groups: layout, threads, limits.

Groups are worked off in portions, each by one thread. The resamples of a large group are shared
among the threads instead: each resample has random numbers of its own, so nothing shows it.
"""

import functools
import itertools
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from midspread.udfs.compiling import compile_driver
from midspread.udfs.declaring import NULL, Values, declared, null_mask
from midspread.udfs.drivers import Indices
from midspread.udfs.grouped import Control, row_numbers
from midspread.udfs.resampling.counted import GENERAL, QUANTILE, TAME, Small, form_of
from midspread.udfs.resampling.counted_drawing import (
    SIGNATURE,
    counted_resamples,
    written_resamples,
)
from midspread.udfs.resampling.evaluating import evaluate
from midspread.udfs.resampling.intervals import acceleration, intervals
from midspread.udfs.resampling.statistics import Statistic, compiled_for, read_statistic
from midspread.udfs.resampling.working import work_off

if TYPE_CHECKING:
    from midspread.udfs.binding.batches import Batch

PARTS_LEFT_OUT: Final = 1000
"""More units than this are left out in so many parts, not one by one."""

_PORTION_WORK: Final = 1 << 25
_PORTION_ROWS: Final = 1 << 18
_PORTION_DRAWS: Final = 1 << 20
_SHARED_WORK: Final = 1 << 28
"""Rows times resamples: worked on at once by one thread; shared among threads from here on."""
_SHARES: Final = 8
_TIE: Final = 4 * np.finfo(np.float64).eps


@dataclass(frozen=True)
class Rows:
    """Some groups' rows, each group's sorted by value and then by unit.

    Attributes
    ----------
    values, codes : ndarray
        The values, and whose they are: units of a group are numbered from 0 in their own order.
    starts : ndarray of int64, shape (groups + 1,)
        Group i holds ``starts[i] : starts[i + 1]``.
    units, blocks : ndarray of int64
        How many units a group has; the length of its blocks, 0 where units are drawn.
    """

    values: Values
    codes: Small
    starts: Indices
    units: Indices
    blocks: Indices

    def only(self, groups: Any) -> "Rows":
        """Some of the groups."""
        chosen = np.flatnonzero(groups)
        if chosen.size == self.units.size:
            return self
        places = [np.arange(self.starts[i], self.starts[i + 1]) for i in chosen]
        at = np.concatenate(places) if places else np.empty(0, dtype=np.int64)
        starts = row_numbers(np.diff(self.starts)[chosen])
        return Rows(
            self.values[at], self.codes[at], starts, self.units[chosen], self.blocks[chosen]
        )


@dataclass(frozen=True)
class _Plan:
    """What some groups of a batch have in common."""

    text: str
    statistic: Statistic
    method: str
    resamples: int


LayOut = Callable[[Indices], Rows]
"""From numbers of groups to their rows; a group of fewer than two units is not drawn from."""


def bootstrapped(batch: "Batch", lay_out: LayOut) -> dict[str, Any]:
    """The figures of each group: estimate, lower, upper, se, bias, resamples, units and blocks."""
    fields = ("estimate", "lower", "upper", "se", "bias", "resamples")
    found = {name: np.full(batch.size, NULL) for name in fields}
    found["units"] = np.zeros(batch.size)
    found["blocks"] = np.zeros(batch.size)
    control = batch.work.control
    confidence, seeds = batch.number("confidence"), batch.number("seed")
    known: dict[str, Values] = {}
    for plan, members in _plans(batch):
        if plan.text not in known:
            known[plan.text] = evaluate(plan.statistic, batch.groups("x"), batch.work)
        estimates = known[plan.text]
        found["estimate"][members] = estimates[members]

        def draw_and_limit(groups: Indices, plan: _Plan, estimates: Values, threads: int) -> None:
            rows = lay_out(groups)
            found["units"][groups] = rows.units
            found["blocks"][groups] = rows.blocks
            drawn = groups[rows.units > 1]
            rows = rows.only(rows.units > 1)
            if not drawn.size:
                return
            nothing = np.zeros(drawn.size, dtype=np.int64)
            draws = _resampled(plan, rows, nothing, seeds[drawn], plan.resamples, control, threads)
            at = estimates[drawn]
            _unify_ties(draws, at)
            left = None
            if plan.method == "bca":
                left = _accelerations(plan, rows, seeds[drawn], control, threads)
            limits = intervals(plan.method, at, draws, confidence[drawn], accelerations=left)
            for name in ("lower", "upper", "se", "bias", "resamples"):
                found[name][drawn] = getattr(limits, name)

        lengths = batch.lengths
        shared = members[lengths[members] * plan.resamples >= _SHARED_WORK]
        portions = _portions(np.setdiff1d(members, shared), lengths, plan.resamples)
        work_off(
            (functools.partial(draw_and_limit, part, plan, estimates, 1) for part in portions),
            control,
            batch.work.threads,
        )
        for group in shared:
            draw_and_limit(np.array([group]), plan, estimates, batch.work.threads)
    return found


def _plans(batch: "Batch") -> Iterator[tuple[_Plan, Indices]]:
    """Groups by what they ask for."""
    numbers = batch.number("resamples")
    asked: dict[tuple[str, str, int], list[int]] = {}
    given = zip(batch.texts("statistic"), batch.texts("method"), numbers.tolist(), strict=True)
    for group, (text, method, resamples) in enumerate(given):
        asked.setdefault((text, method, int(resamples)), []).append(group)
    for (text, method, resamples), members in asked.items():
        statistic = read_statistic(batch.function.name, text)
        yield _Plan(text, statistic, method, resamples), np.array(members, dtype=np.int64)


def _portions(members: Indices, lengths: Indices, resamples: int) -> Iterator[Indices]:
    """Runs of groups that are little enough work for one thread at a time."""
    most = max(_PORTION_DRAWS // resamples, 1)
    at_once = min(_PORTION_WORK // resamples, _PORTION_ROWS)
    ends = np.cumsum(lengths[members])
    start = 0
    while start < members.size:
        done = ends[start - 1] if start else 0
        stop = int(np.searchsorted(ends, done + at_once, side="right"))
        stop = min(max(stop, start + 1), start + most)
        yield members[start:stop]
        start = stop


def _resampled(
    plan: _Plan,
    rows: Rows,
    parts: Indices,
    seeds: Values,
    resamples: int,
    control: Control,
    threads: int,
) -> Values:
    """The statistic of every resample, a row for each group; or with each part left out."""
    out = np.full((rows.units.size, resamples), NULL)
    form = form_of(plan.statistic)
    ends = rows.values[rows.starts[1:] - 1]
    spoilt = np.isnan(ends)
    wild = (ends > TAME) | (rows.values[rows.starts[:-1]] < -TAME)
    if form == GENERAL:
        wild[:] = True
    elif form == QUANTILE:
        wild[:] = False
    for chosen, loop_form in ((~wild & ~spoilt, form), (wild & ~spoilt, GENERAL)):
        if not chosen.any():
            continue
        loop = _loop(plan.statistic.function.name if loop_form == GENERAL else "")
        some = rows.only(chosen)
        part = out if chosen.all() else out[chosen]
        shares = _SHARES * threads if threads > 1 else 1
        bounds = np.unique(np.linspace(0, resamples, shares + 1).astype(np.int64))
        work_off(
            (
                functools.partial(
                    loop,
                    some.values,
                    some.codes,
                    some.starts,
                    some.units,
                    some.blocks,
                    parts[chosen],
                    seeds[chosen],
                    loop_form,
                    np.array([*plan.statistic.parameters, 0.0]),
                    plan.statistic.function.smallest_n,
                    int(first),
                    int(stop),
                    part,
                    control.cells,
                )
                for first, stop in itertools.pairwise(bounds)
            ),
            control,
            threads,
        )
        if part is not out:
            out[chosen] = part
    out[spoilt] = np.nan
    return out


@functools.cache
def _loop(function: str) -> Callable[..., None]:
    """The compiled loop: that of one function, or the counting one where none is named."""
    if not function:
        return compile_driver(counted_resamples, {}, "counted_resamples", SIGNATURE)
    return compiled_for(written_resamples, declared()[function], SIGNATURE)


def _unify_ties(draws: Values, estimates: Values) -> None:
    """Sums over counts end a few bits off: a draw that equals the estimate is made to."""
    centre = estimates[:, np.newaxis]
    with np.errstate(invalid="ignore"):
        near = np.abs(draws - centre) <= _TIE * np.abs(centre)
    np.copyto(draws, np.broadcast_to(centre, draws.shape), where=near)


def _accelerations(
    plan: _Plan, rows: Rows, seeds: Values, control: Control, threads: int
) -> Values:
    """The acceleration of bca from the jackknife over units, or over parts of them."""
    parts = np.minimum(rows.units, PARTS_LEFT_OUT)
    left = _resampled(plan, rows, parts, seeds, int(parts.max()), control, threads)
    kept = ~null_mask(left).reshape(left.shape)
    return np.array([acceleration(row[some]) for row, some in zip(left, kept, strict=True)])
