-- purpose: the streets that the store was made for
-- grain:   one row; a store holds one network
-- params:  none
-- reads:   nothing; writes: network
create table network (
    network_digest varchar not null primary key,
    -- road classes, greatest first: their order ranks the class of a passage
    class_names varchar[] not null,
    n_junctions integer not null check (n_junctions >= 0),
    n_arms integer not null check (n_arms >= 0),
    n_links integer not null check (n_links >= 0),
    n_movements integer not null check (n_movements >= 0),
    min_lon double not null check (min_lon between -180 and 180),
    min_lat double not null check (min_lat between -90 and 90),
    max_lon double not null check (max_lon between -180 and 180),
    max_lat double not null check (max_lat between -90 and 90),
    -- that rings tell, else right; whatever is configured
    seen_side varchar not null check (seen_side in ('right', 'left')),
    -- result-changing keys the network was built with, as JSON; empty when not told
    config varchar not null,
    put_at timestamp not null
)
