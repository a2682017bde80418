-- purpose: roads between two junctions
-- grain:   one row per link
-- params:  none
-- reads:   nothing; writes: link
create table link (
    link_ix integer not null primary key check (link_ix >= 0),
    arm_from_ix integer not null check (arm_from_ix >= -1),
    -- -1: a dead end
    arm_to_ix integer not null check (arm_to_ix >= -1),
    length_m double not null check (length_m >= 0),
    class varchar not null,
    limit_kmh double not null check (limit_kmh > 0),
    -- what is left between the two gates, along and against the link
    middle_fwd_m double,
    middle_back_m double,
    is_open_fwd boolean not null,
    is_open_back boolean not null,
    -- place halfway along, which decides on the zone
    lon double not null,
    lat double not null,
    zone varchar not null
)
