"""`choices_table`: a difference of two levels under every reasonable choice of method."""

from typing import Final

from midspread.udfs.declaring import Parameter, ParameterError, table_function
from midspread.udfs.resampling.randomness import SEED
from midspread.udfs.sensitivity.rules import RULES
from midspread.udfs.tables.comparing import CONFIDENCE, checked_number
from midspread.udfs.tables.relations import BY, joined, keys, quoted_name, quoted_text
from midspread.udfs.tables.two_levels import BASELINE, computed_by_group, share_of

_RE_EXPRESSIONS: Final = {"raw": 1.0, "log": 0.0, "sqrt": 0.5}
_ESTIMATORS: Final = Parameter(
    "estimators",
    "of the location: mean, median, trimmed_mean(share)",
    "['mean', 'median', 'trimmed_mean(0.1)', 'trimmed_mean(0.2)']",
)
_SCALES: Final = Parameter(
    "re_expressions", "scales the values may be on: raw, log, sqrt", "['raw', 'log', 'sqrt']"
)
_RULES: Final = Parameter(
    "rules",
    "for outlying values: none, fences, adjusted_fences, median_mad",
    "['none', 'fences', 'median_mad']",
)
_SHUFFLES: Final = Parameter(
    "shuffles", "how often labels are dealt out anew", default=200, low=1, high=1e6, whole=True
)
_OF_CHOICE: Final = (
    "n_baseline",
    "n_other",
    "estimate",
    "effect",
    "lower",
    "upper",
    "sign",
)
_OF_GROUP: Final = (
    "choices",
    "choices_left_out",
    "share_same_sign",
    "expected_same_sign",
    "share_excluding_zero",
    "expected_excluding_zero",
    "p_excluding_zero",
)
_FIELDS: Final = (
    *("baseline", "other", "re_expression", "rule", "estimator"),
    *_OF_CHOICE,
    "excludes_zero",
    *_OF_GROUP,
    "note",
)


