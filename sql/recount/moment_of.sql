-- purpose: read count, sum and sum of squares of one batch
-- grain:   one row per tally, stratum
-- params:  $batch_id
-- reads:   moment; writes: nothing
select tally, stratum_id, n, sum, sum_sq
from moment
where batch_id = $batch_id
