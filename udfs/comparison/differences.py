"""The Arrow function behind `group_differences`: every wanted pair of levels of each group."""

import functools
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.comparison.inference import brunner_munzel, kept, standardised, yuen
from midspread.udfs.comparison.samples import Samples, read_samples, work_off
from midspread.udfs.comparison.two_samples import (
    HAS_INFINITE,
    HAS_NAN,
    MEAN,
    PLACEMENTS,
    ROOT,
    SHIFT,
    WIDTH,
    WINS,
    pair_loop,
)
from midspread.udfs.declaring import NULL, Values, helper
from midspread.udfs.drivers import Indices
from midspread.udfs.grouped import row_numbers
from midspread.udfs.parameters import ParameterError

if TYPE_CHECKING:
    from midspread.udfs.binding.computing import Work

EACH: Final = "each"
REST: Final = "rest"
BASELINE: Final = "baseline"
MOST_LEVELS: Final = 200
"""More levels than this are not compared pair by pair: 19,900 pairs a group are enough."""

COUNTS: Final = ("first", "second", "n", "n_versus")
FIGURES: Final = (
    "trimmed_mean",
    "trimmed_mean_versus",
    "difference",
    "lower",
    "upper",
    "p_value",
    "effect",
    "hodges_lehmann_shift",
    "cliffs_delta",
    "p_more",
    "brunner_munzel_p",
)
REMARK: Final = "remark"
ALONE, NO_BASELINE, HAD_NAN, HAD_INFINITE, FEW, TOO_FEW, NO_SPREAD, APART, EQUAL = (
    1 << bit for bit in range(9)
)
"""What a remark is made of."""
_FEW_VALUES: Final = 10
_MOST_SAMPLES: Final = 1 << 18
_RESULT: Final = (
    "STRUCT("
    + ", ".join(
        [*(f'"{name}" BIGINT' for name in (*COUNTS, REMARK)), *(f'"{f}" DOUBLE' for f in FIGURES)]
    )
    + ")[]"
)


@dataclass(frozen=True)
class _Pairs:
    """Which samples are compared; second −1 is all the rest of the group, −2 nothing."""

    first: Indices
    second: Indices
    rows: Indices  # first pair of each group, and the end
    no_baseline: npt.NDArray[np.bool_]


@helper("_group_differences", _RESULT)
def group_differences_of(
    work: "Work", lists: Any, has_baseline: Any, against: Any, share: Any, confidence: Any
) -> Any:
    """Compare the levels of each group; levels are numbered from 1 as they come.

    Parameters
    ----------
    lists : Arrow array of lists of lists
        For each group the values of each of its levels, the baseline first.
    has_baseline : Arrow array of booleans
        Whether the first level is the baseline.
    against, share, confidence : Arrow arrays
        The same for all groups.
    """
    from midspread.udfs.binding.arrow_columns import single_chunk

    samples = read_samples(lists)
    count = len(samples.groups) - 1
    if not count:
        return _listed(np.zeros(1, dtype=np.int64), [])
    mode = str(single_chunk(against)[0].as_py())
    cut = float(single_chunk(share)[0].as_py())
    level = float(single_chunk(confidence)[0].as_py())
    first_is_baseline = _true(single_chunk(has_baseline))
    if mode == EACH and int(samples.levels.max()) > MOST_LEVELS:
        raise ParameterError(
            f"group_differences: label must have at most {MOST_LEVELS} levels in a group to be "
            f"compared pair by pair, got {int(samples.levels.max())}; write for example "
            f"against := 'rest', or leave levels out in a query in parentheses."
        )
    rows = [0]
    parts = []
    for start, stop in samples.portions(_MOST_SAMPLES):
        portion = samples.in_order(start, stop, work)
        pairs = _wanted(portion, mode, first_is_baseline[start:stop])
        parts.append(_compared(portion, pairs, cut, level, work))
        rows.extend((pairs.rows[1:] + rows[-1]).tolist())
    return _listed(np.array(rows, dtype=np.int64), parts)


def _true(flags: Any) -> npt.NDArray[np.bool_]:
    return np.array([flag is True for flag in flags.to_pylist()], dtype=np.bool_)


def _wanted(samples: Samples, mode: str, has_baseline: npt.NDArray[np.bool_]) -> _Pairs:
    """The pairs of each group, in order; what cannot be compared stands alone."""
    levels = samples.levels
    lone = (levels == 1) | (~has_baseline if mode == BASELINE else np.zeros_like(has_baseline))
    counts = np.where(lone, levels, _pair_counts(levels, mode))
    rows = row_numbers(counts)
    first, second = (np.empty(int(rows[-1]), dtype=np.int64) for _ in range(2))
    for kind in np.unique(np.stack((levels, lone.astype(np.int64))), axis=1).T.tolist():
        members = np.flatnonzero((levels == kind[0]) & (lone == bool(kind[1])))
        one, other = _numbers(kind[0], "" if kind[1] else mode)
        places = rows[members][:, np.newaxis] + np.arange(one.size)
        begin = samples.groups[members][:, np.newaxis]
        first[places] = begin + one
        second[places] = np.where(other < 0, other, begin + other)
    return _Pairs(first, second, rows, np.repeat(lone & (mode == BASELINE) & ~has_baseline, counts))


def _pair_counts(levels: Indices, mode: str) -> Indices:
    if mode == EACH:
        return levels * (levels - 1) // 2
    return levels if mode == REST else levels - 1


