-- purpose: rows dropped, by reason
-- grain:   one row per batch and reason that occurred
-- params:  none
-- reads:   nothing; writes: batch_count
create table batch_count (
    batch_id bigint not null,
    reason varchar not null,
    n bigint not null check (n > 0),
    primary key (batch_id, reason)
)
