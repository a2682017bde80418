-- purpose: add when the vehicles of one batch were seen
-- grain:   one row per span
-- params:  $batch_id, $is_backfill
-- reads:   incoming (registered: vehicle varchar, first_us bigint, last_us bigint); writes: span
insert into span (batch_id, vehicle, first_at, last_at, is_backfill)
select $batch_id, vehicle, make_timestamp(first_us), make_timestamp(last_us), $is_backfill
from incoming
