-- purpose: roads at a junction, with their gates
-- grain:   one row per arm
-- params:  none
-- reads:   nothing; writes: arm
create table arm (
    arm_ix integer not null primary key check (arm_ix >= 0),
    junction_ix integer not null check (junction_ix >= 0),
    junction_id bigint not null,
    -- number within the junction, clockwise by bearing from north
    arm integer not null check (arm >= 0),
    way_id bigint not null,
    mouth_node_id bigint not null,
    bearing_deg double not null,
    is_inbound boolean not null,
    is_outbound boolean not null,
    class varchar not null,
    limit_kmh double not null check (limit_kmh > 0),
    limit_in_kmh double,
    limit_out_kmh double,
    has_limit boolean not null,
    link_ix integer not null check (link_ix >= -1),
    link_m double not null check (link_m >= 0),
    -- metres from the mouth; 0 where the arm has no such gate, and then its ends are null
    entry_gate_m double not null check (entry_gate_m >= 0),
    exit_gate_m double not null check (exit_gate_m >= 0),
    entry_lon1 double,
    entry_lat1 double,
    entry_lon2 double,
    entry_lat2 double,
    exit_lon1 double,
    exit_lat1 double,
    exit_lon2 double,
    exit_lat2 double,
    unique (junction_id, arm)
)
