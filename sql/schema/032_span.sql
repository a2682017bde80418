-- purpose: when each vehicle was seen, so that no time of it is taken in twice; a silence of an hour parts spans
-- grain:   one row per batch, vehicle and first_at (no index, see passage)
-- params:  none
-- reads:   nothing; writes: span
create table span (
    batch_id bigint not null,
    vehicle varchar not null,
    first_at timestamp not null,
    last_at timestamp not null,
    is_backfill boolean not null,
    check (last_at >= first_at)
)
