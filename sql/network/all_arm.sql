-- purpose: read the arm rows of the network
-- grain:   one row per arm
-- params:  none
-- reads:   arm; writes: nothing
select
    arm_ix, junction_ix, junction_id, arm, way_id, mouth_node_id, bearing_deg, is_inbound, is_outbound,
    class, limit_kmh, limit_in_kmh, limit_out_kmh, has_limit, link_ix, link_m, entry_gate_m, exit_gate_m,
    entry_lon1, entry_lat1, entry_lon2, entry_lat2, exit_lon1, exit_lat1, exit_lon2, exit_lat2
from arm
order by arm_ix
