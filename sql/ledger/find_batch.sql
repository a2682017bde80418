-- purpose: find the batches that have this content or this name
-- grain:   at most two rows
-- params:  $content_digest, $batch_name
-- reads:   batch; writes: nothing
select
    batch_id, batch_name, content_digest, config_digest, network_digest, files, rows_in, rows_used, rows_dropped,
    rows_held, n_vehicles, first_ping_at, last_ping_at, started_at, ended_at, is_closed, is_backfill,
    trips_cut_start, trips_cut_end, rolled_into
from batch
where content_digest = $content_digest or batch_name = $batch_name
order by batch_id
