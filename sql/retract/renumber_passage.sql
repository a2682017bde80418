-- purpose: part what stays of trips from their beginnings, which may be taken in again: another trip number
-- grain:   one row per passage renumbered
-- params:  $batch_id
-- reads:   incoming (registered: vehicle varchar, trip_id bigint); writes: passage
update passage
set trip_id = xor(passage.trip_id, 4611686018427387904)
from incoming as i
where passage.batch_id > $batch_id and passage.vehicle = i.vehicle and passage.trip_id = i.trip_id
