-- purpose: write passages set aside anew, in a range of row numbers, with their delays and local times of now
-- grain:   one row per passage
-- params:  $first, $last, $reference_id
-- reads:   incoming (registered: row_ix bigint, delay_ms integer, day_type varchar, time_band varchar),
--          passage_before; writes: passage
insert into passage (
    batch_id, vehicle, trip_id, junction_id, arm_in, arm_out, entry_at, exit_at, traversal_ms, delay_ms,
    gate_in_m, inside_m, gate_out_m, n_pings, max_step_ms, slow_ms, timing_error_ms, entry_speed_mps,
    is_queued_at_gate, day_type, time_band, reference_id
)
select
    p.batch_id, p.vehicle, p.trip_id, p.junction_id, p.arm_in, p.arm_out, p.entry_at, p.exit_at, p.traversal_ms,
    n.delay_ms, p.gate_in_m, p.inside_m, p.gate_out_m, p.n_pings, p.max_step_ms, p.slow_ms, p.timing_error_ms,
    p.entry_speed_mps, p.is_queued_at_gate, n.day_type, n.time_band, $reference_id
from passage_before as p
join incoming as n on n.row_ix = p.rowid
where p.rowid between $first and $last
