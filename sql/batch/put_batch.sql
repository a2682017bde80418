-- purpose: write the ledger row, the last statement of a batch
-- grain:   one row
-- params:  $batch_id, $batch_name, $content_digest, $config_digest, $network_digest, $files, $rows_in, $rows_used,
--          $rows_dropped, $rows_held, $n_vehicles, $first_ping_us, $last_ping_us, $started_us, $ended_us,
--          $is_closed, $is_backfill, $trips_cut_start, $trips_cut_end
-- reads:   nothing; writes: batch
insert into batch (
    batch_id, batch_name, content_digest, config_digest, network_digest, files, rows_in, rows_used, rows_dropped,
    rows_held, n_vehicles, first_ping_at, last_ping_at, started_at, ended_at, is_closed, is_backfill,
    trips_cut_start, trips_cut_end
)
values (
    $batch_id, $batch_name, $content_digest, $config_digest, $network_digest, $files, $rows_in, $rows_used,
    $rows_dropped, $rows_held, $n_vehicles, make_timestamp($first_ping_us), make_timestamp($last_ping_us),
    make_timestamp($started_us), make_timestamp($ended_us), $is_closed, $is_backfill,
    $trips_cut_start, $trips_cut_end
)
