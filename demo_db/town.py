"""The stops of the invented town and the look-up rows that the generator's SQL joins to."""

from collections.abc import Iterator
from itertools import product

from midspread.demo_db import truth

STREETS = (
    *("Alder", "Anchor", "Baker", "Beacon", "Bramble", "Canal", "Chapel", "Cooper"),
    *("Dyer", "Falcon", "Fuller", "Garnet", "Hazel", "Juniper", "Lantern", "Linen"),
    *("Mallow", "Orchard", "Pewter", "Rowan", "Saddler", "Tanner", "Thistle", "Wicker"),
)
KINDS = ("Street", "Lane", "Bridge", "Green", "Corner", "Hill", "Gate", "Wharf")

StopRow = tuple[str, str, str, int, bool, bool, int]


def stop_rows() -> Iterator[StopRow]:
    """Yield stop, name, route, position, is_end_stop, has_shelter and kerb height in cm."""
    names = (f"{street} {kind}" for kind, street in product(KINDS, STREETS))
    for route in truth.ROUTES:
        for position in range(1, route.stops + 1):
            is_end = position in (1, route.stops)
            has_shelter = is_end or position % 3 == 0
            kerb_cm = (12, 16, 18)[(position + len(route.name)) % 3]
            stop = f"{route.route}-{position:02d}"
            yield stop, next(names), route.route, position, is_end, has_shelter, kerb_cm


def route_rows() -> Iterator[tuple[object, ...]]:
    """Yield each route, its place in its depot, the hundredths of visits it takes, its truth."""
    taken = 0
    for position, route in enumerate(truth.ROUTES):
        upto = taken + route.visit_percent
        depot, place = divmod(position, truth.ROUTES_PER_DEPOT)
        yield (
            *(route.route, route.name, route.depot, depot, place, route.length_km, route.stops),
            *(taken, upto, route.log_spread, route.tap_factor, route.layover_share),
        )
        taken = upto


def day_part_rows() -> Iterator[tuple[object, ...]]:
    """Yield each day part, its place, the hundredths of the day it takes, its boardings."""
    taken = 0
    for position, part in enumerate(truth.DAY_PARTS):
        upto = taken + part.visit_percent
        yield part.name, position, taken, upto, part.boardings
        taken = upto


def median_rows() -> Iterator[tuple[str, str, float]]:
    """Yield the median dwell of every route and day part, paying at the cash box."""
    for route, part in product(truth.ROUTES, truth.DAY_PARTS):
        yield route.route, part.name, truth.median_s(route.route, part.name)


def vehicle_rows() -> Iterator[tuple[object, ...]]:
    """Yield each vehicle, its depot's place, its place in the depot and what is known of it."""
    for position, bus in enumerate(truth.VEHICLES):
        depot, place = divmod(position, truth.VEHICLES_PER_DEPOT)
        yield (
            *(bus.vehicle, position, depot, place, bus.depot, bus.model, bus.seats, bus.capacity),
            *(bus.in_service_since, bus.reader_fitted),
        )
