"""What the tour shows: plain words and the SQL that goes with them.

Every query runs in the demo's folder, with the small warehouse attached under its name.
"""

from dataclasses import dataclass
from typing import Final

WAREHOUSE: Final = "warehouse"


@dataclass(frozen=True)
class Step:
    """One step of the tour.

    Attributes
    ----------
    title : str
        What is asked.
    words : str
        What to know before looking at the answer.
    sql : str
        The query, as one would type it.
    lesson : str
        What the answer says, true of the demo at any size.
    """

    title: str
    words: str
    sql: str
    lesson: str


MEAN_AND_ROBUST: Final = """\
SELECT route,
       count(dwell_s)             AS n,
       avg(dwell_s)               AS mean,
       trimmed_mean(dwell_s, 0.1) AS trimmed_mean,
       stddev(dwell_s)            AS sd,
       mad_scale(dwell_s)         AS mad_scale
FROM 'dwell/*.parquet'
GROUP BY route
ORDER BY trimmed_mean DESC"""

MEAN_AND_ROBUST_AGAIN: Final = """\
-- slowest first
select route, count(dwell_s) AS n, avg(dwell_s) AS mean,
       trimmed_mean(dwell_s, 0.1) AS trimmed_mean,
       stddev(dwell_s) AS sd, mad_scale(dwell_s) AS mad_scale
from 'dwell/*.parquet' group by route order by trimmed_mean desc"""

