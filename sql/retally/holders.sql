-- purpose: list the batches that bear counts: all but those rolled up into another
-- grain:   one row per batch
-- params:  none
-- reads:   batch; writes: nothing
select batch_id
from batch
where coalesce(rolled_into, batch_id) = batch_id
order by batch_id
