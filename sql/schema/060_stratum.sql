-- purpose: what a stratum number stands for
-- grain:   one row per tally, stratum, dimension
-- params:  none
-- reads:   nothing; writes: stratum
create table stratum (
    tally varchar not null,
    stratum_id bigint not null,
    dimension varchar not null,
    value varchar not null,
    primary key (tally, stratum_id, dimension)
)
