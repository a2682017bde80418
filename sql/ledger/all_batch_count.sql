-- purpose: read the dropped rows of every batch, by reason
-- grain:   one row per batch and reason
-- params:  none
-- reads:   batch_count; writes: nothing
select batch_id, reason, n
from batch_count
order by batch_id, reason
