"""`value_profile`: what the values of each column are, before any estimate."""

from typing import Final

from midspread.udfs.declaring import Parameter, table_function
from midspread.udfs.tables.relations import (
    BY,
    column,
    joined,
    keys,
    names,
    quoted_name,
    quoted_text,
    relation,
)

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

# Stands in where no column is left, as the engine's own message would help nobody.
_NOTHING: Final = "_midspread_nothing"
_NO_COLUMNS: Final = (
    "value_profile: no column is left besides the keys and the position; name the columns to "
    "profile, for example columns := ['dwell_s']."
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
    group = f"GROUP BY {', '.join(aliases)}" if grouped else ""
    kept = "MATERIALIZED" if str(tbl).lstrip().startswith("(") else "NOT MATERIALIZED"
    carried = list(aliases)
    order = ""
    if ordering is not None:
        # Rows of equal position are told apart by their content: the order must not be chance.
        order = f"{ordering} AS _midspread_position, hash(_midspread_source) AS _midspread_row, "
        carried += ["_midspread_position", "_midspread_row"]
    if chosen:
        profiled = ", ".join(chosen)
    else:
        left_out = [*grouped, *([ordering] if ordering and ordering not in grouped else [])]
        profiled = f"{_all_but([*carried, *left_out])}, NULL AS {_NOTHING}"
    each = f"COLUMNS({_all_but(carried)})"
    figures = f"COLUMNS({_all_but(aliases)})"
    return f"""
WITH _midspread_source AS {kept} (SELECT * FROM {relation(function, tbl)}),
_midspread_chosen AS (
    SELECT {joined(carried)}{profiled} FROM (SELECT {named}{order}* FROM _midspread_source)
),
_midspread_names AS (
    SELECT column_name AS _midspread_column, column_type, row_number() OVER () AS _midspread_at
    FROM (DESCRIBE SELECT {each} FROM _midspread_chosen)
),
_midspread_wide AS (
    SELECT {joined(aliases)}_column_profile({each}, {each}) FROM _midspread_chosen {group}
),
_midspread_profiles AS (
    UNPIVOT _midspread_wide ON {figures} INTO NAME _midspread_column VALUE _midspread_p
),
_midspread_wide_texts AS (
    SELECT {joined(aliases)}_text_unless_number({each}, {each}) FROM _midspread_chosen
),
_midspread_texts AS (
    UNPIVOT _midspread_wide_texts ON {figures} INTO NAME _midspread_column VALUE _midspread_text
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
){_runs(aliases, each, figures) if ordering else ""}
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
WHERE _midspread_column <> '{_NOTHING}'
    OR CASE WHEN (SELECT count(*) FROM _midspread_names) = 1
        THEN error(concat({quoted_text(_NO_COLUMNS)}, _midspread_column[:0])) ELSE false END
ORDER BY {joined([f"_midspread_profiles.{alias}" for alias in aliases])}_midspread_at"""


def _runs(aliases: list[str], each: str, figures: str) -> str:
    """The relations that find the longest run of each column.

    A row that starts a run is numbered 2r, or 2r + 1 where the run is one of NULLs.
    """
    partition = f"PARTITION BY {', '.join(aliases)}" if aliases else ""
    return f""",
_midspread_starts AS (
    SELECT {joined(aliases)}CAST(
        CASE WHEN {each} IS DISTINCT FROM lag({each}) OVER _midspread_order THEN
            2 * row_number() OVER _midspread_order + CAST({each} IS NULL AS BIGINT)
        END AS DOUBLE)
    FROM _midspread_chosen WHERE _midspread_position IS NOT NULL
    WINDOW _midspread_order AS ({partition} ORDER BY _midspread_position, _midspread_row)
),
_midspread_wide_runs AS (
    SELECT {joined(aliases)}_run_of_column({figures})
    FROM _midspread_starts {f"GROUP BY {', '.join(aliases)}" if aliases else ""}
),
_midspread_runs AS (
    UNPIVOT _midspread_wide_runs ON {figures} INTO NAME _midspread_column VALUE _midspread_run
)"""


def _all_but(left_out: list[str]) -> str:
    return f"* EXCLUDE ({', '.join(left_out)})" if left_out else "*"


def _same(other: str, aliases: list[str], column_too: bool) -> str:
    """Whether a row of another relation belongs to the profile's group, NULL keys included."""
    conditions = [f"_midspread_profiles.{a} IS NOT DISTINCT FROM {other}.{a}" for a in aliases]
    if column_too:
        conditions.append(f"_midspread_profiles._midspread_column = {other}._midspread_column")
    return " AND ".join(conditions) or "true"
