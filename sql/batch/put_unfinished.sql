-- purpose: add the unfinished passages of one chunk
-- grain:   one row per unfinished passage
-- params:  $batch_id
-- reads:   incoming (registered:
--            vehicle varchar, trip_id bigint, junction_id bigint, arm_in integer, reason varchar,
--            entry_us bigint, last_us bigint); writes: unfinished
insert into unfinished (
    batch_id, vehicle, trip_id, junction_id, arm_in, reason, entry_at, last_at
)
select
    $batch_id, vehicle, trip_id, junction_id, arm_in, reason, make_timestamp(entry_us),
    make_timestamp(last_us)
from incoming
