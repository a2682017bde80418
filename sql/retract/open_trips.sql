-- purpose: find the trips that began with pings of a batch and are open in later states
-- grain:   one row per trip
-- params:  $batch_id
-- reads:   carry, span; writes: nothing
select distinct c.vehicle, c.trip_start_us
from carry as c
where
    c.batch_id > $batch_id and c.mode = 1
    and exists (
        select 1 from span as s
        where
            s.batch_id = $batch_id and s.vehicle = c.vehicle
            and c.trip_start_us between epoch_us(s.first_at) and epoch_us(s.last_at)
    )
order by c.vehicle, c.trip_start_us
