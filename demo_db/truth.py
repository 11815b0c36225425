"""What is true of Larkmoor Transit's buses: every constant of the demo in one place.

The generator's SQL and the tests are both derived from this module, so a figure cannot be true
in one and stale in the other. The town, its routes and its stops are invented.
"""

import datetime as dt
from dataclasses import dataclass
from math import exp, log
from statistics import NormalDist

YEAR = 2031
FIRST_DAY = dt.date(YEAR, 1, 1)
DAYS_IN_YEAR = 365
CASH_BOX = "cash box"
TAP_READER = "tap reader"
DIRECTIONS = ("outbound", "inbound")


@dataclass(frozen=True)
class Route:
    """A route and the truth about its dwell times.

    Parameters
    ----------
    median_s
        Median dwell at midday with a cash box, in seconds.
    log_spread
        Standard deviation of the natural logarithm of the clean dwell times.
    tap_factor
        What a tap reader multiplies every dwell by; 1 where it changes nothing.
    layover_share
        Share of the visits to the route's two end stops whose layover was booked as dwell.
    visit_percent
        The route's share of all visits, in whole per cent.
    """

    route: str
    name: str
    depot: str
    length_km: float
    stops: int
    visit_percent: int
    median_s: float
    log_spread: float
    tap_factor: float
    layover_share: float


@dataclass(frozen=True)
class DayPart:
    """A part of the day: its share of a day's visits, dwell factor and usual boardings."""

    name: str
    visit_percent: int
    factor: float
    boardings: float


ROUTES = (
    Route("L1", "Harbour Loop", "Quay Yard", 9.4, 14, 12, 19.0, 0.45, 0.84, 0.06),
    Route("L2", "Fish Market to Infirmary", "Quay Yard", 11.8, 18, 12, 22.0, 0.48, 0.80, 0.05),
    Route("L3", "Ferry Steps Shuttle", "Quay Yard", 4.1, 8, 8, 14.0, 0.40, 0.88, 0.30),
    Route("L4", "Quay to Ropewalk", "Quay Yard", 7.7, 12, 7, 17.0, 0.44, 0.86, 0.08),
    Route("L5", "Fell Road", "Fell Yard", 13.2, 20, 9, 18.0, 0.46, 0.85, 0.04),
    Route("L6", "Upper Larkmoor", "Fell Yard", 10.5, 16, 10, 20.0, 0.45, 0.82, 0.06),
    Route("L7", "Schools Circular", "Fell Yard", 8.9, 13, 7, 16.0, 0.50, 0.90, 0.03),
    Route("L8", "Quarry Villages", "Fell Yard", 17.6, 17, 5, 15.0, 0.52, 0.87, 0.10),
    Route("L9", "Mill Lane", "Mill Yard", 6.8, 11, 9, 21.0, 0.47, 1.00, 0.05),
    Route("L10", "Weavers to College", "Mill Yard", 9.9, 15, 9, 23.0, 0.46, 0.81, 0.06),
    Route("L11", "Market Cross", "Mill Yard", 5.6, 10, 7, 18.0, 0.75, 0.83, 0.02),
    Route("L12", "Moor Edge", "Mill Yard", 15.3, 19, 5, 13.0, 0.49, 0.89, 0.07),
)
ROUTE_BY_CODE = {route.route: route for route in ROUTES}
DEPOTS = ("Quay Yard", "Fell Yard", "Mill Yard")
ROUTES_PER_DEPOT = 4

DAY_PARTS = (
    DayPart("early", 12, 0.85, 1.2),
    DayPart("morning peak", 24, 1.25, 3.2),
    DayPart("midday", 26, 1.00, 2.0),
    DayPart("afternoon peak", 24, 1.20, 3.0),
    DayPart("evening", 14, 0.90, 1.4),
)
DAY_PART_BY_NAME = {part.name: part for part in DAY_PARTS}
# One cell departs from "route times day part": pupils leave school all at once.
SCHOOL_RUN = ("L7", "afternoon peak")
SCHOOL_RUN_FACTOR = 1.5

# Visits on a weekday, a Saturday and a Sunday stand in this ratio.
WEEKDAY_WEIGHT, SATURDAY_WEIGHT, SUNDAY_WEIGHT = 10, 8, 6

VEHICLES_PER_DEPOT = 40
FIRST_VEHICLE_NUMBER = 101
# (model, seats, capacity), dealt out in turn
VEHICLE_MODELS = (("Heron 12", 40, 85), ("Plover 10", 32, 66), ("Dunlin 9", 27, 52))
FIRST_FITTING = dt.date(YEAR, 2, 1)
FITTING_SPAN_DAYS = 300
# Every twelfth vehicle keeps its cash box all year.
NEVER_FITTED_EVERY = 12

