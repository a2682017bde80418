-- purpose: read the junction rows of the network
-- grain:   one row per junction
-- params:  none
-- reads:   junction; writes: nothing
select
    junction_ix, junction_id, lon, lat, n_nodes, node_ids, kind, control, zone, driving_side, time_zone,
    class, n_arms
from junction
order by junction_ix