@table_function(
    columns=("tbl", "value", "label"),
    parameters=(BY, BASELINE, _ESTIMATORS, _SCALES, _RULES, CONFIDENCE, _SHUFFLES, SEED),
    fields=_FIELDS,
    formula=(
        "estimate = difference of trimmed means of rung(value, 1, 0 or 0.5); effect = estimate / "
        "(median abs(value − median of its label) / 0.6745); interval: Yuen's, ∓ t · √(d1 + d2); "
        "for the median ∓ z · √(s1² + s2²), s = (x_(n−c+1) − x_(c)) / (2 z₀.₉₉₅), c = (n + 1)/2 − "
        "z₀.₉₉₅ √(n/4) to the nearest whole number, at least 1; p = (b + 1)/(shuffles + 1), b "
        "shuffles with as many intervals that exclude 0"
    ),
    source=(
        "Steegen, Tuerlinckx, Gelman & Vanpaemel 2016, Perspectives on Psychological Science 11, "
        "702–712; Simonsohn, Simmons & Nelson 2020, Nature Human Behaviour 4, 1208–1214; Yuen "
        "1974; McKean & Schrader 1984, Commun. Statist. Simul. Comput. 13, 751–773"
    ),
    breakdown="that of each choice: 0 for the mean under no rule, up to 0.5 for the median",
    cost="O(n log n) time, then O(n) a shuffle and re-expression; O(n) memory",
    example="SELECT * FROM choices_table('visits', 'dwell_s', 'payment', shuffles := 50)",
)
def choices_table(
    *,
    tbl: object,
    value: object,
    label: object,
    by: object,
    baseline: object,
    estimators: object,
    re_expressions: object,
    rules: object,
    confidence: object,
    shuffles: object,
    seed: object,
) -> str:
    """Whether a difference between two levels survives other reasonable choices of method.

    One row for each group and choice of re-expression, rule for outlying values and estimator,
    ordered by keys and as listed in the call. The shares are the same in every row of a group.

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
    estimators : list of text
        Of 'mean', 'median' and 'trimmed_mean(share)'.
    re_expressions : list of text
        Of 'raw', 'log' (rung 0) and 'sqrt' (rung 0.5). Where one would lose a value of a group,
        its choices are left out there and counted.
    rules : list of text
        Of 'none', 'fences' (1.5 fourth spreads beyond the fourths), 'adjusted_fences' and
        'median_mad' (3 mad_scale from the median), on the re-expressed values of both levels
        together, whatever their label. Limits without width leave every value in.
    confidence : number
        Of the intervals, between 0 and 1; for each choice by itself.
    shuffles : number
        How often the labels are dealt out anew over the values, for the whole grid at once.
    seed : number
        Chooses the random numbers; they depend on it and on the values, not on their order.

    Returns
    -------
    baseline, other : as the column label
        The level that is subtracted, and the one it is subtracted from.
    re_expression, rule, estimator : VARCHAR
        The choice.
    n_baseline, n_other : BIGINT
        Numbers of values that the rule leaves.
    estimate, lower, upper : DOUBLE
        The difference and its interval, in the unit of the re-expressed values; NULL limits where
        fewer than two values are kept on a side or no spread is left.
    effect : DOUBLE
        The estimate as a multiple of the robust scale of what the rule leaves, each value taken
        from its own label's median; comparable between choices.
    sign : BIGINT
        −1, 0 or 1.
    excludes_zero : BOOLEAN
        Whether the interval does.
    choices, choices_left_out : BIGINT
        How many choices the group has, and how many would have lost rows.
    share_same_sign, share_excluding_zero : DOUBLE
        Of the choices: those with the commoner sign (of + and −), and those whose interval
        excludes 0; a choice without an interval does not.
    expected_same_sign, expected_excluding_zero : DOUBLE
        Means of the same two over the shuffles: what they are when the label means nothing.
    p_excluding_zero : DOUBLE
        How likely so large a share_excluding_zero is when the label means nothing.
    note : VARCHAR
        Why a group has no figures, in words.

    Notes
    -----
    Choices share their data and mostly agree: under no effect nine in ten often have the same
    sign. Read share_same_sign against expected_same_sign, and judge by p_excluding_zero, not by
    how many intervals exclude 0. Its smallest value is 1 / (shuffles + 1), and as choices move
    together, labels without meaning make nearly all of them exclude 0 about once in 100 shuffles:
    it seldom falls far below 0.01, however strong the effect.

    This explores, it proves nothing: the grid holds the choices listed, not all there are, and
    other definitions of the rows matter as much. Shuffling takes rows for exchangeable under no
    effect: visits of one vehicle or one day are not, two levels that only differ in spread are
    not quite, and a p after a search through groups is optimistic. The rules look at both levels
    together, since cutting each by its own limits would make differences out of nothing. The
    median's interval is rough with many ties or below about 20 values a side.

    More than two levels in a group are an error; a group with one level, without the baseline,
    or whose every choice would lose rows, has one row without figures. A NaN makes the figures
    of its group NaN.

    References
    ----------
    Steegen, S., Tuerlinckx, F., Gelman, A. & Vanpaemel, W. (2016). Perspectives on Psychological
    Science 11, 702–712.
    Simonsohn, U., Simmons, J. P. & Nelson, L. D. (2020). Nature Human Behaviour 4, 1208–1214.
    Yuen, K. K. (1974). Biometrika 61, 165–170.
    McKean, J. W. & Schrader, R. M. (1984). Commun. Statist. Simul. Comput. 13, 751–773.
    """
    function = "choices_table"
    grouped = [quoted_name(name) for name in keys(function, by, _FIELDS)]
    shares = [share_of(function, "estimators", text) for text in _texts(_ESTIMATORS, estimators)]
    named = [_estimator(share) for share in shares]
    _check_distinct("estimators", named)
    scales = _chosen(_SCALES, re_expressions, tuple(_RE_EXPRESSIONS))
    cut = _chosen(_RULES, rules, RULES)
    level = checked_number(function, CONFIDENCE, confidence)
    shuffled = checked_number(function, _SHUFFLES, shuffles)
    start = checked_number(function, SEED, seed)
    arguments = (
        f"{[_RE_EXPRESSIONS[name] for name in scales]}::DOUBLE[], "
        f"{[RULES.index(rule) for rule in cut]}::BIGINT[], {shares}::DOUBLE[], "
        f"{level!r}::DOUBLE, {int(shuffled)}::BIGINT, {int(start)}::BIGINT"
    )
    pairs = computed_by_group(
        function, tbl, value, label, grouped, baseline, f"_choices_table({{}}, {arguments})"
    )
    figures = ", ".join(
        f"coalesce(_m.{name}, {name}) AS {name}" if name.startswith("n_") else f"_m.{name}"
        for name in _OF_CHOICE
    )
    shown = ", ".join(f"_m.{name}" for name in _OF_GROUP)
    per_scale, count = len(cut) * len(named), len(named)
    return f"""{pairs},
_midspread_rows AS (
    SELECT * EXCLUDE (_m), CASE WHEN _m_note IS NULL THEN _m_each END AS _m
    FROM (SELECT *, unnest(CASE WHEN _m_note IS NULL THEN _m ELSE _m[1:1] END) AS _m_each
          FROM _midspread_pairs)
)
SELECT {joined(grouped)}baseline, other,
    {_listed(scales)}[_m.choice // {per_scale} + 1] AS re_expression,
    {_listed(cut)}[_m.choice % {per_scale} // {count} + 1] AS rule,
    {_listed(named)}[_m.choice % {count} + 1] AS estimator,
    {figures}, _m.excludes_zero = 1 AS excludes_zero, {shown},
    CASE WHEN _m_note IS NOT NULL THEN _m_note
        WHEN _m.choices = 0 THEN 'every choice would lose rows'
        WHEN isnan(_m.share_same_sign) THEN 'NaN among the values, so every figure is NaN'
    END AS note
FROM _midspread_rows ORDER BY {joined(grouped)}baseline, _m.choice"""


def _texts(parameter: Parameter, given: object) -> list[object]:
    """A list that is not empty; one text stands for a list of one."""
    listed = given if isinstance(given, list) else [given]
    if not listed or given is None:
        raise ParameterError(
            f"choices_table: {parameter.name} must name at least one, got {given!r}; "
            f"write for example {parameter.name} := {parameter.default}."
        )
    return listed


def _chosen(parameter: Parameter, given: object, choices: tuple[str, ...]) -> list[str]:
    """Names among the choices, each once."""
    found = []
    for name in _texts(parameter, given):
        if not isinstance(name, str) or name.strip().lower() not in choices:
            shown = f"'{name}'" if isinstance(name, str) else repr(name)
            raise ParameterError(
                f"choices_table: {parameter.name} must be among {', '.join(choices)}, got "
                f"{shown}; write for example {parameter.name} := {parameter.default}."
            )
        found.append(name.strip().lower())
    _check_distinct(parameter.name, found)
    return found


def _check_distinct(parameter: str, listed: list[str]) -> None:
    for name in listed:
        if listed.count(name) > 1:
            raise ParameterError(
                f"choices_table: {parameter} names {name} twice; name each choice once, or it "
                f"counts double."
            )


def _estimator(share: float) -> str:
    if share == 0.0:
        return "mean"
    return "median" if share == 0.5 else f"trimmed_mean({share!r})"


def _listed(texts: list[str]) -> str:
    return f"[{', '.join(quoted_text(text) for text in texts)}]"
