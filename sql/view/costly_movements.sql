-- purpose: movements with what they cost all vehicles together, as from-way, via, to-way
-- grain:   one row per movement that was passed
-- params:  none
-- reads:   passage_full; writes: nothing
create view costly_movements as
select
    junction_id, arm_in, arm_out, way_in_id, way_out_id, zone, maneuver, control, turn_deg, is_banned,
    count(*) as n_passages, count(distinct vehicle) as n_vehicles, sum(delay_ms)::bigint as total_delay_ms,
    (sum(delay_ms) / count(*))::double as mean_delay_ms
from passage_full
group by
    junction_id, arm_in, arm_out, way_in_id, way_out_id, zone, maneuver, control, turn_deg, is_banned
