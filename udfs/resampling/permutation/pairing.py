"""How permutation_test_yx computes: the values of x rearranged against those of y."""

import math
from typing import Any

import numpy as np

from midspread.udfs.binding.batches import Batch
from midspread.udfs.declaring import Values
from midspread.udfs.drivers import Indices
from midspread.udfs.grouped import Groups, row_numbers
from midspread.udfs.resampling.evaluating import evaluate
from midspread.udfs.resampling.permutation.drawing import (
    ROUNDING,
    Outcome,
    Question,
    content_keys,
    p_values,
    side_numbers,
)
from midspread.udfs.resampling.permutation.rearranged_pairs import over_pairs
from midspread.udfs.resampling.statistics import Statistic, read_statistic


def compute_association(batch: Batch) -> dict[str, Any]:
    """The fields of permutation_test_yx for every group."""
    texts = batch.texts("statistic")
    statistics = {text: read_statistic(batch.function.name, text, ("y", "x")) for text in texts}
    resamples, seeds = batch.number("resamples"), batch.number("seed")
    sides = side_numbers(batch.texts("alternative"))
    y, x = batch.numbers("y"), batch.numbers("x")
    strata = np.full(y.size, -1, dtype=np.int64)
    if batch.has("stratum"):
        strata = batch.keys("stratum").codes
    found = Outcome(batch.size)
    lengths = batch.lengths
    owner = np.repeat(np.arange(batch.size), lengths)
    for text, statistic in statistics.items():
        mine = np.array([own == text for own in texts], dtype=np.bool_)
        groups = np.flatnonzero(mine & (lengths >= batch.function.smallest_n))
        rows = np.flatnonzero(np.isin(owner, groups))
        if groups.size:
            order = rows[np.lexsort((strata[rows], x[rows], y[rows], owner[rows]))]
            _Association(
                y[order], x[order], strata[order], row_numbers(lengths[groups]), statistic, batch
            ).answer(groups, resamples[groups], seeds[groups], sides[groups], found)
    return found.fields()


class _Association:
    """One statistic on some groups, whose pairs are sorted by y, then x, then stratum."""

    def __init__(
        self,
        y: Values,
        x: Values,
        strata: Indices,
        starts: Indices,
        statistic: Statistic,
        batch: Batch,
    ) -> None:
        self._y, self._x, self._starts = y, x, starts
        self._statistic = statistic
        self._work = batch.work
        lengths = np.diff(starts)
        owner = np.repeat(np.arange(lengths.size), lengths)
        order = np.lexsort((strata, owner))
        self._places = order - starts[owner]
        is_new = np.ones(order.size, dtype=np.bool_)
        is_new[1:] = (np.diff(owner) != 0) | (np.diff(strata[order]) != 0)
        new = np.flatnonzero(is_new)
        self._strata = np.concatenate((new, [order.size]))
        self._first_stratum = row_numbers(np.bincount(owner[new], minlength=lengths.size))
        sizes = np.diff(self._strata)
        self._codes = (np.arange(order.size) - np.repeat(new, sizes)).astype(np.int32)

    def answer(
        self, groups: Indices, resamples: Values, seeds: Values, sides: Indices, found: Outcome
    ) -> None:
        """Enter the answers of all groups, which are groups `groups` of the batch."""
        y, x, starts, work = self._y, self._x, self._starts, self._work
        observed = evaluate(self._statistic, Groups(y, starts, x), work)
        asked = found.enter_estimates(groups, observed, observed)
        totals = np.array([self._orders(g) for g in range(groups.size)])
        exact = totals <= resamples
        off = ROUNDING * np.abs(observed)
        question = Question(
            np.diff(starts),
            np.where(exact, totals, resamples).astype(np.int64),
            exact,
            observed,
            np.where(np.isfinite(off), off, 0.0),
            sides,
            content_keys(x, starts, content_keys(y, starts, seeds)),
        )
        some = np.flatnonzero(asked)
        if not some.size:
            return
        loop = over_pairs(self._statistic.function.name)
        parameters = np.array(self._statistic.parameters, dtype=np.float64)
        flags = exact.astype(np.int64)

        def draw(group: Indices, *jobs: Any) -> None:
            loop(
                y,
                x,
                starts,
                self._codes,
                self._strata,
                self._first_stratum,
                self._places,
                parameters,
                flags,
                question.keys,
                some[group],
                *jobs,
                work.control.cells,
            )

        of_some = question.of(some)
        found.enter(groups[some], of_some, p_values(draw, of_some, work))

    def _orders(self, group: int) -> float:
        """The number of ways to arrange a group's x."""
        first, last = self._first_stratum[group], self._first_stratum[group + 1]
        sizes = np.diff(self._strata[first : last + 1])
        # 20! is the last one below 2⁶³, far beyond any number of resamples.
        return float(math.prod(math.factorial(min(int(n), 20)) for n in sizes))
