"""The Arrow function behind `choices_table`: a grid of choices for each group, and its like."""

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from midspread.udfs.comparison.inference import yuen
from midspread.udfs.comparison.samples import Samples, work_off
from midspread.udfs.declaring import NULL, Values, helper, null_mask
from midspread.udfs.drivers import Indices
from midspread.udfs.grouped import row_numbers
from midspread.udfs.sensitivity.choice_figures import (
    ESTIMATE,
    ROOT,
    SCALE,
    WIDTH,
    N,
    choices_loop,
)
from midspread.udfs.sensitivity.rules import rules_loop
from midspread.udfs.sensitivity.shuffled_choices import STEPS, shuffles_loop
from midspread.udfs.sensitivity.two_levels import two_levels, whole_numbers

if TYPE_CHECKING:
    from midspread.udfs.binding.computing import Work

_COUNTS: Final = ("choice", "n_baseline", "n_other", "sign", "choices", "choices_left_out")
FIGURES: Final = ("estimate", "effect", "lower", "upper")
SHARES: Final = (
    "share_same_sign",
    "expected_same_sign",
    "share_excluding_zero",
    "expected_excluding_zero",
    "p_excluding_zero",
)
"""The same in every record of a group."""
_RESULT: Final = (
    "STRUCT("
    + ", ".join(
        [*(f"{name} BIGINT" for name in _COUNTS), *(f"{f} DOUBLE" for f in (*FIGURES, *SHARES))]
    )
    + ", excludes_zero BIGINT)[]"
)
_CELLS_AT_ONCE: Final = 1 << 22
_VALUES_A_JOB: Final = 1 << 22
_MOST_SAMPLES: Final = 1 << 16


@dataclass(frozen=True)
class _Grid:
    """What is chosen from, and how it is judged."""

    powers: Values
    rules: Indices
    shares: Values
    confidence: float
    shuffles: int
    seed: int

    @property
    def size(self) -> int:
        """How many choices there are."""
        return self.powers.size * self.rules.size * self.shares.size


