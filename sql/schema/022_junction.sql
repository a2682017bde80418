-- purpose: places where roads meet
-- grain:   one row per junction
-- params:  none
-- reads:   nothing; writes: junction
create table junction (
    junction_ix integer not null primary key check (junction_ix >= 0),
    -- smallest OSM node id of the cluster
    junction_id bigint not null unique,
    lon double not null check (lon between -180 and 180),
    lat double not null check (lat between -90 and 90),
    n_nodes integer not null check (n_nodes >= 1),
    node_ids bigint[] not null,
    kind varchar not null,
    control varchar not null,
    -- empty outside all zones
    zone varchar not null,
    driving_side varchar not null check (driving_side in ('right', 'left')),
    time_zone varchar not null,
    class varchar not null,
    n_arms integer not null check (n_arms >= 0)
)
