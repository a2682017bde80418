-- purpose: load the junction rows of a network
-- grain:   one row per junction
-- params:  none
-- reads:   incoming (registered:
--            junction_ix integer, junction_id bigint, lon double, lat double, n_nodes integer,
--            node_ids bigint[], kind varchar, control varchar, zone varchar, driving_side varchar,
--            time_zone varchar, class varchar, n_arms integer); writes: junction
insert into junction (
    junction_ix, junction_id, lon, lat, n_nodes, node_ids, kind, control, zone, driving_side, time_zone,
    class, n_arms
)
select
    junction_ix, junction_id, lon, lat, n_nodes, node_ids, kind, control, zone, driving_side, time_zone,
    class, n_arms
from incoming