STEPS: Final = (
    Step(
        "What the values are, before any estimate",
        "Dwell is how long a bus stands at a stop, in seconds and tenths. Look for missing values, "
        "for zeros, and for one value repeated where none should repeat.",
        """\
SELECT stop, n, n_null, n_zero, n_distinct,
       most_frequent, most_frequent_share
FROM value_profile('dwell/*.parquet', columns := 'dwell_s', by := 'stop')
ORDER BY most_frequent_share DESC
LIMIT 5""",
        "At L6-08 somebody rounds to five seconds. And zeros: no bus stops for no time at all, so "
        "clocks got stuck.",
    ),
    Step(
        "The mean beside the mean of the middle part",
        "trimmed_mean cuts a tenth of the values from each end and averages the rest; mad_scale "
        "is a spread that wild values cannot move, equal to the sd on normal data.",
        MEAN_AND_ROBUST,
        "A few stuck clocks inflate the mean, and the sd many times over; the robust figures hold.",
    ),
    Step(
        "How much has to be cut",
        "The same mean for route L3, cutting more and more. Where it still moves, wild values "
        "decide it; where it has settled, the middle does.",
        """\
SELECT share, n_kept, trimmed_mean, se
FROM trim_path('dwell/*.parquet', 'dwell_s', by := 'route')
WHERE route = 'L3'""",
        "Cutting a tenth from each end does most of it, and se, the standard error, shrinks more "
        "than twentyfold.",
    ),
    Step(
        "Every route at every time of the day",
        "robust_summary gives one row a group with two dozen figures; here a few of them, for the "
        "slowest groups. Beyond the fences lie values that deserve a look, not wrong ones.",
        """\
SELECT route, day_part, n, median, trimmed_mean_10,
       mad_scale, fence_upper, n_outside
FROM robust_summary('dwell/*.parquet', 'dwell_s',
                    by := ['route', 'day_part'])
ORDER BY trimmed_mean_10 DESC
LIMIT 8""",
        "The Schools Circular, L7, stands out in the afternoon, when the pupils leave all at once.",
    ),
    Step(
        "One vehicle among 120",
        "How much longer each visit took than its route's trimmed mean (OVER works on every "
        "function), then what is typical of each vehicle, joined to the warehouse.",
        """\
WITH visits AS (
    SELECT vehicle,
           dwell_s - trimmed_mean(dwell_s, 0.1) OVER (PARTITION BY route)
               AS excess_s
    FROM 'dwell/*.parquet'
)
SELECT vehicle, model, depot, count(excess_s) AS n,
       trimmed_mean(excess_s, 0.1) AS excess_s
FROM visits JOIN warehouse.vehicles USING (vehicle)
GROUP BY ALL
ORDER BY excess_s DESC
LIMIT 5""",
        "V158 is out by itself: its clock drifts, a little more every day.",
    ),
    Step(
        "Tap readers against cash boxes",
        "FILTER works as it does on avg: the trimmed mean with each way of paying.",
        """\
SELECT route,
       trimmed_mean(dwell_s) FILTER (payment = 'cash box')   AS cash_box,
       trimmed_mean(dwell_s) FILTER (payment = 'tap reader') AS tap_reader,
       tap_reader / cash_box                                 AS ratio
FROM 'dwell/*.parquet'
GROUP BY route
ORDER BY ratio""",
        "Readers save a tenth to a fifth on most routes, and on L9 nothing at all.",
    ),
    Step(
        "How sure that is",
        "Visits of one vehicle hang together, so vehicles are what is resampled: each one's ratio "
        "after its reader was fitted to before, then an interval for their trimmed mean, and the "
        "share of random signs that would show as much (a permutation test of no change).",
        """\
WITH vehicles AS (
    SELECT route, vehicle,
           trimmed_mean(dwell_s, 0.1) FILTER (payment = 'tap reader')
           / trimmed_mean(dwell_s, 0.1) FILTER (payment = 'cash box')
               AS ratio
    FROM 'dwell/*.parquet'
    GROUP BY route, vehicle
)
SELECT route, i.n AS vehicles,
       i.estimate AS ratio, i.lower, i.upper, p_value
FROM (
    SELECT route,
           bootstrap_interval(ratio, 'trimmed_mean(0.1)') AS i,
           sign_flip_test(ln(ratio)).p_value              AS p_value
    FROM vehicles
    GROUP BY route
)
ORDER BY ratio""",
        "Most intervals lie below 1, with enough visits all but one. That of L9 holds 1, and "
        "chance alone would do as much.",
    ),
    Step(
        "The scale on which dwell behaves",
        "Every rung of the ladder of powers for one route in June, stuck clocks left out: 0 is the "
        "logarithm, 1 the seconds as they are. A medcouple near 0 says that both sides of the "
        "median are alike.",
        """\
SELECT power, skewness, medcouple, normal_plot_corr, best, expression
FROM power_ladder(
    '(FROM ''dwell/2031-06.parquet'' WHERE route = ''L2''
                                     AND dwell_s BETWEEN 0.1 AND 3600)',
    'dwell_s')""",
        "On the logarithm, or next to it, the medcouple is near 0, though layovers still drag the "
        "skewness. The last column is what to paste into a query of the warehouse.",
    ),
    Step(
        "Which stop rounds, which vehicle moves its routes",
        "heaping finds the grid that values sit on, leave_one_out what each route's trimmed mean "
        "would be without each of its vehicles.",
        """\
SELECT 'a grid of ' || step || ' s' AS what, stop AS found
FROM heaping('dwell/*.parquet', 'dwell_s', by := 'stop')
WHERE step > 0.1
UNION ALL
SELECT 'moves ' || count(*) || ' routes most', unit
FROM leave_one_out('dwell/*.parquet', 'dwell_s', 'vehicle',
                   by := 'route')
WHERE rank = 1
GROUP BY unit HAVING count(*) > 2""",
        "L6-08 again, and V158, whose clock drifts. Flagged does not mean wrong; here it is.",
    ),
    Step(
        "Does the readers' saving hold",
        "Thirty-six reasonable ways to compare the two ways of paying: four estimators, three "
        "scales, three rules for wild values; clocks stuck at zero are left out. Beside the share "
        "of choices that exclude zero stands what shuffled labels would give.",
        """\
SELECT route, any_value(choices) AS choices,
       any_value(share_same_sign)         AS same_sign,
       any_value(share_excluding_zero)    AS excluding_zero,
       any_value(expected_excluding_zero) AS by_chance
FROM choices_table(
    '(FROM ''dwell/2031-09.parquet''
      WHERE dwell_s > 0 AND route IN (''L2'', ''L9'', ''L10''))',
    'dwell_s', 'payment', by := 'route', shuffles := 100)
GROUP BY route
ORDER BY excluding_zero DESC""",
        "On L2 and L10 the choices point the same way, and with enough visits nearly all exclude "
        "zero. On L9 hardly more of them do than by chance.",
    ),
    Step(
        "Each route with a limit of its own",
        "A parameter may differ by group. On L3 layovers were booked as dwell, always at the upper "
        "end, so more is cut there.",
        """\
WITH limits(route, share) AS (
    VALUES ('L1', 0.05), ('L3', 0.25), ('L9', 0.1)
)
SELECT name, share,
       trimmed_mean(dwell_s, share)    AS trimmed_mean,
       trimmed_mean_se(dwell_s, share) AS se
FROM 'dwell/*.parquet'
JOIN limits USING (route)
JOIN warehouse.routes USING (route)
GROUP BY name, share
ORDER BY name""",
        "Three routes, three shares, one query.",
    ),
    Step(
        "Asked again",
        "The second question once more, typed in another way. Nothing it rests on has changed.",
        MEAN_AND_ROBUST_AGAIN,
        "The answer was kept; any change to the files would have it computed anew.",
    ),
)

# Command lines to copy at the end; the folder is the demo's.
NEXT: Final = (
    """midspread query "FROM robust_summary('dwell/*.parquet', 'dwell_s', by := 'stop')" """
    "--out stops.xlsx",
    """midspread query --attach warehouse=warehouse.duckdb "SELECT name, trimmed_mean(dwell_s) """
    """FROM 'dwell/*.parquet' JOIN warehouse.routes USING (route) GROUP BY name\"""",
    "midspread show warehouse.duckdb",
    "midspread functions outlier",
)
