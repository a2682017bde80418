-- purpose: the ledger: what was taken in, as a whole or not at all
-- grain:   one row per batch
-- params:  none
-- reads:   nothing; writes: batch
create table batch (
    batch_id bigint not null primary key check (batch_id >= 1),
    batch_name varchar not null unique,
    -- SHA-256 of the bytes; a batch that only closes has `close:` and its number
    content_digest varchar not null unique,
    config_digest varchar not null,
    network_digest varchar not null,
    files varchar[] not null,
    rows_in bigint not null check (rows_in >= 0),
    rows_used bigint not null check (rows_used >= 0),
    rows_dropped bigint not null check (rows_dropped >= 0),
    -- rows waiting in the carry: after the batch minus before it
    rows_held bigint not null,
    n_vehicles bigint not null check (n_vehicles >= 0),
    first_ping_at timestamp,
    last_ping_at timestamp,
    started_at timestamp not null,
    ended_at timestamp not null,
    -- what was open was ended after the batch's last row
    is_closed boolean not null,
    -- older than what was in, and so taken in alone
    is_backfill boolean not null,
    -- of a backfill: trips that begin, and trips left open, next to pings that other batches hold
    trips_cut_start bigint not null check (trips_cut_start >= 0),
    trips_cut_end bigint not null check (trips_cut_end >= 0),
    -- the batch that holds the histograms of its month; null until `compact` rolled it up
    rolled_into bigint,
    check (rows_in = rows_used + rows_dropped + rows_held)
)
