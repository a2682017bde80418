-- purpose: part what stays of trips from their beginnings, which may be taken in again: another trip number
-- grain:   one row per unfinished renumbered
-- params:  $batch_id
-- reads:   incoming (registered: vehicle varchar, trip_id bigint); writes: unfinished
update unfinished
set trip_id = xor(unfinished.trip_id, 4611686018427387904)
from incoming as i
where unfinished.batch_id > $batch_id and unfinished.vehicle = i.vehicle and unfinished.trip_id = i.trip_id
