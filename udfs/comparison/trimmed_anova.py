"""`trimmed_anova`: whether the trimmed means of several levels differ at all."""

from typing import TYPE_CHECKING, Final

import numpy as np

from midspread.udfs.comparison.inference import kept
from midspread.udfs.declaring import NULL, Parameter, Values, batch_aggregate
from midspread.udfs.drivers import Indices, driver
from midspread.udfs.grouped import Groups, Task, row_numbers, run

if TYPE_CHECKING:
    from midspread.udfs.binding.batches import Batch

SHARE: Final = Parameter(
    "share",
    "share of the values cut from each tail",
    default=0.2,
    low=0.0,
    high=0.5,
    high_open=True,
)


@batch_aggregate(
    family="comparison",
    columns=("x", "label"),
    keys=("label",),
    parameters=(SHARE,),
    fields=("f", "df1", "df2", "p_value"),
    formula=(
        "w = 1 / d, d = winsorized SSD / (h (h − 1)), U = Σ w, m = Σ w t / U of the trimmed means "
        "t; f = Σ w (t − m)² / (J − 1) / (1 + 2 (J − 2) A / (J² − 1)), A = Σ (1 − w/U)² / (h − 1); "
        "df1 = J − 1, df2 = (J² − 1) / (3 A)"
    ),
    source=(
        "Welch 1951, Biometrika 38, 330–336; Wilcox 2017, Introduction to Robust Estimation and "
        "Hypothesis Testing, 4th ed., Academic Press"
    ),
    breakdown="share, in each level",
    cost="O(n log n) time, O(n) memory",
    smallest_n=2,
    example="trimmed_anova(dwell_s, payment)",
)
def trimmed_anova(batch: "Batch") -> dict[str, Values]:
    """Whether the trimmed means of the levels of a label differ, spreads being unequal.

    Parameters
    ----------
    x : DOUBLE
        The values; independent observations are assumed.
    label : any simple type
        Which level each value belongs to; rows without one are skipped.
    share : float
        Share cut from each tail of every level, from 0 to below 0.5; 0 is Welch's test of means.

    Returns
    -------
    f, df1, df2 : DOUBLE
        Welch's statistic and its degrees of freedom; df1 is the number of levels that took
        part, less one.
    p_value : DOUBLE
        How often F with these degrees of freedom is that large.

    Notes
    -----
    Levels of which fewer than two values are kept are left out. The fields are NULL where fewer
    than two levels are left or where a level has no spread left after trimming, as its weight
    would have no bound. With two levels f is the square of Yuen's t. At millions of rows every
    test rejects: look at the differences themselves with group_differences. Rows must be
    independent: visits of one vehicle or one day are not, and p is then too small. A p after a
    search is optimistic.

    References
    ----------
    Welch, B. L. (1951). Biometrika 38, 330–336.
    Wilcox, R. R. (2017). Introduction to Robust Estimation and Hypothesis Testing, 4th ed.
    """
    groups, owner = _by_level(batch)
    share = batch.number("share")
    n = groups.lengths
    means, errors = _trimmed(groups, np.ascontiguousarray(share[owner]), batch)
    h = kept(n, share[owner])
    part = h >= 2
    return _welch(owner[part], means[part], errors[part], h[part].astype(np.float64), batch.size)


def _by_level(batch: "Batch") -> tuple[Groups, Indices]:
    """The values of each level of each group as groups of their own, and whose each is."""
    codes = batch.keys("label").codes
    owner = np.repeat(np.arange(batch.size), batch.lengths)
    first, last = int(batch.offsets[0]), int(batch.offsets[-1])
    levels = int(codes.max(initial=0)) + 1
    cell = owner * levels + codes[first:last]
    # A narrow type is sorted by counting.
    order = np.argsort(cell.astype(np.min_scalar_type(batch.size * levels)), kind="stable")
    cells, counts = np.unique(cell, return_counts=True)
    values = batch.numbers("x")[first:last][order]
    return Groups(values, row_numbers(counts)), cells // levels


def _trimmed(groups: Groups, share: Values, batch: "Batch") -> tuple[Values, Values]:
    """Trimmed mean of each level and its standard error, by the functions of these names."""
    from midspread.udfs.catalogue import functions

    count = len(groups.offsets) - 1
    out = np.full((count, 2), NULL)
    parameters = share[np.newaxis, :] if count else np.zeros((1, 1))
    tasks = []
    for column, name in enumerate(("trimmed_mean", "trimmed_mean_se")):
        function = functions()[name]
        tasks.append(Task(driver(function), parameters, function.smallest_n, column))
    rows = row_numbers(np.ones(count, dtype=np.int64))
    run(groups, tasks, out, rows, batch.work.control, batch.work.threads)
    return out[:, 0], out[:, 1]


def _welch(
    owner: Indices, means: Values, errors: Values, h: Values, count: int
) -> dict[str, Values]:
    """Welch's test for each group; the levels of a group stand together."""
    from scipy.special import fdtrc

    levels = np.bincount(owner, minlength=count).astype(np.float64)

    def total(numbers: Values) -> Values:
        return np.bincount(owner, weights=numbers, minlength=count).astype(np.float64)

    with np.errstate(all="ignore"):
        smallest = np.full(count, np.inf)
        np.minimum.at(smallest, owner, errors)
        # Weights relative to the largest, and means from one inside: no digit is lost.
        weight = (smallest[owner] / errors) ** 2
        origin = np.zeros(count)
        origin[owner] = means
        apart = means - origin[owner]
        all_weights = total(weight)
        centre = total(weight * apart) / all_weights
        between = total(((apart - centre[owner]) / errors) ** 2) / (levels - 1.0)
        uneven = total((1.0 - weight / all_weights[owner]) ** 2 / (h - 1.0))
        f = between / (1.0 + 2.0 * (levels - 2.0) * uneven / (levels**2 - 1.0))
        df1, df2 = levels - 1.0, (levels**2 - 1.0) / (3.0 * uneven)
        p = fdtrc(df1, df2, f)
    missing = (levels < 2) | (smallest == 0.0)
    spoilt = np.isnan(total(means) + total(errors)) & (levels >= 2)
    return {
        name: np.where(spoilt, np.nan, np.where(missing, NULL, numbers))
        for name, numbers in (("f", f), ("df1", df1), ("df2", df2), ("p_value", p))
    }
