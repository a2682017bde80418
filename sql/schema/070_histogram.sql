-- purpose: integer counts over the fixed bins; merging is addition
-- grain:   one row per batch, tally, stratum, bin that is not empty (no index, see passage)
-- params:  none
-- reads:   nothing; writes: histogram
create table histogram (
    batch_id bigint not null,
    tally varchar not null,
    stratum_id bigint not null,
    bin_ix integer not null check (bin_ix >= 0),
    n bigint not null check (n > 0)
)
