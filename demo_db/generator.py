"""The generator: equips a DuckDB connection to produce the year's visits in SQL.

Nothing is drawn from random() or hash(): each figure of a visit is an arithmetic mix of the
visit's number and a salt of its own (`chance.sql`), so the same number of visits gives the same
rows whatever the threads, the machine or the engine's version.
"""

import math
from collections.abc import Iterable
from importlib.resources import files
from string import Template

import duckdb

from midspread.demo_db import town, truth

VISIT_COLUMNS = (
    *("visit", "day", "day_part", "route", "direction", "stop", "vehicle"),
    *("boardings", "alightings", "ramp_used", "payment", "dwell_s"),
)
TRUTH_COLUMNS = ("clean_dwell_s", "fault")

# One salt for each figure drawn: arbitrary 32-bit numbers, fixed for good.
SALTS = {
    "route": 0x5BD1E995,
    "direction": 0x1B873593,
    "stop": 0xCC9E2D51,
    "vehicle": 0x27D4EB2F,
    "dwell": 0x9E3779B1,
    "boardings": 0x85EBCA77,
    "alightings": 0xC2B2AE3D,
    "ramp": 0x165667B1,
    "layover": 0xD3A2646C,
    "layover_length": 0xFD7046C5,
    "stuck": 0xB55A4F09,
    "stuck_kind": 0x7F4A7C15,
    "stuck_length": 0x38495AB5,
    "missing": 0xE6546B64,
}

LOOKUPS: dict[str, tuple[str, Iterable[tuple[object, ...]]]] = {
    "larkmoor_route": (
        "route VARCHAR, name VARCHAR, depot_name VARCHAR, depot INTEGER, place INTEGER, "
        "length_km DOUBLE, stops INTEGER, taken INTEGER, upto INTEGER, log_spread DOUBLE, "
        "tap_factor DOUBLE, layover_share DOUBLE",
        tuple(town.route_rows()),
    ),
    "larkmoor_day_part": (
        "day_part VARCHAR, part_index INTEGER, taken INTEGER, upto INTEGER, usual_boardings DOUBLE",
        tuple(town.day_part_rows()),
    ),
    "larkmoor_median": (
        "route VARCHAR, day_part VARCHAR, median_s DOUBLE",
        tuple(town.median_rows()),
    ),
    "larkmoor_vehicle": (
        "vehicle VARCHAR, vehicle_index INTEGER, depot INTEGER, place INTEGER, "
        "depot_name VARCHAR, model VARCHAR, seats INTEGER, capacity INTEGER, "
        "in_service_since INTEGER, reader_fitted DATE",
        tuple(town.vehicle_rows()),
    ),
    "larkmoor_stop": (
        "stop VARCHAR, name VARCHAR, route VARCHAR, position INTEGER, is_end_stop BOOLEAN, "
        "has_shelter BOOLEAN, kerb_cm INTEGER",
        tuple(town.stop_rows()),
    ),
}


def equip(connection: duckdb.DuckDBPyConnection, visits: int) -> None:
    """Create the generator's temporary tables and macros on a connection.

    Afterwards ``FROM larkmoor_visits(from_day, to_day)`` yields the visits of those days with
    their truth (`TRUTH_COLUMNS`), in no particular order.

    Parameters
    ----------
    connection
        Any DuckDB connection; only its temporary catalogue is written.
    visits
        How many visits the whole year has.
    """
    connection.execute(_script("chance.sql"))
    for table, (columns, rows) in LOOKUPS.items():
        _create_lookup(connection, table, columns, rows)
    connection.execute(Template(_script("visits.sql")).substitute(_constants(visits)))


