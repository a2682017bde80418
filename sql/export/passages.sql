-- purpose: passages with what the network says of them, of movements that hold enough of them
-- grain:   one row per passage
-- params:  $min_passages, $min_vehicles
-- reads:   passage, passage_full; writes: nothing
with wide_enough as (
    select junction_id, arm_in, arm_out
    from passage
    group by junction_id, arm_in, arm_out
    having count(*) >= $min_passages and count(distinct vehicle) >= $min_vehicles
)
select
    p.vehicle, p.trip_id, p.junction_id, p.arm_in, p.arm_out, p.way_in_id, p.way_out_id, p.entry_at, p.exit_at,
    p.traversal_ms, p.delay_ms, p.turn_deg, p.maneuver, p.class_in, p.class_out, p.control, p.zone,
    p.driving_side, p.gate_in_m, p.gate_out_m, p.n_pings, p.max_step_ms, p.slow_ms, p.entry_speed_mps,
    p.is_queued_at_gate, p.is_banned, p.timing_error_ms, p.reference_id, p.batch_id, p.inside_m, p.day_type,
    p.time_band
from passage_full as p
semi join wide_enough as w
    on w.junction_id = p.junction_id and w.arm_in = p.arm_in and w.arm_out = p.arm_out
order by p.vehicle, p.entry_at
