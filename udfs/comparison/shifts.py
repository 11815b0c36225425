"""The Arrow function behind `decile_shifts`: two levels of each group, decile by decile."""

from typing import TYPE_CHECKING, Any, Final

import numpy as np

from midspread.udfs.comparison.resampled_deciles import DECILES, resample_loop
from midspread.udfs.comparison.samples import Samples, read_samples, work_off
from midspread.udfs.declaring import NULL, Values, helper
from midspread.udfs.drivers import Indices
from midspread.udfs.parameters import ParameterError

if TYPE_CHECKING:
    from midspread.udfs.binding.computing import Work

COUNTS: Final = ("n", "n_versus")
FIGURES: Final = (
    "estimate",
    "estimate_versus",
    "difference",
    "lower",
    "upper",
    "simultaneous_lower",
    "simultaneous_upper",
)
_RESULT: Final = (
    "STRUCT("
    + ", ".join([*(f'"{name}" BIGINT' for name in COUNTS), *(f'"{f}" DOUBLE' for f in FIGURES)])
    + ")[]"
)
_MOVES_AT_ONCE: Final = 1 << 22
_VALUES_A_JOB: Final = 1 << 20


@helper("_decile_shifts", _RESULT)
def decile_shifts_of(
    work: "Work", lists: Any, places: Any, resamples: Any, confidence: Any, seed: Any
) -> Any:
    """Nine records a group: the first level is subtracted from the second.

    Parameters
    ----------
    lists : Arrow array of lists of lists
        For each group the values of one or two levels.
    places : Arrow array of lists of whole numbers
        For each level its rank among the levels, whichever of them is subtracted.
    resamples, confidence, seed : Arrow arrays
        The same for all groups.
    """
    from midspread.udfs.binding.arrow_columns import numpy_view, single_chunk

    samples = read_samples(lists)
    count = len(samples.groups) - 1
    if count and int(samples.levels.max()) > 2:
        raise ParameterError(
            f"decile_shifts: label must have two levels in a group, got "
            f"{int(samples.levels.max())}; choose two in a query in parentheses, for example "
            f"tbl := '(FROM visits WHERE payment IN (…))'."
        )
    if not count:
        return _listed(samples.levels, {})
    drawn = int(single_chunk(resamples)[0].as_py())
    level = float(single_chunk(confidence)[0].as_py())
    key = int(single_chunk(seed)[0].as_py())
    own_places = numpy_view(single_chunk(places).values).astype(np.int64)
    most = max(2, _MOVES_AT_ONCE // (DECILES * drawn))
    parts = []
    for start, stop in samples.portions(most):
        first, last = samples.groups[start], samples.groups[stop]
        portion = samples.in_order(start, stop, work)
        estimates, moves = _resampled(portion, own_places[first:last], drawn, key, work)
        parts.append(_compared(portion, estimates, moves, level))
    joined = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
    return _listed(samples.levels, joined)


def _resampled(
    samples: Samples, places: Indices, resamples: int, seed: int, work: "Work"
) -> tuple[Values, Values]:
    """Deciles of each sample, and by how much each resample moves them."""
    lengths = samples.lengths
    jobs = []
    for s, (n, place) in enumerate(zip(lengths.tolist(), places.tolist(), strict=True)):
        step = max(16, min(resamples, _VALUES_A_JOB // n))
        jobs += [(s, place, r, min(r + step, resamples)) for r in range(0, resamples, step)]
    listed = np.array(jobs, dtype=np.int64).reshape(-1, 4)
    estimates = np.full((lengths.size, DECILES), NULL)
    moves = np.full((lengths.size, resamples, DECILES), np.nan)
    loop = resample_loop()

    def resample(start: int, stop: int) -> None:
        loop(
            samples.values,
            samples.starts,
            listed[start:stop],
            seed,
            estimates,
            moves,
            work.control.cells,
        )

    costs = lengths[listed[:, 0]] * (listed[:, 3] - listed[:, 2]) if jobs else lengths
    work_off(resample, costs, work)
    return estimates, moves


def _compared(
    samples: Samples, estimates: Values, moves: Values, confidence: float
) -> dict[str, Values]:
    """The records of each group with values, nine rows a group."""
    from scipy.special import ndtri

    levels, lengths = samples.levels, samples.lengths
    begin = samples.groups[:-1]
    pair = levels == 2
    groups = begin.size
    n = np.zeros((groups, 2))
    values = {name: np.full((groups, DECILES), NULL) for name in FIGURES}
    some = levels > 0
    n[some, 1] = lengths[begin[some]]
    values["estimate_versus"][some] = estimates[begin[some]]
    n[pair, 0] = lengths[begin[pair] + 1]
    values["estimate"][pair] = estimates[begin[pair] + 1]
    z = float(ndtri((1.0 + confidence) / 2.0))
    for g in np.flatnonzero(pair).tolist():
        with np.errstate(all="ignore"):
            difference = values["estimate"][g] - values["estimate_versus"][g]
            values["difference"][g] = difference
            if n[g].min() < 2:
                continue
            error, critical = _limits(moves[begin[g] + 1] - moves[begin[g]], confidence, z)
            for name, reach in (("", z), ("simultaneous_", critical)):
                for side, sign in (("lower", -1.0), ("upper", 1.0)):
                    limit = difference + sign * reach * error
                    values[name + side][g] = np.where(error == 0.0, NULL, limit)
    flat = {name: column[some].reshape(-1) for name, column in values.items()}
    flat["n"] = np.repeat(n[some, 0], DECILES)
    flat["n_versus"] = np.repeat(n[some, 1], DECILES)
    return flat


def _limits(moves: Values, confidence: float, z: float) -> tuple[Values, float]:
    """Bootstrap standard error of each decile's difference, and max-t's critical value."""
    error = np.std(moves, axis=0, ddof=1)
    if np.isnan(error).any() or not error.any():
        return error, np.nan
    t = np.abs(moves[:, error > 0.0] / error[error > 0.0]).max(axis=1)
    place = min(int(np.ceil(confidence * (t.size + 1))), t.size) - 1
    return error, max(z, float(np.partition(t, place)[place]))


def _listed(levels: Indices, columns: dict[str, Values]) -> Any:
    """The records of each group as an Arrow list."""
    import pyarrow as pa

    from midspread.udfs.binding.arrow_columns import arrow_view, numbers_or_null
    from midspread.udfs.grouped import row_numbers

    none = np.empty(0)
    arrays = [arrow_view(columns.get(name, none).astype(np.int64)) for name in COUNTS]
    arrays += [numbers_or_null(columns.get(name, none)) for name in FIGURES]
    records = pa.StructArray.from_arrays(arrays, names=[*COUNTS, *FIGURES])
    rows = row_numbers(np.where(levels > 0, DECILES, 0))
    return pa.ListArray.from_arrays(arrow_view(rows.astype(np.int32)), records)
