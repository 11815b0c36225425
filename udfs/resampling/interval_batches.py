"""Bootstrap intervals and jackknives of a batch of groups, whatever the statistic."""

from typing import TYPE_CHECKING, Final

import numpy as np

from midspread.udfs.declaring import NULL, Values, null_mask
from midspread.udfs.drivers import Indices
from midspread.udfs.grouped import Groups
from midspread.udfs.parameters import ParameterError
from midspread.udfs.resampling.intervals import intervals
from midspread.udfs.resampling.randomness import SEED
from midspread.udfs.resampling.statistics import Statistic, read_statistic

if TYPE_CHECKING:
    from midspread.udfs.binding.batches import Batch
    from midspread.udfs.resampling.draws import Drawn
    from midspread.udfs.resampling.samples import Samples

INTERVAL_FIELDS: Final = ("estimate", "lower", "upper", "se", "bias", "n", "resamples")
INTERVAL_TYPES: Final = {"n": "BIGINT", "resamples": "BIGINT"}
JACKKNIFE_FIELDS: Final = ("estimate", "bias", "se", "n")
JACKKNIFE_TYPES: Final = {"n": "BIGINT"}

EXACT_FOR_ACCELERATION: Final = 400
EXACT_FOR_JACKKNIFE: Final = 1000
"""Up to so many values each is left out in turn where there is no closed form."""


def interval_batch(batch: "Batch") -> dict[str, Values]:
    """The fields of a bootstrap interval for every group of a batch."""
    from midspread.udfs.resampling.draws import draw_all
    from midspread.udfs.resampling.left_out_figures import left_out_work

    groups = _groups(batch)
    out = {name: np.full(batch.size, NULL) for name in INTERVAL_FIELDS}
    out["n"][:] = batch.lengths
    confidence, seeds = batch.number("confidence"), batch.number(SEED.name)
    resamples, methods = batch.number("resamples"), batch.texts("method")
    texts = batch.texts("statistic")
    chosen: dict[tuple[str, str, float], list[int]] = {}
    for group, key in enumerate(zip(texts, methods, resamples.tolist(), strict=True)):
        chosen.setdefault(key, []).append(group)
    for (text, method, count), listed in chosen.items():
        statistic = read_statistic(batch.function.name, text, batch.function.columns)
        if method == "studentized":
            _refuse_without_error(batch.function.name, statistic)
        further = left_out_work(statistic) if method == "bca" else 0

        def use(
            members: Indices,
            drawn: "Drawn",
            statistic: Statistic = statistic,
            method: str = method,
            further: int = further,
        ) -> None:
            _keep_intervals(batch, statistic, method, further, confidence, members, drawn, out)

        draw_all(
            groups,
            np.array(listed, dtype=np.int64),
            statistic,
            int(count),
            seeds,
            batch.work,
            use,
            with_errors=method == "studentized",
            further=further,
        )
    return out


def _groups(batch: "Batch") -> Groups:
    """The batch's values; of pairs the first column with the second along."""
    return batch.groups(*batch.function.columns)


def _refuse_without_error(caller: str, statistic: Statistic) -> None:
    from midspread.udfs.resampling.ways_of_drawing import has_error

    if not has_error(statistic):
        raise ParameterError(
            f"{caller}: method 'studentized' needs a statistic with a standard error, which are "
            f"mean and trimmed_mean with a share below 0.5, got '{statistic.text}'; "
            f"write for example method := 'bca'."
        )


def _keep_intervals(
    batch: "Batch",
    statistic: Statistic,
    method: str,
    further: int,
    confidence: Values,
    members: Indices,
    drawn: "Drawn",
    out: dict[str, Values],
) -> None:
    """Turn a portion's draws into the fields of its groups."""
    from midspread.udfs.resampling.draws import errors_of
    from midspread.udfs.resampling.left_out_figures import left_out_figures

    samples = drawn.samples
    accelerations = errors = None
    if method == "bca":
        steps = drawn.draws.shape[1] + further
        figures = left_out_figures(
            statistic, samples, EXACT_FOR_ACCELERATION, steps, further, batch.work
        )
        # Where nothing can be left out, or infinite values are, nothing is known of it.
        accelerations = np.where(np.isnan(figures[:, 2]), 0.0, figures[:, 2])
    if method == "studentized":
        errors = errors_of(statistic, samples)
    found = intervals(
        method,
        samples.estimates,
        drawn.draws,
        confidence[members],
        accelerations=accelerations,
        errors=errors,
        draw_errors=drawn.errors if method == "studentized" else None,
    )
    out["estimate"][members] = samples.estimates
    for name, values in vars(found).items():
        out[name][members] = np.where(null_mask(samples.estimates), NULL, values)


def jackknife_batch(batch: "Batch") -> dict[str, Values]:
    """The fields of a jackknife for every group of a batch."""
    from midspread.udfs.resampling.draws import in_portions
    from midspread.udfs.resampling.left_out_figures import left_out_figures

    groups = _groups(batch)
    out = {name: np.full(batch.size, NULL) for name in JACKKNIFE_FIELDS}
    out["n"][:] = batch.lengths
    chosen: dict[str, list[int]] = {}
    for group, text in enumerate(batch.texts("statistic")):
        chosen.setdefault(text, []).append(group)
    for text, listed in chosen.items():
        statistic = read_statistic(batch.function.name, text, batch.function.columns)

        def use(members: Indices, samples: "Samples", statistic: Statistic = statistic) -> None:
            figures = left_out_figures(statistic, samples, EXACT_FOR_JACKKNIFE, 1, 1, batch.work)
            n = samples.lengths
            missing = null_mask(figures[:, 0].copy()) | null_mask(samples.estimates)
            out["estimate"][members] = samples.estimates
            out["bias"][members] = np.where(missing, NULL, (n - 1) * figures[:, 0])
            out["se"][members] = np.where(missing, NULL, np.sqrt((n - 1) / n * figures[:, 1]))

        in_portions(groups, np.array(listed), statistic, batch.work, use)
    return out
