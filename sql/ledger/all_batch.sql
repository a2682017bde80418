-- purpose: read the ledger in the order in which batches were taken in
-- grain:   one row per batch
-- params:  none
-- reads:   batch; writes: nothing
select
    batch_id, batch_name, content_digest, config_digest, network_digest, files, rows_in, rows_used, rows_dropped,
    rows_held, n_vehicles, first_ping_at, last_ping_at, started_at, ended_at, is_closed, is_backfill,
    trips_cut_start, trips_cut_end, rolled_into
from batch
order by batch_id
