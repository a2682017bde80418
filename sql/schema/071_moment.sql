-- purpose: exact count, sum and sum of squares of a stratum's values (ms, or ms per km)
-- grain:   one row per batch, tally, stratum (no index, see passage)
-- params:  none
-- reads:   nothing; writes: moment
create table moment (
    batch_id bigint not null,
    tally varchar not null,
    stratum_id bigint not null,
    n bigint not null check (n > 0),
    sum hugeint not null,
    sum_sq hugeint not null check (sum_sq >= 0)
)
