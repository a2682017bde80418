-- purpose: what the store says of itself: format_version, created_at, key_id, network_digest, config
-- grain:   one row per key
-- params:  none
-- reads:   nothing; writes: meta
create table meta (
    key varchar not null primary key,
    value varchar not null
)
