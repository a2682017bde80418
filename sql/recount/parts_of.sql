-- purpose: find the batches whose counts bear one number: itself, or those of the month rolled up into it
-- grain:   one row per batch
-- params:  $batch_id
-- reads:   batch; writes: nothing
select batch_id
from batch
where coalesce(rolled_into, batch_id) = $batch_id
order by batch_id
