-- purpose: write the states as one batch leaves them
-- grain:   one row per vehicle
-- params:  $batch_id, $carry_version
-- reads:   incoming (registered:
--            vehicle varchar, t_us bigint, lon integer, lat integer, held_us bigint, held_lon integer,
--            held_lat integer, has_last utinyint, is_held utinyint, mode utinyint, is_placed utinyint,
--            since utinyint, has_met utinyint, is_queued utinyint, n_skipped utinyint, stay_us bigint,
--            stay_lon integer, stay_lat integer, trip_start_us bigint, first_gate_us bigint,
--            last_gate_us bigint, passage_us bigint, section_us bigint, unfinished_us bigint, other_us
--            bigint, path_m double, n_pings integer, n_passages integer, n_breaks integer, n_caps
--            integer, edge integer, n_kept integer, reach_m double, slow_at_m double, open_us bigint,
--            open_slow_us bigint, open_at_m double, open_arm integer, open_n integer, open_step_ms
--            integer, open_speed_mps float, open_error_s float, section_arm integer, section_step_ms
--            integer, section_at_m double, arrive_us bigint[], leave_us bigint[], kept_lon integer[],
--            kept_lat integer[], left_lon integer[], left_lat integer[], kept_n integer[], kept_step_ms
--            integer[], n_columns integer, anchor integer, column_kept tinyint[], column_n tinyint[],
--            at_edge integer[], back tinyint[], at_m float[], cost double[], waiting_us bigint[],
--            waiting_lon double[], waiting_lat double[]); writes: carry
insert into carry (
    vehicle, batch_id, carry_version, t_us, lon, lat, held_us, held_lon, held_lat, has_last, is_held,
    mode, is_placed, since, has_met, is_queued, n_skipped, stay_us, stay_lon, stay_lat, trip_start_us,
    first_gate_us, last_gate_us, passage_us, section_us, unfinished_us, other_us, path_m, n_pings,
    n_passages, n_breaks, n_caps, edge, n_kept, reach_m, slow_at_m, open_us, open_slow_us, open_at_m,
    open_arm, open_n, open_step_ms, open_speed_mps, open_error_s, section_arm, section_step_ms,
    section_at_m, arrive_us, leave_us, kept_lon, kept_lat, left_lon, left_lat, kept_n, kept_step_ms,
    n_columns, anchor, column_kept, column_n, at_edge, back, at_m, cost, waiting_us, waiting_lon,
    waiting_lat
)
select
    vehicle, $batch_id, $carry_version, t_us, lon, lat, held_us, held_lon, held_lat, has_last, is_held,
    mode, is_placed, since, has_met, is_queued, n_skipped, stay_us, stay_lon, stay_lat, trip_start_us,
    first_gate_us, last_gate_us, passage_us, section_us, unfinished_us, other_us, path_m, n_pings,
    n_passages, n_breaks, n_caps, edge, n_kept, reach_m, slow_at_m, open_us, open_slow_us, open_at_m,
    open_arm, open_n, open_step_ms, open_speed_mps, open_error_s, section_arm, section_step_ms,
    section_at_m, arrive_us, leave_us, kept_lon, kept_lat, left_lon, left_lat, kept_n, kept_step_ms,
    n_columns, anchor, column_kept, column_n, at_edge, back, at_m, cost, waiting_us, waiting_lon,
    waiting_lat
from incoming
