-- purpose: read the spans of one batch
-- grain:   one row per span
-- params:  $batch_id
-- reads:   span; writes: nothing
select vehicle, epoch_us(first_at) as first_us, epoch_us(last_at) as last_us
from span
where batch_id = $batch_id
order by vehicle, first_us
