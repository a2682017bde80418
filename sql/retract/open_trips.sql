-- purpose: find the open trips of later states that began no later than a batch ended for their vehicle
-- grain:   one row per state
-- params:  $batch_id
-- reads:   carry, span; writes: nothing
select c.vehicle, c.batch_id, c.trip_start_us
from carry as c
where
    c.batch_id > $batch_id and c.mode = 1
    and c.trip_start_us <= (
        select max(epoch_us(s.last_at)) from span as s
        where s.batch_id = $batch_id and s.vehicle = c.vehicle
    )
order by c.vehicle, c.batch_id
