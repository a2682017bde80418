-- purpose: passages with what the network says of their movement
-- grain:   one row per passage
-- params:  none
-- reads:   passage, movement, arm, junction, network; writes: nothing
create view passage_full as
select
    p.batch_id, p.vehicle, p.trip_id, p.junction_id, p.arm_in, p.arm_out,
    i.way_id as way_in_id, o.way_id as way_out_id, p.entry_at, p.exit_at, p.traversal_ms, p.delay_ms,
    m.turn_deg, m.maneuver, i.class as class_in, o.class as class_out,
    -- the greater of the two classes, by the network's order
    case
        when list_position(n.class_names, i.class) <= list_position(n.class_names, o.class) then i.class
        else o.class
    end as class_max,
    j.control, j.zone, j.driving_side, p.gate_in_m, p.inside_m, p.gate_out_m, p.n_pings, p.max_step_ms,
    p.slow_ms, p.entry_speed_mps, p.is_queued_at_gate, m.is_banned, p.timing_error_ms, p.day_type, p.time_band,
    p.reference_id
from passage as p
join arm as i on i.junction_id = p.junction_id and i.arm = p.arm_in
join arm as o on o.junction_id = p.junction_id and o.arm = p.arm_out
join movement as m on m.arm_in_ix = i.arm_ix and m.arm_out_ix = o.arm_ix
join junction as j on j.junction_id = p.junction_id
cross join network as n
