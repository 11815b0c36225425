"""`group_differences`: how the levels of a label differ, pair by pair."""

from typing import Any, Final

from midspread.udfs.declaring import Parameter, ParameterError, table_function
from midspread.udfs.tables.comparing import (
    CONFIDENCE,
    LEVEL,
    checked_number,
    is_level,
    known_baseline,
)
from midspread.udfs.tables.relations import (
    BY,
    column,
    joined,
    keys,
    quoted_name,
    quoted_text,
    relation,
)

_AGAINST: Final = Parameter(
    "against",
    "what each level is compared with: every other, all the rest together, or the baseline",
    "'each'",
    kind="text",
    choices=("each", "rest", "baseline"),
)
_BASELINE: Final = Parameter(
    "baseline",
    "the level that is subtracted; NULL for the smallest",
    "NULL",
    kind="level",
)
_SHARE: Final = Parameter(
    "share",
    "share of the values cut from each tail",
    default=0.2,
    low=0.0,
    high=0.5,
    high_open=True,
)
_FIELDS: Final = (
    "label",
    "versus",
    "n",
    "n_versus",
    "trimmed_mean",
    "trimmed_mean_versus",
    "difference",
    "lower",
    "upper",
    "effect",
    "p_value",
    "p_holm",
    "p_bh",
    "hodges_lehmann_shift",
    "cliffs_delta",
    "p_more",
    "brunner_munzel_p",
    "note",
)
# In the order of the bits of a remark; see `differences`.
_REMARKS: Final = (
    "one level alone, so there is nothing to compare",
    "the baseline has no values in this group",
    "NaN among the values, so every figure is NaN",
    "infinite values",
    "fewer than 10 values on a side",
    "fewer than 2 values kept on a side, so no interval and no p_value",
    "no spread is left on either side, so no interval, effect and p_value",
    "the two do not overlap, so brunner_munzel_p is the exact permutation p",
    "all values are equal, so no brunner_munzel_p",
)


