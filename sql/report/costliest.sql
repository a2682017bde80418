-- purpose: movements that cost all vehicles together the most, of those that hold enough passages
-- grain:   one row per movement, costliest first, at most $n_rows
-- params:  $min_passages, $min_vehicles, $n_rows
-- reads:   costly_movements; writes: nothing
select
    junction_id, way_in_id, way_out_id, arm_in, arm_out, zone, maneuver, control, turn_deg, is_banned, n_passages,
    n_vehicles, total_delay_ms, mean_delay_ms
from costly_movements
where n_passages >= $min_passages and n_vehicles >= $min_vehicles
order by total_delay_ms desc, junction_id, arm_in, arm_out
limit $n_rows
