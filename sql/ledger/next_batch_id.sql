-- purpose: number the next batch; from the rows and not from a sequence, so that a rollback leaves no trace
-- grain:   one row
-- params:  none
-- reads:   batch; writes: nothing
select coalesce(max(batch_id), 0) + 1 as batch_id
from batch
