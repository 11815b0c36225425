"""How permutation_test and permutation_test_k compute: labels rearranged over sorted values."""

from dataclasses import replace
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.binding.batches import Batch
from midspread.udfs.declaring import NULL, Values, null_mask
from midspread.udfs.drivers import Indices
from midspread.udfs.grouped import Groups, row_numbers
from midspread.udfs.parameters import ParameterError
from midspread.udfs.resampling.evaluating import evaluate
from midspread.udfs.resampling.permutation.cells import cells_of, sort_parts
from midspread.udfs.resampling.permutation.chosen_ranks import over_chosen_ranks
from midspread.udfs.resampling.permutation.drawing import (
    ROUNDING,
    Outcome,
    Question,
    content_keys,
    p_values,
    side_numbers,
)
from midspread.udfs.resampling.permutation.labelled import Labelled, eligible, labelled_groups
from midspread.udfs.resampling.permutation.rearranging import (
    BETWEEN,
    DIFFERENCE,
    over_labels,
    studentized_over_labels,
)
from midspread.udfs.resampling.permutation.subset_sums import (
    STUDENTIZED_SUBSETS,
    SUBSETS,
    mean_differences,
)
from midspread.udfs.resampling.statistics import Statistic, read_statistic
from midspread.udfs.resampling.ways_of_drawing import ranks_read, reads_few_ranks

_SHIFT_FREE: Final = ("location", "scale", "shape")
"""Families whose figures move along with a shift of the values, or not at all."""
_HUGE: Final = 1e300
_LEAST_TABULATED: Final = 1024
"""With fewer arrangements to a job the tables of subset sums would not pay."""
_LEAST_OF_RANKS: Final = 256
"""Arrangements take the same time whatever the number of values."""
_LARGE_ENOUGH: Final = 1000
"""Values from which on studentized means come from sums of squares, which cancel a little."""


def compute_comparison(batch: Batch, *, two_labels: bool) -> dict[str, Any]:
    """The fields of permutation_test, or of permutation_test_k, for every group."""
    name = batch.function.name
    texts = batch.texts("statistic")
    statistics = {text: read_statistic(name, text) for text in texts}
    resamples, seeds = batch.number("resamples"), batch.number("seed")
    sides = side_numbers(["greater"] * batch.size)
    studentize = np.zeros(batch.size, dtype=np.bool_)
    baselines, unknown = None, None
    if two_labels:
        sides = side_numbers(batch.texts("alternative"))
        studentize = batch.flags("studentize")
        try:
            baselines = batch.levels("baseline", "label")
        except ParameterError as error:
            unknown = error
        for g in np.flatnonzero(studentize):
            _check_standard_error(name, statistics[texts[g]], texts[g])
    keys = batch.keys("label")
    strata = np.full(keys.codes.size, -1, dtype=np.int64)
    if batch.has("stratum"):
        strata = batch.keys("stratum").codes
    found = Outcome(batch.size)
    cells = cells_of(batch.numbers("x"), batch.lengths, strata, keys.codes, batch.work)
    chosen, labels = eligible(name, cells, batch.size, keys.values, two_labels, baselines)
    if unknown is not None and chosen.size:
        raise unknown  # not where all have one label: then the answer is NULL with any baseline
    alike: dict[tuple[str, bool], list[int]] = {}
    for g in chosen.tolist():
        alike.setdefault((texts[g], bool(studentize[g])), []).append(g)
    for (text, is_studentized), members in alike.items():
        groups = np.array(members, dtype=np.int64)
        data = labelled_groups(cells, groups, labels, batch.size)
        comparison = _Comparison(data, statistics[text], is_studentized, two_labels, batch)
        comparison.answer(groups, resamples[groups], seeds[groups], sides[groups], found)
    return found.fields()


def _check_standard_error(function: str, statistic: Statistic, text: str) -> None:
    if statistic.function.name != "trimmed_mean" or statistic.parameters[0] == 0.5:
        raise ParameterError(
            f"{function}: studentize := true needs a statistic with a standard error, mean or "
            f"trimmed_mean with a share below 0.5, got '{text}'; leave studentize out."
        )


