-- purpose: part what stays of trips from their beginnings, which may be taken in again: another trip number
-- grain:   one row per section renumbered
-- params:  $batch_id
-- reads:   incoming (registered: vehicle varchar, trip_id bigint); writes: section
update section
set trip_id = xor(section.trip_id, 4611686018427387904)
from incoming as i
where section.batch_id > $batch_id and section.vehicle = i.vehicle and section.trip_id = i.trip_id
