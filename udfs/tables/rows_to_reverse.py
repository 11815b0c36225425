"""`rows_to_reverse`: how few rows carry the sign of a difference between two levels."""

from typing import Final

from midspread.udfs.declaring import Parameter, table_function
from midspread.udfs.sensitivity.reversing import HAD_NAN, INFINITE, LASTING, NO_DIFFERENCE
from midspread.udfs.tables.relations import BY, joined, keys, quoted_name, quoted_text
from midspread.udfs.tables.two_levels import BASELINE, computed_by_group, share_of

_STATISTIC: Final = Parameter(
    "statistic", "mean, median or trimmed_mean(share), of each level", "'mean'", kind="text"
)
_FIELDS: Final = (
    "baseline",
    "other",
    "n_baseline",
    "n_other",
    "difference",
    "rows_to_reverse",
    "share_of_rows",
    "difference_after",
    "removed_from_other",
    "other_lowest",
    "other_highest",
    "removed_from_baseline",
    "baseline_lowest",
    "baseline_highest",
    "note",
)
_REMARKS: Final = {
    HAD_NAN: "NaN among the values, so there is no difference",
    INFINITE: "infinite values leave no difference",
    NO_DIFFERENCE: "no difference to reverse",
    LASTING: "cannot be reversed while a row is left on each side",
}


@table_function(
    columns=("tbl", "value", "label"),
    parameters=(BY, BASELINE, _STATISTIC),
    fields=_FIELDS,
    formula=(
        "the least a + b such that the statistic of the higher level without its a largest values "
        "is below that of the lower level without its b smallest; two pointers over a and b, as "
        "both move one way only"
    ),
    source=(
        "the question: Broderick, Giordano & Meager 2020, arXiv:2011.14999 (approximate, for "
        "regressions); here exact, by the order of the values (Tukey & McLaughlin 1963 for the "
        "trimmed mean)"
    ),
    breakdown="itself a measure of it: the share of rows that turns the sign",
    cost="O(n log n) time, one sort a level; O(n) memory",
    example="SELECT * FROM rows_to_reverse('visits', 'dwell_s', 'payment', by := 'route')",
)
def rows_to_reverse(
    *, tbl: object, value: object, label: object, by: object, baseline: object, statistic: object
) -> str:
    """The fewest rows whose removal turns the sign of the difference between two levels, exactly.

    One row a group, ordered by the keys. A difference that a handful of rows out of thousands can
    turn is not one to report without looking at those rows.

    Parameters
    ----------
    tbl : text
        A table, view, CTE, file, glob, or a query in parentheses.
    value : text
        The column of measurements; any numeric type. Rows without a value are skipped.
    label : text
        The column with the two levels; any simple type. Rows without a label are skipped.
    by : list of text or text
        Columns whose values make the groups; none for one group.
    baseline : value of label
        Which level is subtracted; NULL for the smaller one of each group.
    statistic : text
        'mean', 'median' or 'trimmed_mean(share)' with a share from 0 to 0.5.

    Returns
    -------
    baseline, other : as the column label
        The level that is subtracted, and the one it is subtracted from.
    n_baseline, n_other : BIGINT
        Numbers of values.
    difference : DOUBLE
        The statistic of other minus that of baseline, in the unit of the value.
    rows_to_reverse : BIGINT
        The fewest rows to remove for a difference strictly of the other sign, at least one row
        being left on each side; NULL where there is no such set, as the note says.
    share_of_rows : DOUBLE
        rows_to_reverse of all n_baseline + n_other rows.
    difference_after : DOUBLE
        The difference once they are removed.
    removed_from_other, removed_from_baseline : BIGINT
        How many of them are of each level: the largest of the level that is higher, and the
        smallest of the lower one.
    other_lowest, other_highest, baseline_lowest, baseline_highest : DOUBLE
        The lowest and the highest value removed from each; NULL where none is. These and all
        values beyond them go; of rows tied at the inner end any will do.
    note : VARCHAR
        Why a figure is missing, in words.

    Notes
    -----
    Exact: no other set of that size or smaller turns the sign. The trimmed mean of the rows that
    are left cuts ⌊share · n⌋ of the n left from each tail. Of equally small sets the one that
    turns the difference farthest is given, then the one that takes more from the higher level. A
    difference within the rounding of the values themselves (2⁻⁵¹ of their mean size) counts as
    none: decimal fractions with equal means are a tie.

    The rows found are those the sign rests on. They are not wrong for that, and leaving them out
    to get the other sign is no analysis. Many rows needed do not make a difference real either:
    rows that depend on one another, or a mix of routes, mislead all of them at once. A group with
    one level alone, or without the baseline, has no figures; more than two levels in a group are
    an error.

    References
    ----------
    Broderick, T., Giordano, R. & Meager, R. (2020). arXiv:2011.14999.
    Tukey, J. W. & McLaughlin, D. H. (1963). Sankhyā A 25, 331–352.
    """
    function = "rows_to_reverse"
    grouped = [quoted_name(name) for name in keys(function, by, _FIELDS)]
    cut = share_of(function, "statistic", statistic)
    computation = f"_rows_to_reverse({{}}, {cut!r}::DOUBLE)"
    pairs = computed_by_group(function, tbl, value, label, grouped, baseline, computation)
    remarks = " ".join(
        f"WHEN {state} THEN {quoted_text(words)}" for state, words in _REMARKS.items()
    )
    figures = ", ".join(
        "_m.rows_to_reverse / (n_baseline + n_other) AS share_of_rows"
        if name == "share_of_rows"
        else f"_m.{name}"
        for name in _FIELDS[4:14]
    )
    return f"""{pairs},
_midspread_answers AS (
    SELECT * EXCLUDE (_m), CASE WHEN _m_note IS NULL THEN _m END AS _m FROM _midspread_pairs
)
SELECT {joined(grouped)}baseline, other, n_baseline, n_other, {figures},
    coalesce(_m_note, CASE _m.state {remarks} END) AS note
FROM _midspread_answers ORDER BY {joined(grouped)}baseline"""
