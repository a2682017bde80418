-- purpose: arms with their gates, and what the junction says of them
-- grain:   one row per arm
-- params:  none
-- reads:   arm, junction; writes: nothing
select
    a.junction_id, a.arm, a.way_id, a.mouth_node_id, a.bearing_deg, a.is_inbound, a.is_outbound, a.class,
    a.limit_kmh, a.link_m, a.entry_gate_m, a.exit_gate_m, a.entry_lon1, a.entry_lat1, a.entry_lon2,
    a.entry_lat2, a.exit_lon1, a.exit_lat1, a.exit_lon2, a.exit_lat2, a.limit_in_kmh, a.limit_out_kmh,
    a.has_limit, a.link_ix, j.control, j.zone, j.driving_side, j.time_zone
from arm as a
join junction as j on j.junction_ix = a.junction_ix
order by a.junction_id, a.arm
