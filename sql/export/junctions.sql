-- purpose: junctions with their place, control and zone
-- grain:   one row per junction
-- params:  none
-- reads:   junction; writes: nothing
select
    junction_id, lon, lat, kind, control, zone, driving_side, time_zone, class, n_arms, n_nodes,
    array_to_string(node_ids, ' ') as node_ids
from junction
order by junction_id
