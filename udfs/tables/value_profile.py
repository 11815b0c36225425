"""`value_profile`: what the values of each column are, before any estimate."""

from typing import Final

from midspread.udfs.declaring import Parameter, table_function
from midspread.udfs.tables.relations import BY, column, joined, keys, names, quoted_name, relation

_FIELDS: Final = (
    "column_name",
    "column_type",
    "n",
    "n_null",
    "n_nan",
    "n_infinite",
    "n_zero",
    "n_negative",
    "n_distinct",
    "most_frequent",
    "most_frequent_share",
    "longest_run",
    "suspected_sentinels",
    "n_duplicated_rows",
)


@table_function(
    columns=("tbl",),
    parameters=(
        Parameter("columns", "the columns to profile; all but the keys and position", "[]"),
        BY,
        Parameter("position", "the column that orders the rows, for longest_run", "NULL"),
    ),
    fields=_FIELDS,
    formula=(
        "counts; a suspected sentinel is a repeated number beyond the far fences (k = 3) of the "
        "other numbers, where hardly any of them lies as far out; see the notes"
    ),
    source="fences: Tukey 1977; the rule for sentinels: common practice, no source",
    breakdown="not an estimate; sentinels are found up to and beyond half of the rows",
    cost="O(n log n) time, one sort for each number column and group",
    example="SELECT * FROM value_profile('visits', columns := ['dwell_s', 'payment'])",
)
def value_profile(*, tbl: object, columns: object, by: object, position: object) -> str:
    """What the values of each column are: counts, the most frequent value, suspected codes.

    One row for each group and column, ordered by the keys and the order of the columns. n counts
    the values that are not NULL, NaN included; n_distinct leaves NULL out, too.
    most_frequent is given as text, the smallest where several are equally frequent, and its
    share is that of n. Columns that are no numbers have NULL in the numeric figures n_nan,
    n_infinite, n_zero, n_negative and suspected_sentinels.

    Parameters
    ----------
    tbl : text
        A table, view, CTE, file, glob, or a query in parentheses.
    columns : list of text or text
        The columns to profile, of any type; all but the keys and `position` when empty.
    by : list of text or text
        Columns whose values make the groups; none for one group.
    position : text
        The column that orders the rows of a group, such as a time or a running number.

    Notes
    -----
    longest_run is the greatest number of neighbouring rows with one value once the rows of the
    group are ordered by `position`; NULL without `position`. A NULL ends a run and is no run
    itself. Rows whose position is NULL stand nowhere and are left out; rows with one and the
    same position are put in an order that depends on their content alone.

    n_duplicated_rows counts the rows that repeat another row of the group in every column of
    the table, profiled or not: what would go if each were kept once. It is the same on every row
    of the group.

    suspected_sentinels lists numbers that may stand for something else, such as −999 for
    "missing", each with how often it occurs, at most 8. A value is suspected when it

    - occurs 3 times or more,
    - lies beyond the far fences, 3 fourth spreads beyond the fourths (where the fourths
      coincide, the eighths, sixteenths, … are taken),
    - makes up more than half of the values that lie more than half as far out from the median
      on its side, and
    - is at least 3 times as frequent as all values within 3 fourth spreads of it together.

    Fences and median come from the other values, of which at least 5 must be distinct; so a code
    in a large share of the rows does not hide itself. For what looks like a code (−1, −9, a row
    of nines such as 99 or −999.9, a limit of computer integers) 2 occurrences beyond the fences,
    3 distinct other values and a fifth of the values out there will do; and inside the fences it
    is suspected when it is the only negative value and occurs 3 times. Suspected is not proven:
    ask where the number comes from.

    Exactness: long integers and decimals are told apart to their last digit. Numbers of type
    BIGNUM are treated as text.

    References
    ----------
    Tukey, J. W. (1977). Exploratory Data Analysis. Addison-Wesley.
    """
    function = "value_profile"
    grouped = [quoted_name(name) for name in keys(function, by, _FIELDS)]
    chosen = [quoted_name(name) for name in names(function, "columns", columns)]
    ordering = None if position is None else column(function, "position", position)
    aliases = [f"_midspread_key_{i}" for i in range(1, len(grouped) + 1)]
    named = joined([f"{key} AS {alias}" for key, alias in zip(grouped, aliases, strict=True)])
    group = f"GROUP BY {', '.join(grouped)}" if grouped else ""
    kept = "MATERIALIZED" if str(tbl).lstrip().startswith("(") else "NOT MATERIALIZED"
    everything = _all_but([*grouped, *([ordering] if ordering else [])])
    return f"""
WITH _midspread_source AS {kept} (SELECT * FROM {relation(function, tbl)}),
_midspread_names AS (
    SELECT column_name AS _midspread_column, column_type, row_number() OVER () AS _midspread_at
    FROM (DESCRIBE SELECT {_each("{0}", chosen, everything)} FROM _midspread_source)
),
_midspread_wide AS (
    SELECT {named}{_each("_column_profile({0}, {0})", chosen, everything)}
    FROM _midspread_source {group}
),
_midspread_profiles AS (
    UNPIVOT _midspread_wide ON {_all_but(aliases)}
    INTO NAME _midspread_column VALUE _midspread_p
),
_midspread_wide_texts AS (
    SELECT {named}{_each("_text_unless_number({0}, {0})", chosen, everything)}
    FROM _midspread_source
),
_midspread_texts AS (
    UNPIVOT _midspread_wide_texts ON {_all_but(aliases)}
    INTO NAME _midspread_column VALUE _midspread_text
),
_midspread_text_counts AS (
    SELECT {joined(aliases)}_midspread_column, _midspread_text, count(*) AS _midspread_count
    FROM _midspread_texts GROUP BY ALL
),
_midspread_text_figures AS (
    SELECT {joined(aliases)}_midspread_column, count(*) AS _midspread_distinct,
        min({{count: -_midspread_count, text: _midspread_text}}) AS _midspread_most
    FROM _midspread_text_counts GROUP BY {joined(aliases)}_midspread_column
),
_midspread_rows AS (
    SELECT {named}count(*) AS _midspread_distinct_rows
    FROM (SELECT DISTINCT * FROM _midspread_source) {group}
){_runs(named, grouped, aliases, chosen, everything, ordering)}
SELECT {joined([f"_midspread_profiles.{a} AS {k}" for a, k in zip(aliases, grouped, strict=True)])}
    _midspread_column AS column_name, column_type, _midspread_p.n AS n,
    _midspread_p.n_rows - _midspread_p.n AS n_null,
    _midspread_p.counts.n_nan AS n_nan, _midspread_p.counts.n_infinite AS n_infinite,
    _midspread_p.counts.n_zero AS n_zero, _midspread_p.counts.n_negative AS n_negative,
    coalesce(_midspread_p.counts.n_distinct, _midspread_distinct, 0) AS n_distinct,
    coalesce(_midspread_p.counts.most_frequent, _midspread_most.text) AS most_frequent,
    CASE WHEN _midspread_p.n > 0 THEN
        coalesce(_midspread_p.counts.most_frequent_count, -_midspread_most.count)
        / _midspread_p.n END AS most_frequent_share,
    {"coalesce(_midspread_run, 0)" if ordering else "CAST(NULL AS BIGINT)"} AS longest_run,
    _midspread_p.counts.suspected_sentinels AS suspected_sentinels,
    _midspread_p.n_rows - _midspread_distinct_rows AS n_duplicated_rows
FROM _midspread_profiles
JOIN _midspread_names USING (_midspread_column)
LEFT JOIN _midspread_text_figures ON {_same("_midspread_text_figures", aliases, True)}
LEFT JOIN _midspread_rows ON {_same("_midspread_rows", aliases, False)}
{f"LEFT JOIN _midspread_runs ON {_same('_midspread_runs', aliases, True)}" if ordering else ""}
ORDER BY {joined([f"_midspread_profiles.{alias}" for alias in aliases])}_midspread_at"""