@helper("_choices_table", _RESULT)
def choices_table_of(
    work: "Work",
    lists: Any,
    powers: Any,
    rules: Any,
    shares: Any,
    confidence: Any,
    shuffles: Any,
    seed: Any,
) -> Any:
    """One record a group and choice, numbered from 0; the first level is subtracted.

    A group with one level, or whose every choice would lose a value, has one record without a
    choice.

    Parameters
    ----------
    lists : Arrow array of lists of lists
        For each group the values of one or two levels.
    powers, rules, shares : Arrow arrays of lists
        Re-expressions as rungs, rules by number, estimators as shares of a trimmed mean.
    confidence, shuffles, seed : Arrow arrays
        Like the lists before them the same for all groups.
    """
    from midspread.udfs.binding.arrow_columns import single_chunk

    samples = two_levels("choices_table", lists)
    count = len(samples.groups) - 1
    if not count:
        return _listed(np.zeros(0, dtype=np.int64), [])
    grid = _Grid(
        np.array(single_chunk(powers)[0].as_py(), dtype=np.float64),
        np.array(single_chunk(rules)[0].as_py(), dtype=np.int64),
        np.array(single_chunk(shares)[0].as_py(), dtype=np.float64),
        float(single_chunk(confidence)[0].as_py()),
        int(single_chunk(shuffles)[0].as_py()),
        int(single_chunk(seed)[0].as_py()),
    )
    rows = np.ones(count, dtype=np.int64)
    parts = []
    most = max(2, min(_MOST_SAMPLES, _CELLS_AT_ONCE // (grid.size * WIDTH + grid.shuffles)))
    for start, stop in samples.portions(most):
        has_two = samples.levels[start:stop] == 2
        found = np.full((stop - start, grid.size, WIDTH), NULL)
        found[:, :, N : N + 2] = -1.0
        by_chance = np.zeros((2, stop - start, grid.shuffles))
        if has_two.any():
            portion = samples.in_order(start, stop, work)
            _compute(portion, np.flatnonzero(has_two), grid, found, by_chance, work)
        part, rows[start:stop] = _judged(found, by_chance, grid)
        parts.append(part)
    return _listed(rows, parts)


def _compute(
    samples: Samples,
    chosen: Indices,
    grid: _Grid,
    found: Values,
    by_chance: Values,
    work: "Work",
) -> None:
    """Fill in the figures of each choice and of each shuffle for the groups with two levels."""
    pairs = samples.groups[chosen]
    sizes = samples.starts[pairs + 2] - samples.starts[pairs]
    windows = np.zeros((chosen.size, grid.powers.size, grid.rules.size, 2), dtype=np.int64)
    figures = np.full((chosen.size, grid.size, WIDTH), NULL)
    figures[:, :, N : N + 2] = -1.0
    keep, loop = rules_loop(), choices_loop()

    def choose(first: int, last: int) -> None:
        rows = samples.values, samples.starts, pairs[first:last], grid.powers
        kept, cells = windows[first:last], work.control.cells
        keep(*rows, grid.rules, kept, cells)
        loop(*rows, kept, grid.shares, figures[first:last], cells)

    work_off(choose, sizes, work)
    found[chosen] = figures
    ends = samples.starts[np.stack((pairs + 1, pairs + 2), axis=1)] - 1
    has_nan: list[bool] = np.any(np.isnan(samples.values[ends]), axis=1).tolist()
    jobs = []
    for row, pair, size, nan in zip(
        range(chosen.size),
        pairs.tolist(),
        sizes.tolist(),
        has_nan,
        strict=True,
    ):
        step = max(8, _VALUES_A_JOB // size)
        shuffles = 0 if nan else grid.shuffles
        jobs += [(row, pair, r, min(r + step, shuffles)) for r in range(0, shuffles, step)]
    if not jobs:
        return
    listed = np.array(jobs, dtype=np.int64)
    critical, normal = _critical_values(grid.confidence)
    agreeing, excluding = np.zeros((2, chosen.size, grid.shuffles))
    shuffling = shuffles_loop()

    def shuffle(first: int, last: int) -> None:
        shuffling(
            samples.values,
            samples.starts,
            listed[first:last],
            grid.powers,
            windows,
            grid.shares,
            critical,
            normal,
            grid.seed,
            agreeing,
            excluding,
            work.control.cells,
        )

    own = samples.starts[listed[:, 1] + 2] - samples.starts[listed[:, 1]]
    work_off(shuffle, own * (listed[:, 3] - listed[:, 2]), work)
    by_chance[:, chosen] = agreeing, excluding


def _critical_values(confidence: float) -> tuple[Values, float]:
    """Logarithms of Student's two-sided critical values by 1 / df, and the normal one."""
    from scipy.special import ndtri, stdtrit

    prob = (1.0 + confidence) / 2.0
    normal = float(ndtri(prob))
    with np.errstate(divide="ignore"):
        t = stdtrit(1.0 / (np.arange(1, STEPS + 1) / STEPS), prob)
        return np.log(np.concatenate(([normal], t))), normal


def _judged(found: Values, by_chance: Values, grid: _Grid) -> tuple[dict[str, Values], Indices]:
    """The records of some groups, and how many each has."""
    from scipy.special import ndtri

    groups = found.shape[0]
    n = found[:, :, N : N + 2].astype(np.int64)
    is_choice = n[:, :, 0] >= 0
    estimate = found[:, :, ESTIMATE]
    lower, upper = (np.full((groups, grid.size), NULL) for _ in range(2))
    for e, share in enumerate(grid.shares.tolist()):
        some = slice(e, None, grid.shares.size)
        difference = estimate[:, some].reshape(-1)
        roots = np.ascontiguousarray(found[:, some, ROOT : ROOT + 2]).reshape(-1, 2)
        if share == 0.5:
            with np.errstate(all="ignore"):
                error = np.hypot(roots[:, 0], roots[:, 1])
                reach = float(ndtri((1.0 + grid.confidence) / 2.0)) * error
                limits = difference - reach, difference + reach
            lacks = null_mask(roots).any(axis=1) | (error == 0.0)
        else:
            sizes = np.maximum(n[:, some].reshape(-1, 2), 0)
            limits = yuen(difference, roots, sizes, share, grid.confidence)[:2]
            lacks = np.zeros(difference.size, dtype=np.bool_)
        lacks |= null_mask(difference)
        for column, limit in zip((lower, upper), limits, strict=True):
            column[:, some] = np.where(lacks, NULL, limit).reshape(groups, -1)
    with np.errstate(all="ignore"):
        effect = np.where(found[:, :, SCALE] == 0.0, NULL, estimate / found[:, :, SCALE])
        effect = np.where(null_mask(estimate).reshape(estimate.shape), NULL, effect)
        unknown = np.isnan(lower) | np.isnan(upper)
        excludes = np.where(unknown, np.nan, (lower > 0.0) | (upper < 0.0))
    sign = np.sign(estimate)
    columns = {
        "choice": np.where(is_choice, np.arange(grid.size), np.nan),
        "n_baseline": np.where(is_choice, n[:, :, 0], np.nan),
        "n_other": np.where(is_choice, n[:, :, 1], np.nan),
        "sign": sign,
        "estimate": estimate,
        "effect": effect,
        "lower": lower,
        "upper": upper,
        "excludes_zero": excludes,
    }
    choices = is_choice.sum(axis=1)
    columns |= {
        name: np.repeat(column[:, np.newaxis], grid.size, axis=1)
        for name, column in _shares(choices, estimate, sign, excludes, by_chance).items()
    }
    columns["choices"] = np.repeat(choices[:, np.newaxis], grid.size, axis=1).astype(np.float64)
    columns["choices_left_out"] = grid.size - columns["choices"]
    # A group without any choice keeps one record, to say so.
    shown = is_choice.copy()
    shown[choices == 0, 0] = True
    return {name: column[shown] for name, column in columns.items()}, shown.sum(axis=1)


def _shares(
    choices: Indices, estimate: Values, sign: Values, excludes: Values, by_chance: Values
) -> dict[str, Values]:
    """How many choices agree and exclude 0, beside what shuffled labels give."""
    shuffles = by_chance.shape[2]
    none = choices == 0
    whole = np.where(none, 1, choices).astype(np.float64)
    agreeing = np.maximum((sign > 0.0).sum(axis=1), (sign < 0.0).sum(axis=1))
    excluding = (excludes == 1.0).sum(axis=1)
    reached = (by_chance[1] >= excluding[:, np.newaxis]).sum(axis=1)
    shares = {
        "share_same_sign": agreeing / whole,
        "expected_same_sign": by_chance[0].mean(axis=1) / whole,
        "share_excluding_zero": excluding / whole,
        "expected_excluding_zero": by_chance[1].mean(axis=1) / whole,
        "p_excluding_zero": (reached + 1.0) / (shuffles + 1.0),
    }
    nan = np.isnan(estimate) & ~null_mask(estimate).reshape(estimate.shape)
    had_nan = ~none & (nan.sum(axis=1) == choices)
    return {
        name: np.where(none, NULL, np.where(had_nan, np.nan, column))
        for name, column in shares.items()
    }


def _listed(rows: Indices, parts: list[dict[str, Values]]) -> Any:
    """The records of each group as an Arrow list."""
    import pyarrow as pa

    from midspread.udfs.binding.arrow_columns import arrow_view, numbers_or_null

    names = (*_COUNTS, *FIGURES, *SHARES, "excludes_zero")
    arrays = []
    for name in names:
        column = np.concatenate([part[name] for part in parts]) if parts else np.empty(0)
        is_number = name in FIGURES or name in SHARES
        arrays.append(numbers_or_null(column) if is_number else whole_numbers(column))
    records = pa.StructArray.from_arrays(arrays, names=list(names))
    return pa.ListArray.from_arrays(arrow_view(row_numbers(rows).astype(np.int32)), records)
