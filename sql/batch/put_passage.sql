-- purpose: add the passages of one chunk
-- grain:   one row per passage
-- params:  $batch_id
-- reads:   incoming (registered:
--            vehicle varchar, trip_id bigint, junction_id bigint, arm_in integer, arm_out integer,
--            entry_us bigint, exit_us bigint, traversal_ms integer, delay_ms integer, gate_in_m double,
--            inside_m double, gate_out_m double, n_pings integer, max_step_ms integer, slow_ms integer,
--            timing_error_ms integer, entry_speed_mps float, is_queued_at_gate boolean, day_type varchar,
--            time_band varchar, reference_id integer); writes: passage
insert into passage (
    batch_id, vehicle, trip_id, junction_id, arm_in, arm_out, entry_at, exit_at, traversal_ms, delay_ms,
    gate_in_m, inside_m, gate_out_m, n_pings, max_step_ms, slow_ms, timing_error_ms, entry_speed_mps,
    is_queued_at_gate, day_type, time_band, reference_id
)
select
    $batch_id, vehicle, trip_id, junction_id, arm_in, arm_out, make_timestamp(entry_us),
    make_timestamp(exit_us), traversal_ms, delay_ms, gate_in_m, inside_m, gate_out_m, n_pings, max_step_ms,
    slow_ms, timing_error_ms, entry_speed_mps, is_queued_at_gate, day_type, time_band, reference_id
from incoming