def create_truth_view(
    connection: duckdb.DuckDBPyConnection, visits: int, name: str = "visits_with_truth"
) -> None:
    """Create a temporary view of all visits with their clean dwell and what went wrong.

    Parameters
    ----------
    connection
        Any DuckDB connection; only its temporary catalogue is written.
    visits
        As given to `build`: the view then holds the same visits as the Parquet files.
    name
        The view's name.

    Notes
    -----
    `clean_dwell_s` is the dwell before any contamination, to 0.1 s. `fault` is NULL where
    nothing went wrong, else what decided the recorded value: 'missing', 'stuck at zero',
    'stuck open', 'layover', 'drift' or 'rounded'.
    """
    equip(connection, visits)
    quoted = '"' + name.replace('"', '""') + '"'
    first, last = f"DATE '{truth.YEAR}-01-01'", f"DATE '{truth.YEAR}-12-31'"
    connection.execute(
        f"CREATE OR REPLACE TEMP VIEW {quoted} AS FROM larkmoor_visits({first}, {last})"
    )


def _script(name: str) -> str:
    return files("midspread.demo_db").joinpath(name).read_text(encoding="utf-8")


def _create_lookup(
    connection: duckdb.DuckDBPyConnection,
    table: str,
    columns: str,
    rows: Iterable[tuple[object, ...]],
) -> None:
    rows = tuple(rows)
    marks = "(" + ", ".join("?" * len(rows[0])) + ")"
    connection.execute(f"CREATE OR REPLACE TEMP TABLE {table} ({columns})")
    connection.execute(
        f"INSERT INTO {table} VALUES {', '.join([marks] * len(rows))}",
        [value for row in rows for value in row],
    )


def _constants(visits: int) -> dict[str, str]:
    whole = {
        "visits": visits,
        "days_in_year": truth.DAYS_IN_YEAR,
        "weekday": truth.WEEKDAY_WEIGHT,
        "saturday": truth.SATURDAY_WEIGHT,
        "sunday": truth.SUNDAY_WEIGHT,
        "vehicles_per_depot": truth.VEHICLES_PER_DEPOT,
        "vehicles_per_route": truth.VEHICLES_PER_DEPOT // truth.ROUTES_PER_DEPOT,
        **{f"salt_{draw}": salt for draw, salt in SALTS.items()},
    }
    text = {
        "first_day": truth.FIRST_DAY.isoformat(),
        "outbound": truth.DIRECTIONS[0],
        "inbound": truth.DIRECTIONS[1],
        "cash_box": truth.CASH_BOX,
        "tap_reader": truth.TAP_READER,
        "drifting_vehicle": truth.DRIFTING_VEHICLE,
        "rounded_stop": truth.ROUNDED_STOP,
    }
    measured = {
        "stuck_cash_box": truth.STUCK_SHARE[truth.CASH_BOX],
        "stuck_tap_reader": truth.STUCK_SHARE[truth.TAP_READER],
        "stuck_at_zero_part": truth.STUCK_AT_ZERO_PART,
        "stuck_open_min_s": truth.STUCK_OPEN_MIN_S,
        "stuck_open_range_s": truth.STUCK_OPEN_RANGE_S,
        "clock_ceiling_s": truth.CLOCK_CEILING_S,
        "clock_step_s": truth.CLOCK_STEP_S,
        "layover_min_s": truth.LAYOVER_MIN_S,
        "layover_max_s": truth.LAYOVER_MAX_S,
        "drift_s_per_year": truth.DRIFT_S_PER_YEAR,
        "rounding_step_s": truth.ROUNDING_STEP_S,
        "missing_share": truth.MISSING_SHARE,
        "boardings_log_spread": truth.BOARDINGS_LOG_SPREAD,
        "boardings_correlation": truth.BOARDINGS_CORRELATION,
        "boardings_rest": math.sqrt(1 - truth.BOARDINGS_CORRELATION**2),
        "alightings_log_spread": truth.ALIGHTINGS_LOG_SPREAD,
        "alightings_correlation": truth.ALIGHTINGS_CORRELATION,
        "alightings_rest": math.sqrt(1 - truth.ALIGHTINGS_CORRELATION**2),
        "ramp_base": truth.RAMP_BASE,
        "ramp_growth": truth.RAMP_GROWTH,
        "ramp_most": truth.RAMP_MOST,
    }
    # with an exponent a literal is a DOUBLE; without one the engine would take it as a DECIMAL
    doubles = {name: f"{value:.17e}" for name, value in measured.items()}
    return {name: str(value) for name, value in whole.items()} | text | doubles