def _runs(
    named: str,
    grouped: list[str],
    aliases: list[str],
    chosen: list[str],
    everything: str,
    ordering: str | None,
) -> str:
    """The relations that find the longest run of each column; none without an order.

    Each row that starts a run is numbered 2r, or 2r + 1 where the run is one of NULLs.
    """
    if ordering is None:
        return ""
    start = (
        "CAST(CASE WHEN {0} IS DISTINCT FROM lag({0}) OVER _midspread_order "
        "THEN 2 * row_number() OVER _midspread_order + CAST({0} IS NULL AS BIGINT) END AS DOUBLE)"
    )
    partition = f"PARTITION BY {', '.join(grouped)}" if grouped else ""
    group = f"GROUP BY {', '.join(aliases)}" if aliases else ""
    longest = "_longest_run(list_append(list({0}) FILTER ({0} IS NOT NULL), 2.0 * count(*) + 2.0))"
    return f""",
_midspread_starts AS (
    SELECT {named}{_each(start, chosen, everything)} FROM _midspread_source
    WHERE {ordering} IS NOT NULL
    WINDOW _midspread_order AS ({partition} ORDER BY {ordering}, hash(_midspread_source))
),
_midspread_wide_runs AS (
    SELECT {joined(aliases)}{longest.format(_all_but(aliases))}
    FROM _midspread_starts {group}
),
_midspread_runs AS (
    UNPIVOT _midspread_wide_runs ON {_all_but(aliases)}
    INTO NAME _midspread_column VALUE _midspread_run
)"""


def _each(template: str, chosen: list[str], everything: str) -> str:
    """The template once for each chosen column, under the column's own name."""
    if not chosen:
        return template.format(everything)
    return ", ".join(f"{template.format(name)} AS {name}" for name in chosen)


def _all_but(left_out: list[str]) -> str:
    return f"COLUMNS(* EXCLUDE ({', '.join(left_out)}))" if left_out else "COLUMNS(*)"


def _same(other: str, aliases: list[str], column_too: bool) -> str:
    """Whether a row of another relation belongs to the profile's group, NULL keys included."""
    conditions = [f"_midspread_profiles.{a} IS NOT DISTINCT FROM {other}.{a}" for a in aliases]
    if column_too:
        conditions.append(f"_midspread_profiles._midspread_column = {other}._midspread_column")
    return " AND ".join(conditions) or "true"
