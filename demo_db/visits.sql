-- Every stop visit of the year from from_day to to_day, with its truth beside it.
-- Dollar names stand for constants of truth.py and for the salts of generator.py.

-- Whole hundredths, so that a draw out of 100 finds its route or day part by an equal join.
CREATE OR REPLACE TEMP TABLE larkmoor_route_hundredth AS
SELECT hundredth::INTEGER AS hundredth, larkmoor_route.*
FROM larkmoor_route, unnest(range(taken, upto)) AS hundredths(hundredth);

CREATE OR REPLACE TEMP TABLE larkmoor_day_hundredth AS
SELECT hundredth::INTEGER AS hundredth, larkmoor_day_part.*
FROM larkmoor_day_part, unnest(range(taken, upto)) AS hundredths(hundredth);

-- The year's visits shared out over its days, in order; whole numbers, so that each adds up.
CREATE OR REPLACE TEMP TABLE larkmoor_calendar AS
WITH weighted AS (
    SELECT
        DATE '$first_day' + step::INTEGER AS day,
        step::INTEGER AS day_index,
        CASE isodow(day) WHEN 6 THEN $saturday WHEN 7 THEN $sunday ELSE $weekday END AS weight
    FROM range($days_in_year) AS steps(step)
),
running AS (
    SELECT *, (sum(weight) OVER (ORDER BY day))::BIGINT AS upto, sum(weight) OVER () AS total
    FROM weighted
)
SELECT
    day,
    day_index,
    ($visits * (upto - weight) // total)::INTEGER AS visits_before,
    ($visits * upto // total)::INTEGER - visits_before AS visits_of_day
FROM running;

-- The spells of stuck clocks: one vehicle, one day, one day part.
CREATE OR REPLACE TEMP TABLE larkmoor_stuck_spell AS
WITH spells AS (
    SELECT
        vehicles.vehicle,
        calendar.day,
        parts.day_part,
        CASE WHEN calendar.day >= vehicles.reader_fitted
            THEN $stuck_tap_reader ELSE $stuck_cash_box END AS stuck_share,
        larkmoor_mixed(
            ((vehicles.vehicle_index * $days_in_year + calendar.day_index) * 8
                + parts.part_index)::UBIGINT) AS spell_key
    FROM larkmoor_vehicle AS vehicles, larkmoor_calendar AS calendar, larkmoor_day_part AS parts
)
SELECT
    vehicle,
    day,
    day_part,
    CASE WHEN larkmoor_uniform(spell_key, $salt_stuck_kind) < $stuck_at_zero_part
        THEN 'stuck at zero' ELSE 'stuck open' END AS kind
FROM spells
WHERE larkmoor_uniform(spell_key, $salt_stuck) < stuck_share;

CREATE OR REPLACE TEMP MACRO larkmoor_visits(from_day, to_day) AS TABLE
WITH stepped AS (
    SELECT *, unnest(range(visits_of_day)) AS step
    FROM larkmoor_calendar
    WHERE day BETWEEN from_day AND to_day
),
numbered AS (
    SELECT
        day,
        day_index,
        (visits_before + step + 1)::INTEGER AS visit,
        (step * 100 // visits_of_day)::INTEGER AS day_hundredth
    FROM stepped
),
keyed AS (
    SELECT *, larkmoor_mixed(visit::UBIGINT) AS key FROM numbered
),
drawn AS (
    SELECT
        *,
        larkmoor_whole(key, $salt_route, 100) AS route_hundredth,
        larkmoor_whole(key, $salt_direction, 2) AS way,
        larkmoor_uniform(key, $salt_stop) AS stop_chance,
        larkmoor_whole(key, $salt_vehicle, $vehicles_per_route) AS vehicle_turn,
        larkmoor_uniform(key, $salt_dwell) AS dwell_chance,
        larkmoor_uniform(key, $salt_boardings) AS boardings_chance,
        larkmoor_uniform(key, $salt_alightings) AS alightings_chance,
        larkmoor_uniform(key, $salt_ramp) AS ramp_chance,
        larkmoor_uniform(key, $salt_layover) AS layover_chance,
        larkmoor_uniform(key, $salt_layover_length) AS layover_length,
        larkmoor_uniform(key, $salt_stuck_length) AS stuck_length,
        larkmoor_uniform(key, $salt_missing) AS missing_chance
    FROM keyed
),
scored AS (
    SELECT
        *,
        larkmoor_normal_quantile(dwell_chance) AS dwell_z,
        larkmoor_normal_quantile(boardings_chance) AS boardings_z,
        larkmoor_normal_quantile(alightings_chance) AS alightings_z
    FROM drawn
),
placed AS (
    SELECT
        scored.*,
        routes.route,
        routes.depot,
        routes.stops,
        routes.log_spread,
        routes.tap_factor,
        routes.layover_share,
        parts.day_part,
        parts.usual_boardings,
        1 + floor(stop_chance * routes.stops)::INTEGER AS position,
        -- A vehicle keeps to one route for a day and moves on the next.
        (routes.place * $vehicles_per_route + vehicle_turn + scored.day_index * 7)
            % $vehicles_per_depot AS vehicle_place
    FROM scored
    JOIN larkmoor_route_hundredth AS routes ON routes.hundredth = scored.route_hundredth
    JOIN larkmoor_day_hundredth AS parts ON parts.hundredth = scored.day_hundredth
),
served AS (
    SELECT
        placed.*,
        vehicles.vehicle,
        placed.position IN (1, placed.stops) AS is_end_stop,
        CASE WHEN placed.day >= vehicles.reader_fitted THEN '$tap_reader' ELSE '$cash_box' END
            AS payment,
        medians.median_s,
        spells.kind AS stuck
    FROM placed
    JOIN larkmoor_vehicle AS vehicles
        ON vehicles.depot = placed.depot AND vehicles.place = placed.vehicle_place
    JOIN larkmoor_median AS medians
        ON medians.route = placed.route AND medians.day_part = placed.day_part
    LEFT JOIN larkmoor_stuck_spell AS spells
        ON spells.vehicle = vehicles.vehicle
        AND spells.day = placed.day
        AND spells.day_part = placed.day_part
),
clean AS (
    SELECT
        *,
        format('{}-{:02d}', route, position) AS stop,
        median_s * exp(log_spread * dwell_z)
            * CASE WHEN payment = '$tap_reader' THEN tap_factor ELSE 1e0 END AS true_s,
        is_end_stop AND layover_chance < layover_share AS is_layover,
        vehicle = '$drifting_vehicle' AS is_drifting
    FROM served
),
measured AS (
    SELECT
        *,
        stop = '$rounded_stop' AS is_rounded,
        true_s
            + CASE WHEN is_layover
                THEN $layover_min_s + layover_length * ($layover_max_s - $layover_min_s)
                ELSE 0e0 END
            + CASE WHEN is_drifting
                THEN $drift_s_per_year * day_index / $days_in_year
                ELSE 0e0 END AS booked_s
    FROM clean
)
SELECT
    visit,
    day,
    day_part,
    route,
    CASE way WHEN 0 THEN '$outbound' ELSE '$inbound' END AS direction,
    stop,
    vehicle,
    floor(usual_boardings * exp($boardings_log_spread
        * ($boardings_correlation * dwell_z + $boardings_rest * boardings_z)))::INTEGER
        AS boardings,
    floor(usual_boardings * exp($alightings_log_spread
        * ($alightings_correlation * dwell_z + $alightings_rest * alightings_z)))::INTEGER
        AS alightings,
    ramp_chance < least($ramp_most, $ramp_base * exp($ramp_growth * dwell_z)) AS ramp_used,
    payment,
    CASE
        WHEN missing_chance < $missing_share THEN NULL
        WHEN stuck = 'stuck at zero' THEN 0e0
        WHEN stuck = 'stuck open'
            THEN round(least($clock_ceiling_s,
                $stuck_open_min_s + $stuck_open_range_s * stuck_length + $clock_step_s), 1)
        WHEN is_rounded THEN round(booked_s / $rounding_step_s) * $rounding_step_s
        ELSE round(booked_s, 1)
    END AS dwell_s,
    round(true_s, 1) AS clean_dwell_s,
    CASE
        WHEN missing_chance < $missing_share THEN 'missing'
        WHEN stuck IS NOT NULL THEN stuck
        WHEN is_layover THEN 'layover'
        WHEN is_drifting THEN 'drift'
        WHEN is_rounded THEN 'rounded'
    END AS fault
FROM measured;