# --- contaminations -----------------------------------------------------------------------
# A clock sticks for one vehicle, day and day part at a time: the reader comes with a new clock.
STUCK_SHARE = {CASH_BOX: 0.010, TAP_READER: 0.002}
STUCK_AT_ZERO_PART = 0.5  # of the stuck spells; the rest run on past an hour
STUCK_OPEN_MIN_S = 3600.0
STUCK_OPEN_RANGE_S = 4000.0
CLOCK_CEILING_S = 6553.5  # 16 bits of tenths of a second: where a clock left running stops
LAYOVER_MIN_S, LAYOVER_MAX_S = 180.0, 600.0
DRIFTING_VEHICLE = "V158"
DRIFT_S_PER_YEAR = 30.0  # seconds added to each dwell by the end of the year, from 0, in line
ROUNDED_STOP = "L6-08"
ROUNDING_STEP_S = 5.0
MISSING_SHARE = 0.004
CLOCK_STEP_S = 0.1

# --- what goes with long dwells, and leaves their distribution exactly as it is -------------
BOARDINGS_LOG_SPREAD, BOARDINGS_CORRELATION = 0.75, 0.7
ALIGHTINGS_LOG_SPREAD, ALIGHTINGS_CORRELATION = 0.75, 0.3
# chance of a ramp = RAMP_BASE * exp(RAMP_GROWTH * z), z the dwell's own normal score
RAMP_BASE, RAMP_GROWTH, RAMP_MOST = 0.003, 1.5, 0.5


@dataclass(frozen=True)
class Vehicle:
    """A bus; `reader_fitted` is None where the cash box stays all year."""

    vehicle: str
    depot: str
    model: str
    seats: int
    capacity: int
    in_service_since: int
    reader_fitted: dt.date | None


def _vehicle(position: int) -> Vehicle:
    model, seats, capacity = VEHICLE_MODELS[position % len(VEHICLE_MODELS)]
    fleet = VEHICLES_PER_DEPOT * len(DEPOTS)
    fitted = None
    if position % NEVER_FITTED_EVERY != NEVER_FITTED_EVERY - 1:
        # 53 shares no factor with the fleet, so fittings go round the depots in a mixed order
        turn = position * 53 % fleet
        fitted = FIRST_FITTING + dt.timedelta(turn * FITTING_SPAN_DAYS // (fleet - 1))
    return Vehicle(
        vehicle=f"V{FIRST_VEHICLE_NUMBER + position}",
        depot=DEPOTS[position // VEHICLES_PER_DEPOT],
        model=model,
        seats=seats,
        capacity=capacity,
        in_service_since=YEAR - 2 - position * 7 % 13,
        reader_fitted=fitted,
    )


VEHICLES = tuple(_vehicle(position) for position in range(VEHICLES_PER_DEPOT * len(DEPOTS)))


def median_s(route: str, day_part: str, payment: str = CASH_BOX) -> float:
    """Median of the clean dwell times of a route, day part and way of paying, in seconds."""
    truth = ROUTE_BY_CODE[route]
    factor = DAY_PART_BY_NAME[day_part].factor
    if (route, day_part) == SCHOOL_RUN:
        factor *= SCHOOL_RUN_FACTOR
    with_cash_box = round(truth.median_s * factor, 1)
    return with_cash_box * truth.tap_factor if payment == TAP_READER else with_cash_box


def quantile_s(prob: float, route: str, day_part: str, payment: str = CASH_BOX) -> float:
    """Quantile of the clean dwell times: log-normal, `median_s * exp(log_spread * z)`."""
    z = NormalDist().inv_cdf(prob)
    return median_s(route, day_part, payment) * exp(ROUTE_BY_CODE[route].log_spread * z)


def trimmed_mean_s(share: float, route: str, day_part: str, payment: str = CASH_BOX) -> float:
    """Mean of the clean distribution without a share in [0, 0.5) of each tail, in seconds.

    Notes
    -----
    For a log-normal with median m and log spread s, and z the normal quantile of 1 - share, it is
    m exp(s²/2) (Φ(z - s) - Φ(-z - s)) / (1 - 2 share); share 0 gives the mean m exp(s²/2).
    """
    spread = ROUTE_BY_CODE[route].log_spread
    mean = exp(log(median_s(route, day_part, payment)) + spread**2 / 2)
    if share == 0:
        return mean
    normal = NormalDist()
    z = normal.inv_cdf(1 - share)
    return mean * (normal.cdf(z - spread) - normal.cdf(-z - spread)) / (1 - 2 * share)


def drift_s(day: dt.date) -> float:
    """Seconds the drifting vehicle's clock adds to each dwell on a day."""
    return DRIFT_S_PER_YEAR * (day - FIRST_DAY).days / DAYS_IN_YEAR


def layover_share(route: str) -> float:
    """Share of all of a route's visits whose layover was booked as dwell."""
    truth = ROUTE_BY_CODE[route]
    return truth.layover_share * 2 / truth.stops