@table_function(
    columns=("tbl", "value", "label"),
    parameters=(BY, _AGAINST, _BASELINE, _SHARE, CONFIDENCE),
    fields=_FIELDS,
    formula=(
        "difference of trimmed means ∓ t · √(d1 + d2), d = winsorized SSD / (h (h − 1)), Welch's "
        "degrees of freedom with h; effect = c · difference / pooled winsorized sd, c that sd on "
        "the standard normal (0.642 at share 0.2); shift = median of all differences; delta = "
        "P(more) − P(less); p_more = P(more) + P(equal)/2"
    ),
    source=(
        "Yuen 1974, Biometrika 61, 165–170; Algina, Keselman & Penfield 2005, Psychological "
        "Methods 10, 317–328; Hodges & Lehmann 1963; Cliff 1993, Psychological Bulletin 114, "
        "494–509; Brunner & Munzel 2000, Biometrical Journal 42, 17–25; Holm 1979; Benjamini & "
        "Hochberg 1995"
    ),
    breakdown="share for means, interval and effect; 0.29 for the shift",
    cost="O(n log n) time a pair, one sort a level; O(n) memory",
    example="SELECT * FROM group_differences('visits', 'dwell_s', 'payment', by := 'route')",
)
def group_differences(
    *,
    tbl: object,
    value: object,
    label: object,
    by: object,
    against: object,
    baseline: object,
    share: object,
    confidence: object,
) -> str:
    """By how much the levels of a label differ in each group, how surely, and how often.

    One row for each group and pair: what `label` has more than `versus`, which is subtracted.
    Against 'each', every pair once, the smaller level (or the baseline) as versus; against
    'rest', each level with all others of its group together, versus NULL; against 'baseline',
    each other level with the baseline. Ordered by keys, then levels.

    Parameters
    ----------
    tbl : text
        A table, view, CTE, file, glob, or a query in parentheses.
    value : text
        The column of measurements; any numeric type. Rows without a value are skipped.
    label : text
        The column whose values are compared; any simple type. Rows without a label are skipped.
    by : list of text or text
        Columns whose values make the groups; none for one group.
    against : text
        'each', 'rest' or 'baseline'. Against 'each' a group may have at most 200 levels.
    baseline : value of label
        Which level is subtracted; NULL for the smallest of the table. Not with 'rest'.
    share : number
        Share cut from each tail, from 0 to below 0.5; 0 compares means, as Welch's t test does.
    confidence : number
        Of the interval lower to upper, between 0 and 1; for each pair by itself.

    Returns
    -------
    label, versus : as the column label
        The pair; versus is NULL for the rest.
    n, n_versus : BIGINT
        Numbers of values.
    trimmed_mean, trimmed_mean_versus, difference : DOUBLE
        In the unit of the value; difference is the first minus the second.
    lower, upper, p_value : DOUBLE
        Yuen's interval and two-sided p for the difference.
    effect : DOUBLE
        The difference as a multiple of the spread; on normal data Cohen's d.
    p_holm, p_bh : DOUBLE
        p_value adjusted over all rows of this call's answer, before any WHERE around it: after
        Holm for the chance of a single false alarm, after Benjamini & Hochberg for their share.
    hodges_lehmann_shift : DOUBLE
        Median of all differences between a value of label and one of versus; exact.
    cliffs_delta, p_more : DOUBLE
        How often a value of label is above one of versus: P(more) − P(less), from −1 to 1, and
        P(more) + P(equal)/2, from 0 to 1.
    brunner_munzel_p : DOUBLE
        Two-sided p for p_more = 1/2, without adjustment.
    note : VARCHAR
        What to be wary of, in words.

    Notes
    -----
    At millions of rows every test rejects: look at the effect. A p after a search is
    optimistic, and rows must be independent: visits of one vehicle or one day are not, and then
    intervals are too short. Nothing here says why two levels differ.

    Where the samples do not overlap the variance behind brunner_munzel_p is 0; the exact
    permutation p of that outcome, 2 / C(n + n_versus, n), stands in and the note says so. Where
    no spread is left after trimming, or fewer than 2 values are kept, interval and p_value are
    NULL. A group with one level, or without the baseline, has a row a level with no figures.

    References
    ----------
    Yuen, K. K. (1974). Biometrika 61, 165–170.
    Algina, J., Keselman, H. J. & Penfield, R. D. (2005). Psychological Methods 10, 317–328.
    Hodges, J. L. & Lehmann, E. L. (1963). Ann. Math. Statist. 34, 598–611.
    Cliff, N. (1993). Psychological Bulletin 114, 494–509.
    Brunner, E. & Munzel, U. (2000). Biometrical Journal 42, 17–25.
    Holm, S. (1979). Scandinavian Journal of Statistics 6, 65–70.
    Benjamini, Y. & Hochberg, Y. (1995). J. Royal Statist. Soc. B 57, 289–300.
    """
    function = "group_differences"
    grouped = [quoted_name(name) for name in keys(function, by, _FIELDS)]
    mode = _AGAINST.check_text(function, against)
    if mode == "rest" and baseline is not None:
        raise ParameterError(
            f"{function}: baseline cannot go with against := 'rest', where all others together "
            f"are subtracted; write for example against := 'baseline'."
        )
    cut = checked_number(function, _SHARE, share)
    level = checked_number(function, CONFIDENCE, confidence)
    measured = column(function, "value", value)
    collected = f"_numbers({measured}, {quoted_text(function)}, {quoted_text(str(value))})"
    labelled = column(function, "label", label)
    group = f"GROUP BY {', '.join(grouped)}" if grouped else ""
    order = "_m_baseline DESC, " + LEVEL
    known = known_baseline(function, label, baseline)
    return f"""
WITH _midspread_source AS (SELECT * FROM {relation(function, tbl)}),
_midspread_levels AS (
    SELECT {joined(grouped)}{labelled} AS {LEVEL}, count({measured}) AS _m_n,
        {collected} AS _m_values
    FROM _midspread_source WHERE {labelled} IS NOT NULL
    GROUP BY {joined(grouped)}{labelled} HAVING _m_n > 0
),
_midspread_marked AS (
    SELECT *, {_baseline_mark(function, mode, baseline)} AS _m_baseline FROM _midspread_levels
),
_midspread_groups AS (
    SELECT {joined(grouped)}list({LEVEL} ORDER BY {order}) AS _m_levels,
        bool_or(_m_baseline) AS _m_has_baseline,
        _group_differences(list(_m_values ORDER BY {order}), bool_or(_m_baseline),
            {quoted_text(mode)}, {cut!r}::DOUBLE, {level!r}::DOUBLE) AS _m_pairs
    FROM _midspread_marked {group}
),
_midspread_pairs AS (
    SELECT {joined(grouped)}_m_levels, _m_has_baseline, unnest(_m_pairs) AS _m
    FROM _midspread_groups
),
_midspread_ranked AS (
    SELECT *, CASE WHEN isnan(_m.p_value) THEN NULL ELSE _m.p_value END AS _m_p,
        count(_m_p) OVER () AS _m_tests,
        row_number() OVER (ORDER BY _m_p NULLS LAST) AS _m_rank
    FROM _midspread_pairs
)
SELECT {joined(grouped)}{known.format("_m_levels[_m.first]")} AS label,
    _m_levels[nullif(_m.second, 0)] AS versus, _m.n, _m.n_versus, _m.trimmed_mean,
    _m.trimmed_mean_versus, _m.difference, _m.lower, _m.upper, _m.effect, _m.p_value,
    CASE WHEN _m_p IS NULL THEN _m.p_value ELSE least(1.0, max(_m_p * (_m_tests - _m_rank + 1))
        OVER (ORDER BY _m_p NULLS LAST
              RANGE BETWEEN UNBOUNDED PRECEDING AND CURRENT ROW)) END AS p_holm,
    CASE WHEN _m_p IS NULL THEN _m.p_value ELSE least(1.0, min(_m_p * _m_tests / _m_rank)
        OVER (ORDER BY _m_p DESC NULLS LAST
              RANGE BETWEEN UNBOUNDED PRECEDING AND CURRENT ROW)) END AS p_bh,
    _m.hodges_lehmann_shift, _m.cliffs_delta, _m.p_more, _m.brunner_munzel_p,
    concat_ws('; ', {_remarks()}) AS note
FROM _midspread_ranked ORDER BY {joined(grouped)}_m.first, _m.second"""


def _baseline_mark(function: str, mode: str, baseline: Any) -> str:
    """Whether a level is the baseline, as SQL."""
    if baseline is not None:
        return is_level(function, baseline)
    return f"{LEVEL} = min({LEVEL}) OVER ()" if mode == "baseline" else "false"


def _remarks() -> str:
    return ", ".join(
        f"CASE WHEN _m.remark & {1 << bit} > 0 THEN {quoted_text(words)} END"
        for bit, words in enumerate(_REMARKS)
    )