@functools.cache
def _numbers(levels: int, mode: str) -> tuple[Indices, Indices]:
    """Which levels stand against which: the later one first, as the earlier is subtracted."""
    if mode == EACH:
        one, other = np.tril_indices(levels, -1)
        return one.astype(np.int64), other.astype(np.int64)
    if mode == BASELINE:
        return np.arange(1, levels), np.zeros(levels - 1, dtype=np.int64)
    return np.arange(levels), np.full(levels, -1 if mode == REST else -2)


def _compared(
    samples: Samples, pairs: _Pairs, share: float, confidence: float, work: "Work"
) -> dict[str, Values]:
    """The answer for each pair, by field."""
    lengths = samples.lengths
    own = np.repeat(np.arange(len(pairs.rows) - 1), np.diff(pairs.rows))
    ends = samples.starts[samples.groups]
    homes = np.ascontiguousarray(np.stack((ends[own], ends[own + 1]), axis=1))
    n = np.empty((own.size, 2), dtype=np.int64)
    n[:, 0] = lengths[pairs.first]
    against_rest = pairs.second == -1
    n[:, 1] = np.where(pairs.second >= 0, lengths[np.maximum(pairs.second, 0)], 0)
    n[against_rest, 1] = (homes[:, 1] - homes[:, 0] - n[:, 0])[against_rest]
    pooled = samples.pooled(work) if against_rest.any() else np.empty(0)
    out = np.full((own.size, WIDTH), NULL)
    chosen = np.flatnonzero(n[:, 1] > 0)
    found = np.full((chosen.size, WIDTH), NULL)
    first, second = pairs.first[chosen], pairs.second[chosen]
    homes = np.ascontiguousarray(homes[chosen])
    loop = pair_loop()

    def compare(start: int, stop: int) -> None:
        part = slice(start, stop)
        loop(
            samples.values,
            samples.starts,
            pooled,
            first[part],
            second[part],
            homes[part],
            share,
            found[part],
            work.control.cells,
        )

    work_off(compare, n[chosen].sum(axis=1), work)
    out[chosen] = found
    answer = _figures(out, n, share, confidence)
    answer["first"] = (pairs.first - samples.groups[own] + 1).astype(np.float64)
    answer["second"] = np.where(pairs.second >= 0, pairs.second - samples.groups[own] + 1, 0)
    answer[REMARK] += NO_BASELINE * pairs.no_baseline
    answer[REMARK] += ALONE * ((n[:, 1] == 0) & ~pairs.no_baseline)
    return answer


def _figures(out: Values, n: Indices, share: float, confidence: float) -> dict[str, Values]:
    """All fields from the figures of the compiled loop."""
    roots, wins = out[:, ROOT : ROOT + 2], out[:, WINS]
    met = n[:, 1] > 0
    with np.errstate(invalid="ignore"):
        difference = np.where(met, out[:, MEAN] - out[:, MEAN + 1], NULL)
        pairs = n[:, 0].astype(np.float64) * n[:, 1]
        delta = np.where(met, (wins - pairs) / np.where(met, pairs, 1.0), NULL)
        more = np.where(met, wins / np.where(met, 2.0 * pairs, 1.0), NULL)
    lower, upper, p = yuen(difference, roots, n, share, confidence)
    rank_p, apart = brunner_munzel(wins, out[:, PLACEMENTS : PLACEMENTS + 2], n)
    too_few = met & (kept(n, share) < 2).any(axis=1)
    no_spread = met & (roots == 0.0).all(axis=1) & ~too_few
    had_nan = out[:, HAS_NAN] == 1.0
    remark = (
        HAD_NAN * had_nan
        + HAD_INFINITE * (out[:, HAS_INFINITE] == 1.0)
        + FEW * (met & (n.min(axis=1) < _FEW_VALUES))
        + TOO_FEW * too_few
        + NO_SPREAD * no_spread
        + APART * (apart & met)
        + EQUAL * (no_spread & ~had_nan & np.isnan(rank_p) & (n >= 2).all(axis=1))
    )
    return {
        "n": n[:, 0].astype(np.float64),
        "n_versus": n[:, 1].astype(np.float64),
        REMARK: remark.astype(np.float64),
        "trimmed_mean": out[:, MEAN],
        "trimmed_mean_versus": out[:, MEAN + 1],
        "difference": difference,
        "lower": lower,
        "upper": upper,
        "p_value": p,
        "effect": standardised(difference, roots, n, share),
        "hodges_lehmann_shift": out[:, SHIFT],
        "cliffs_delta": delta,
        "p_more": more,
        "brunner_munzel_p": rank_p,
    }


def _listed(rows: Indices, parts: list[dict[str, Values]]) -> Any:
    """The pairs of each group as an Arrow list of records."""
    import pyarrow as pa

    from midspread.udfs.binding.arrow_columns import arrow_view, numbers_or_null

    names = (*COUNTS, REMARK, *FIGURES)
    columns = [
        np.concatenate([part[name] for part in parts]) if parts else np.empty(0) for name in names
    ]
    arrays = [
        numbers_or_null(column) if name in FIGURES else arrow_view(column.astype(np.int64))
        for name, column in zip(names, columns, strict=True)
    ]
    records = pa.StructArray.from_arrays(arrays, names=list(names))
    return pa.ListArray.from_arrays(arrow_view(rows.astype(np.int32)), records)
