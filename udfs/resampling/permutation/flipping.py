"""How sign_flip_test computes: every value's sign is left or flipped, each as likely."""

from typing import Any, Final

import numpy as np

from midspread.udfs.binding.batches import Batch
from midspread.udfs.declaring import Values
from midspread.udfs.drivers import Indices
from midspread.udfs.grouped import Groups, row_numbers
from midspread.udfs.resampling.evaluating import evaluate
from midspread.udfs.resampling.permutation.cells import cells_of
from midspread.udfs.resampling.permutation.drawing import (
    ROUNDING,
    Outcome,
    Question,
    content_keys,
    p_values,
    side_numbers,
)
from midspread.udfs.resampling.permutation.rearranging import over_signs
from midspread.udfs.resampling.permutation.subset_sums import SIGNS, mean_differences
from midspread.udfs.resampling.statistics import Statistic, read_statistic

_HUGE: Final = 1e300
_LEAST_TABULATED: Final = 1024


def compute_sign_flips(batch: Batch) -> dict[str, Any]:
    """The fields of sign_flip_test for every group."""
    texts = batch.texts("statistic")
    statistics = {text: read_statistic(batch.function.name, text) for text in texts}
    resamples, seeds = batch.number("resamples"), batch.number("seed")
    sides = side_numbers(batch.texts("alternative"))
    found = Outcome(batch.size)
    none = np.full(int(batch.lengths.sum()), -1, dtype=np.int64)
    cells = cells_of(batch.numbers("d"), batch.lengths, none, none, batch.work)
    for text, statistic in statistics.items():
        mine = [g for g, own in enumerate(texts) if own == text]
        kept = np.isin(cells.groups, mine) & (cells.sizes >= batch.function.smallest_n)
        some = np.flatnonzero(kept)
        groups = cells.groups[some]
        if groups.size:
            ends = row_numbers(cells.sizes[some])
            values = np.concatenate(
                [cells.values[cells.offsets[c] : cells.offsets[c + 1]] for c in some]
            )
            _answer(
                statistic,
                values,
                ends,
                (resamples[groups], seeds[groups], sides[groups]),
                groups,
                batch,
                found,
            )
    return found.fields()


def _answer(
    statistic: Statistic,
    values: Values,
    starts: Indices,
    given: tuple[Values, Values, Indices],
    groups: Indices,
    batch: Batch,
    found: Outcome,
) -> None:
    """Enter the answers of some groups of the batch, whose values are sorted."""
    resamples, seeds, sides = given
    work, lengths = batch.work, np.diff(starts)
    observed = evaluate(statistic, Groups(values, starts), work)
    asked = found.enter_estimates(groups, observed, observed)
    totals = np.where(lengths < 60, 2.0 ** np.minimum(lengths, 60), np.inf)
    exact = totals <= resamples
    off = ROUNDING * np.abs(observed)
    question = Question(
        lengths,
        np.where(exact, totals, resamples).astype(np.int64),
        exact,
        observed,
        np.where(np.isfinite(off), off, 0.0),
        sides,
        content_keys(values, starts, seeds),
    )
    largest = np.maximum(np.abs(values[starts[:-1]]), np.abs(values[starts[1:] - 1]))
    is_mean = statistic.function.name == "trimmed_mean" and statistic.parameters[0] == 0.0
    by_sums = asked & ~exact & (largest < _HUGE) & is_mean
    if by_sums.any():
        loop = mean_differences()
        chosen = np.flatnonzero(by_sums)
        one_each, zeros = np.arange(lengths.size + 1), np.zeros(lengths.size, dtype=np.int64)

        def draw_sums(group: Indices, *jobs: Any) -> None:
            loop(
                values,
                starts,
                starts,
                one_each,
                zeros,
                np.zeros(lengths.size),
                np.ones(lengths.size),
                question.keys,
                SIGNS,
                chosen[group],
                *jobs,
                work.control.cells,
            )

        of_sums = question.of(chosen)
        found.enter(groups[chosen], of_sums, p_values(draw_sums, of_sums, work, _LEAST_TABULATED))
    if (asked & ~by_sums).any():
        by_kernel = over_signs(statistic.function.name)
        rest = np.flatnonzero(asked & ~by_sums)
        by_size = values.copy()
        for g in rest.tolist():
            own = values[starts[g] : starts[g + 1]]
            by_size[starts[g] : starts[g + 1]] = own[np.argsort(np.abs(own), kind="stable")]
        flags = exact.astype(np.int64)
        parameters = np.array(statistic.parameters, dtype=np.float64)

        def draw(group: Indices, *jobs: Any) -> None:
            by_kernel(
                by_size,
                starts,
                parameters,
                flags,
                question.keys,
                rest[group],
                *jobs,
                work.control.cells,
            )

        of_kernel = question.of(rest)
        found.enter(groups[rest], of_kernel, p_values(draw, of_kernel, work))
