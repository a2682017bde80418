-- purpose: read the passages of one batch with all that a tally may sort them by
-- grain:   one row per passage
-- params:  $batch_id
-- reads:   passage_full, junction; writes: nothing
select
    epoch_us(p.entry_at) as entry_us, j.time_zone, p.delay_ms, p.junction_id, p.arm_in, p.arm_out, p.turn_deg,
    p.maneuver, p.class_in, p.class_out, p.control, p.zone, p.driving_side, p.is_banned, p.is_queued_at_gate
from passage_full as p
join junction as j on j.junction_id = p.junction_id
where p.batch_id = $batch_id
