-- purpose: the arrays that detection reads, as bytes
-- grain:   one row per array
-- params:  none
-- reads:   nothing; writes: network_blob
create table network_blob (
    name varchar not null primary key,
    body blob not null
)
