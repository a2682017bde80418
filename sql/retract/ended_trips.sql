-- purpose: find the trips that began with pings of a batch and ended in later ones
-- grain:   one row per trip
-- params:  $batch_id
-- reads:   trip, span; writes: nothing
select t.vehicle, t.trip_id
from trip as t
where
    t.batch_id > $batch_id
    and exists (
        select 1 from span as s
        where s.batch_id = $batch_id and s.vehicle = t.vehicle and t.start_at between s.first_at and s.last_at
    )
order by t.vehicle, t.trip_id