class _Comparison:
    """One statistic on some groups."""

    def __init__(
        self,
        data: Labelled,
        statistic: Statistic,
        studentize: bool,
        two_labels: bool,
        batch: Batch,
    ) -> None:
        self._data = data
        self._statistic = statistic
        self._studentize = studentize
        self._two_labels = two_labels
        self._work = batch.work
        starts, values = data.starts[:-1], data.values
        largest = np.maximum(
            np.abs(np.maximum.reduceat(values, starts)), np.abs(np.minimum.reduceat(values, starts))
        )
        self._is_plain = largest < _HUGE
        # Powers of two, so that squares stay within the range of a double.
        exponents = np.frexp(np.where(self._is_plain, largest, 1.0))[1]
        self._scales = np.ldexp(1.0, np.clip(-exponents, -1000, 1000))
        self._origins = self._middles()

    def _middles(self) -> Values:
        """A value amid each group, from which differences are taken."""
        data, scales = self._data, self._scales
        if self._statistic.function.family not in _SHIFT_FREE:
            return np.zeros(scales.size)
        with np.errstate(over="ignore", invalid="ignore"):
            scaled = data.values * np.repeat(scales, data.lengths)
            middles = np.add.reduceat(scaled, data.starts[:-1]) / data.lengths / scales
        return np.where(self._is_plain, middles, 0.0)

    def answer(
        self, groups: Indices, resamples: Values, seeds: Values, sides: Indices, found: Outcome
    ) -> None:
        """Enter the answers of all groups, which are groups `groups` of the batch."""
        data = self._data
        with np.errstate(invalid="ignore", over="ignore", divide="ignore"):
            estimates, observed, rounding = self._observed()
        asked = found.enter_estimates(groups, estimates, observed)
        totals = data.arrangements(resamples)
        exact = totals <= resamples
        question = Question(
            data.lengths,
            np.where(exact, totals, resamples).astype(np.int64),
            exact,
            observed,
            rounding,
            sides,
            content_keys(data.values, data.starts, seeds),
        )
        by_sums = asked & self._fits_sums() & ~exact
        if by_sums.any():
            self._answer_by_sums(np.flatnonzero(by_sums), question, groups, found)
        by_ranks = asked & ~exact & (np.diff(data.first_stratum) == 1)
        by_ranks &= self._two_labels and reads_few_ranks(self._statistic)
        if by_ranks.any():
            self._answer_by_ranks(np.flatnonzero(by_ranks), question, groups, found)
        rest = asked & ~by_sums & ~by_ranks
        if rest.any():
            self._answer_by_kernel(np.flatnonzero(rest), question, groups, found)

    def _observed(self) -> tuple[Values, Values, Values]:
        """For each group the estimate, T, and how far rounding may take equal T apart."""
        data = self._data
        by_label = data.by_label() - np.repeat(self._origins, data.lengths)
        parts = Groups(by_label, row_numbers(data.sizes))
        figures = evaluate(self._statistic, parts, self._work)
        first, counts = data.first_label[:-1], np.diff(data.first_label)
        is_null = np.logical_or.reduceat(null_mask(figures), first)
        off = np.abs(figures) + np.repeat(np.abs(self._origins), counts)
        off = ROUNDING * np.maximum.reduceat(off, first)
        if not self._two_labels:
            weights = data.sizes.astype(np.float64)
            away = figures - np.repeat(figures[first], counts)
            away -= np.repeat(np.add.reduceat(weights * away, first) / data.lengths, counts)
            spread = np.add.reduceat(weights * away * away, first)
            spread[is_null] = NULL
            off = 4.0 * off * np.sqrt(data.lengths * spread) + data.lengths * off * off
            return spread, spread, np.where(np.isfinite(off), off, 0.0)
        estimates = figures[1::2] - figures[::2]
        estimates[is_null] = NULL
        observed = estimates
        if self._studentize:
            observed, off = self._divided_by_error(parts, estimates, off)
        return estimates, observed, np.where(np.isfinite(off), off, 0.0)

    def _divided_by_error(
        self, parts: Groups, estimates: Values, off: Values
    ) -> tuple[Values, Values]:
        error_of = read_statistic("", f"trimmed_mean_se({self._statistic.parameters[0]!r})")
        errors = evaluate(error_of, parts, self._work)
        is_null = null_mask(errors)
        error = np.hypot(errors[1::2], errors[::2])
        observed = np.where((error == 0.0) & (estimates == 0.0), 0.0, estimates / error)
        observed[is_null[1::2] | is_null[::2]] = NULL
        return observed, off / error

    def _fits_sums(self) -> npt.NDArray[np.bool_]:
        """Where T follows from the sum of the values with one label."""
        is_mean = (
            self._statistic.function.name == "trimmed_mean"
            and self._statistic.parameters[0] == 0.0
            and self._two_labels
        )
        if not is_mean:
            return np.zeros(self._is_plain.size, dtype=np.bool_)
        return self._is_plain & (not self._studentize or self._data.lengths > _LARGE_ENOUGH)

    def _answer_by_sums(
        self, some: Indices, question: Question, groups: Indices, found: Outcome
    ) -> None:
        data = self._data
        chosen = data.with_label(1)
        loop = mean_differences()

        def draw(group: Indices, *jobs: Any) -> None:
            loop(
                data.values,
                data.starts,
                data.strata,
                data.first_stratum,
                chosen,
                self._origins,
                self._scales,
                question.keys,
                STUDENTIZED_SUBSETS if self._studentize else SUBSETS,
                some[group],
                *jobs,
                self._work.control.cells,
            )

        asked = question.of(some)
        if not self._studentize:
            scales = self._scales[some]
            asked = replace(
                asked, observed=asked.observed * scales, rounding=asked.rounding * scales
            )
        found.enter(groups[some], asked, p_values(draw, asked, self._work, _LEAST_TABULATED))

    def _answer_by_ranks(
        self, some: Indices, question: Question, groups: Indices, found: Outcome
    ) -> None:
        data = self._data
        values, _ = self._sorted_values(some)
        ranks, first_rank = ranks_read(self._statistic, data.sizes)
        loop = over_chosen_ranks(self._statistic.function.name)

        def draw(group: Indices, *jobs: Any) -> None:
            loop(
                values,
                data.starts,
                data.sizes,
                ranks,
                first_rank,
                np.array(self._statistic.parameters, dtype=np.float64),
                question.keys,
                some[group],
                *jobs,
                self._work.control.cells,
            )

        asked = question.of(some)
        found.enter(groups[some], asked, p_values(draw, asked, self._work, _LEAST_OF_RANKS))

    def _answer_by_kernel(
        self, some: Indices, question: Question, groups: Indices, found: Outcome
    ) -> None:
        data = self._data
        values, places = self._sorted_values(some)
        codes = data.codes
        if self._studentize:
            loop = studentized_over_labels()
        else:
            loop = over_labels(self._statistic.function.name)
        exact = question.exact.astype(np.int64)

        def draw(group: Indices, *jobs: Any) -> None:
            loop(
                values,
                data.starts,
                codes,
                data.strata,
                data.first_stratum,
                places,
                data.sizes,
                data.first_label,
                np.array(self._statistic.parameters, dtype=np.float64),
                DIFFERENCE if self._two_labels else BETWEEN,
                exact,
                question.keys,
                some[group],
                *jobs,
                self._work.control.cells,
            )

        asked = question.of(some)
        found.enter(groups[some], asked, p_values(draw, asked, self._work))

    def _sorted_values(self, some: Indices) -> tuple[Values, Indices]:
        """Each group's values less its origin, sorted, and where those of each stratum went."""
        data = self._data
        values = data.values - np.repeat(self._origins, data.lengths)
        if not data.is_stratified:
            sort_parts(values, data.starts, self._work)
            return values, np.empty(0, dtype=np.int64)
        places = np.zeros(values.size, dtype=np.int64)
        stratum = np.repeat(np.arange(data.strata.size - 1), np.diff(data.strata))
        for g in some.tolist():
            own = slice(data.starts[g], data.starts[g + 1])
            order = np.argsort(values[own], kind="stable")
            values[own] = values[own][order]
            places[own] = np.argsort(stratum[own][order], kind="stable")
        return values, places
