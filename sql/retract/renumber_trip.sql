-- purpose: part what stays of trips from their beginnings, which may be taken in again: another trip number
-- grain:   one row per trip renumbered
-- params:  $batch_id
-- reads:   incoming (registered: vehicle varchar, trip_id bigint); writes: trip
update trip
set trip_id = xor(trip.trip_id, 4611686018427387904)
from incoming as i
where trip.batch_id > $batch_id and trip.vehicle = i.vehicle and trip.trip_id = i.trip_id
