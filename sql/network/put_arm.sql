-- purpose: load the arm rows of a network
-- grain:   one row per arm
-- params:  none
-- reads:   incoming (registered:
--            arm_ix integer, junction_ix integer, junction_id bigint, arm integer, way_id bigint,
--            mouth_node_id bigint, bearing_deg double, is_inbound boolean, is_outbound boolean,
--            class varchar, limit_kmh double, limit_in_kmh double, limit_out_kmh double, has_limit boolean,
--            link_ix integer, link_m double, entry_gate_m double, exit_gate_m double, entry_lon1 double,
--            entry_lat1 double, entry_lon2 double, entry_lat2 double, exit_lon1 double, exit_lat1 double,
--            exit_lon2 double, exit_lat2 double); writes: arm
insert into arm (
    arm_ix, junction_ix, junction_id, arm, way_id, mouth_node_id, bearing_deg, is_inbound, is_outbound,
    class, limit_kmh, limit_in_kmh, limit_out_kmh, has_limit, link_ix, link_m, entry_gate_m, exit_gate_m,
    entry_lon1, entry_lat1, entry_lon2, entry_lat2, exit_lon1, exit_lat1, exit_lon2, exit_lat2
)
select
    arm_ix, junction_ix, junction_id, arm, way_id, mouth_node_id, bearing_deg, is_inbound, is_outbound,
    class, limit_kmh, limit_in_kmh, limit_out_kmh, has_limit, link_ix, link_m, entry_gate_m, exit_gate_m,
    entry_lon1, entry_lat1, entry_lon2, entry_lat2, exit_lon1, exit_lat1, exit_lon2, exit_lat2
from incoming
